//! One made map: the source, the instrument's share, the stored form, the description and
//! the truth.

use ndarray::Array2;
use serde_json::{Map, Value, json};

use super::noise::{
    Clip, Draws, NoiseKind, RmsField, blank_border, blank_discs, bowl, clip, hole_centres,
    neighbour_fluxes_and_places, quantise, rings, rms_field, spokes, stream_seed, stripes,
    unit_noise,
};
use super::observe::{Canvas, Observation, described_core, geometry_keys, is_one};
use super::parameters::Parameters;
use super::scenario::{Scenario, ScenarioError};
use super::scene::{GaussianShape, add_gaussian};
use super::source::{Look, Part, SkyGaussian, SourceError, TwinSource, twin_source};
use super::truth::{Truth, TruthInput, truth};
use crate::map::description::DescriptionError;
use crate::units::{Pixel, SkyOffset};

/// Why no map can be made of parameters.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum MakeError {
    /// Parameters that cannot be drawn.
    #[error(transparent)]
    Scenario(#[from] ScenarioError),
    /// Numbers that make no source.
    #[error(transparent)]
    Source(#[from] SourceError),
    /// Numbers that make no array on the sky.
    #[error(transparent)]
    Description(#[from] DescriptionError),
    /// One of a scenario's sources cannot be made.
    #[error("source {name}: {error}")]
    Numbered {
        /// Its name.
        name: String,
        /// Why.
        error: Box<MakeError>,
    },
}

/// One made map.
#[derive(Clone, Debug)]
pub struct MadeMap {
    /// Rows as stored, in the unit described; NaN where blank.
    pub brightness: Array2<f64>,
    /// Keys of the map description.
    pub description: Map<String, Value>,
    /// What a perfect measurement would find.
    pub truth: Truth,
    /// What to store it as.
    pub file: FileFormat,
}

/// File formats a made map can be stored in.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Format {
    /// NumPy array.
    Npy,
    /// NumPy archive with one member, `map`.
    Npz,
    /// Gray PNG.
    Png,
    /// TIFF.
    Tiff,
    /// Portable graymap.
    Pgm,
    /// Portable floatmap.
    Pfm,
    /// Numbers as text.
    Text,
}

/// Sample types a made map can be stored in.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Dtype {
    /// 32-bit float.
    F4,
    /// 64-bit float.
    F8,
    /// 16-bit signed integer.
    I2,
    /// 32-bit signed integer.
    I4,
    /// 8-bit unsigned integer.
    U1,
    /// 16-bit unsigned integer.
    U2,
}

/// Order of the bytes of a sample.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum ByteOrder {
    /// Least significant first.
    Little,
    /// Most significant first.
    Big,
}

/// How a map is stored. Integer samples hold (brightness − offset)/step.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct FileFormat {
    /// The format.
    pub format: Format,
    /// The sample type.
    pub dtype: Dtype,
    /// The byte order.
    pub byte_order: ByteOrder,
    /// Brightness of one count, in the map's unit.
    pub integer_step: f64,
    /// Brightness of count zero, in the map's unit.
    pub integer_offset: f64,
}

/// Makes the map of these parameters. `seed` is that of this source: epochs of one source
/// share it, and differ by `look` and `epoch`. `id` names the map in its description.
///
/// # Errors
/// Where numbers that need each other are not all there.
pub fn make_map(
    parameters: &Parameters,
    look: &Look,
    epoch: usize,
    id: &str,
) -> Result<MadeMap, MakeError> {
    let p = parameters;
    let seed = |name: &str| stream_seed(look.seed, epoch as u64, name);
    let core = registered_core(p, seed("registration"))?;
    let observation = Observation::new(p, core)?;
    let source = twin_source(p, observation.beam.minor, look)?;
    let (whole, made_truth) = sky(p, look, source, &observation);
    let mut brightness = Array2::zeros((observation.rows, observation.columns));
    let scale = 1.0 + p.noise.flux_scale_error * Draws::new(seed("flux-scale")).normal();
    let scale = scale.max(0.1);
    whole.add_to(&mut brightness, scale);
    add_neighbours(&mut brightness, p, &observation, look.seed, scale);
    add_instrument(&mut brightness, p, &observation, &made_truth, &seed);
    let file = store(&mut brightness, p, &observation, &made_truth, &seed);
    let mut made_truth = made_truth;
    made_truth.values.number("intrinsic.flux_scale_factor", scale);
    Ok(MadeMap {
        brightness,
        description: describe(p, look, id, seed("host")),
        truth: made_truth,
        file,
    })
}

/// Where the core really lies on the array: where it is described, and an error of alignment.
fn registered_core(p: &Parameters, seed: u64) -> Result<Pixel, MakeError> {
    let core = described_core(p);
    let mut draws = Draws::new(seed);
    let error = p.registration.error_arcsec;
    let frame = Observation::new(p, core)?.frame;
    let shift = SkyOffset::new(error * draws.normal(), error * draws.normal());
    Ok(frame.pixel(shift))
}

/// The noise-free source, and the truth that follows from it.
fn sky(
    p: &Parameters,
    look: &Look,
    source: TwinSource,
    observation: &Observation,
) -> (Canvas, Truth) {
    let (core, rest): (Vec<SkyGaussian>, Vec<SkyGaussian>) =
        source.parts.iter().copied().partition(|piece| piece.part == Part::Core);
    let mut whole = Canvas::around(observation, &source.parts);
    whole.add(observation, &rest);
    whole.add(observation, &core);
    let made = TruthInput {
        parameters: p,
        look: *look,
        rms_mjy_per_beam: rms_at_core(p, observation),
        whole: &whole,
    };
    let made_truth = truth(source, observation.clone(), &made);
    (whole, made_truth)
}

/// The rms field on the array, 1 at its middle.
fn field(p: &Parameters, observation: &Observation) -> Option<Array2<f64>> {
    let flat = is_one(p.noise.gradient) && is_one(p.noise.edge_rise);
    (!flat).then(|| {
        rms_field(
            observation.columns,
            observation.rows,
            &RmsField {
                gradient: p.noise.gradient,
                gradient_angle_deg: array_angle_deg(observation, p.noise.gradient_pa_deg),
                edge_rise: p.noise.edge_rise,
            },
        )
    })
}

/// rms at the core in mJy/beam, stripes included.
fn rms_at_core(p: &Parameters, observation: &Observation) -> f64 {
    let origin = observation.frame.origin;
    let factor = field(p, observation).map_or(1.0, |field| {
        let x = origin.x.round().clamp(0.0, observation.columns as f64 - 1.0) as usize;
        let y = origin.y.round().clamp(0.0, observation.rows as f64 - 1.0) as usize;
        field[(y, x)]
    });
    p.noise.rms_mjy_per_beam * libm::hypot(factor, p.noise.stripes)
}

/// Direction on the array (degrees from +x towards +y) of a position angle.
fn array_angle_deg(observation: &Observation, pa_deg: f64) -> f64 {
    let origin = observation.frame.origin;
    let to = observation.frame.pixel(SkyOffset::polar(1.0, pa_deg));
    libm::atan2(to.y - origin.y, to.x - origin.x).to_degrees()
}

/// Pixels per arcsec, mean of both axes.
fn px_per_arcsec(observation: &Observation) -> f64 {
    1.0 / observation.frame.mean_scale()
}

/// Unrelated point sources, the same at every epoch.
fn add_neighbours(
    brightness: &mut Array2<f64>,
    p: &Parameters,
    observation: &Observation,
    seed: u64,
    scale: f64,
) {
    let arcmin_per_px = observation.frame.mean_scale() / 60.0;
    let pixels = (observation.columns * observation.rows) as f64;
    let mean = p.neighbours.per_square_arcmin * pixels * arcmin_per_px * arcmin_per_px;
    if mean <= 0.0 {
        return;
    }
    let fluxes = (p.neighbours.flux_min_mjy, p.neighbours.flux_max_mjy, p.neighbours.slope);
    let seed = stream_seed(seed, 0, "neighbours");
    let (columns, rows) = (observation.columns, observation.rows);
    for (x, y, flux) in neighbour_fluxes_and_places(columns, rows, mean, fluxes, seed) {
        add_gaussian(brightness, (x, y), scale * flux, observation.beam_px);
    }
}

/// Noise, sidelobes, bowl and offset.
fn add_instrument(
    brightness: &mut Array2<f64>,
    p: &Parameters,
    observation: &Observation,
    made_truth: &Truth,
    seed: &dyn Fn(&str) -> u64,
) {
    let n = &p.noise;
    let (columns, rows) = (observation.columns, observation.rows);
    let scale = px_per_arcsec(observation);
    let angle = |pa_deg: f64| array_angle_deg(observation, pa_deg);
    if n.rms_mjy_per_beam > 0.0 {
        let kind = match n.kind {
            "white" => NoiseKind::White,
            "smooth" => {
                let wider = n.fwhm_arcsec / p.map.beam_major_arcsec;
                NoiseKind::Smoothed(GaussianShape::from_moments(
                    observation.beam_px.map(|m| m * wider * wider),
                ))
            }
            _ => NoiseKind::Smoothed(GaussianShape::from_moments(observation.beam_px)),
        };
        let noise = unit_noise(columns, rows, kind, seed("noise"));
        let rms = n.rms_mjy_per_beam;
        match field(p, observation) {
            Some(field) => ndarray::Zip::from(&mut *brightness)
                .and(&noise)
                .and(&field)
                .for_each(|b, noise, field| *b += rms * field * noise),
            None => brightness.scaled_add(rms, &noise),
        }
        if n.stripes > 0.0 {
            let period = n.stripe_period_arcsec * scale;
            *brightness += &stripes(
                columns,
                rows,
                n.stripes * rms,
                period,
                angle(n.stripe_pa_deg),
                seed("stripes"),
            );
        }
    }
    let bright = brightest(made_truth);
    if let Some((centre, peak)) = bright {
        if n.rings > 0.0 {
            let period = n.ring_period_arcsec * scale;
            *brightness += &rings(columns, rows, centre, n.rings * peak, period);
        }
        if n.spokes > 0.0 {
            let beam_px = (observation.beam_area_px / crate::constants::GAUSSIAN_AREA).sqrt();
            let count = n.spoke_count;
            *brightness +=
                &spokes(columns, rows, centre, n.spokes * peak, count, beam_px, seed("spokes"));
        }
    }
    if n.bowl > 0.0 {
        let flux = n.bowl * made_truth.source.total_flux_mjy() * observation.beam_area_px;
        let origin = observation.frame.origin;
        let width = n.bowl_fwhm_arcsec * scale;
        *brightness += &bowl(columns, rows, (origin.x, origin.y), flux, width);
    }
    if n.offset_mjy_per_beam != 0.0 {
        *brightness += n.offset_mjy_per_beam;
    }
}

/// Place on the array and brightness of the brightest of core and hot spots: what sidelobes
/// come from.
fn brightest(made_truth: &Truth) -> Option<((f64, f64), f64)> {
    let observation = &made_truth.observation;
    let parts = &made_truth.source.parts;
    parts
        .iter()
        .filter(|piece| matches!(piece.part, Part::Core | Part::Hotspot))
        .map(|piece| (piece.offset, observation.brightness_at(parts, piece.offset)))
        .max_by(|a, b| a.1.total_cmp(&b.1))
        .map(|(offset, peak)| {
            let pixel = observation.frame.pixel(offset);
            ((pixel.x, pixel.y), peak)
        })
}

/// Turns brightness in mJy/beam into the map's unit, quantises, clips and blanks it, and says
/// how it is stored.
fn store(
    brightness: &mut Array2<f64>,
    p: &Parameters,
    observation: &Observation,
    made_truth: &Truth,
    seed: &dyn Fn(&str) -> u64,
) -> FileFormat {
    let per_beam = match p.map.unit {
        "Jy/beam" | "Jy/pixel" => 1e-3,
        "uJy/beam" | "uJy/pixel" => 1e3,
        _ => 1.0,
    };
    let is_per_pixel = p.map.unit.ends_with("pixel");
    let factor = if is_per_pixel { per_beam / observation.beam_area_px } else { per_beam };
    if !is_one(factor) {
        brightness.mapv_inplace(|v| v * factor);
    }
    let rms = made_truth.values.get("noise.rms_mjy_per_beam").unwrap_or(0.0) * factor;
    if p.file.step_mjy_per_beam > 0.0 {
        quantise(brightness, p.file.step_mjy_per_beam * factor);
    }
    let what = match p.file.clip {
        "zero" => Clip::Zero,
        "blank" => Clip::Blank,
        "floor" => Clip::Floor,
        _ => Clip::None,
    };
    clip(brightness, p.file.clip_sigma * rms, what);
    blank_border(brightness, p.file.border_px);
    if p.file.holes > 0 {
        let centres = if p.file.hole_place == "strip" {
            strip_places(made_truth, p.file.holes)
        } else {
            hole_centres(observation.columns, observation.rows, p.file.holes, seed("holes"))
        };
        blank_discs(brightness, &centres, p.file.hole_radius_px);
    }
    file_format(brightness, p, rms, factor)
}

/// Places on the approaching jet's path, evenly spaced.
fn strip_places(made_truth: &Truth, count: usize) -> Vec<(f64, f64)> {
    let path = &made_truth.source.paths[0];
    let end = made_truth.source.jet_to_arcsec[0];
    (0..count)
        .map(|i| {
            let t = end * (i as f64 + 0.7) / (count as f64 + 0.4);
            let pixel = made_truth.observation.frame.pixel(path.at(t).0);
            (pixel.x, pixel.y)
        })
        .collect()
}

/// The stored form; integers span the map with steps no coarser than asked for, if they can.
fn file_format(brightness: &Array2<f64>, p: &Parameters, rms: f64, factor: f64) -> FileFormat {
    let format = match p.file.format {
        "npz" => Format::Npz,
        "png" => Format::Png,
        "tiff" => Format::Tiff,
        "pgm" => Format::Pgm,
        "pfm" => Format::Pfm,
        "text" => Format::Text,
        _ => Format::Npy,
    };
    let dtype = match (p.file.dtype, format) {
        ("f4", Format::Png | Format::Pgm) => Dtype::U2,
        ("f8", _) => Dtype::F8,
        ("i2", _) => Dtype::I2,
        ("i4", _) => Dtype::I4,
        ("u1", _) => Dtype::U1,
        ("u2", _) => Dtype::U2,
        _ => Dtype::F4,
    };
    let byte_order = if p.file.byte_order == "big" { ByteOrder::Big } else { ByteOrder::Little };
    let (low, high) = brightness
        .iter()
        .filter(|v| v.is_finite())
        .fold((f64::INFINITY, f64::NEG_INFINITY), |(low, high), v| (low.min(*v), high.max(*v)));
    let span = if high > low { high - low } else { 1.0 };
    let asked = p.file.step_mjy_per_beam * factor;
    let wanted = if asked > 0.0 { asked } else { 0.125 * rms };
    let largest = low.abs().max(high.abs());
    // Room for the blank value and rounding at either end.
    let (least, offset) = match dtype {
        Dtype::U1 => (span / 253.0, low),
        Dtype::U2 => (span / 65_533.0, low),
        Dtype::I2 => (largest / 32_766.0, 0.0),
        Dtype::I4 => (largest / 2_147_483_646.0, 0.0),
        Dtype::F4 | Dtype::F8 => (0.0, 0.0),
    };
    let integer_step = wanted.max(least);
    let integer_step =
        if integer_step > 0.0 && integer_step.is_finite() { integer_step } else { 1.0 };
    // Unsigned counts begin at 1: 0 is blank.
    let integer_offset = match dtype {
        Dtype::U1 | Dtype::U2 if offset.is_finite() => offset - integer_step,
        _ => 0.0,
    };
    FileFormat { format, dtype, byte_order, integer_step, integer_offset }
}

/// The description an observer would give.
fn describe(p: &Parameters, look: &Look, id: &str, seed: u64) -> Map<String, Value> {
    let mut keys = geometry_keys(p);
    let mut put = |key: &str, value: Value| {
        keys.insert(key.to_owned(), value);
    };
    put("id", json!(id));
    put("frequency_ghz", json!(look.frequency_ghz));
    put("flux_scale_error", json!(p.noise.flux_scale_error));
    if p.map.host == "known" {
        let scale = p.map.pixel_scale_arcsec;
        let core = described_core(p);
        let mut draws = Draws::new(seed);
        let error = [scale, scale * p.map.pixel_aspect]
            .map(|scale| p.map.host_error_arcsec / scale * draws.normal());
        put("host_x_px", json!(core.x + error[0]));
        put("host_y_px", json!(core.y + error[1]));
    }
    if p.map.describe == "full" {
        if let Some(redshift) = p.source.redshift {
            put("redshift", json!(redshift));
        }
        if let Some(distance) = p.source.distance_mpc {
            put("distance_mpc", json!(distance));
        }
        put("spectral_index", json!(p.jet.spectral_index));
        put("core_spectral_index", json!(p.core.spectral_index));
    }
    keys
}

/// One made map with its name.
#[derive(Clone, Debug)]
pub struct Made {
    /// Name of its files, without ending.
    pub name: String,
    /// The map.
    pub map: MadeMap,
}

impl Scenario {
    /// Makes all epochs of the source with this number (from 0). The same number gives the
    /// same bytes whatever else is made.
    ///
    /// # Errors
    /// Where the parameters drawn for this source make none.
    pub fn make(&self, index: usize) -> Result<Vec<Made>, MakeError> {
        let parameters = self.parameters(index)?;
        let epochs = self.epochs();
        let first_year = epochs.iter().find_map(|epoch| epoch.year);
        let source = format!("{}-{index:05}", self.name());
        epochs
            .iter()
            .enumerate()
            .map(|(number, epoch)| {
                let years = epoch.year.zip(first_year).map_or(0.0, |(year, first)| year - first);
                let look = Look {
                    frequency_ghz: epoch.frequency_ghz.unwrap_or(parameters.map.frequency_ghz),
                    years,
                    seed: stream_seed(self.seed(), index as u64, "source"),
                };
                let name = if epochs.len() == 1 {
                    source.clone()
                } else {
                    format!("{source}-e{}", number + 1)
                };
                let mut map = make_map(&parameters, &look, number, &name).map_err(|error| {
                    MakeError::Numbered { name: name.clone(), error: Box::new(error) }
                })?;
                if let Some(year) = epoch.year {
                    map.description.insert("epoch".to_owned(), json!(year));
                }
                map.truth.values.value("id", json!(name));
                Ok(Made { name, map })
            })
            .collect()
    }
}
