//! From what the stages found to the record: quantities formed, units put on, reasons given
//! where there is no number. Every quantity is formed here or in the stage it names, once.

use std::collections::BTreeMap;

use crate::brightness::{FluxPair, PlacedStrip, StripPair, positive_upper_limit, ratio};
use crate::class::classify;
use crate::extent::{Extent, feature_sigma, position_sigma, resolution_limit, widest_across};
use crate::flags::{self, Flag};
use crate::flux::{Sum, sum_where, widened};
use crate::map::SkyMap;
use crate::measurement::{Bare, Because, Measurement, OrMissing};
use crate::physics::{self, PhysicsInput, constrain_physics};
use crate::pipeline::{MapName, Observed};
use crate::record::{
    ApertureRecord, ArmBasis, BrightnessRecord, CoreBasis, CoreRecord, Described, FrClass,
    FrClassName, HotspotRecord, Input, JetRecord, LobeRecord, MapRecord, NoiseRecord, Position,
    PositionBasis, ProfilePointRecord, RECORD_VERSION, RidgePointRecord, Rival, Role, SideRecord,
    Software, SourcePosition, SourceRecord, Status, Symmetry,
};
use crate::regions::Region;
use crate::ridge::Ridge;
use crate::settings::Settings;
use crate::source::SourceModel;
use crate::source::associate::SourceRegions;
use crate::source::sides::{BRIGHTEST_BEYOND_BEAMS, SideFeatures, side_of};
use crate::stats::normal_deviate;
use crate::units::{Pixel, SkyOffset, wrap_difference_deg, wrap_directed_deg, wrap_undirected_deg};

/// The strips of both sides, whole and in pieces.
pub struct Strips {
    /// Where they lie.
    pub placed: PlacedStrip,
    /// The whole strips' fluxes.
    pub pair: StripPair,
    /// Middle distance and fluxes of pieces one beam long.
    pub profile: Vec<(f64, StripPair)>,
    /// rms at the strip's distances away from the source, map unit.
    pub near_rms: Option<f64>,
    /// Share of the strips that is blank.
    pub blank_fraction: f64,
}

/// All that the record is made from.
pub struct Findings<'a> {
    /// The map.
    pub map: &'a SkyMap,
    /// Its name.
    pub name: &'a MapName,
    /// Settings.
    pub settings: &'a Settings,
    /// Noise, beam, regions.
    pub observed: &'a Observed,
    /// The source's regions.
    pub chosen: &'a SourceRegions,
    /// The source.
    pub model: &'a SourceModel,
    /// Strips, where there is room.
    pub strips: Option<Strips>,
}

/// Puts units on numbers in the map's own unit, or says why that cannot be done.
#[derive(Clone, Copy)]
struct Units {
    /// mJy/beam per map unit.
    per_beam: Result<f64, Because>,
    /// mJy per map unit summed over one pixel.
    per_pixel: Result<f64, Because>,
    /// Fractional error of the flux scale.
    scale_error: f64,
    /// Plane units are arcsec.
    has_scale: bool,
    /// Pixels per plane unit.
    px_per_unit: f64,
}

impl Units {
    fn new(map: &SkyMap, observed: &Observed) -> Self {
        let because = if map.has_flux_unit() { Because::NoBeam } else { Because::NoFluxUnit };
        let factors = map.flux_factors(observed.beam.as_ref());
        Self {
            per_beam: factors.map(|f| f.mjy_per_beam).ok_or(because),
            per_pixel: factors.map(|f| f.mjy_per_pixel).ok_or(because),
            scale_error: map.description.flux_scale_error_or_default().unwrap_or(0.0),
            has_scale: map.geometry.has_scale(),
            px_per_unit: 1.0 / map.geometry.mean_scale(),
        }
    }

    /// Brightness with noise error only.
    fn brightness_noise(&self, value: f64, sigma: f64) -> Measurement {
        match self.per_beam {
            Ok(factor) => Measurement::symmetric(value * factor, sigma * factor),
            Err(because) => Measurement::missing(because),
        }
    }

    /// Brightness with the flux scale's error.
    fn brightness(&self, value: f64, sigma: f64) -> Measurement {
        self.brightness_noise(value, sigma).with_fractional_error(self.scale_error)
    }

    /// Flux with noise error only.
    fn flux_noise(&self, sum: f64, sigma: f64) -> Measurement {
        match self.per_pixel {
            Ok(factor) => Measurement::symmetric(sum * factor, sigma * factor),
            Err(because) => Measurement::missing(because),
        }
    }

    /// Flux with the flux scale's error.
    fn flux(&self, sum: f64, sigma: f64) -> Measurement {
        self.flux_noise(sum, sigma).with_fractional_error(self.scale_error)
    }

    fn bare_brightness(&self, value: f64) -> Bare {
        match self.per_beam {
            Ok(factor) => Bare::number(value * factor, Because::OutOfDomain),
            Err(because) => Bare::missing(because),
        }
    }

    /// A length in plane units as arcsec.
    fn arcsec(&self, length: Measurement) -> Measurement {
        if self.has_scale || length.is_missing() {
            length
        } else {
            Measurement::missing(Because::NoPixelScale)
        }
    }

    fn bare_arcsec(&self, length: f64) -> Bare {
        if self.has_scale {
            Bare::number(length, Because::OutOfDomain)
        } else {
            Bare::missing(Because::NoPixelScale)
        }
    }

    /// A length in plane units as pixels.
    fn px(&self, length: Measurement) -> Measurement {
        length.scaled(self.px_per_unit)
    }
}

/// Offset of a side's end: its hot spot, else its ridge's last point.
pub fn end_offset(ridge: &Ridge, features: &SideFeatures) -> Option<SkyOffset> {
    features.hotspot.map(|h| h.offset).or_else(|| ridge.points.last().map(|p| p.offset))
}

/// The record of a map on which nothing was found.
pub fn assemble_without_source(
    map: &SkyMap,
    name: &MapName,
    settings: &Settings,
    observed: &Observed,
    mut flags: Vec<Flag>,
) -> MapRecord {
    let because = Because::NoSource;
    let none = Measurement::missing(because);
    let units = Units::new(map, observed);
    let middle = (0.5 * (map.columns as f64 - 1.0), 0.5 * (map.rows as f64 - 1.0));
    let noise = noise_record(observed, &units, Pixel::new(middle.0, middle.1), None, None);
    let brightness = BrightnessRecord {
        jet_to_counter_jet_ratio: none,
        jet_flux_density_mjy: none,
        counter_jet_flux_density_mjy: none,
        strip_covariance_mjy2: Bare::missing(because),
        aperture: OrMissing::missing(because),
        peak_ratio: none,
        profile: Vec::new(),
        sidedness_sigma: Bare::missing(because),
    };
    let physics = constrain_physics(
        &physics_input(map, settings, none, none, none, none, [none; 2]),
        &settings.cosmology,
    );
    assumed_values(map, &mut flags);
    MapRecord {
        record_version: RECORD_VERSION,
        id: name.id.clone(),
        file: name.file.clone(),
        status: Status::NoDetection,
        flags,
        settings: *settings,
        software: Software::default(),
        input: input_record(map),
        map: described(map),
        noise,
        core: CoreRecord {
            position: OrMissing::missing(because),
            position_error_arcsec: Bare::missing(because),
            basis: CoreBasis::None,
            confidence: 0.0,
            rivals: Vec::new(),
            flux_density_mjy: none,
        },
        source: SourceRecord {
            position: OrMissing::missing(because),
            total_flux_density_mjy: none,
            contour_flux_density_mjy: none,
            peak_brightness_mjy_per_beam: none,
            peak_signal_to_noise: Bare::missing(because),
            contour_mjy_per_beam: Bare::missing(because),
            largest_angular_size_arcsec: none,
            largest_angular_size_deconvolved_arcsec: none,
            largest_size_px: none,
            component_separation_arcsec: none,
            position_angle_deg: none,
            hotspot_separation_arcsec: none,
            fr_ratio: none,
            fr_ratio_deconvolved: none,
            fr_class: FrClass { class: FrClassName::Undecided, probability: BTreeMap::new() },
            arm_length_ratio: none,
            arm_length_ratio_basis: ArmBasis::None,
            longer_arm: OrMissing::missing(because),
            arm_length_ratio_jet_side: none,
            lobe_flux_ratio: none,
            misalignment_deg: none,
            bend_deg: none,
            symmetry: Symmetry::Undecided,
            axial_ratio: none,
            core_prominence: none,
            core_prominence_rest: none,
        },
        sides: [
            SideRecord::missing(Role::First, because),
            SideRecord::missing(Role::Second, because),
        ],
        components: Vec::new(),
        brightness,
        physics: physics.physics,
    }
}

/// The record of a measured source.
pub fn assemble(findings: &Findings, mut flags: Vec<Flag>) -> MapRecord {
    let Findings { map, name, settings, observed, model, .. } = *findings;
    let units = Units::new(map, observed);
    let beam = &observed.working_beam;
    let order = order_sides(findings, &mut flags);

    let sums = sum_parts(findings, order.index);
    let core_flux = core_flux(findings, &units, &sums);
    let total = units.flux(sums.total.value, sums.total.sigma);

    let extents = measure_extents(findings);
    let size = extents.size;
    let deconvolved = extents.deconvolved;
    let sides = order.index.map(|k| side_record(findings, &units, &sums, k, order.role_of(k)));
    let [first_side, second_side] = sides;
    let arms = arms(findings, order.index);
    let fr = fr_ratios(findings, order.index, size, deconvolved);
    let beams = deconvolved.best().map(|d| d / beam.major);
    let brightness = brightness_record(findings, &units, &order);

    let las_arcsec = units.arcsec(size);
    let physics = constrain_physics(
        &physics_input(
            map,
            settings,
            brightness.jet_to_counter_jet_ratio,
            las_arcsec,
            total,
            core_flux,
            [first_side.length_arcsec, second_side.length_arcsec],
        ),
        &settings.cosmology,
    );
    if !brightness.jet_to_counter_jet_ratio.is_missing() {
        flags.push(Flag::new(flags::SYMMETRY_ASSUMED, &[]));
    }
    assumed_values(map, &mut flags);
    let mut sides = [first_side, second_side];
    for (side, kpc) in sides.iter_mut().zip(physics.side_length_kpc) {
        side.length_kpc = kpc;
    }

    let peak = model
        .peaks
        .iter()
        .map(|p| (p.value, p.signal_to_noise))
        .fold((0.0, 0.0), |a, b| if b.0 > a.0 { b } else { a });
    let peak = if peak.0 > 0.0 { peak } else { brightest_region(findings) };
    let rms = if peak.1 > 0.0 { peak.0 / peak.1 } else { 0.0 };
    let near = findings.strips.as_ref().and_then(|s| s.near_rms);
    let core_px = model.core.pixel;
    let status = if matches!(deconvolved, Measurement::UpperLimit { .. }) {
        Status::Unresolved
    } else {
        Status::Measured
    };
    let prominence = physics::emission::core_prominence(
        core_flux_noise(findings, &units, &sums),
        units.flux_noise(sums.total.value, sums.total.sigma),
    );
    let source = SourceRecord {
        position: source_position(map, model),
        total_flux_density_mjy: total,
        contour_flux_density_mjy: units.flux(sums.contour.value, sums.contour.sigma),
        peak_brightness_mjy_per_beam: units.brightness(peak.0, rms),
        peak_signal_to_noise: Bare::number(peak.1, Because::NoNoiseEstimate),
        contour_mjy_per_beam: units.bare_brightness(model.level),
        largest_angular_size_arcsec: las_arcsec,
        largest_angular_size_deconvolved_arcsec: units.arcsec(deconvolved),
        largest_size_px: units.px(size),
        component_separation_arcsec: Measurement::missing(Because::NotImplemented),
        position_angle_deg: arms.position_angle_deg,
        hotspot_separation_arcsec: units.arcsec(arms.hotspot_separation),
        fr_ratio: fr.whole,
        fr_ratio_deconvolved: fr.deconvolved,
        fr_class: classify(fr.deconvolved, beams),
        arm_length_ratio: arms.folded,
        arm_length_ratio_basis: arms.basis,
        longer_arm: OrMissing::from_option(arms.longer.map(|k| order.role[k]), arms.because),
        arm_length_ratio_jet_side: arms.unfolded,
        lobe_flux_ratio: lobe_flux_ratio(&sums, settings),
        misalignment_deg: arms.misalignment_deg,
        bend_deg: arms.bend_deg,
        symmetry: Symmetry::Undecided,
        axial_ratio: extents.axial_ratio,
        core_prominence: prominence,
        core_prominence_rest: map.description.redshift.map_or(
            Measurement::missing(Because::NoRedshift),
            |redshift| {
                physics::emission::core_prominence_rest(
                    prominence,
                    redshift,
                    map.description.core_spectral_index_or_default(),
                    map.description.total_spectral_index_or_default(),
                )
            },
        ),
    };
    MapRecord {
        record_version: RECORD_VERSION,
        id: name.id.clone(),
        file: name.file.clone(),
        status,
        flags,
        settings: *settings,
        software: Software::default(),
        input: input_record(map),
        map: described(map),
        noise: noise_record(observed, &units, core_px.unwrap_or(model.middle), Some(peak.0), near),
        core: CoreRecord {
            position: OrMissing::from_option(core_px.map(|p| position(map, p)), Because::NoCore),
            position_error_arcsec: core_px.map_or(Bare::missing(Because::NoCore), |_| {
                units.bare_arcsec(model.core.position_sigma)
            }),
            basis: model.core.basis,
            confidence: model.core.confidence,
            rivals: model
                .core
                .rivals
                .iter()
                .map(|(peak, confidence)| Rival {
                    x_px: peak.pixel.x,
                    y_px: peak.pixel.y,
                    signal_to_noise: peak.signal_to_noise,
                    confidence: *confidence,
                })
                .collect(),
            flux_density_mjy: core_flux,
        },
        source,
        sides,
        components: Vec::new(),
        brightness,
        physics: physics.physics,
    }
}

/// Which of the model's sides comes first, and both roles.
struct Order {
    /// Index into the model's sides of the record's first and second.
    index: [usize; 2],
    /// Role of the record's first and second.
    role: [Role; 2],
    /// Difference of the strip fluxes over its error, absolute.
    sidedness: Option<f64>,
}

impl Order {
    fn role_of(&self, model_index: usize) -> Role {
        if self.index[0] == model_index { self.role[0] } else { self.role[1] }
    }
}

/// The jet comes first where the strips tell, or the observer; else the side whose end lies
/// in [0, 180).
fn order_sides(findings: &Findings, flags: &mut Vec<Flag>) -> Order {
    let map = findings.map;
    let undecided = |sidedness| {
        let end = findings.model.sides.as_ref().map_or(0.0, |(ridges, features)| {
            end_offset(&ridges[0], &features[0])
                .map_or(ridges[0].start_deg, SkyOffset::position_angle_deg)
        });
        let index = if end < 180.0 { [0, 1] } else { [1, 0] };
        Order { index, role: [Role::First, Role::Second], sidedness }
    };
    let jet_first = |first: usize, sidedness| Order {
        index: [first, 1 - first],
        role: [Role::Jet, Role::CounterJet],
        sidedness,
    };
    let strips = findings.strips.as_ref();
    let difference = strips.and_then(|s| {
        let pair = &s.pair;
        let variance = pair.variance[0] + pair.variance[1] - 2.0 * pair.covariance;
        (variance > 0.0).then(|| (pair.fluxes[0].sum - pair.fluxes[1].sum) / variance.sqrt())
    });
    let sidedness = difference.map(f64::abs);
    if let (Some(given), Some((ridges, _))) =
        (map.description.jet_side_pa_deg, &findings.model.sides)
    {
        let turn = |k: usize| wrap_difference_deg(ridges[k].start_deg - given).abs();
        return jet_first(usize::from(turn(1) < turn(0)), sidedness);
    }
    match difference {
        Some(d) if d.abs() >= findings.settings.sidedness_sigma => {
            jet_first(usize::from(d < 0.0), sidedness)
        }
        Some(d) => {
            flags.push(Flag::new(flags::ROLES_UNDECIDED, &[("sigma", d.abs())]));
            undecided(sidedness)
        }
        None => undecided(sidedness),
    }
}

/// Sums over the parts of the source.
struct Sums {
    total: Sum,
    contour: Sum,
    /// By the model's side index.
    sides: [Sum; 2],
    /// By the record's order; `None` where there is no strip or no lobe.
    lobes: Option<[Sum; 2]>,
    /// The lobes' second moments across their axes, plane units squared, by record order.
    lobe_width: [Option<f64>; 2],
    beam_area_px: f64,
}

fn sum_parts(findings: &Findings, order: [usize; 2]) -> Sums {
    let Findings { map, observed, chosen, model, .. } = *findings;
    let members: Vec<Region> =
        chosen.members.iter().filter_map(|&k| observed.regions.get(k).cloned()).collect();
    let beam = &observed.working_beam;
    let grow = beam.major / map.geometry.mean_scale();
    let inside = widened(&model.window, &members, map.columns, map.rows, grow);
    let background_px = observed.noise.background_area_px();
    let correlation = (&observed.noise, &observed.correlation);
    let total = sum_where(&model.window, correlation, background_px, |r, c| inside[[r, c]]);
    let contour = sum_where(&model.window, correlation, background_px, |r, c| {
        model.window.member[[r, c]] && model.window.brightness[[r, c]] >= model.level
    });
    let nothing = Sum::default();
    let mut sums = Sums {
        total,
        contour,
        sides: [nothing; 2],
        lobes: None,
        lobe_width: [None; 2],
        beam_area_px: beam.area_px(&map.geometry),
    };
    let Some((ridges, features)) = &model.sides else { return sums };
    let offset = |r: usize, c: usize| model.frame.offset(model.coreless.pixel(r, c));
    let side = |r: usize, c: usize| side_of(ridges, offset(r, c));
    sums.sides = [0, 1].map(|k| {
        sum_where(&model.coreless, correlation, background_px, |r, c| {
            inside[[r, c]] && side(r, c) == k
        })
    });
    if let Some(strips) = &findings.strips {
        let edge = strips.placed.strip.outer + beam.major;
        sums.lobes = Some(order.map(|k| {
            sum_where(&model.coreless, correlation, background_px, |r, c| {
                inside[[r, c]] && side(r, c) == k && offset(r, c).radius() > edge
            })
        }));
        sums.lobe_width = order.map(|k| {
            let axis = end_offset(&ridges[k], &features[k])?;
            let across = SkyOffset::polar(1.0, axis.position_angle_deg() + 90.0);
            let (mut weight, mut first, mut second) = (0.0, 0.0, 0.0);
            for ((r, c), &b) in model.coreless.brightness.indexed_iter() {
                if model.window.member[[r, c]]
                    && model.coreless.usable(r, c)
                    && b > 0.0
                    && side(r, c) == k
                    && offset(r, c).radius() > edge
                {
                    let x = offset(r, c).dot(across);
                    weight += b;
                    first += b * x;
                    second += b * x * x;
                }
            }
            (weight > 0.0).then(|| (second / weight - (first / weight).powi(2)).max(0.0))
        });
    }
    sums
}

/// The core's flux with noise error only.
fn core_flux_noise(findings: &Findings, units: &Units, sums: &Sums) -> Measurement {
    let core = &findings.model.core;
    match (core.fit, core.peak_upper) {
        (Some(fit), _) => {
            units.flux_noise(fit.peak * sums.beam_area_px, fit.peak_sigma * sums.beam_area_px)
        }
        (None, Some(upper)) => match units.per_pixel {
            Ok(factor) => Measurement::upper_limit(
                upper * sums.beam_area_px * factor,
                findings.settings.confidence,
            ),
            Err(because) => Measurement::missing(because),
        },
        (None, None) => Measurement::missing(Because::NoCore),
    }
}

fn core_flux(findings: &Findings, units: &Units, sums: &Sums) -> Measurement {
    core_flux_noise(findings, units, sums).with_fractional_error(units.scale_error)
}

fn brightest_region(findings: &Findings) -> (f64, f64) {
    findings
        .chosen
        .members
        .iter()
        .filter_map(|&k| findings.observed.regions.get(k))
        .map(|r| {
            (r.peak.value - findings.observed.noise.background(r.peak.x, r.peak.y), r.peak.snr)
        })
        .fold((0.0, 0.0), |a, b| if b.0 > a.0 { b } else { a })
}

/// Sizes of the whole source in plane units.
struct Extents {
    size: Measurement,
    deconvolved: Measurement,
    axial_ratio: Measurement,
}

fn measure_extents(findings: &Findings) -> Extents {
    let Findings { observed, model, settings, .. } = *findings;
    let beam = &observed.working_beam;
    let z = normal_deviate(settings.confidence);
    let peaks: Vec<(Pixel, f64)> = model.peaks.iter().map(|p| (p.pixel, p.value)).collect();
    let between = |points: [Pixel; 2]| {
        Extent::between(&model.window, &model.frame, beam, model.level, &peaks, points)
    };
    let strongest = model.peaks.iter().map(|p| p.signal_to_noise).fold(1.5, f64::max);
    let along = between(model.ends);
    let limit = |direction_deg: f64| resolution_limit(beam.reach_along(direction_deg), strongest);
    let size = along.size(model.cut_off, settings.confidence);
    let deconvolved =
        along.deconvolved(model.cut_off, limit(along.direction_deg), settings.confidence, z);
    let width = widest_across(&model.contour, &model.frame, along.direction_deg).map(|points| {
        // Only the part of the chord across the axis counts.
        let across_deg = along.direction_deg + 90.0;
        let mut extent = between(points);
        let chord = model.frame.difference(points[0], points[1]);
        extent.length = chord.dot(SkyOffset::polar(1.0, across_deg)).abs();
        extent.deconvolved(false, limit(across_deg), settings.confidence, z)
    });
    let axial_ratio = match (deconvolved, width) {
        (
            Measurement::Value { value: l, minus, .. },
            Some(Measurement::Value { value: w, minus: sw, .. }),
        ) => {
            let value = (l / w).max(1.0);
            Measurement::symmetric(value, value * (minus / l).hypot(sw / w))
        }
        (
            Measurement::Value { value: l, .. },
            Some(Measurement::UpperLimit { upper_limit, confidence }),
        ) => Measurement::lower_limit((l / upper_limit).max(1.0), confidence),
        _ => Measurement::missing(Because::Unresolved),
    };
    Extents { size, deconvolved, axial_ratio }
}

/// What follows from the two sides' ends.
struct Arms {
    position_angle_deg: Measurement,
    hotspot_separation: Measurement,
    folded: Measurement,
    unfolded: Measurement,
    basis: ArmBasis,
    /// Record index of the longer arm.
    longer: Option<usize>,
    because: Because,
    misalignment_deg: Measurement,
    bend_deg: Measurement,
}

/// 1σ of a side's end along each axis: a hot spot's fit error, or a quarter beam for a ridge
/// that fades.
fn end_sigma(findings: &Findings, k: usize) -> f64 {
    let beam = findings.observed.working_beam.mean_fwhm();
    let Some((_, features)) = &findings.model.sides else { return beam };
    features[k].hotspot.map_or(0.5 * beam, |h| feature_sigma(beam, h.peak.signal_to_noise))
}

fn arms(findings: &Findings, order: [usize; 2]) -> Arms {
    let none = |because| Arms {
        position_angle_deg: Measurement::missing(because),
        hotspot_separation: Measurement::missing(because),
        folded: Measurement::missing(because),
        unfolded: Measurement::missing(because),
        basis: ArmBasis::None,
        longer: None,
        because,
        misalignment_deg: Measurement::missing(because),
        bend_deg: Measurement::missing(because),
    };
    let Some((ridges, features)) = &findings.model.sides else { return none(Because::NoCore) };
    let ends = order.map(|k| end_offset(&ridges[k], &features[k]));
    let sigma = order.map(|k| end_sigma(findings, k));
    let core_sigma = findings.model.core.position_sigma;
    let (Some(a), Some(b)) = (ends[0], ends[1]) else {
        let mut one = none(Because::SideNotDetected);
        // One side still has a direction.
        if let Some((k, end)) = ends.iter().enumerate().find_map(|(k, e)| e.map(|e| (k, e))) {
            let error = (sigma[k].hypot(core_sigma) / end.radius()).to_degrees();
            one.position_angle_deg =
                Measurement::symmetric(wrap_undirected_deg(end.position_angle_deg()), error);
        }
        return one;
    };
    let chord = b.minus(a);
    let both_hotspots = order.iter().all(|&k| features[k].hotspot.is_some());
    let chord_sigma = sigma[0].hypot(sigma[1]);
    let angle_sigma = (chord_sigma / chord.radius()).to_degrees();
    let (ra, rb) = (a.radius(), b.radius());
    let unfolded = ra / rb;
    let unfolded_sigma = unfolded
        * ((sigma[0] / ra).powi(2)
            + (sigma[1] / rb).powi(2)
            + (core_sigma * (1.0 / ra + 1.0 / rb)).powi(2))
        .sqrt();
    let misalignment = wrap_difference_deg(b.position_angle_deg() - a.position_angle_deg() - 180.0);
    let misalignment_sigma = ((sigma[0] / ra).powi(2)
        + (sigma[1] / rb).powi(2)
        + (core_sigma * (1.0 / ra + 1.0 / rb)).powi(2))
    .sqrt()
    .to_degrees();
    // Folded at 1: the error bar may not reach below.
    let folded = unfolded.max(1.0 / unfolded);
    let folded_sigma = unfolded_sigma * folded / unfolded;
    Arms {
        position_angle_deg: Measurement::symmetric(
            wrap_undirected_deg(chord.position_angle_deg()),
            angle_sigma,
        ),
        hotspot_separation: if both_hotspots {
            Measurement::symmetric(chord.radius(), chord_sigma)
        } else {
            Measurement::missing(Because::NoHotspot)
        },
        folded: Measurement::value(folded, folded_sigma.min(folded - 1.0), folded_sigma),
        unfolded: Measurement::symmetric(unfolded, unfolded_sigma),
        basis: if both_hotspots { ArmBasis::Hotspots } else { ArmBasis::Ends },
        longer: Some(usize::from(unfolded < 1.0)),
        because: Because::SideNotDetected,
        misalignment_deg: Measurement::symmetric(misalignment, misalignment_sigma),
        bend_deg: Measurement::value(
            misalignment.abs(),
            misalignment_sigma.min(misalignment.abs()),
            misalignment_sigma,
        ),
    }
}

struct FrRatios {
    whole: Measurement,
    deconvolved: Measurement,
}

/// Distance of the brightest points over the size. A side without a peak of its own beyond
/// 1.5 beams falls from the core outwards: its brightest point lies within that distance.
fn fr_ratios(
    findings: &Findings,
    order: [usize; 2],
    size: Measurement,
    deconvolved: Measurement,
) -> FrRatios {
    let missing = |because| FrRatios {
        whole: Measurement::missing(because),
        deconvolved: Measurement::missing(because),
    };
    let Some((_, features)) = &findings.model.sides else { return missing(Because::NoCore) };
    let beam = &findings.observed.working_beam;
    let points = order.map(|k| features[k].brightest);
    let sigma = order.map(|k| {
        features[k]
            .brightest
            .map_or(0.0, |f| feature_sigma(beam.mean_fwhm(), f.peak.signal_to_noise))
    });
    let nearest = BRIGHTEST_BEYOND_BEAMS * beam.major;
    let (distance, monotonic) = match points {
        [Some(a), Some(b)] => (a.offset.minus(b.offset).radius(), false),
        [Some(a), None] | [None, Some(a)] => (a.distance() + nearest, true),
        [None, None] => (2.0 * nearest, true),
    };
    let confidence = findings.settings.confidence;
    let over = |size: Measurement| match size {
        Measurement::Value { value, minus, .. } if value > 0.0 => {
            let ratio = distance / value;
            if monotonic {
                Measurement::upper_limit(ratio, confidence)
            } else {
                let error = ratio * (sigma[0].hypot(sigma[1]) / distance).hypot(minus / value);
                Measurement::symmetric(ratio, error)
            }
        }
        Measurement::LowerLimit { lower_limit, confidence } if lower_limit > 0.0 => {
            Measurement::upper_limit(distance / lower_limit, confidence)
        }
        Measurement::UpperLimit { .. } => Measurement::missing(Because::Unresolved),
        Measurement::Missing { missing } => Measurement::missing(missing),
        _ => Measurement::missing(Because::Unresolved),
    };
    FrRatios { whole: over(size), deconvolved: over(deconvolved) }
}

fn lobe_flux_ratio(sums: &Sums, settings: &Settings) -> Measurement {
    let Some([a, b]) = sums.lobes else { return Measurement::missing(Because::NoLobe) };
    if a.area_px < 1.0 || b.area_px < 1.0 {
        return Measurement::missing(Because::NoLobe);
    }
    ratio(
        FluxPair {
            numerator: a.value,
            denominator: b.value,
            numerator_variance: a.sigma * a.sigma,
            denominator_variance: b.sigma * b.sigma,
            covariance: 0.0,
        },
        settings.ratio_value_sigma,
        settings.confidence,
    )
}

fn side_record(
    findings: &Findings,
    units: &Units,
    sums: &Sums,
    k: usize,
    role: Role,
) -> SideRecord {
    let model = findings.model;
    let settings = findings.settings;
    let Some((ridges, features)) = &model.sides else {
        return SideRecord::missing(role, Because::NoCore);
    };
    let (ridge, side) = (&ridges[k], &features[k]);
    let flux = units.flux(sums.sides[k].value, sums.sides[k].sigma);
    if !ridge.detected && side.hotspot.is_none() {
        let mut record = SideRecord::missing(role, Because::SideNotDetected);
        record.flux_density_mjy = flux;
        record.jet.flux_density_mjy = jet_flux(findings, units, k);
        record.jet.criteria = OrMissing::missing(Because::NotImplemented);
        return record;
    }
    let beam = &findings.observed.working_beam;
    let core_sigma = model.core.position_sigma;
    let end = end_offset(ridge, side);
    let end_sigma = end_sigma(findings, k);
    let end_pa = end.map_or(Measurement::missing(Because::SideNotDetected), |e| {
        Measurement::symmetric(
            e.position_angle_deg(),
            (end_sigma.hypot(core_sigma) / e.radius()).to_degrees(),
        )
    });
    let bearing_sigma = |distance: f64, signal: f64| {
        ((position_sigma(beam.mean_fwhm(), signal)).hypot(core_sigma) / distance).to_degrees()
    };
    let inner_distance = 2.0 * beam.major;
    let inner_pa = ridge.points.iter().find(|p| p.distance >= inner_distance).map_or(
        Measurement::missing(Because::JetNotDetected),
        |p| {
            let sigma = bearing_sigma(inner_distance, p.signal_to_noise());
            Measurement::symmetric(ridge.bearing_at(inner_distance), sigma)
        },
    );
    let bend = match (end_pa, inner_pa) {
        (
            Measurement::Value { value: e, minus: se, .. },
            Measurement::Value { value: i, minus: si, .. },
        ) => Measurement::symmetric(wrap_difference_deg(e - i), se.hypot(si)),
        _ => Measurement::missing(Because::JetNotDetected),
    };
    let (size, fr) = side_size(findings, k);
    let hotspot = side.hotspot.map(|h| HotspotRecord {
        x_px: h.peak.pixel.x,
        y_px: h.peak.pixel.y,
        east_arcsec: units.bare_arcsec(h.offset.east),
        north_arcsec: units.bare_arcsec(h.offset.north),
        distance_arcsec: units
            .arcsec(Measurement::symmetric(h.distance(), end_sigma.hypot(core_sigma))),
        position_angle_deg: end_pa,
        peak_brightness_mjy_per_beam: units
            .brightness(h.peak.value, h.peak.value / h.peak.signal_to_noise),
        signal_to_noise: h.peak.signal_to_noise,
    });
    let record_index = usize::from(matches!(role, Role::CounterJet | Role::Second));
    let lobe = lobe_record(findings, units, sums, record_index, size);
    let peak = model.peaks.first().map_or(1.0, |p| p.value);
    SideRecord {
        role,
        position_angle_deg: mean_bearing(findings, ridge, core_sigma),
        inner_position_angle_deg: inner_pa,
        end_position_angle_deg: end_pa,
        bend_deg: bend,
        length_arcsec: units.arcsec(size),
        length_px: units.px(size),
        ridge_length_arcsec: if ridge.points.is_empty() {
            Measurement::missing(Because::JetNotDetected)
        } else {
            units.arcsec(Measurement::symmetric(
                ridge.length(),
                (0.5 * beam.mean_fwhm()).hypot(core_sigma),
            ))
        },
        length_kpc: Measurement::missing(Because::NoRedshift),
        flux_density_mjy: flux,
        fr_ratio: fr,
        jet: JetRecord {
            detected: strip_signal(findings, k).is_some_and(|s| s >= settings.ratio_value_sigma),
            criteria: OrMissing::missing(Because::NotImplemented),
            flux_density_mjy: jet_flux(findings, units, k),
            opening_angle_deg: Measurement::missing(Because::NotImplemented),
            width_exponent: Bare::missing(Because::NotImplemented),
        },
        hotspot: OrMissing::from_option(hotspot, Because::NoHotspot),
        lobe,
        ridge: ridge
            .points
            .iter()
            .map(|p| RidgePointRecord {
                distance_arcsec: units.bare_arcsec(p.distance),
                east_arcsec: units.bare_arcsec(p.offset.east),
                north_arcsec: units.bare_arcsec(p.offset.north),
                brightness_mjy_per_beam: units.brightness_noise(p.brightness, p.rms),
                brightness_relative: p.brightness / peak,
                width_arcsec: units.arcsec(p.width),
                width_deconvolved_arcsec: units.arcsec(p.width_deconvolved),
            })
            .collect(),
    }
}

/// Length of a side in plane units and its Fanaroff–Riley ratio.
fn side_size(findings: &Findings, k: usize) -> (Measurement, Measurement) {
    let Findings { observed, model, settings, .. } = *findings;
    let none = Measurement::missing(Because::SideNotDetected);
    let Some((_, features)) = &model.sides else { return (none, none) };
    let Some((pixel, offset)) = features[k].farthest else { return (none, none) };
    let beam = &observed.working_beam;
    let peaks: Vec<(Pixel, f64)> = model.peaks.iter().map(|p| (p.pixel, p.value)).collect();
    let extent = Extent::between(
        &model.window,
        &model.frame,
        beam,
        model.level,
        &peaks,
        [model.frame.origin, pixel],
    );
    let length = offset.radius();
    let sigma = extent.ends[1].sigma.hypot(model.core.position_sigma);
    let size = if model.cut_off {
        Measurement::lower_limit(length, settings.confidence)
    } else {
        Measurement::symmetric(length, sigma)
    };
    let fr = match features[k].brightest {
        Some(f) => {
            let ratio = f.distance() / length;
            let error = feature_sigma(beam.mean_fwhm(), f.peak.signal_to_noise);
            Measurement::symmetric(ratio, ratio * (error / f.distance()).hypot(sigma / length))
        }
        None => Measurement::upper_limit(
            (BRIGHTEST_BEYOND_BEAMS * beam.major / length).min(1.0),
            settings.confidence,
        ),
    };
    (size, if model.cut_off { fr_of_cut(fr, settings.confidence) } else { fr })
}

/// A ratio over a length that is only known from below is an upper limit.
fn fr_of_cut(fr: Measurement, confidence: f64) -> Measurement {
    fr.best().map_or(fr, |value| Measurement::upper_limit(value, confidence))
}

/// Flux-weighted bearing of a ridge inside the strip.
fn mean_bearing(findings: &Findings, ridge: &Ridge, core_sigma: f64) -> Measurement {
    let Some(strips) = &findings.strips else {
        return Measurement::missing(Because::NoRoomForStrip);
    };
    let beam = &findings.observed.working_beam;
    let strip = strips.placed.strip;
    let inside: Vec<_> = ridge
        .points
        .iter()
        .filter(|p| p.distance >= strip.inner && p.distance < strip.outer && p.brightness > 0.0)
        .collect();
    let Some(first) = inside.first() else { return Measurement::missing(Because::JetNotDetected) };
    let weight: f64 = inside.iter().map(|p| p.brightness).sum();
    let turn: f64 = inside
        .iter()
        .map(|p| p.brightness * wrap_difference_deg(p.bearing_deg - first.bearing_deg))
        .sum::<f64>()
        / weight;
    // Points closer than a beam share their noise: as many independent ones as beams.
    let beams = ((strip.outer - strip.inner) / beam.major).max(1.0);
    let mean_square: f64 = inside
        .iter()
        .map(|p| {
            p.brightness / weight
                * (position_sigma(beam.mean_fwhm(), p.signal_to_noise()) / p.distance).powi(2)
        })
        .sum();
    let middle = 0.5 * (strip.inner + strip.outer);
    let sigma = (mean_square / beams).sqrt().hypot(core_sigma / middle).to_degrees();
    Measurement::symmetric(wrap_directed_deg(first.bearing_deg + turn), sigma)
}

/// Strip flux of a model side over its error.
fn strip_signal(findings: &Findings, k: usize) -> Option<f64> {
    let pair = &findings.strips.as_ref()?.pair;
    (pair.variance[k] > 0.0).then(|| pair.fluxes[k].sum / pair.variance[k].sqrt())
}

/// Flux of a side's jet: a value from 3σ, else an upper limit for a flux ≥ 0.
fn jet_flux(findings: &Findings, units: &Units, k: usize) -> Measurement {
    let Some(strips) = &findings.strips else {
        return Measurement::missing(Because::NoRoomForStrip);
    };
    let (sum, sigma) = (strips.pair.fluxes[k].sum, strips.pair.variance[k].sqrt());
    if !(sigma > 0.0) {
        return Measurement::missing(Because::BlankPixels);
    }
    if sum >= findings.settings.ratio_value_sigma * sigma {
        return units.flux(sum, sigma);
    }
    let confidence = findings.settings.confidence;
    match units.per_pixel {
        Ok(factor) => Measurement::upper_limit(
            positive_upper_limit(sum, sigma, confidence) * factor,
            confidence,
        ),
        Err(because) => Measurement::missing(because),
    }
}

fn lobe_record(
    findings: &Findings,
    units: &Units,
    sums: &Sums,
    index: usize,
    size: Measurement,
) -> OrMissing<LobeRecord> {
    let (Some(lobes), Some(strips)) = (sums.lobes, &findings.strips) else {
        return OrMissing::missing(Because::NoLobe);
    };
    let edge = strips.placed.strip.outer + findings.observed.working_beam.major;
    let lobe = lobes[index];
    if lobe.area_px < 1.0 {
        return OrMissing::missing(Because::NoLobe);
    }
    let beam = findings.observed.working_beam.mean_fwhm();
    let signal = (lobe.value / lobe.sigma.max(f64::MIN_POSITIVE)).max(1.0);
    OrMissing::Present(LobeRecord {
        flux_density_mjy: units.flux(lobe.value, lobe.sigma),
        length_arcsec: units.arcsec(size.increasing(|s| s - edge)),
        width_arcsec: units.arcsec(sums.lobe_width[index].map_or(
            Measurement::missing(Because::NoLobe),
            |square| {
                let width = crate::constants::FWHM_PER_SIGMA * square.sqrt();
                Measurement::symmetric(width, width.max(beam) / signal)
            },
        )),
    })
}

fn brightness_record(findings: &Findings, units: &Units, order: &Order) -> BrightnessRecord {
    let because =
        if findings.model.sides.is_none() { Because::NoCore } else { Because::NoRoomForStrip };
    let none = Measurement::missing(because);
    let Some(strips) = &findings.strips else {
        return BrightnessRecord {
            jet_to_counter_jet_ratio: none,
            jet_flux_density_mjy: none,
            counter_jet_flux_density_mjy: none,
            strip_covariance_mjy2: Bare::missing(because),
            aperture: OrMissing::missing(because),
            peak_ratio: none,
            profile: Vec::new(),
            sidedness_sigma: Bare::missing(because),
        };
    };
    let settings = findings.settings;
    let [a, b] = order.index;
    let flux_pair = |pair: &StripPair| FluxPair {
        numerator: pair.fluxes[a].sum,
        denominator: pair.fluxes[b].sum,
        numerator_variance: pair.variance[a],
        denominator_variance: pair.variance[b],
        covariance: pair.covariance,
    };
    let ratio_of = |pair: &StripPair| {
        if strips.blank_fraction > 0.5 {
            return Measurement::missing(Because::BlankPixels);
        }
        ratio(flux_pair(pair), settings.ratio_value_sigma, settings.confidence)
    };
    let pair = &strips.pair;
    let flux = |k: usize| units.flux_noise(pair.fluxes[k].sum, pair.variance[k].sqrt());
    let peak = findings.model.peaks.first().map_or(1.0, |p| p.value);
    let strip = strips.placed.strip;
    BrightnessRecord {
        jet_to_counter_jet_ratio: ratio_of(pair),
        jet_flux_density_mjy: flux(a),
        counter_jet_flux_density_mjy: flux(b),
        strip_covariance_mjy2: match units.per_pixel {
            Ok(factor) => Bare::number(pair.covariance * factor * factor, Because::OutOfDomain),
            Err(because) => Bare::missing(because),
        },
        aperture: OrMissing::Present(ApertureRecord {
            inner_arcsec: units.bare_arcsec(strip.inner),
            outer_arcsec: units.bare_arcsec(strip.outer),
            half_width_arcsec: units.bare_arcsec(strip.half_width),
            inner_px: strip.inner * units.px_per_unit,
            outer_px: strip.outer * units.px_per_unit,
            half_width_px: strip.half_width * units.px_per_unit,
            counter_strip_follows_ridge: strips.placed.follows[b],
        }),
        peak_ratio: peak_ratio(findings, order, strips),
        profile: strips
            .profile
            .iter()
            .map(|(distance, piece)| {
                let mean = |k: usize| {
                    let area = piece.fluxes[k].area_px.max(f64::MIN_POSITIVE);
                    (piece.fluxes[k].sum / area, piece.variance[k].sqrt() / area)
                };
                let ((jet, jet_sigma), (counter, counter_sigma)) = (mean(a), mean(b));
                ProfilePointRecord {
                    distance_arcsec: units.bare_arcsec(*distance),
                    ratio: ratio_of(piece),
                    jet_brightness_mjy_per_beam: units.brightness_noise(jet, jet_sigma),
                    counter_jet_brightness_mjy_per_beam: units
                        .brightness_noise(counter, counter_sigma),
                    jet_brightness_relative: jet / peak,
                    counter_jet_brightness_relative: counter / peak,
                }
            })
            .collect(),
        sidedness_sigma: Bare::from_option(order.sidedness, Because::BlankPixels),
    }
}

/// Ratio of the brightest places along the two strips' middles.
fn peak_ratio(findings: &Findings, order: &Order, strips: &Strips) -> Measurement {
    let Some((ridges, _)) = &findings.model.sides else {
        return Measurement::missing(Because::NoCore);
    };
    let model = findings.model;
    let refs = [&ridges[0], &ridges[1]];
    let strip = strips.placed.strip;
    let step = findings.observed.working_beam.minor / 4.0;
    let steps = (((strip.outer - strip.inner) / step).ceil() as usize).clamp(1, 2000);
    let brightest = |k: usize| {
        (0..=steps)
            .filter_map(|i| {
                let d = strip.inner + (strip.outer - strip.inner) * i as f64 / steps as f64;
                let bearing = strips.placed.bearing(refs, k, d);
                let at = model.frame.pixel(SkyOffset::polar(d, bearing));
                Some((model.coreless.cubic(at)?, model.coreless.rms_at(at)?))
            })
            .max_by(|x, y| x.0.total_cmp(&y.0))
    };
    let (Some(jet), Some(counter)) = (brightest(order.index[0]), brightest(order.index[1])) else {
        return Measurement::missing(Because::BlankPixels);
    };
    ratio(
        FluxPair {
            numerator: jet.0,
            denominator: counter.0,
            numerator_variance: jet.1 * jet.1,
            denominator_variance: counter.1 * counter.1,
            covariance: 0.0,
        },
        findings.settings.ratio_value_sigma,
        findings.settings.confidence,
    )
}

fn physics_input(
    map: &SkyMap,
    settings: &Settings,
    ratio: Measurement,
    size: Measurement,
    total: Measurement,
    core: Measurement,
    side_length_arcsec: [Measurement; 2],
) -> PhysicsInput {
    let d = &map.description;
    let (spectral_index, spectral_index_error) = d.jet_spectral_index();
    PhysicsInput {
        redshift: d.redshift,
        redshift_error: d.redshift_error,
        distance_mpc: d.distance_mpc,
        frequency_ghz: d.frequency_ghz,
        spectral_index,
        spectral_index_error,
        core_spectral_index: d.core_spectral_index_or_default(),
        total_spectral_index: d.total_spectral_index_or_default(),
        flow: settings.flow,
        ratio,
        largest_angular_size_arcsec: size,
        total_flux_density_mjy: total,
        core_flux_density_mjy: core,
        core_axes_mas: None,
        side_length_arcsec,
    }
}

fn assumed_values(map: &SkyMap, flags: &mut Vec<Flag>) {
    let d = &map.description;
    if d.spectral_index.is_none() {
        flags.push(Flag::new(flags::SPECTRAL_INDEX_ASSUMED, &[]));
    }
    if d.distance_mpc.is_some() && d.redshift.is_some() {
        flags.push(Flag::new(flags::REDSHIFT_AND_DISTANCE, &[]));
    }
}

fn input_record(map: &SkyMap) -> Input {
    Input {
        sha256: map.input.sha256.clone(),
        format: map.input.format.to_owned(),
        shape: map.input.shape.clone(),
        dtype: map.input.dtype.clone(),
    }
}

fn described(map: &SkyMap) -> BTreeMap<String, Described> {
    map.description
        .entries()
        .into_iter()
        .map(|(key, value, origin)| (key.to_owned(), Described { value, origin }))
        .collect()
}

fn noise_record(
    observed: &Observed,
    units: &Units,
    at: Pixel,
    peak: Option<f64>,
    near_rms: Option<f64>,
) -> NoiseRecord {
    let rms = observed.noise.rms(at.x, at.y);
    NoiseRecord {
        rms_mjy_per_beam: units.bare_brightness(rms),
        background_mjy_per_beam: units.bare_brightness(observed.noise.background(at.x, at.y)),
        rms_near_core_mjy_per_beam: near_rms
            .map_or(Bare::missing(Because::NoRoomForStrip), |r| units.bare_brightness(r)),
        dynamic_range: peak.map_or(Bare::missing(Because::NoSource), |p| {
            Bare::number(p / rms, Because::NoNoiseEstimate)
        }),
        correlation_fwhm_px: Bare::number(
            observed.correlation.correlation_fwhm_px(),
            Because::NoNoiseEstimate,
        ),
        method: observed.noise.method.to_owned(),
    }
}

fn position(map: &SkyMap, pixel: Pixel) -> Position {
    let sky = map.geometry.sky(pixel);
    Position {
        x_px: pixel.x,
        y_px: pixel.y,
        ra_deg: Bare::from_option(sky.map(|s| s.ra_deg), Because::NoCoordinates),
        dec_deg: Bare::from_option(sky.map(|s| s.dec_deg), Because::NoCoordinates),
    }
}

fn source_position(map: &SkyMap, model: &SourceModel) -> OrMissing<SourcePosition> {
    let (pixel, basis) = match (model.core.pixel, map.host_pixel()) {
        (Some(pixel), _) => (pixel, PositionBasis::Core),
        (None, Some(pixel)) => (pixel, PositionBasis::Host),
        (None, None) => (model.middle, PositionBasis::FluxWeighted),
    };
    let Position { x_px, y_px, ra_deg, dec_deg } = position(map, pixel);
    OrMissing::Present(SourcePosition { ra_deg, dec_deg, x_px, y_px, basis })
}
