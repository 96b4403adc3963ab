//! The record of one map: the JSON contract. Every path is always present; a number that
//! could not be measured says why.
//!
//! Conventions are those of the crate documentation. Keys are only ever added.

use std::collections::BTreeMap;

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

use crate::flags::Flag;
use crate::map::description::Origin;
use crate::measurement::{Bare, Because, Measurement, OrMissing};
use crate::physics::Physics;
use crate::settings::Settings;

/// Version of the record's layout; raised when a key is added.
pub const RECORD_VERSION: u32 = 1;

/// What became of a map.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "kebab-case")]
pub enum Status {
    /// A resolved source was measured.
    Measured,
    /// A source was found, but the beam does not resolve it.
    Unresolved,
    /// Nothing stands above the detection threshold.
    NoDetection,
    /// The map could not be read or measured.
    Failed,
}

/// Why a map failed.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
pub struct RecordError {
    /// Stable code, kebab-case.
    pub code: String,
    /// What was found, what was needed, where, and what to do.
    pub message: String,
}

/// The program that wrote the record.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
pub struct Software {
    /// Program name.
    pub name: String,
    /// Its version.
    pub version: String,
}

impl Default for Software {
    fn default() -> Self {
        Self {
            name: env!("CARGO_PKG_NAME").to_owned(),
            version: env!("CARGO_PKG_VERSION").to_owned(),
        }
    }
}

/// What the file held.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
pub struct Input {
    /// SHA-256 of the file's bytes, hexadecimal.
    pub sha256: String,
    /// Format recognised from the content.
    pub format: String,
    /// Shape as stored.
    pub shape: Vec<u64>,
    /// Sample type as stored.
    pub dtype: String,
}

/// One key of the map description as it was used.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct Described {
    /// The value used.
    pub value: serde_json::Value,
    /// Where it came from.
    pub origin: Origin,
}

/// Noise of the map, in units per beam.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct NoiseRecord {
    /// rms at the source.
    pub rms_mjy_per_beam: Bare,
    /// Background at the source, already taken off everywhere.
    pub background_mjy_per_beam: Bare,
    /// rms at the jet's distances from the core, away from the source.
    pub rms_near_core_mjy_per_beam: Bare,
    /// Peak brightness of the source over its rms.
    pub dynamic_range: Bare,
    /// FWHM of the Gaussian kernel that makes white noise look like this one.
    pub correlation_fwhm_px: Bare,
    /// How the noise was estimated.
    pub method: String,
}

/// A place on the map and on the sky.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct Position {
    /// Column, 0-based.
    pub x_px: f64,
    /// Row as stored, 0-based.
    pub y_px: f64,
    /// Right ascension.
    pub ra_deg: Bare,
    /// Declination.
    pub dec_deg: Bare,
}

/// What the choice of the core rests on.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "kebab-case")]
pub enum CoreBasis {
    /// The observer's own choice.
    Given,
    /// The host galaxy's position.
    Host,
    /// A compact component in the middle.
    CompactCentral,
    /// The bright compact end of a one-sided source.
    OneSidedEnd,
    /// No core was chosen.
    None,
}

/// Another component that could have been the core.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct Rival {
    /// Column, 0-based.
    pub x_px: f64,
    /// Row as stored, 0-based.
    pub y_px: f64,
    /// Peak over rms.
    pub signal_to_noise: f64,
    /// Its share of the confidence, 0 to 1.
    pub confidence: f64,
}

/// The radio core.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct CoreRecord {
    /// Where it is.
    pub position: OrMissing<Position>,
    /// 1σ along an axis, the mean over all directions.
    pub position_error_arcsec: Bare,
    /// 1σ towards east.
    pub position_error_east_arcsec: Bare,
    /// 1σ towards north.
    pub position_error_north_arcsec: Bare,
    /// Correlation of the errors towards east and north, −1 to 1.
    pub position_error_correlation: Bare,
    /// What the choice rests on.
    pub basis: CoreBasis,
    /// 0 to 1.
    pub confidence: f64,
    /// Other candidates.
    pub rivals: Vec<Rival>,
    /// Of the beam-shaped component at the core.
    pub flux_density_mjy: Measurement,
}

/// What the source's position is.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "kebab-case")]
pub enum PositionBasis {
    /// The core.
    Core,
    /// The host.
    Host,
    /// The flux-weighted middle.
    FluxWeighted,
}

/// Position of the source, so that every record can be joined.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct SourcePosition {
    /// Right ascension.
    pub ra_deg: Bare,
    /// Declination.
    pub dec_deg: Bare,
    /// Column, 0-based.
    pub x_px: f64,
    /// Row as stored, 0-based.
    pub y_px: f64,
    /// What it is the position of.
    pub basis: PositionBasis,
}

/// Fanaroff–Riley class.
#[derive(
    Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Serialize, Deserialize, JsonSchema,
)]
pub enum FrClassName {
    /// Edge-darkened.
    I,
    /// Edge-brightened.
    II,
    /// One side of each kind.
    #[serde(rename = "hybrid")]
    Hybrid,
    /// Too small for the beam.
    #[serde(rename = "unresolved")]
    Unresolved,
    /// The ratio's error spans the division.
    #[serde(rename = "undecided")]
    Undecided,
}

/// Class with the probability of each alternative.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct FrClass {
    /// The class.
    pub class: FrClassName,
    /// Probability of `I` and `II`; empty where the class could not be tried.
    pub probability: BTreeMap<FrClassName, f64>,
}

/// What the ends of an arm ratio are.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "kebab-case")]
pub enum ArmBasis {
    /// Hot spots on both sides.
    Hotspots,
    /// The ends of the sides, on one side at least.
    Ends,
    /// No arms were measured.
    None,
}

/// Symmetry of the two sides' bends.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "kebab-case")]
pub enum Symmetry {
    /// S-shaped.
    Inversion,
    /// C-shaped.
    Mirror,
    /// Neither side bends.
    Straight,
    /// The bends do not tell.
    Undecided,
}

/// The whole source.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct SourceRecord {
    /// Core, host or flux-weighted middle.
    pub position: OrMissing<SourcePosition>,
    /// The whole source, also outside its contour.
    pub total_flux_density_mjy: Measurement,
    /// Inside the 3σ contour.
    pub contour_flux_density_mjy: Measurement,
    /// Highest brightness.
    pub peak_brightness_mjy_per_beam: Measurement,
    /// Highest brightness over the local rms.
    pub peak_signal_to_noise: Bare,
    /// Level used for sizes.
    pub contour_mjy_per_beam: Bare,
    /// Largest distance between two points of the contour.
    pub largest_angular_size_arcsec: Measurement,
    /// The same, with the beam's reach taken off at both ends.
    pub largest_angular_size_deconvolved_arcsec: Measurement,
    /// The largest size in pixels (mean scale), also where no pixel scale is known.
    pub largest_size_px: Measurement,
    /// Distance between the two outermost fitted components.
    pub component_separation_arcsec: Measurement,
    /// Of the axis through the outermost features, undirected.
    pub position_angle_deg: Measurement,
    /// Distance between the two hot spots.
    pub hotspot_separation_arcsec: Measurement,
    /// Distance between the brightest points over the largest angular size.
    pub fr_ratio: Measurement,
    /// The same over the deconvolved size.
    pub fr_ratio_deconvolved: Measurement,
    /// Fanaroff–Riley class.
    pub fr_class: FrClass,
    /// Longer over shorter arm.
    pub arm_length_ratio: Measurement,
    /// What the arms end in.
    pub arm_length_ratio_basis: ArmBasis,
    /// Role of the side with the longer arm.
    pub longer_arm: OrMissing<Role>,
    /// `sides[0]` over `sides[1]`, not folded.
    pub arm_length_ratio_jet_side: Measurement,
    /// `sides[0]` over `sides[1]`.
    pub lobe_flux_ratio: Measurement,
    /// Signed angle by which the second side's end departs from straight opposition.
    pub misalignment_deg: Measurement,
    /// 180° − angle hot spot–core–hot spot.
    pub bend_deg: Measurement,
    /// From the two sides' bends: bends below 5° or 2σ are none.
    pub symmetry: OrMissing<Symmetry>,
    /// Length over width, both deconvolved.
    pub axial_ratio: Measurement,
    /// Core flux over the rest, observed.
    pub core_prominence: Measurement,
    /// Core flux over the rest, both K-corrected.
    pub core_prominence_rest: Measurement,
}

/// Role of a side.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "kebab-case")]
pub enum Role {
    /// The brighter side, taken as approaching.
    Jet,
    /// The fainter side, taken as receding.
    CounterJet,
    /// Undecided; end position angle in [0, 180).
    First,
    /// Undecided; the other side.
    Second,
}

/// The jet of one side.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct JetRecord {
    /// Whether jet emission stands above the noise in the strip (3σ).
    pub detected: bool,
    /// Which criteria of a jet one map can test, and whether they are met (Bridle & Perley 1984):
    /// `four_times_as_long_as_wide`, `separable`, `aligned_with_core`.
    pub criteria: OrMissing<BTreeMap<String, bool>>,
    /// Flux in the strip.
    pub flux_density_mjy: Measurement,
    /// Apparent full opening angle.
    pub opening_angle_deg: Measurement,
    /// Exponent k of width ∝ distance^k.
    pub width_exponent: Bare,
}

/// A hot spot.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct HotspotRecord {
    /// Column, 0-based.
    pub x_px: f64,
    /// Row as stored, 0-based.
    pub y_px: f64,
    /// East of the core.
    pub east_arcsec: Bare,
    /// North of the core.
    pub north_arcsec: Bare,
    /// Distance from the core.
    pub distance_arcsec: Measurement,
    /// Directed position angle from the core.
    pub position_angle_deg: Measurement,
    /// Peak brightness.
    pub peak_brightness_mjy_per_beam: Measurement,
    /// Peak over rms.
    pub signal_to_noise: f64,
}

/// A lobe: the side's emission beyond the jet's strip.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct LobeRecord {
    /// Flux beyond the inner edge.
    pub flux_density_mjy: Measurement,
    /// From the inner edge to the farthest point of the contour.
    pub length_arcsec: Measurement,
    /// Flux-weighted FWHM across the side's axis, beam not taken off.
    pub width_arcsec: Measurement,
}

/// One point of a ridge line.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct RidgePointRecord {
    /// Radial distance from the core.
    pub distance_arcsec: Bare,
    /// East of the core.
    pub east_arcsec: Bare,
    /// North of the core.
    pub north_arcsec: Bare,
    /// Brightness on the ridge.
    pub brightness_mjy_per_beam: Measurement,
    /// Brightness relative to the source's peak.
    pub brightness_relative: f64,
    /// FWHM across the ridge.
    pub width_arcsec: Measurement,
    /// The same with the projected beam taken off.
    pub width_deconvolved_arcsec: Measurement,
}

/// One side of the source.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct SideRecord {
    /// Role of the side.
    pub role: Role,
    /// Bearing of the ridge, flux-weighted over the strip.
    pub position_angle_deg: Measurement,
    /// Bearing of the ridge at two beam majors from the core.
    pub inner_position_angle_deg: Measurement,
    /// Core to hot spot, else to the ridge's end.
    pub end_position_angle_deg: Measurement,
    /// End minus inner position angle.
    pub bend_deg: Measurement,
    /// Core to the farthest point of the contour.
    pub length_arcsec: Measurement,
    /// The same in pixels (mean scale), also where no pixel scale is known.
    pub length_px: Measurement,
    /// Along the ridge to where it last stands at 3 rms.
    pub ridge_length_arcsec: Measurement,
    /// Projected length.
    pub length_kpc: Measurement,
    /// All of that side.
    pub flux_density_mjy: Measurement,
    /// Core to brightest point over length.
    pub fr_ratio: Measurement,
    /// The jet of the side.
    pub jet: JetRecord,
    /// The hot spot of the side.
    pub hotspot: OrMissing<HotspotRecord>,
    /// The lobe of the side.
    pub lobe: OrMissing<LobeRecord>,
    /// The ridge line.
    pub ridge: Vec<RidgePointRecord>,
}

impl SideRecord {
    /// A side of which nothing is known, for one reason.
    pub fn missing(role: Role, because: Because) -> Self {
        let none = Measurement::missing(because);
        Self {
            role,
            position_angle_deg: none,
            inner_position_angle_deg: none,
            end_position_angle_deg: none,
            bend_deg: none,
            length_arcsec: none,
            length_px: none,
            ridge_length_arcsec: none,
            length_kpc: none,
            flux_density_mjy: none,
            fr_ratio: none,
            jet: JetRecord {
                detected: false,
                criteria: OrMissing::missing(because),
                flux_density_mjy: none,
                opening_angle_deg: none,
                width_exponent: Bare::missing(because),
            },
            hotspot: OrMissing::missing(because),
            lobe: OrMissing::missing(because),
            ridge: Vec::new(),
        }
    }
}

/// What a fitted component is.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "kebab-case")]
pub enum ComponentRole {
    /// The core.
    Core,
    /// The hot spot of a side.
    Hotspot,
    /// Other emission of the source.
    Other,
}

/// The three numbers of a component's shape.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct ShapeRecord {
    /// FWHM of the major axis.
    pub major_arcsec: Measurement,
    /// FWHM of the minor axis.
    pub minor_arcsec: Measurement,
    /// Position angle of the major axis, undirected.
    pub position_angle_deg: Measurement,
}

/// A fitted elliptical Gaussian.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct ComponentRecord {
    /// What it is.
    pub role: ComponentRole,
    /// Where it is.
    pub position: Position,
    /// 1σ along each axis.
    pub position_error_arcsec: Bare,
    /// Integrated flux.
    pub flux_density_mjy: Measurement,
    /// Peak.
    pub peak_brightness_mjy_per_beam: Measurement,
    /// FWHM of the major axis as fitted.
    pub major_arcsec: Measurement,
    /// FWHM of the minor axis as fitted.
    pub minor_arcsec: Measurement,
    /// Position angle of the major axis as fitted, undirected.
    pub position_angle_deg: Measurement,
    /// The shape with the beam taken off.
    pub deconvolved: ShapeRecord,
}

/// The strip used for the ratio.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct ApertureRecord {
    /// Inner radial end.
    pub inner_arcsec: Bare,
    /// Outer radial end.
    pub outer_arcsec: Bare,
    /// Half the width across the ridge.
    pub half_width_arcsec: Bare,
    /// Inner radial end in pixels (mean scale).
    pub inner_px: f64,
    /// Outer radial end in pixels (mean scale).
    pub outer_px: f64,
    /// Half the width across the ridge in pixels (mean scale).
    pub half_width_px: f64,
    /// Whether the second side's strip follows its own ridge (else the first's, turned by 180°).
    pub counter_strip_follows_ridge: bool,
}

/// Ratio at one distance.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct ProfilePointRecord {
    /// Radial distance from the core.
    pub distance_arcsec: Bare,
    /// `sides[0]` over `sides[1]`.
    pub ratio: Measurement,
    /// Brightness of `sides[0]`, strip mean.
    pub jet_brightness_mjy_per_beam: Measurement,
    /// Brightness of `sides[1]`, strip mean.
    pub counter_jet_brightness_mjy_per_beam: Measurement,
    /// `sides[0]` relative to the source's peak.
    pub jet_brightness_relative: f64,
    /// `sides[1]` relative to the source's peak.
    pub counter_jet_brightness_relative: f64,
}

/// Brightness of the two sides.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct BrightnessRecord {
    /// R: strip flux of `sides[0]` over that of `sides[1]`.
    pub jet_to_counter_jet_ratio: Measurement,
    /// Signed strip flux of `sides[0]`.
    pub jet_flux_density_mjy: Measurement,
    /// Signed strip flux of `sides[1]`.
    pub counter_jet_flux_density_mjy: Measurement,
    /// Covariance of the two.
    pub strip_covariance_mjy2: Bare,
    /// The strip.
    pub aperture: OrMissing<ApertureRecord>,
    /// Peak to peak along the ridges, inside the strip.
    pub peak_ratio: Measurement,
    /// Ratio against distance.
    pub profile: Vec<ProfilePointRecord>,
    /// Difference of the strip fluxes over its error, absolute.
    pub sidedness_sigma: Bare,
}

impl BrightnessRecord {
    /// No strips, for one reason.
    pub fn missing(because: Because) -> Self {
        let none = Measurement::missing(because);
        Self {
            jet_to_counter_jet_ratio: none,
            jet_flux_density_mjy: none,
            counter_jet_flux_density_mjy: none,
            strip_covariance_mjy2: Bare::missing(because),
            aperture: OrMissing::missing(because),
            peak_ratio: none,
            profile: Vec::new(),
            sidedness_sigma: Bare::missing(because),
        }
    }
}

/// The record of a map that could be read and whose noise is known.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct MapRecord {
    /// Layout version.
    pub record_version: u32,
    /// Name of the source.
    pub id: String,
    /// The map's file as named by the caller.
    pub file: String,
    /// What became of it.
    pub status: Status,
    /// What to handle with care.
    pub flags: Vec<Flag>,
    /// Settings used.
    pub settings: Settings,
    /// Program.
    pub software: Software,
    /// The file.
    pub input: Input,
    /// The description used, key by key.
    pub map: BTreeMap<String, Described>,
    /// Noise.
    pub noise: NoiseRecord,
    /// Core.
    pub core: CoreRecord,
    /// Whole source.
    pub source: SourceRecord,
    /// The two sides; jet or first comes first.
    pub sides: [SideRecord; 2],
    /// Fitted Gaussians.
    pub components: Vec<ComponentRecord>,
    /// Jet against counter-jet.
    pub brightness: BrightnessRecord,
    /// What follows with redshift and beaming formulas.
    pub physics: Physics,
}

/// The record of a map that failed.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct FailedRecord {
    /// Layout version.
    pub record_version: u32,
    /// Name of the source.
    pub id: String,
    /// The map's file as named by the caller.
    pub file: String,
    /// Always `failed`.
    pub status: Status,
    /// Why.
    pub error: RecordError,
    /// The file, as far as it could be read.
    pub input: OrMissing<Input>,
    /// Settings asked for.
    pub settings: Settings,
    /// Program.
    pub software: Software,
}

/// One line of the results.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(untagged)]
pub enum Record {
    /// The map failed.
    Failed(Box<FailedRecord>),
    /// The map was measured, or nothing was found on it.
    Map(Box<MapRecord>),
}

impl Record {
    /// What became of the map.
    pub fn status(&self) -> Status {
        match self {
            Self::Failed(_) => Status::Failed,
            Self::Map(record) => record.status,
        }
    }

    /// The JSON schema of a record.
    pub fn schema() -> serde_json::Value {
        let generator =
            schemars::generate::SchemaSettings::draft2020_12().for_serialize().into_generator();
        serde_json::to_value(generator.into_root_schema_for::<Self>()).unwrap_or_default()
    }
}
