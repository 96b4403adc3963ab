//! Made maps of the built-in scenarios, measured and held against their truth: number by
//! number how often it is given, how far it is off in its own errors, and how often its
//! intervals and limits hold.
//!
//! `JETSPAN_MAPS=200 cargo test --release calibration -- --nocapture` prints the whole table, for
//! the scenarios of `JETSPAN_SCENARIOS` (names with commas) and with the seed `JETSPAN_SEED` where
//! these are set. `JETSPAN_NO_HOST=1` withholds the host everywhere. Without them a few maps of each scenario show that truth and record speak of
//! the same things.

use std::collections::BTreeMap;

use jetspan::record::{MapRecord, Role};
use jetspan::settings::Settings;
use jetspan::simulate::{Aperture, Made, MadeMap, Scenario, Truth};
use jetspan::units::{wrap_difference_deg, wrap_directed_deg};
use serde_json::Value;

use crate::support::measure_array;

/// The record of a made map, or the code of the reason why it cannot be measured.
pub fn measured(map: &MadeMap, settings: &Settings) -> Result<MapRecord, &'static str> {
    let mut description = map.description.clone();
    if withholds_host() {
        description.retain(|key, _| !key.starts_with("host_"));
    }
    measure_array(&map.brightness, &Value::Object(description).to_string(), settings)
}

/// How a quantity is compared.
#[derive(Clone, Copy, PartialEq)]
enum Scale {
    /// As it is.
    Plain,
    /// Position angles: differences wrap at 360°.
    Directed,
    /// Undirected position angles: differences wrap at 180°.
    Undirected,
}

/// What becomes of a quantity when the record's sides are the other way round.
#[derive(Clone, Copy, PartialEq)]
enum Swap {
    Nothing,
    /// The truth is turned upside down.
    Invert,
    /// The truth changes its sign.
    Negate,
}

/// Numbers of the whole source that have a truth.
const WHOLE: &[(&str, Scale, Swap)] = &[
    ("core.flux_density_mjy", Scale::Plain, Swap::Nothing),
    ("source.total_flux_density_mjy", Scale::Plain, Swap::Nothing),
    ("source.contour_flux_density_mjy", Scale::Plain, Swap::Nothing),
    ("source.peak_brightness_mjy_per_beam", Scale::Plain, Swap::Nothing),
    ("source.largest_angular_size_arcsec", Scale::Plain, Swap::Nothing),
    ("source.largest_angular_size_deconvolved_arcsec", Scale::Plain, Swap::Nothing),
    ("source.component_separation_arcsec", Scale::Plain, Swap::Nothing),
    ("source.position_angle_deg", Scale::Undirected, Swap::Nothing),
    ("source.hotspot_separation_arcsec", Scale::Plain, Swap::Nothing),
    ("source.fr_ratio", Scale::Plain, Swap::Nothing),
    ("source.fr_ratio_deconvolved", Scale::Plain, Swap::Nothing),
    ("source.arm_length_ratio", Scale::Plain, Swap::Nothing),
    ("source.arm_length_ratio_jet_side", Scale::Plain, Swap::Invert),
    ("source.lobe_flux_ratio", Scale::Plain, Swap::Invert),
    ("source.misalignment_deg", Scale::Directed, Swap::Negate),
    ("source.bend_deg", Scale::Plain, Swap::Nothing),
    ("source.axial_ratio", Scale::Plain, Swap::Nothing),
    ("source.core_prominence", Scale::Plain, Swap::Nothing),
    ("source.core_prominence_rest", Scale::Plain, Swap::Nothing),
    ("brightness.jet_to_counter_jet_ratio", Scale::Plain, Swap::Invert),
    ("brightness.jet_flux_density_mjy", Scale::Plain, Swap::Nothing),
    ("brightness.counter_jet_flux_density_mjy", Scale::Plain, Swap::Nothing),
    ("physics.projected_length_kpc", Scale::Plain, Swap::Nothing),
    ("physics.luminosity_w_per_hz", Scale::Plain, Swap::Nothing),
    ("physics.core_luminosity_w_per_hz", Scale::Plain, Swap::Nothing),
    ("physics.beaming.beta_cos_theta", Scale::Plain, Swap::Negate),
];

/// Numbers of a side that have a truth; both sides are counted together.
const SIDE: &[(&str, Scale)] = &[
    ("position_angle_deg", Scale::Directed),
    ("inner_position_angle_deg", Scale::Directed),
    ("end_position_angle_deg", Scale::Directed),
    ("bend_deg", Scale::Directed),
    ("length_arcsec", Scale::Plain),
    ("ridge_length_arcsec", Scale::Plain),
    ("length_kpc", Scale::Plain),
    ("flux_density_mjy", Scale::Plain),
    ("fr_ratio", Scale::Plain),
    ("jet.flux_density_mjy", Scale::Plain),
    ("jet.opening_angle_deg", Scale::Plain),
    ("hotspot.distance_arcsec", Scale::Plain),
    ("hotspot.position_angle_deg", Scale::Directed),
    ("hotspot.peak_brightness_mjy_per_beam", Scale::Plain),
    ("lobe.flux_density_mjy", Scale::Plain),
];

/// What was seen of one quantity.
#[derive(Default)]
struct Tally {
    asked: usize,
    pulls: Vec<f64>,
    in68: usize,
    in95: usize,
    limits: usize,
    limits_true: usize,
    reasons: BTreeMap<String, usize>,
}

impl Tally {
    fn add(&mut self, measured: &Value, truth: f64, scale: Scale) {
        self.asked += 1;
        let number = |key: &str| measured.get(key).and_then(Value::as_f64);
        if let (Some(value), Some(minus), Some(plus)) =
            (number("value"), number("minus"), number("plus"))
        {
            let off = match scale {
                Scale::Plain => value - truth,
                Scale::Directed => wrap_difference_deg(value - truth),
                Scale::Undirected => 0.5 * wrap_difference_deg(2.0 * (value - truth)),
            };
            let sigma = if off > 0.0 { minus } else { plus };
            self.pulls.push(off / sigma.max(1e-300));
            self.in68 += usize::from(off.abs() <= sigma);
            let inside = match measured.get("ci95").and_then(Value::as_array).map(Vec::as_slice) {
                Some([low, high]) => {
                    let low = low.as_f64().unwrap_or(f64::NAN);
                    low <= truth && truth <= high.as_f64().unwrap_or(f64::NAN)
                }
                _ => off.abs() <= 1.96 * sigma,
            };
            self.in95 += usize::from(inside);
        } else if let Some(bound) = number("lower_limit") {
            self.limits += 1;
            self.limits_true += usize::from(truth >= bound);
        } else if let Some(bound) = number("upper_limit") {
            self.limits += 1;
            self.limits_true += usize::from(truth <= bound);
        } else {
            let reason = measured.get("missing").and_then(Value::as_str).unwrap_or("absent");
            *self.reasons.entry(reason.to_owned()).or_default() += 1;
        }
    }

    fn row(&mut self, path: &str) -> String {
        let n = self.asked as f64;
        let values = self.pulls.len();
        let share = |count: usize, of: usize| {
            if of == 0 { "   -".to_owned() } else { format!("{:4.2}", count as f64 / of as f64) }
        };
        self.pulls.sort_by(f64::total_cmp);
        let at = |q: f64| {
            let place = (q * (values.max(1) - 1) as f64).round() as usize;
            self.pulls.get(place).copied().unwrap_or(f64::NAN)
        };
        let (median, width) = (at(0.5), 0.5 * (at(0.841) - at(0.159)));
        let dash = |v: f64| if v.is_nan() { "     -".to_owned() } else { format!("{v:6.2}") };
        let reason = self
            .reasons
            .iter()
            .max_by_key(|(_, count)| **count)
            .map_or(String::new(), |(reason, count)| format!("{reason} {count}"));
        format!(
            "{path:50} {:5} {:4.2} {:4.2}  {} {}  {} {}  {}  {reason}\n",
            self.asked,
            values as f64 / n.max(1.0),
            self.limits as f64 / n.max(1.0),
            dash(median),
            dash(width),
            share(self.in68, values),
            share(self.in95, values),
            share(self.limits_true, self.limits),
        )
    }
}

/// Of cores chosen without a host, by confidence: how many, their mean confidence, and the
/// share of right ones.
fn confidence_rows(confidences: &[(f64, bool)]) -> String {
    let mut text = String::new();
    for (low, high) in [(0.0, 0.2), (0.2, 0.4), (0.4, 0.6), (0.6, 0.8), (0.8, 0.9), (0.9, 1.01)] {
        let of: Vec<_> = confidences.iter().filter(|c| low <= c.0 && c.0 < high).collect();
        if !of.is_empty() {
            let n = of.len() as f64;
            let mean = of.iter().map(|c| c.0).sum::<f64>() / n;
            let right = of.iter().filter(|c| c.1).count() as f64 / n;
            text += &format!(
                "core without host: {n:4} of mean confidence {mean:4.2}, right {right:4.2}\n"
            );
        }
    }
    text
}

const HEAD: &str = "quantity                                               N  val  lim  median  width  c68  c95  limits true\n";

/// The tallies of one scenario.
#[derive(Default)]
pub struct Score {
    maps: usize,
    statuses: BTreeMap<String, usize>,
    tallies: BTreeMap<String, Tally>,
    /// Core more than a beam off.
    pub wrong_core: usize,
    /// Sides called jet and counter-jet the wrong way round.
    pub swapped: usize,
    /// Sides called jet and counter-jet at all.
    pub decided: usize,
    /// A source where there is none.
    pub detections: usize,
    /// Confidence of each core chosen without a host, and whether it is the right one.
    pub confidences: Vec<(f64, bool)>,
}

impl Score {
    /// Adds one map.
    pub fn add(&mut self, record: Result<MapRecord, &'static str>, truth: &Truth) {
        match record {
            Ok(record) => self.add_record(&record, truth),
            Err(code) => {
                self.maps += 1;
                *self.statuses.entry(format!("failed: {code}")).or_default() += 1;
            }
        }
    }

    fn add_record(&mut self, record: &MapRecord, truth: &Truth) {
        let json = serde_json::to_value(record).expect("a record");
        self.maps += 1;
        let status = json["status"].as_str().expect("a status").to_owned();
        self.detections += usize::from(status != "no-detection");
        *self.statuses.entry(status).or_default() += 1;
        let at = |path: &str| {
            let mut value = &json;
            for key in path.split('.') {
                value = match key.parse::<usize>() {
                    Ok(index) => &value[index],
                    Err(_) => &value[key],
                };
            }
            value
        };
        if truth.source.parts.is_empty() {
            return;
        }
        let beam = truth.observation.beam.major / truth.observation.frame.mean_scale();
        let position = at("core.position");
        if let (Some(x), Some(y)) = (position["x_px"].as_f64(), position["y_px"].as_f64()) {
            let origin = truth.observation.frame.origin;
            if at("core.basis") != "host" {
                let confidence = at("core.confidence").as_f64().expect("a number");
                self.confidences.push((confidence, (x - origin.x).hypot(y - origin.y) <= beam));
            }
            if (x - origin.x).hypot(y - origin.y) > beam {
                self.wrong_core += 1;
                return;
            }
            let error =
                |key: &str| at(&format!("core.position_error_{key}")).as_f64().unwrap_or(f64::NAN);
            let (east, north) = (error("east_arcsec"), error("north_arcsec"));
            let cross = error("correlation") * east * north;
            let to_pixel = truth.observation.frame.to_pixel;
            for (off, axis, [a, b]) in
                [(x - origin.x, "x", to_pixel[0]), (y - origin.y, "y", to_pixel[1])]
            {
                let square = (a * east).powi(2) + (b * north).powi(2) + 2.0 * a * b * cross;
                let sigma = square.max(0.0).sqrt();
                let value = serde_json::json!({"value": off, "minus": sigma, "plus": sigma});
                let path = format!("core.position ({axis})");
                self.tallies.entry(path).or_default().add(&value, 0.0, Scale::Plain);
            }
        }
        let swapped = is_swapped(truth, &json);
        if swapped && record.sides[0].role == Role::Jet {
            self.swapped += 1;
            return;
        }
        self.decided += usize::from(record.sides[0].role == Role::Jet);
        let own = own_strip(truth, at("brightness.aperture"), swapped);
        self.add_ratio(at("brightness"), &own);
        for &(path, scale, swap) in WHOLE {
            let by_strip = own.get(path).copied();
            let Some(true_value) = by_strip.or_else(|| truth.values.get(path)) else { continue };
            let true_value = match swap {
                Swap::Invert if swapped && by_strip.is_none() => 1.0 / true_value,
                Swap::Negate if swapped => -true_value,
                _ => true_value,
            };
            self.tallies.entry(path.to_owned()).or_default().add(at(path), true_value, scale);
        }
        for index in [0, 1] {
            for &(name, scale) in SIDE {
                let path = format!("sides.{index}.{name}");
                let true_index = if swapped { 1 - index } else { index };
                let by_strip = own.get(path.as_str()).copied();
                let true_path = format!("sides.{true_index}.{name}");
                let Some(true_value) = by_strip.or_else(|| truth.values.get(&true_path)) else {
                    continue;
                };
                let tally = self.tallies.entry(format!("sides.{name}")).or_default();
                tally.add(at(&path), true_value, scale);
            }
        }
    }

    /// The ratio where the fainter strip truly holds five of its errors or more, and where it
    /// holds less while the brighter one is strong.
    fn add_ratio(&mut self, brightness: &Value, own: &BTreeMap<&str, f64>) {
        let Some(&truth) = own.get("brightness.jet_to_counter_jet_ratio") else { return };
        let flux = |key: &str| {
            let value = &brightness[key];
            let true_flux = own.get(format!("brightness.{key}").as_str()).copied();
            Some(true_flux? / value["plus"].as_f64()?)
        };
        let (Some(a), Some(b)) =
            (flux("jet_flux_density_mjy"), flux("counter_jet_flux_density_mjy"))
        else {
            return;
        };
        let ratio = &brightness["jet_to_counter_jet_ratio"];
        if a.min(b) >= 5.0 {
            let path = "ratio, fainter strip at 5 sigma or more".to_owned();
            self.tallies.entry(path).or_default().add(ratio, truth, Scale::Plain);
        } else if a.max(b) >= 8.0 {
            let path = "ratio, fainter strip below 5 sigma, brighter above 8".to_owned();
            let tally = self.tallies.entry(path).or_default();
            tally.add(ratio, truth, Scale::Plain);
        }
    }

    /// The table as text.
    pub fn table(&mut self, name: &str) -> String {
        let statuses: Vec<String> =
            self.statuses.iter().map(|(status, count)| format!("{count} {status}")).collect();
        let mut text = format!(
            "\n{name}: {} maps ({}); wrong core {}, roles decided {}, sides swapped {}\n",
            self.maps,
            statuses.join(", "),
            self.wrong_core,
            self.decided,
            self.swapped
        );
        text.push_str(&confidence_rows(&self.confidences));
        if !self.tallies.is_empty() {
            text.push_str(HEAD);
        }
        for (path, tally) in &mut self.tallies {
            text.push_str(&tally.row(path));
        }
        text
    }
}

/// Whether the record's first side is the truth's second.
fn is_swapped(truth: &Truth, json: &Value) -> bool {
    let side = json["sides"].as_array().and_then(|sides| {
        sides.iter().enumerate().find_map(|(index, side)| {
            Some((index, side["end_position_angle_deg"]["value"].as_f64()?))
        })
    });
    let Some((index, pa)) = side else { return false };
    let pa = if index == 0 { pa } else { wrap_directed_deg(pa + 180.0) };
    let towards = |k: usize| {
        let end = truth.values.get(&format!("sides.{k}.end_position_angle_deg"));
        end.map(|end| wrap_difference_deg(pa - end).abs())
    };
    match (towards(0), towards(1)) {
        (Some(a), Some(b)) => b < a,
        (Some(a), None) => a > 90.0,
        (None, Some(b)) => b < 90.0,
        (None, None) => false,
    }
}

/// The truth of what hangs on the strip, for the record's own strip and order.
fn own_strip(truth: &Truth, aperture: &Value, swapped: bool) -> BTreeMap<&'static str, f64> {
    let number = |key: &str| aperture[key].as_f64();
    let (Some(inner_arcsec), Some(outer_arcsec), Some(half_width_arcsec)) =
        (number("inner_arcsec"), number("outer_arcsec"), number("half_width_arcsec"))
    else {
        return BTreeMap::new();
    };
    let aperture = Aperture { inner_arcsec, outer_arcsec, half_width_arcsec };
    let mut fluxes = truth.strip_fluxes_mjy(&aperture);
    let edge = outer_arcsec + truth.observation.beam.major;
    let mut lobes = [0, 1].map(|index| truth.flux_beyond_mjy(index, edge));
    if swapped {
        fluxes.swap(0, 1);
        lobes.swap(0, 1);
    }
    let true_index = |index: usize| if swapped { 1 - index } else { index };
    let bearing = |index| truth.strip_bearing_deg(true_index(index), &aperture);
    let opening = |index| truth.opening_angle_deg(true_index(index), &aperture);
    let of_sides = [
        ("sides.0.position_angle_deg", bearing(0)),
        ("sides.1.position_angle_deg", bearing(1)),
        ("sides.0.jet.opening_angle_deg", opening(0)),
        ("sides.1.jet.opening_angle_deg", opening(1)),
    ];
    // The strips' own fluxes carry the noise alone: they are those of the map as calibrated.
    let scale = truth.values.get("intrinsic.flux_scale_factor").unwrap_or(1.0);
    let mut own = BTreeMap::from([
        ("brightness.jet_flux_density_mjy", scale * fluxes[0]),
        ("brightness.counter_jet_flux_density_mjy", scale * fluxes[1]),
        ("brightness.jet_to_counter_jet_ratio", fluxes[0] / fluxes[1]),
        ("sides.0.jet.flux_density_mjy", fluxes[0]),
        ("sides.1.jet.flux_density_mjy", fluxes[1]),
        ("sides.0.lobe.flux_density_mjy", lobes[0]),
        ("sides.1.lobe.flux_density_mjy", lobes[1]),
        ("source.lobe_flux_ratio", lobes[0] / lobes[1]),
    ]);
    own.extend(of_sides.into_iter().filter_map(|(path, value)| Some((path, value?))));
    own
}

/// Whether the description's host is left out.
fn withholds_host() -> bool {
    from_environment::<u8>("JETSPAN_NO_HOST") == Some(1)
}

/// A number from the environment.
fn from_environment<T: std::str::FromStr>(name: &str) -> Option<T> {
    std::env::var(name).ok().and_then(|text| text.parse().ok())
}

#[test]
fn calibration_of_the_built_in_scenarios() {
    let settings = Settings::default();
    let wanted: Option<String> = from_environment("JETSPAN_SCENARIOS");
    let wanted = |name: &str| wanted.as_ref().is_none_or(|list| list.split(',').any(|w| w == name));
    for (name, _) in Scenario::names() {
        if !wanted(name) {
            continue;
        }
        let scenario = Scenario::named(name)
            .expect("a built-in scenario")
            .expect("valid")
            .with(None, from_environment("JETSPAN_SEED"));
        let mut score = Score::default();
        for index in 0..from_environment("JETSPAN_MAPS").unwrap_or(4) {
            for Made { map, .. } in scenario.make(index).expect("a map") {
                score.add(measured(&map, &settings), &map.truth);
            }
        }
        eprint!("{}", score.table(name));
        assert!(score.maps > 0);
        // Cores of known hosts are where they are said to be, to a beam.
        if name == "bright-double" && !withholds_host() {
            assert_eq!((score.wrong_core, score.detections), (0, score.maps));
        }
        // Noise of every kind is no source: one in a hundred at most, none among a few.
        if name == "empty" {
            assert!(100 * score.detections <= score.maps, "{} of {}", score.detections, score.maps);
        }
    }
}
