//! One map, end to end: the stages in their order, and the flags that need more than one of
//! them. What they find is put into the record by [`crate::assemble`]; numbers are formed in
//! the stages.

use crate::assemble::{Findings, Strips, assemble, assemble_without_source};
use crate::brightness::{
    PlacedStrip, PolarCells, StripRule, StripSide, measure_strips, place_strip,
};
use crate::components::{ComponentSettings, fit_components};
use crate::flags::{self, Flag};
use crate::map::SkyMap;
use crate::map::beam::Beam;
use crate::noise::{
    self, CorrelationSettings, Noise, NoiseCorrelation, NoiseError, NoiseHints, NoiseSettings,
    measure_correlation,
};
use crate::record::MapRecord;
use crate::regions::{Region, RegionSettings, find_regions, region_mask};
use crate::settings::Settings;
use crate::source::associate::{Anchor, CHANCE_UNSURE, SourceRegions, associate};
use crate::source::core::KnownCore;
use crate::source::core_fit::PointFit;
use crate::source::sides::end_offset;
use crate::source::{SourceInput, SourceModel, model_source};
use crate::stats::normal_deviate;
use crate::units::{Pixel, SkyOffset, wrap_difference_deg};

/// Name of a map in its record.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct MapName {
    /// Name of the source.
    pub id: String,
    /// The file as the caller named it.
    pub file: String,
}

/// Why a map that could be read cannot be measured.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum MeasureError {
    /// The noise cannot be estimated.
    #[error(transparent)]
    Noise(#[from] NoiseError),
}

impl MeasureError {
    /// Stable code, kebab-case.
    pub fn code(&self) -> &'static str {
        match self {
            Self::Noise(error) => error.code(),
        }
    }
}

/// What the map as a whole shows.
pub struct Observed {
    /// Noise model.
    pub noise: Noise,
    /// Correlation of the noise.
    pub correlation: NoiseCorrelation,
    /// The beam, given or estimated, plane units.
    pub beam: Option<Beam>,
    /// The beam the stages work with: the above, or a stand-in as wide as the noise.
    pub working_beam: Beam,
    /// All regions above the thresholds.
    pub regions: Vec<Region>,
}

/// Measures one map.
///
/// # Errors
/// Where the noise cannot be estimated and none is given.
pub fn measure(
    map: &SkyMap,
    name: &MapName,
    settings: &Settings,
) -> Result<MapRecord, MeasureError> {
    let mut flags = Vec::new();
    let observed = observe(map, settings, &mut flags)?;
    let anchor = anchor(map);
    let frame = map.geometry.local_frame(anchor.pixel);
    let area = map.geometry.pixel_area() * (map.rows * map.columns) as f64;
    let chosen = associate(&observed.regions, anchor, &frame, observed.working_beam.major, area);
    let model = chosen.as_ref().and_then(|chosen| {
        let input = source_input(map, &observed, chosen, settings);
        model_source(&input)
    });
    let (Some(chosen), Some(model)) = (chosen, model) else {
        if let Some(distance_px) = nearest_region_px(&observed.regions, anchor) {
            flags.push(Flag::new(flags::NOTHING_AT_HOST, &[("distance_px", distance_px)]));
        }
        return Ok(assemble_without_source(map, name, settings, &observed, flags));
    };
    flag_source(map, anchor, &chosen, &model, &mut flags);
    let strips = measure_sides(map, &observed, &model, settings, &mut flags);
    let components = fit_components(
        &model.window,
        &model.peaks,
        &observed.working_beam,
        &model.frame,
        (&observed.noise, &observed.correlation),
        &ComponentSettings { confidence: settings.confidence, ..ComponentSettings::default() },
    );
    if components.truncated || !components.converged {
        flags.push(Flag::new(
            flags::COMPONENTS_UNSETTLED,
            &[("count", components.components.len() as f64)],
        ));
    }
    let findings = Findings {
        map,
        name,
        settings,
        observed: &observed,
        chosen: &chosen,
        model: &model,
        strips,
        components,
    };
    Ok(assemble(&findings, flags))
}

/// Noise, its correlation, the beam and all regions.
fn observe(
    map: &SkyMap,
    settings: &Settings,
    flags: &mut Vec<Flag>,
) -> Result<Observed, MeasureError> {
    let scale = map.geometry.mean_scale();
    let given_px = map.beam.map(|b| (b.major / scale, b.minor / scale));
    let hints = NoiseHints {
        beam_px: given_px,
        quantisation_step: map.quantisation_step,
        clipped_floor: map.clipped_floor,
        given_rms: map.given_rms(),
    };
    let estimated = noise::estimate_noise(map, &NoiseSettings::default(), &hints);
    let noise = match (estimated, map.least_contour()) {
        (Ok(noise), _) => noise,
        // A map without noise is measured down to the contour its observer trusts.
        (Err(_), Some(level)) => {
            Noise::uniform(map.columns, map.rows, 0.0, level / settings.outline_sigma)
        }
        (Err(error), None) => return Err(error.into()),
    };
    let correlation = measure_correlation(
        map,
        &noise,
        &noise.source_mask,
        given_px.map(|(major, _)| major),
        &CorrelationSettings::default(),
    );
    let beam = map.beam.or_else(|| estimate_beam(map, &correlation));
    let working_beam = beam.unwrap_or_else(|| stand_in_beam(map, &correlation));
    let least = 0.5 * working_beam.area_px(&map.geometry);
    let regions = find_regions(
        map,
        &noise,
        &RegionSettings {
            detection_sigma: settings.detection_sigma,
            outline_sigma: settings.outline_sigma,
            minimum_area_px: (least.round() as usize).max(1),
        },
    );
    flag_observed(map, &noise, &correlation, beam, working_beam, flags);
    Ok(Observed { noise, correlation, beam, working_beam, regions })
}

/// Distance of the nearest region's nearest pixel from a known host.
fn nearest_region_px(regions: &[Region], anchor: Anchor) -> Option<f64> {
    let pixel = anchor.pixel;
    regions
        .iter()
        .filter(|_| anchor.is_known)
        .flat_map(|region| &region.runs)
        .map(|run| {
            let x = pixel.x.clamp(run.x0 as f64, run.x1 as f64);
            pixel.distance_px(Pixel::new(x, run.y as f64))
        })
        .min_by(f64::total_cmp)
}

/// The beam read off the noise's autocorrelation, turned from the array onto the sky.
fn estimate_beam(map: &SkyMap, correlation: &NoiseCorrelation) -> Option<Beam> {
    let ellipse = correlation.kernel_ellipse()?;
    let middle = Pixel::new(0.5 * (map.columns as f64 - 1.0), 0.5 * (map.rows as f64 - 1.0));
    let frame = map.geometry.local_frame(middle);
    let (sin, cos) = ellipse.angle_deg.to_radians().sin_cos();
    let axis = |dx: f64, dy: f64| frame.offset(Pixel::new(middle.x + dx, middle.y + dy));
    let major: SkyOffset = axis(ellipse.major_px * cos, ellipse.major_px * sin);
    let minor = axis(-ellipse.minor_px * sin, ellipse.minor_px * cos);
    Beam::new(
        major.radius().max(minor.radius()),
        minor.radius().min(major.radius()),
        major.position_angle_deg(),
    )
}

/// A round beam as wide as the noise's correlation, at least three pixels: only for step
/// sizes and distances, never for a flux.
fn stand_in_beam(map: &SkyMap, correlation: &NoiseCorrelation) -> Beam {
    let width = correlation.correlation_fwhm_px().max(3.0) * map.geometry.mean_scale();
    Beam { major: width, minor: width, pa_deg: 0.0 }
}

/// Where the source is looked for.
fn anchor(map: &SkyMap) -> Anchor {
    match map.given_core().or(map.host_pixel()) {
        Some(pixel) => Anchor { pixel, is_known: true },
        None => Anchor {
            pixel: Pixel::new(0.5 * (map.columns as f64 - 1.0), 0.5 * (map.rows as f64 - 1.0)),
            is_known: false,
        },
    }
}

fn source_input<'a>(
    map: &'a SkyMap,
    observed: &'a Observed,
    chosen: &'a SourceRegions,
    settings: &Settings,
) -> SourceInput<'a> {
    SourceInput {
        grid: map,
        noise: &observed.noise,
        correlation: &observed.correlation,
        geometry: &map.geometry,
        beam: &observed.working_beam,
        regions: &observed.regions,
        chosen,
        known: KnownCore { given: map.given_core(), host: map.host_pixel() },
        jet_side_pa_deg: map.description.jet_side_pa_deg,
        least_level: map.least_contour().unwrap_or(0.0),
        outline_sigma: settings.outline_sigma,
        z_confidence: normal_deviate(settings.confidence),
    }
}

/// Strips of both sides, where there is room for them.
fn measure_sides(
    map: &SkyMap,
    observed: &Observed,
    model: &SourceModel,
    settings: &Settings,
    flags: &mut Vec<Flag>,
) -> Option<Strips> {
    let (ridges, features) = model.sides.as_ref()?;
    let rule = StripRule {
        inner_beams: settings.strip_inner_beams,
        half_width_beams: settings.strip_half_width_beams,
        follow_sigma: settings.follow_ridge_sigma,
        reference_sigma: 0.5 * settings.follow_ridge_sigma,
    };
    let (window, frame, beam) = (&model.coreless, &model.frame, &observed.working_beam);
    let clear = [0, 1].map(|k: usize| ridges[k].away_from_blanks(window, frame, 0.6 * beam.major));
    let side = |k: usize| StripSide {
        ridge: &clear[k],
        hotspot: features[k].hotspot.map(|h| (h.distance(), h.peak.value)),
    };
    let ends_deg = [0, 1].map(|k| {
        end_offset(&ridges[k], &features[k])
            .map_or(ridges[k].start_deg, SkyOffset::position_angle_deg)
    });
    let placed: PlacedStrip =
        place_strip([side(0), side(1)], ends_deg, &observed.working_beam, &rule)?;
    let scale = map.geometry.mean_scale();
    let refs = [&clear[0], &clear[1]];
    let around = PolarCells::around(window, frame, placed.strip.outer + beam.major + 3.0 * scale);
    let beams = (&observed.noise, beam.area_px(&map.geometry));
    let placed = placed
        .short_of_flares(window, frame, &around, refs, beam, beams)
        .fitted_to_jet(window, frame, &around, refs, beams);
    let strip = placed.strip;
    let grown =
        region_mask(map.columns, map.rows, &observed.regions, observed.working_beam.major / scale);
    let origin = model.frame.origin;
    let near_rms = noise::rms_at_distance(
        map,
        &observed.noise,
        &grown,
        (origin.x, origin.y),
        strip.inner / scale,
        strip.outer / scale,
    )
    .map(|ring| ring.rms);
    let rms = observed.noise.rms(origin.x, origin.y);
    let near_factor = near_rms.map_or(1.0, |near| (near / rms).max(1.0));
    if near_factor > 1.2 {
        flags.push(Flag::new(flags::STRIP_NEAR_BRIGHT, &[("factor", near_factor)]));
    }
    let noise = (&observed.noise, &observed.correlation);
    let measured =
        |ends: (f64, f64)| measure_strips(window, frame, &around, refs, &placed, ends, noise);
    let pair = measured((strip.inner, strip.outer));
    let structure = pair.fluxes[0].weights.as_ref().map_or(1.0, |weights| {
        noise::structure_factor(map, &observed.noise, &observed.correlation, &grown, weights)
    });
    if structure > 1.0 {
        flags.push(Flag::new(flags::NOISE_STRUCTURED, &[("factor", structure)]));
    }
    let inflation = near_factor.max(structure);
    let pair = pair.inflated(inflation);
    let blank = pair.fluxes.iter().map(|f| f.blank_fraction).fold(0.0, f64::max);
    if blank > 0.01 {
        flags.push(Flag::new(flags::STRIP_BLANKS, &[("percent", 100.0 * blank)]));
    }
    let misalignment_deg = wrap_difference_deg(ends_deg[1] - ends_deg[0] - 180.0).abs();
    let follows_both = placed.follows[0] && placed.follows[1];
    let seen = |k: usize| ridges[k].detected || features[k].hotspot.is_some();
    let off_axis = misalignment_deg.to_radians() * strip.outer > strip.half_width;
    let pair = if !follows_both && seen(0) && seen(1) && off_axis {
        let numbers = [("misalignment_deg", misalignment_deg)];
        flags.push(Flag::new(flags::STRIP_OFF_AXIS, &numbers));
        // Along its own ridge the fainter side shows more: by that much its flux is in doubt.
        let other = 1 - placed.reference;
        let own = PlacedStrip { follows: [true; 2], ..placed.clone() };
        let sum = |placed: &PlacedStrip| {
            let ends = (strip.inner, strip.outer);
            measure_strips(window, frame, &around, refs, placed, ends, noise).fluxes[other].sum
        };
        let doubt = sum(&own) - pair.fluxes[other].sum;
        pair.in_doubt(other, doubt)
    } else {
        pair
    };
    let pieces = (((strip.outer - strip.inner) / observed.working_beam.major).floor() as usize)
        .clamp(1, 200);
    let length = (strip.outer - strip.inner) / pieces as f64;
    let profile = (0..pieces)
        .map(|k| {
            let ends = (strip.inner + k as f64 * length, strip.inner + (k + 1) as f64 * length);
            (0.5 * (ends.0 + ends.1), measured(ends).inflated(inflation))
        })
        .collect();
    Some(Strips { placed, pair, profile, near_rms, blank_fraction: blank })
}

fn flag_observed(
    map: &SkyMap,
    noise: &Noise,
    correlation: &NoiseCorrelation,
    beam: Option<Beam>,
    working: Beam,
    flags: &mut Vec<Flag>,
) {
    let scale = map.geometry.mean_scale();
    let smaller_side = map.rows.min(map.columns) as f64;
    match (map.beam, beam) {
        (Some(given), _) => {
            let minor_px = given.minor / scale;
            if minor_px < 1.5 {
                flags.push(Flag::new(flags::BEAM_UNDERSAMPLED, &[("minor_px", minor_px)]));
            }
            let (correlation_px, beam_px) =
                (correlation.correlation_fwhm_px(), given.mean_fwhm() / scale);
            if correlation_px > 1.5 * beam_px || correlation_px < 0.5 * beam_px {
                flags.push(Flag::new(
                    flags::CORRELATION_UNLIKE_BEAM,
                    &[("correlation_px", correlation_px), ("beam_px", beam_px)],
                ));
            }
        }
        (None, Some(estimated)) => flags.push(Flag::new(
            flags::BEAM_ESTIMATED,
            &[("major_px", estimated.major / scale), ("minor_px", estimated.minor / scale)],
        )),
        (None, None) => flags.push(Flag::new(flags::BEAM_MISSING, &[])),
    }
    if working.major / scale > smaller_side / 3.0 {
        flags.push(Flag::new(
            flags::BEAM_FILLS_MAP,
            &[("major_px", working.major / scale), ("size_px", smaller_side)],
        ));
    }
    if map.saturated > 0 {
        let percent = 100.0 * map.saturated as f64 / (map.rows * map.columns) as f64;
        let count = map.saturated as f64;
        flags.push(Flag::new(flags::SATURATED, &[("count", count), ("percent", percent)]));
    }
    if let Some(fraction) = map.clipped_fraction() {
        flags.push(Flag::new(flags::CLIPPED_FLOOR, &[("percent", 100.0 * fraction)]));
    }
    if map.given_rms().is_some() {
        flags.push(Flag::new(flags::NOISE_GIVEN, &[]));
    }
    if map.quantisation_step > noise.global_rms {
        flags.push(Flag::new(
            flags::QUANTISED,
            &[("step_over_rms", map.quantisation_step / noise.global_rms)],
        ));
    }
    let factor = noise.rms_range();
    if factor > 1.5 {
        flags.push(Flag::new(flags::NOISE_VARIES, &[("factor", factor)]));
    }
}

fn flag_source(
    map: &SkyMap,
    anchor: Anchor,
    chosen: &SourceRegions,
    model: &SourceModel,
    flags: &mut Vec<Flag>,
) {
    if map.host_is_unplaced() {
        flags.push(Flag::new(flags::HOST_UNPLACED, &[]));
    } else if !anchor.is_known {
        flags.push(Flag::new(flags::HOST_UNKNOWN, &[]));
    }
    if chosen.members.len() > 1 && chosen.chance > 0.0 {
        let kind = if chosen.chance > CHANCE_UNSURE {
            flags::PARTNERS_UNSURE
        } else {
            flags::PARTNERS_JOINED
        };
        flags.push(Flag::new(
            kind,
            &[("count", chosen.members.len() as f64), ("chance", chosen.chance)],
        ));
    }
    let core = &model.core;
    match core.pixel {
        None => flags.push(Flag::new(flags::CORE_NOT_FOUND, &[])),
        Some(_) if core.confidence < 0.6 => {
            flags.push(Flag::new(flags::CORE_UNSURE, &[("confidence", core.confidence)]));
        }
        Some(_) if core.fit.is_none() => flags.push(Flag::new(flags::CORE_UNDETECTED, &[])),
        Some(_) => {}
    }
    if let Some(fit) = core.fit.filter(PointFit::is_blended) {
        let base = fit.base.max(0.0);
        flags.push(Flag::new(flags::CORE_BLENDED, &[("share", base / (base + fit.peak))]));
    }
    if model.cut_off {
        flags.push(Flag::new(flags::EDGE, &[]));
    }
    if let Some(limit) = map.description.largest_recoverable_scale_arcsec {
        let size = model.frame.separation(model.ends[0], model.ends[1]);
        if map.geometry.has_scale() && size > 0.7 * limit {
            flags.push(Flag::new(
                flags::LARGE_SCALE_LOSS,
                &[("size_arcsec", size), ("limit_arcsec", limit)],
            ));
        }
    }
    if map.description.jet_side_pa_deg.is_some() && core.pixel.is_some() {
        flags.push(Flag::new(flags::JET_SIDE_GIVEN, &[]));
    }
}
