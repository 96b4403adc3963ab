//! What a perfect measurement of a made map would find: plain numbers under the record's key
//! paths, defined as the record defines them.
//!
//! Sizes are those of the noise-free map's contour at the level the record uses (3 rms at the
//! core), of pieces that the detection threshold passes; neighbours, artefacts and errors of
//! the flux scale are left out. Fluxes of sides and strips are sums over the pieces of the
//! source, each after the beam. What hangs on the strip can be had for any strip
//! ([`Truth::strip_fluxes_mjy`]), since a measurement may choose another.

use std::collections::BTreeMap;

use serde_json::{Map, Value, json};

use super::observe::{Canvas, Observation};
use super::parameters::Parameters;
use super::source::{Look, Part, SkyGaussian, TwinSource};
use crate::class::DIVISION;
use crate::constants::FWHM_PER_SIGMA;
use crate::contour::{contour_of_regions, farthest_pair};
use crate::extent::{beam_reach, widest_across};
use crate::noise::Noise;
use crate::physics::beaming::{
    doppler_factor, jet_to_counter_jet_ratio, lorentz_factor, lorentz_factor_min,
    viewing_angle_max_deg,
};
use crate::physics::emission::{brightness_temperature_k, luminosity_w_per_hz};
use crate::regions::{Peak, RegionSettings, find_regions, local_maxima};
use crate::settings::Settings;
use crate::source::sides::BRIGHTEST_BEYOND_BEAMS;
use crate::stats::normal_probability;
use crate::units::{Pixel, SkyOffset, wrap_difference_deg, wrap_directed_deg, wrap_undirected_deg};

/// Numbers and words by their path: keys and list indices joined by points.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Values(BTreeMap<String, Value>);

impl Values {
    /// Sets a number; one that is not finite is left out.
    pub fn number(&mut self, path: &str, value: f64) {
        if value.is_finite() {
            self.0.insert(path.to_owned(), json!(value));
        }
    }

    /// Sets a number where there is one.
    pub fn optional(&mut self, path: &str, value: Option<f64>) {
        if let Some(value) = value {
            self.number(path, value);
        }
    }

    /// Sets a word, a list or a truth value.
    pub fn value(&mut self, path: &str, value: Value) {
        self.0.insert(path.to_owned(), value);
    }

    /// The number at a path.
    pub fn get(&self, path: &str) -> Option<f64> {
        self.0.get(path).and_then(Value::as_f64)
    }

    /// The word at a path.
    pub fn word(&self, path: &str) -> Option<&str> {
        self.0.get(path).and_then(Value::as_str)
    }

    /// Paths and values in the order of the paths.
    pub fn iter(&self) -> impl Iterator<Item = (&str, &Value)> {
        self.0.iter().map(|(path, value)| (path.as_str(), value))
    }

    /// As one object: keys nested, list indices as places in lists.
    pub fn to_json(&self) -> Value {
        let mut root = Value::Object(Map::new());
        for (path, value) in &self.0 {
            let mut place = &mut root;
            for key in path.split('.') {
                place = match key.parse::<usize>() {
                    Ok(index) => {
                        if !place.is_array() {
                            *place = Value::Array(Vec::new());
                        }
                        let Value::Array(list) = place else { continue };
                        while list.len() <= index {
                            list.push(Value::Object(Map::new()));
                        }
                        &mut list[index]
                    }
                    Err(_) => {
                        if !place.is_object() {
                            *place = Value::Object(Map::new());
                        }
                        let Value::Object(object) = place else { continue };
                        object.entry(key.to_owned()).or_insert(Value::Null)
                    }
                };
            }
            *place = value.clone();
        }
        root
    }
}

/// A pair of strips: radial distances from the core and half the width, arcsec.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Aperture {
    /// Where they begin.
    pub inner_arcsec: f64,
    /// Where they end.
    pub outer_arcsec: f64,
    /// Half their width.
    pub half_width_arcsec: f64,
}

/// The truth about one made map.
#[derive(Clone, Debug)]
pub struct Truth {
    /// Everything that has a path.
    pub values: Values,
    /// The source, side 0 approaching.
    pub source: TwinSource,
    /// How it is seen.
    pub observation: Observation,
    /// The side of the source behind each entry of `sides`.
    pub order: [usize; 2],
    /// The crest of each side of the source: places and brightness.
    crests: [Vec<CrestPoint>; 2],
}

/// A place on a crest.
#[derive(Clone, Copy, Debug, PartialEq)]
struct CrestPoint {
    offset: SkyOffset,
    /// Brightness there without the core, mJy/beam.
    brightness: f64,
}

/// Sampled points of the two paths, to tell which is nearer.
struct Nearer([Vec<SkyOffset>; 2]);

impl Nearer {
    fn of(source: &TwinSource) -> Self {
        const POINTS: usize = 120;
        Self([0, 1].map(|side| {
            let path = &source.paths[side];
            let step = path.length_arcsec / POINTS as f64;
            (1..=POINTS).map(|i| path.at(i as f64 * step).0).collect()
        }))
    }

    fn side(&self, offset: SkyOffset) -> usize {
        let least = |points: &[SkyOffset]| {
            let square = |p: &SkyOffset| {
                let d = p.minus(offset);
                d.dot(d)
            };
            points.iter().map(square).fold(f64::INFINITY, f64::min)
        };
        usize::from(least(&self.0[1]) < least(&self.0[0]))
    }
}

/// What the contour of the noise-free map shows.
struct Outline {
    ends: [SkyOffset; 2],
    points: Vec<SkyOffset>,
    /// The two points farthest apart across the longest chord.
    widest: Option<[SkyOffset; 2]>,
    peaks: Vec<(SkyOffset, f64)>,
    flux_mjy: f64,
}

/// Everything the truth is made from.
pub struct TruthInput<'a> {
    /// The parameters.
    pub parameters: &'a Parameters,
    /// When and how the source is looked at.
    pub look: Look,
    /// rms at the core, mJy/beam.
    pub rms_mjy_per_beam: f64,
    /// The noise-free source.
    pub whole: &'a Canvas,
}

/// The truth of a made source.
pub fn truth(source: TwinSource, observation: Observation, made: &TruthInput) -> Truth {
    let nearer = Nearer::of(&source);
    let level = Settings::default().outline_sigma * made.rms_mjy_per_beam;
    let outline = outline(&observation, made.whole, level, made.rms_mjy_per_beam);
    let aperture = nominal_aperture(&source, &observation, made.parameters);
    let crests = [Vec::new(), Vec::new()];
    let mut truth = Truth { values: Values::default(), source, observation, order: [0, 1], crests };
    truth.crests = [0, 1].map(|side| truth.crest(side, level));
    // Where a side ends: its hot spot, else its crest.
    let ends = [0, 1].map(|side| {
        if made.parameters.hotspots.flux_density_mjy > 0.0 {
            Some(truth.source.paths[side].at(truth.source.arms_arcsec[side]).0)
        } else {
            truth.crests[side].last().map(|point| point.offset)
        }
    });
    truth.order = truth.roles(ends);
    truth.put_core(made);
    truth.put_whole(made, outline.as_ref(), level);
    truth.put_shape(made, ends, outline.as_ref(), &nearer, level);
    for (index, side) in truth.order.into_iter().enumerate() {
        truth.put_side(index, side, made, ends[side]);
    }
    if let Some(aperture) = aperture {
        truth.put_strips(aperture);
    }
    truth.put_physics(made);
    truth.put_intrinsic(made);
    truth
}

/// Contour, peaks and flux of the noise-free map at a level.
fn outline(observation: &Observation, canvas: &Canvas, level: f64, rms: f64) -> Option<Outline> {
    if rms <= 0.0 {
        return None;
    }
    let grid = &canvas.brightness;
    let (rows, columns) = grid.dim();
    let noise = Noise::uniform(columns, rows, 0.0, rms);
    let least = (0.5 * observation.beam_area_px).round().max(1.0) as usize;
    let settings = RegionSettings { minimum_area_px: least, ..RegionSettings::default() };
    let regions = find_regions(grid, &noise, &settings);
    let of_source: Vec<_> = regions.iter().collect();
    let lines = contour_of_regions(grid, level, &of_source);
    let pixels: Vec<Pixel> = lines.iter().flat_map(|line| line.points.iter().copied()).collect();
    let [[a, b], [c, d]] = canvas.frame.to_sky;
    let metric = [[a, b], [c, d]];
    let (first, second, _) = farthest_pair(pixels.iter().copied(), &metric)?;
    let ends = [first, second].map(|p| canvas.frame.offset(p));
    let direction_deg = ends[1].minus(ends[0]).position_angle_deg();
    let widest = widest_across(&pixels, &canvas.frame, direction_deg)
        .map(|points| points.map(|p| canvas.frame.offset(p)));
    let separation = 0.5 * observation.beam_area_px.sqrt();
    let peaks = local_maxima(grid, &noise, &regions, separation, settings.detection_sigma)
        .iter()
        .map(|peak: &Peak| (canvas.frame.offset(Pixel::new(peak.x, peak.y)), peak.value))
        .collect();
    let sum: f64 = regions
        .iter()
        .flat_map(|region| &region.runs)
        .flat_map(|run| (run.x0..=run.x1).map(move |x| (x, run.y)))
        .map(|(x, y)| grid[(y, x)])
        .sum();
    let points = pixels.iter().map(|p| canvas.frame.offset(*p)).collect();
    Some(Outline { ends, points, widest, peaks, flux_mjy: sum / observation.beam_area_px })
}

/// The strips the record's rule would take if it knew the source: from two beam majors to one
/// short of the nearer lobe, flare or hot spot.
fn nominal_aperture(
    source: &TwinSource,
    observation: &Observation,
    parameters: &Parameters,
) -> Option<Aperture> {
    let settings = Settings::default();
    let p = parameters;
    let beam = &observation.beam;
    let radius = |side: usize, t: f64| source.paths[side].at(t).0.radius();
    let outer = [0, 1].map(|side| {
        let arm = source.arms_arcsec[side];
        let mut end = source.jet_to_arcsec[side];
        if p.lobes.flux_density_mjy > 0.0 {
            end = end.min((1.0 - p.lobes.length_share) * arm);
        }
        if p.hotspots.flux_density_mjy > 0.0 {
            end = end.min(arm);
        }
        radius(side, end)
    });
    let inner_arcsec = settings.strip_inner_beams * beam.major;
    let outer_arcsec = outer[0].min(outer[1]) - beam.major;
    if outer_arcsec - inner_arcsec < beam.major {
        return None;
    }
    let middle = source.paths[0].reaching(0.5 * (inner_arcsec + outer_arcsec))?;
    let (_, direction_deg) = source.paths[0].at(middle);
    let width = libm::hypot(beam.projected_fwhm(direction_deg), source.jet_width_at(middle));
    let half_width_arcsec = settings.strip_half_width_beams * width;
    Some(Aperture { inner_arcsec, outer_arcsec, half_width_arcsec })
}

/// Share of a Gaussian of this FWHM, centred at `centre`, that lies between two places.
fn share_between(centre: f64, fwhm: f64, from: f64, to: f64) -> f64 {
    let sigma = (fwhm / FWHM_PER_SIGMA).max(f64::MIN_POSITIVE);
    normal_probability((to - centre) / sigma) - normal_probability((from - centre) / sigma)
}

/// A side's crest lies within this of its path, as seen from the core.
const FARTHEST_CREST_DEG: f64 = 60.0;

impl Truth {
    /// Flux of each side's jet (knots included) inside the strips along its own path, after
    /// the beam, in mJy, in the order of `sides`: what the strips of a noise-free map of the
    /// jets alone hold. Exact for a straight jet; for a bent one pieces count as if the path
    /// were straight over a beam.
    pub fn strip_fluxes_mjy(&self, aperture: &Aperture) -> [f64; 2] {
        self.order.map(|side| {
            self.jet_pieces(side).map(|piece| piece.flux_mjy * self.inside(piece, aperture)).sum()
        })
    }

    /// Flux of a side's emission (an index of `sides`) beyond a distance from the core, mJy:
    /// its lobe where the distance is the lobe's inner edge.
    pub fn flux_beyond_mjy(&self, index: usize, edge_arcsec: f64) -> f64 {
        let side = self.order[index.min(1)];
        self.source
            .parts
            .iter()
            .filter(|piece| piece.side == Some(side))
            .map(|piece| {
                let pa_deg = piece.offset.position_angle_deg();
                let fwhm = self.observation.marginal_fwhm(piece, pa_deg);
                let radius = piece.offset.radius();
                piece.flux_mjy * (1.0 - share_between(radius, fwhm, -1e12, edge_arcsec))
            })
            .sum()
    }

    fn jet_pieces(&self, side: usize) -> impl Iterator<Item = &SkyGaussian> {
        self.source.parts.iter().filter(move |piece| {
            matches!(piece.part, Part::Jet | Part::Knot) && piece.side == Some(side)
        })
    }

    /// Share of a jet's piece inside the strips.
    fn inside(&self, piece: &SkyGaussian, aperture: &Aperture) -> f64 {
        let radius = piece.offset.radius();
        let bearing_deg = piece.offset.position_angle_deg();
        let along = self.observation.marginal_fwhm(piece, bearing_deg);
        let across = self.observation.marginal_fwhm(piece, piece.pa_deg + 90.0);
        let half = aperture.half_width_arcsec;
        share_between(radius, along, aperture.inner_arcsec, aperture.outer_arcsec)
            * share_between(0.0, across, -half, half)
    }

    /// The crest of a side's emission on the noise-free map without the core, to where it last
    /// stands at the level; empty where it never does.
    ///
    /// It is followed outwards on circles about the core, from the jet's own bearing at one beam:
    /// on each circle uphill from the place before to the nearest maximum. Where it falls below
    /// the level it is followed on as far as the source reaches, and counts again if it rises.
    fn crest(&self, side: usize, level: f64) -> Vec<CrestPoint> {
        let observation = &self.observation;
        let beam = observation.beam.minor;
        let path = &self.source.paths[side];
        // The core's own beam is no side.
        let pieces = observation.seen(self.source.parts.iter().filter(|p| p.part != Part::Core));
        let farthest = self
            .source
            .parts
            .iter()
            .map(|piece| piece.offset.radius() + piece.along_arcsec.max(piece.across_arcsec));
        let farthest = farthest.fold(path.length_arcsec, f64::max) + 2.0 * observation.beam.major;
        let step = 0.2 * beam;
        let circles = ((farthest / step).ceil() as usize).min(4000);
        let start = path.reaching(observation.beam.major).unwrap_or(path.length_arcsec);
        let mut bearing_deg = path.at(start).0.position_angle_deg();
        // Where nothing of the side shines the way up leads round to the other side.
        let along: Vec<SkyOffset> =
            (1..=80).map(|i| path.at(path.length_arcsec * f64::from(i) / 80.0).0).collect();
        let path_bearing_deg = |radius: f64| {
            let at = along.iter().find(|offset| offset.radius() >= radius).or(along.last());
            at.map_or(0.0, |offset| offset.position_angle_deg())
        };
        let mut points: Vec<CrestPoint> = Vec::new();
        let (mut last, mut previous) = (0, f64::NEG_INFINITY);
        for circle in 1..=circles {
            let radius = circle as f64 * step;
            let at = |pa_deg: f64| pieces.brightness(SkyOffset::polar(radius, pa_deg));
            if radius >= observation.beam.major {
                let fine_deg = (0.04 * beam / radius).to_degrees();
                let own_deg = path_bearing_deg(radius);
                if wrap_difference_deg(bearing_deg - own_deg).abs() > FARTHEST_CREST_DEG {
                    bearing_deg = own_deg;
                }
                let mut here = at(bearing_deg);
                for sign in [-1.0, 1.0] {
                    loop {
                        let next = at(bearing_deg + sign * fine_deg);
                        let turn = bearing_deg + sign * fine_deg - own_deg;
                        let strays = wrap_difference_deg(turn).abs() > FARTHEST_CREST_DEG;
                        if next <= here || strays {
                            break;
                        }
                        (here, bearing_deg) = (next, bearing_deg + sign * fine_deg);
                    }
                }
            }
            let brightness = at(bearing_deg);
            let place = CrestPoint { offset: SkyOffset::polar(radius, bearing_deg), brightness };
            if brightness >= level {
                points.push(place);
                last = points.len();
            } else if previous >= level {
                // The end proper, between this circle and the one before.
                let back = step * (level - brightness) / (previous - brightness);
                let offset = SkyOffset::polar(radius - back, bearing_deg);
                points.push(CrestPoint { offset, brightness: level });
                last = points.len();
            } else {
                points.push(place);
            }
            previous = brightness;
        }
        points.truncate(last);
        points
    }

    /// Which side of the source comes first: the jet where flow and angle make one, else the
    /// one whose end points to [0°, 180°).
    fn roles(&self, ends: [Option<SkyOffset>; 2]) -> [usize; 2] {
        if self.has_jet_side() {
            return [0, 1];
        }
        let pa = ends[0].map_or(0.0, SkyOffset::position_angle_deg);
        if pa < 180.0 { [0, 1] } else { [1, 0] }
    }

    /// Whether boosting makes one jet the brighter.
    fn has_jet_side(&self) -> bool {
        self.source.flux_of_mjy(Part::Jet, Some(0))
            > 1.000_001 * self.source.flux_of_mjy(Part::Jet, Some(1))
    }

    fn put_core(&mut self, made: &TruthInput) {
        let origin = self.observation.frame.origin;
        self.values.number("core.position.x_px", origin.x);
        self.values.number("core.position.y_px", origin.y);
        self.values.number("core.position.ra_deg", made.parameters.source.ra_deg);
        self.values.number("core.position.dec_deg", made.parameters.source.dec_deg);
        let core = self.source.flux_of_mjy(Part::Core, None);
        self.values.number("core.flux_density_mjy", core);
        let values = &mut self.values;
        for key in ["x_px", "y_px", "ra_deg", "dec_deg"] {
            let value = values.get(&format!("core.position.{key}"));
            values.optional(&format!("source.position.{key}"), value);
        }
    }

    fn put_whole(&mut self, made: &TruthInput, outline: Option<&Outline>, level: f64) {
        let total = self.source.total_flux_mjy();
        let core = self.source.flux_of_mjy(Part::Core, None);
        let values = &mut self.values;
        values.number("noise.rms_mjy_per_beam", made.rms_mjy_per_beam);
        values.number("source.contour_mjy_per_beam", level);
        values.number("source.total_flux_density_mjy", total);
        if total > core {
            values.number("source.core_prominence", core / (total - core));
        }
        let Some(outline) = outline else { return };
        values.number("source.contour_flux_density_mjy", outline.flux_mjy);
        let peak = outline.peaks.iter().map(|p| p.1).fold(f64::NAN, f64::max);
        values.number("source.peak_brightness_mjy_per_beam", peak);
        values.number("source.peak_signal_to_noise", peak / made.rms_mjy_per_beam);
    }

    fn put_shape(
        &mut self,
        made: &TruthInput,
        ends: [Option<SkyOffset>; 2],
        outline: Option<&Outline>,
        nearer: &Nearer,
        level: f64,
    ) {
        let p = made.parameters;
        let order = self.order;
        let has_hotspots = p.hotspots.flux_density_mjy > 0.0;
        let values = &mut self.values;
        if let [Some(a), Some(b)] = order.map(|side| ends[side]) {
            let chord = b.minus(a);
            let pa = wrap_undirected_deg(chord.position_angle_deg());
            values.number("source.position_angle_deg", pa);
            let ratio = a.radius() / b.radius();
            values.number("source.arm_length_ratio_jet_side", ratio);
            values.number("source.arm_length_ratio", ratio.max(1.0 / ratio));
            let misalignment =
                wrap_difference_deg(b.position_angle_deg() - a.position_angle_deg() - 180.0);
            values.number("source.misalignment_deg", misalignment);
            values.number("source.bend_deg", misalignment.abs());
            if has_hotspots {
                values.number("source.hotspot_separation_arcsec", chord.radius());
                // An older pair of lobes lies farther out, and its components have no one place.
                if p.outer.flux_density_mjy <= 0.0 {
                    values.number("source.component_separation_arcsec", chord.radius());
                }
            }
        }
        let symmetry = match p.bend.shape {
            "none" => "straight",
            word => word,
        };
        values.value("source.symmetry", json!(symmetry));
        let Some(outline) = outline else { return };
        let chord = outline.ends[1].minus(outline.ends[0]);
        let size = chord.radius();
        values.number("source.largest_angular_size_arcsec", size);
        let scale = self.observation.frame.mean_scale();
        values.number("source.largest_size_px", size / scale);
        let beam = &self.observation.beam;
        let reach = |end: SkyOffset, direction_deg: f64| {
            let near = outline
                .peaks
                .iter()
                .min_by(|a, b| a.0.minus(end).radius().total_cmp(&b.0.minus(end).radius()));
            near.map_or(0.0, |p| beam_reach(p.1, level, beam.reach_along(direction_deg)))
        };
        let direction_deg = chord.position_angle_deg();
        let taken_off: f64 = outline.ends.iter().map(|end| reach(*end, direction_deg)).sum();
        let deconvolved = size - taken_off;
        let resolved = deconvolved > 0.0;
        if resolved {
            values.number("source.largest_angular_size_deconvolved_arcsec", deconvolved);
        }
        // Farthest contour point and brightest peak of each side.
        let beyond = BRIGHTEST_BEYOND_BEAMS * beam.major;
        let mut brightest = [None; 2];
        for (index, side) in order.into_iter().enumerate() {
            let on_side = |offset: &SkyOffset| nearer.side(*offset) == side;
            let length = outline
                .points
                .iter()
                .filter(|o| on_side(o))
                .map(|o| o.radius())
                .fold(f64::NAN, f64::max);
            values.number(&format!("sides.{index}.length_arcsec"), length);
            values.number(&format!("sides.{index}.length_px"), length / scale);
            let peak = outline
                .peaks
                .iter()
                .filter(|p| p.0.radius() > beyond && on_side(&p.0))
                .max_by(|a, b| a.1.total_cmp(&b.1));
            if let Some((offset, _)) = peak {
                values.number(&format!("sides.{index}.fr_ratio"), offset.radius() / length);
                brightest[index] = Some(*offset);
            }
        }
        if let [Some(a), Some(b)] = brightest {
            let distance = a.minus(b).radius();
            values.number("source.fr_ratio", distance / size);
            if resolved {
                values.number("source.fr_ratio_deconvolved", distance / deconvolved);
            }
        }
        let between = match brightest {
            [Some(a), Some(b)] => a.minus(b).radius(),
            [Some(a), None] | [None, Some(a)] => a.radius(),
            [None, None] => 0.0,
        };
        if deconvolved > 1.5 * beam.major {
            let class = if between / deconvolved > DIVISION { "II" } else { "I" };
            values.value("source.fr_class.class", json!(class));
        }
        if let Some([p, q]) = outline.widest {
            let across = wrap_directed_deg(direction_deg + 90.0);
            let chord = p.minus(q).dot(SkyOffset::polar(1.0, across)).abs();
            // A chord across that ends beside one peak is what the beam alone draws.
            let width = chord - reach(p, across) - reach(q, across);
            if resolved && width > 0.2 * beam.minor {
                values.number("source.axial_ratio", (deconvolved / width).max(1.0));
            }
        }
    }

    fn put_side(&mut self, index: usize, side: usize, made: &TruthInput, end: Option<SkyOffset>) {
        let p = made.parameters;
        let path = self.source.paths[side].clone();
        let beam_major = self.observation.beam.major;
        let key = |name: &str| format!("sides.{index}.{name}");
        let role = match (self.has_jet_side(), index) {
            (true, 0) => "jet",
            (true, _) => "counter-jet",
            (false, 0) => "first",
            (false, _) => "second",
        };
        let inner = self.crests[side].iter().find(|p| p.offset.radius() >= 2.0 * beam_major);
        let inner_deg = inner.map(|p| p.offset.position_angle_deg());
        let flux = self.side_flux_mjy(side);
        let hotspot_flux = self.source.flux_of_mjy(Part::Hotspot, Some(side));
        let hotspot = (hotspot_flux > 0.0).then(|| path.at(self.source.arms_arcsec[side]).0);
        let hotspot_peak = hotspot.map(|at| self.observation.brightness_at(&self.source.parts, at));
        let frame = self.observation.frame;
        // In chords of a beam, as the record's.
        let chord = self.observation.beam.mean_fwhm();
        let ridge_length = self.crests[side].last().map(|end| {
            let mut previous = SkyOffset::default();
            let inside = end.offset.radius() - chord;
            let mut sum = 0.0;
            for point in self.crests[side].iter().filter(|p| p.offset.radius() < inside) {
                let step = point.offset.minus(previous).radius();
                if step >= chord {
                    sum += step;
                    previous = point.offset;
                }
            }
            sum + end.offset.minus(previous).radius()
        });
        let values = &mut self.values;
        values.value(&key("role"), json!(role));
        values.optional(&key("inner_position_angle_deg"), inner_deg);
        values.number(&key("flux_density_mjy"), flux);
        values.optional(&key("ridge_length_arcsec"), ridge_length);
        if let Some(offset) = end {
            let end_deg = offset.position_angle_deg();
            values.number(&key("end_position_angle_deg"), end_deg);
            if let Some(inner_deg) = inner_deg {
                values.number(&key("bend_deg"), wrap_difference_deg(end_deg - inner_deg));
            }
        }
        if let Some(offset) = hotspot {
            let pixel = frame.pixel(offset);
            values.number(&key("hotspot.x_px"), pixel.x);
            values.number(&key("hotspot.y_px"), pixel.y);
            values.number(&key("hotspot.east_arcsec"), offset.east);
            values.number(&key("hotspot.north_arcsec"), offset.north);
            values.number(&key("hotspot.distance_arcsec"), offset.radius());
            values.number(&key("hotspot.position_angle_deg"), offset.position_angle_deg());
            values.optional(&key("hotspot.peak_brightness_mjy_per_beam"), hotspot_peak);
        }
        let widens = p.jet.width_arcsec > p.jet.inner_width_arcsec;
        if widens && p.jet.inner_width_arcsec == 0.0 && p.jet.start_arcsec == 0.0 {
            values.number(&key("jet.width_exponent"), p.jet.width_exponent);
        }
        if let Some(distance) = self.source.distance {
            let kpc = distance.kpc_per_arcsec();
            let length = values.get(&key("length_arcsec"));
            values.optional(&key("length_kpc"), length.map(|arcsec| arcsec * kpc));
        }
        let points: Vec<Value> = (1..=40)
            .map(|i| {
                let (offset, _) = path.at(path.length_arcsec * f64::from(i) / 40.0);
                json!({
                    "distance_arcsec": offset.radius(),
                    "east_arcsec": offset.east,
                    "north_arcsec": offset.north,
                })
            })
            .collect();
        values.value(&key("ridge"), Value::Array(points));
    }

    /// Flux of a side without the core, mJy. Near the core the line between the sides cuts
    /// through pieces; farther out a piece is all its own side's.
    fn side_flux_mjy(&self, side: usize) -> f64 {
        let axis_deg = self.source.paths[0].at(0.0).1;
        let near = 4.0 * self.observation.beam.major;
        let sign = if side == 0 { 1.0 } else { -1.0 };
        let axis = SkyOffset::polar(sign, axis_deg);
        self.source
            .parts
            .iter()
            .filter(|piece| piece.part != Part::Core)
            .map(|piece| {
                let fwhm = self.observation.marginal_fwhm(piece, axis_deg);
                let is_cut = piece.offset.radius() < near.max(2.0 * fwhm);
                let share = match piece.side {
                    Some(own) if !is_cut => f64::from(u8::from(own == side)),
                    _ => share_between(piece.offset.dot(axis), fwhm, 0.0, 1e12),
                };
                piece.flux_mjy * share
            })
            .sum()
    }

    /// Bearing of a side's crest (an index of `sides`) inside the strips, weighted by
    /// brightness.
    pub fn strip_bearing_deg(&self, index: usize, aperture: &Aperture) -> Option<f64> {
        let strip = aperture.inner_arcsec..aperture.outer_arcsec;
        let points = || {
            let crest = self.crests[self.order[index.min(1)]].iter();
            crest.filter(|p| strip.contains(&p.offset.radius()))
        };
        let first = points().next()?.offset.position_angle_deg();
        let sum: f64 = points().map(|p| p.brightness).sum();
        let turn = |p: &CrestPoint| wrap_difference_deg(p.offset.position_angle_deg() - first);
        let turned: f64 = points().map(|p| p.brightness * turn(p)).sum();
        Some(wrap_directed_deg(first + turned / sum))
    }

    fn put_strips(&mut self, aperture: Aperture) {
        let fluxes = self.strip_fluxes_mjy(&aperture);
        let edge = aperture.outer_arcsec + self.observation.beam.major;
        let lobes = [0, 1].map(|index| self.flux_beyond_mjy(index, edge));
        let bearings = [0, 1].map(|index| self.strip_bearing_deg(index, &aperture));
        let opening = [0, 1].map(|index| self.opening_angle_deg(index, &aperture));
        let values = &mut self.values;
        let Aperture { inner_arcsec, outer_arcsec, half_width_arcsec } = aperture;
        values.number("brightness.aperture.inner_arcsec", inner_arcsec);
        values.number("brightness.aperture.outer_arcsec", outer_arcsec);
        values.number("brightness.aperture.half_width_arcsec", half_width_arcsec);
        values.number("brightness.jet_flux_density_mjy", fluxes[0]);
        values.number("brightness.counter_jet_flux_density_mjy", fluxes[1]);
        if fluxes[1] > 0.0 {
            values.number("brightness.jet_to_counter_jet_ratio", fluxes[0] / fluxes[1]);
        }
        for index in [0, 1] {
            let key = |name: &str| format!("sides.{index}.{name}");
            values.number(&key("jet.flux_density_mjy"), fluxes[index]);
            values.optional(&key("position_angle_deg"), bearings[index]);
            values.optional(&key("jet.opening_angle_deg"), opening[index]);
            values.number(&key("lobe.flux_density_mjy"), lobes[index]);
        }
        if lobes[1] > 0.0 {
            values.number("source.lobe_flux_ratio", lobes[0] / lobes[1]);
        }
    }

    /// Median of 2 atan(½ width/distance) of a side's jet (an index of `sides`) over the strip;
    /// none for a jet without width.
    pub fn opening_angle_deg(&self, index: usize, aperture: &Aperture) -> Option<f64> {
        const POINTS: usize = 21;
        let path = &self.source.paths[self.order[index.min(1)]];
        let mut angles: Vec<f64> = (0..POINTS)
            .filter_map(|i| {
                let share = (i as f64 + 0.5) / POINTS as f64;
                let radius =
                    aperture.inner_arcsec + share * (aperture.outer_arcsec - aperture.inner_arcsec);
                let width = self.source.jet_width_at(path.reaching(radius)?);
                Some(2.0 * libm::atan(0.5 * width / radius).to_degrees())
            })
            .collect();
        crate::stats::median(&mut angles).filter(|angle| *angle > 0.0)
    }

    fn put_physics(&mut self, made: &TruthInput) {
        let p = made.parameters;
        let theta_deg = p.source.viewing_angle_deg;
        let (beta, exponent) = (self.source.speed, self.source.exponent);
        let along = beta * libm::cos(theta_deg.to_radians());
        let total = self.source.total_flux_mjy();
        let core = self.source.flux_of_mjy(Part::Core, None);
        let distance = self.source.distance;
        let values = &mut self.values;
        values.number("physics.beaming.exponent", exponent);
        values.number("physics.beaming.beta_cos_theta", along);
        values.optional("physics.beaming.viewing_angle_max_deg", viewing_angle_max_deg(along));
        values.number("physics.beaming.beta_min", along);
        values.optional("physics.beaming.lorentz_factor_min", lorentz_factor_min(along));
        values.number("physics.posterior.beta", beta);
        values.number("physics.posterior.viewing_angle_deg", theta_deg);
        values.optional("physics.posterior.lorentz_factor", lorentz_factor(beta));
        values.optional("physics.posterior.doppler_factor", doppler_factor(beta, theta_deg));
        let Some(distance) = distance else { return };
        let kpc = distance.kpc_per_arcsec();
        values.number("physics.scale_kpc_per_arcsec", kpc);
        if let Some(size) = values.get("source.largest_angular_size_arcsec") {
            values.number("physics.projected_length_kpc", size * kpc);
            let sine = libm::sin(theta_deg.to_radians());
            if sine > 0.0 {
                values.number("physics.posterior.deprojected_length_kpc", size * kpc / sine);
            }
        }
        let (z, far) = (distance.redshift(), distance.luminosity_mpc());
        let steep = 0.75;
        values.optional("physics.luminosity_w_per_hz", luminosity_w_per_hz(total, far, z, steep));
        let flat = p.core.spectral_index;
        values
            .optional("physics.core_luminosity_w_per_hz", luminosity_w_per_hz(core, far, z, flat));
        if total > core {
            let correction = libm::pow(1.0 + z, flat - steep);
            values.number("source.core_prominence_rest", core / (total - core) * correction);
        }
        let mas = p.core.fwhm_arcsec * 1e3;
        values.optional(
            "physics.core_brightness_temperature_k",
            brightness_temperature_k(core, made.look.frequency_ghz, mas, mas, z),
        );
    }

    fn put_intrinsic(&mut self, made: &TruthInput) {
        let p = made.parameters;
        let (beta, theta_deg) = (self.source.speed, p.source.viewing_angle_deg);
        let arms = self.source.arms_arcsec;
        let ratio = jet_to_counter_jet_ratio(beta, theta_deg, self.source.exponent);
        let counter = doppler_factor(beta, 180.0 - theta_deg);
        let core_speed = self.source.core_speed;
        let slowed = self.source.speed_at(f64::MAX);
        let values = &mut self.values;
        values.number("intrinsic.viewing_angle_deg", theta_deg);
        values.number("intrinsic.jet_speed", beta);
        values.number("intrinsic.jet_end_speed", slowed);
        values.number("intrinsic.core_speed", core_speed);
        values.number("intrinsic.advance_speed", p.arms.advance_speed);
        values.number("intrinsic.environment_ratio", p.arms.environment_ratio);
        values.number("intrinsic.spectral_index", p.jet.spectral_index);
        values.value("intrinsic.flow", json!(p.jet.flow));
        values.optional("intrinsic.ratio_where_the_jet_begins", ratio);
        values.optional("intrinsic.counter_jet_doppler_factor", counter);
        values.number("intrinsic.arm_arcsec_approaching", arms[0]);
        values.number("intrinsic.arm_arcsec_receding", arms[1]);
        values.number("intrinsic.frequency_ghz", made.look.frequency_ghz);
        values.number("intrinsic.years", made.look.years);
        values.optional("intrinsic.redshift", p.source.redshift);
        values.number("intrinsic.bridge_flux_density_mjy", p.bridge.flux_density_mjy);
    }
}
