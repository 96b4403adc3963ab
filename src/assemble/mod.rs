//! From what the stages found to the record: quantities formed, units put on, reasons given
//! where there is no number. Every quantity is formed here or in the stage it names, once.

mod jet;
mod parts;
mod roles;
mod shape;
mod side;
mod strips;
mod sums;
mod units;

use std::collections::BTreeMap;

use self::parts::{component_records, component_separation, core_axes_mas, core_component};
use self::roles::order_sides;
use self::shape::{Arms, arms, fr_ratios, measure_extents, symmetry};
use self::side::side_record;
use self::strips::brightness_record;
use self::sums::{core_sum, lobe_flux_ratio, sum_parts};
use self::units::Units;
use crate::brightness::{PlacedStrip, StripPair};
use crate::class::classify;
use crate::components::FitReport;
use crate::flags::{self, Flag};
use crate::map::SkyMap;
use crate::measurement::{Bare, Because, Measurement, OrMissing};
use crate::physics::{self, PhysicsInput, constrain_physics};
use crate::pipeline::{MapName, Observed};
use crate::record::{
    ArmBasis, BrightnessRecord, CoreBasis, CoreRecord, Described, FrClass, FrClassName, Input,
    MapRecord, NoiseRecord, Position, PositionBasis, RECORD_VERSION, Rival, Role, SideRecord,
    Software, SourcePosition, SourceRecord, Status,
};
use crate::settings::Settings;
use crate::source::SourceModel;
use crate::source::associate::SourceRegions;
use crate::units::Pixel;

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
    /// The fitted components.
    pub components: FitReport,
}

/// Below this confidence of the core no ratio is given and no side is called the jet.
const LEAST_CORE_CONFIDENCE: f64 = 0.5;
/// With a larger share of the strips blank or off the map no ratio is given.
const MOST_BLANK: f64 = 0.5;

impl Findings<'_> {
    /// Whether too little speaks for the chosen core to hang a ratio on it.
    fn core_is_unsure(&self) -> bool {
        self.model.core.confidence < LEAST_CORE_CONFIDENCE
    }
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
    let brightness = BrightnessRecord::missing(because);
    let physics = constrain_physics(&physics_input(map, settings), &settings.cosmology);
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
            position_error_east_arcsec: Bare::missing(because),
            position_error_north_arcsec: Bare::missing(because),
            position_error_correlation: Bare::missing(because),
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
            symmetry: OrMissing::missing(because),
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
    let core_sum = core_sum(findings, &sums);
    let core_flux = units.flux_of(core_sum);
    let whole = |m: Measurement| {
        if model.cut_off { m.as_lower_limit(settings.confidence) } else { m }
    };
    let total = whole(units.flux(sums.total.value, sums.total.sigma));

    let components = component_records(findings, &units);
    let core_px = model.core.pixel;
    let extents = measure_extents(findings);
    let size = extents.size;
    let deconvolved = units.deconvolved(extents.deconvolved);
    // A point has no sides, arms or extended rest.
    let unresolved = matches!(deconvolved, Measurement::UpperLimit { .. });
    let [first_side, second_side] = order.index.map(|k| {
        if unresolved {
            SideRecord::missing(order.role_of(k), Because::Unresolved)
        } else {
            side_record(findings, &units, &sums, k, order.role_of(k))
        }
    });
    let arms =
        if unresolved { Arms::missing(Because::Unresolved) } else { arms(findings, order.index) };
    let fr = fr_ratios(findings, order.index, size, deconvolved);
    let beams = deconvolved.best().map(|d| d / beam.major);
    let brightness = brightness_record(findings, &units, &order);

    let las_arcsec = units.arcsec(size);
    let physics = constrain_physics(
        &PhysicsInput {
            ratio: brightness.jet_to_counter_jet_ratio,
            largest_angular_size_arcsec: las_arcsec,
            total_flux_density_mjy: total,
            core_flux_density_mjy: core_flux,
            core_component_flux_density_mjy: core_component(&components)
                .map_or(core_flux, |c| c.flux_density_mjy),
            core_axes_mas: core_axes_mas(findings, &units, &components),
            side_length_arcsec: [first_side.length_arcsec, second_side.length_arcsec],
            ..physics_input(map, settings)
        },
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

    let place = model.core.position_error;
    let placed = |error: Bare| core_px.map_or(Bare::missing(Because::NoCore), |_| error);
    let peak = model.peak;
    let rms = if peak.signal_to_noise > 0.0 { peak.value / peak.signal_to_noise } else { 0.0 };
    let near = findings.strips.as_ref().and_then(|s| s.near_rms);
    let status = if unresolved { Status::Unresolved } else { Status::Measured };
    // In the map's own unit: a ratio needs no flux scale, and its error cancels.
    let total_sum = whole(Measurement::symmetric(sums.total.value, sums.total.sigma));
    let prominence = if unresolved {
        Measurement::missing(Because::Unresolved)
    } else {
        physics::emission::core_prominence(core_sum, total_sum)
    };
    let source = SourceRecord {
        position: source_position(map, model),
        total_flux_density_mjy: total,
        contour_flux_density_mjy: whole(units.flux(sums.contour.value, sums.contour.sigma)),
        peak_brightness_mjy_per_beam: if map.saturated > 0 {
            units.brightness(peak.value, rms).as_lower_limit(settings.confidence)
        } else {
            units.brightness(peak.value, rms)
        },
        peak_signal_to_noise: Bare::number(peak.signal_to_noise, Because::NoNoiseEstimate),
        contour_mjy_per_beam: units.bare_brightness(model.level),
        largest_angular_size_arcsec: las_arcsec,
        largest_angular_size_deconvolved_arcsec: units.arcsec(deconvolved),
        largest_size_px: units.px(size),
        component_separation_arcsec: units.arcsec(component_separation(findings)),
        position_angle_deg: arms.position_angle_deg,
        hotspot_separation_arcsec: units.arcsec(arms.hotspot_separation),
        fr_ratio: fr.whole,
        fr_ratio_deconvolved: fr.deconvolved,
        fr_class: classify(fr.of_regions, beams),
        arm_length_ratio: arms.folded,
        arm_length_ratio_basis: arms.basis,
        longer_arm: OrMissing::from_option(arms.longer.map(|k| order.role[k]), arms.because),
        arm_length_ratio_jet_side: arms.unfolded,
        lobe_flux_ratio: lobe_flux_ratio(findings, &sums, order.index),
        misalignment_deg: arms.misalignment_deg,
        bend_deg: arms.bend_deg,
        symmetry: symmetry([sides[0].bend_deg, sides[1].bend_deg]),
        axial_ratio: units.deconvolved(extents.axial_ratio),
        core_prominence: prominence,
        core_prominence_rest: redshift_used(map).map_or(
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
        noise: noise_record(
            observed,
            &units,
            core_px.unwrap_or(model.middle),
            Some(peak.value),
            near,
        ),
        core: CoreRecord {
            position: OrMissing::from_option(core_px.map(|p| position(map, p)), Because::NoCore),
            position_error_arcsec: placed(units.bare_arcsec(model.core.position_sigma)),
            position_error_east_arcsec: placed(units.bare_arcsec(place.east_east.max(0.0).sqrt())),
            position_error_north_arcsec: placed(
                units.bare_arcsec(place.north_north.max(0.0).sqrt()),
            ),
            position_error_correlation: placed(Bare::number(
                place.correlation(),
                Because::OutOfDomain,
            )),
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
        components,
        brightness,
        physics: physics.physics,
    }
}

/// What the description says; nothing measured yet.
fn physics_input(map: &SkyMap, settings: &Settings) -> PhysicsInput {
    let none = Measurement::missing(Because::NoSource);
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
        ratio: none,
        largest_angular_size_arcsec: none,
        total_flux_density_mjy: none,
        core_flux_density_mjy: none,
        core_component_flux_density_mjy: none,
        core_axes_mas: None,
        side_length_arcsec: [none; 2],
    }
}

/// The redshift that counts: a distance replaces it, for a source near enough that z = 0.
fn redshift_used(map: &SkyMap) -> Option<f64> {
    map.description.distance_mpc.map(|_| 0.0).or(map.description.redshift)
}

fn assumed_values(map: &SkyMap, flags: &mut Vec<Flag>) {
    let d = &map.description;
    let uses_index =
        d.redshift.is_some() || flags.iter().any(|f| f.code == flags::SYMMETRY_ASSUMED.code);
    if let Some(value) = d.spectral_index.filter(|index| *index < -0.3) {
        flags.push(Flag::new(flags::INVERTED_INDEX, &[("value", value)]));
    }
    if let Some(value) = d.frequency_ghz.filter(|ghz| !(0.001..=3000.0).contains(ghz)) {
        flags.push(Flag::new(flags::ODD_FREQUENCY, &[("value", value)]));
    }
    if d.spectral_index.is_none() && uses_index {
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
