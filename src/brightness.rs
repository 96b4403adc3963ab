//! Jet against counter-jet: flux in matched strips, their ratio with interval or limit.
//!
//! A strip lies along a side's ridge between two radial distances; the other side's strip is
//! the same, turned by 180° about the core, unless that side's own ridge is strong enough to
//! be followed. The mean of two bands beside the strip is taken off (diffuse emission, lobe
//! wings). Nothing in the rule looks at whether a strip holds signal or noise.
//!
//! Each strip flux is a weighted sum of pixels, so that its error follows from the noise's
//! measured autocorrelation.

use crate::map::beam::Beam;
use crate::map::geometry::LocalFrame;
use crate::measurement::{Because, Measurement};
use crate::noise::{ApertureWeights, Noise, NoiseCorrelation};
use crate::ridge::{Ridge, RidgePoint};
use crate::stats::normal_deviate;
use crate::units::{Pixel, wrap_difference_deg};
use crate::window::Window;

/// The strip, in sky units.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Strip {
    /// Inner radial end.
    pub inner: f64,
    /// Outer radial end.
    pub outer: f64,
    /// Half the width across the ridge.
    pub half_width: f64,
}

/// Sum over one strip, side bands taken off.
#[derive(Clone, Debug)]
pub struct StripFlux {
    /// Weighted sum of brightness over pixels, map unit × pixels.
    pub sum: f64,
    /// Pixels in the strip (fractions count).
    pub area_px: f64,
    /// Weights of the pixels, for the error.
    pub weights: Option<ApertureWeights>,
    /// Share of the strip that is not usable.
    pub blank_fraction: f64,
}

/// Bands beside the strip run from this to the next multiple of the half width.
const BAND_INNER: f64 = 1.5;
const BAND_OUTER: f64 = 2.75;
/// Each pixel is divided into this many parts along each axis to find its share in a strip.
const PARTS: usize = 5;

/// A window's cells around the core in polar coordinates, by growing distance: made once,
/// used by every strip.
#[derive(Clone, Debug)]
pub struct PolarCells {
    cells: Vec<PolarCell>,
}

#[derive(Clone, Copy, Debug)]
struct PolarCell {
    row: usize,
    column: usize,
    radius: f64,
    bearing_deg: f64,
    /// Whether both this cell and the one opposite the core hold usable brightness.
    pair_usable: bool,
}

impl PolarCells {
    /// The cells within `reach` of the frame's origin.
    pub fn around(window: &Window, frame: &LocalFrame, reach: f64) -> Self {
        let mut cells = Vec::new();
        for row in 0..window.rows() {
            for column in 0..window.columns() {
                let offset = frame.offset(window.pixel(row, column));
                let radius = offset.radius();
                if radius <= reach {
                    let opposite = frame.pixel(offset.times(-1.0));
                    let pair_usable = window.usable(row, column) && window.usable_nearest(opposite);
                    let bearing_deg = offset.position_angle_deg();
                    cells.push(PolarCell { row, column, radius, bearing_deg, pair_usable });
                }
            }
        }
        cells.sort_by(|a, b| a.radius.total_cmp(&b.radius));
        Self { cells }
    }

    fn between(&self, low: f64, high: f64) -> &[PolarCell] {
        let start = self.cells.partition_point(|c| c.radius < low);
        let end = self.cells.partition_point(|c| c.radius <= high);
        self.cells.get(start..end).unwrap_or(&[])
    }
}

/// Sums a strip along bearings `bearing(d)` between two radial distances.
///
/// A pixel enters by its share inside the strip (25 points a pixel). Pixels that are blank or
/// another source's, or whose place opposite the core is, are left out on both sides.
fn sum_strip(
    window: &Window,
    frame: &LocalFrame,
    around: &PolarCells,
    bearing: &dyn Fn(f64) -> f64,
    (inner, outer): (f64, f64),
    half_width: f64,
) -> StripFlux {
    let mut strip = (0.0, 0.0);
    let mut band = (0.0, 0.0);
    let mut blank_area = 0.0;
    let mut cells: Vec<(usize, usize, f64, f64)> = Vec::new();
    let margin = frame.pixel_reach();
    for cell in around.between(inner - 2.0 * margin, outer + 2.0 * margin) {
        let turn = wrap_difference_deg(cell.bearing_deg - bearing(cell.radius));
        let across = cell.radius * turn.to_radians().abs();
        if across > BAND_OUTER * half_width + 2.0 * margin && cell.radius > 2.0 * margin {
            continue;
        }
        let inside_ends = cell.radius >= inner + margin && cell.radius < outer - margin;
        let whole = inside_ends && turn.abs() < 45.0 && cell.radius > 4.0 * margin;
        let (in_strip, in_band) = if whole && across + margin <= half_width {
            (1.0, 0.0)
        } else if whole
            && across - margin >= BAND_INNER * half_width
            && across + margin <= BAND_OUTER * half_width
        {
            (0.0, 1.0)
        } else {
            shares(frame, window.pixel(cell.row, cell.column), bearing, (inner, outer), half_width)
        };
        if in_strip + in_band <= 0.0 {
            continue;
        }
        if !cell.pair_usable {
            blank_area += in_strip;
            continue;
        }
        let value = window.brightness[[cell.row, cell.column]];
        strip = (strip.0 + in_strip * value, strip.1 + in_strip);
        band = (band.0 + in_band * value, band.1 + in_band);
        cells.push((cell.row, cell.column, in_strip, in_band));
    }
    // Bands that hold less than a third of the strip's area say more noise than base.
    let band_weight = if band.1 > 0.33 * strip.1 && band.1 > 0.0 { strip.1 / band.1 } else { 0.0 };
    let weights = ApertureWeights::from_cells(
        cells.iter().map(|&(r, c, s, b)| (window.x0 + c, window.y0 + r, s - band_weight * b)),
    );
    StripFlux {
        sum: strip.0 - band_weight * band.0,
        area_px: strip.1,
        weights,
        blank_fraction: blank_area / (blank_area + strip.1).max(f64::MIN_POSITIVE),
    }
}

/// Shares of a pixel's area inside a strip and inside the bands beside it.
fn shares(
    frame: &LocalFrame,
    middle: Pixel,
    bearing: &dyn Fn(f64) -> f64,
    (inner, outer): (f64, f64),
    half_width: f64,
) -> (f64, f64) {
    let (mut in_strip, mut in_band) = (0u32, 0u32);
    let part = |k: usize| (k as f64 + 0.5) / PARTS as f64 - 0.5;
    for i in 0..PARTS {
        for j in 0..PARTS {
            let offset = frame.offset(Pixel::new(middle.x + part(i), middle.y + part(j)));
            let d = offset.radius();
            if d < inner || d >= outer {
                continue;
            }
            let turn = wrap_difference_deg(offset.position_angle_deg() - bearing(d));
            if turn.abs() >= 90.0 {
                continue;
            }
            let across = d * turn.to_radians().abs();
            if across <= half_width {
                in_strip += 1;
            } else if across >= BAND_INNER * half_width && across <= BAND_OUTER * half_width {
                in_band += 1;
            }
        }
    }
    let share = |n: u32| f64::from(n) / (PARTS * PARTS) as f64;
    (share(in_strip), share(in_band))
}

/// The two strips' fluxes with their covariance matrix (map unit × pixels).
#[derive(Clone, Debug)]
pub struct StripPair {
    /// First and second side.
    pub fluxes: [StripFlux; 2],
    /// Variances of the two and their covariance.
    pub variance: [f64; 2],
    /// Covariance of the two.
    pub covariance: f64,
}

/// What placing the strips needs to know of one side.
#[derive(Clone, Copy, Debug)]
pub struct StripSide<'a> {
    /// The side's ridge.
    pub ridge: &'a Ridge,
    /// Distance of its hot spot and the hot spot's brightness, where it has one.
    pub hotspot: Option<(f64, f64)>,
}

/// How strips are placed.
#[derive(Clone, Copy, Debug)]
pub struct StripRule {
    /// Inner end in beam majors.
    pub inner_beams: f64,
    /// Half width in projected beam widths.
    pub half_width_beams: f64,
    /// Signal-to-noise from which a side's own ridge is followed.
    pub follow_sigma: f64,
    /// Signal-to-noise from which the reference side's ridge is followed.
    pub reference_sigma: f64,
}

/// The strip's ends and the bearings of its two sides.
#[derive(Clone, Debug)]
pub struct PlacedStrip {
    /// The strip.
    pub strip: Strip,
    /// Index of the side whose ridge or axis carries the strip.
    pub reference: usize,
    /// Whether each side's strip follows its own ridge.
    pub follows: [bool; 2],
    /// Straight bearings of the two sides, used where no ridge is followed.
    pub axis_deg: [f64; 2],
    /// Whether each side ends in a lobe that stands out from its jet.
    pub lobe: [bool; 2],
}

impl PlacedStrip {
    /// Bearing of one side's strip at a radial distance.
    pub fn bearing(&self, ridges: [&Ridge; 2], side: usize, distance: f64) -> f64 {
        if self.follows[side] {
            ridges[side].bearing_at(distance)
        } else if self.follows[1 - side] {
            ridges[1 - side].bearing_at(distance) + 180.0
        } else {
            self.axis_deg[self.reference] + if side == self.reference { 0.0 } else { 180.0 }
        }
    }
}

/// Places the strips; `None` where less than one beam is left between core and lobes.
///
/// Outer end: one beam short of where the nearer lobe begins. A side whose hot spot does not
/// stand out from its jet has no lobe and ends with its ridge; of two such sides the longer ridge counts, since a counter-jet that
/// fades is what is to be measured.
pub fn place_strip(
    sides: [StripSide; 2],
    ends_deg: [f64; 2],
    beam: &Beam,
    rule: &StripRule,
) -> Option<PlacedStrip> {
    let inner = rule.inner_beams * beam.major;
    let mut outer = f64::INFINITY;
    let mut open_end: f64 = 0.0;
    let mut lobes = [false; 2];
    for (side, has_lobe) in sides.into_iter().zip(&mut lobes) {
        let lobe = side.hotspot.and_then(|(distance, brightness)| {
            lobe_start(side.ridge, distance, brightness, inner, beam.major)
        });
        match lobe {
            Some(start) => {
                *has_lobe = true;
                outer = outer.min(start);
            }
            None => {
                open_end =
                    open_end.max(side.ridge.points.last().map_or(0.0, |p| p.distance + beam.major))
            }
        }
    }
    if !outer.is_finite() {
        outer = open_end;
    }
    let outer = outer - beam.major;
    if outer - inner < beam.major {
        return None;
    }
    let strength = sides.map(|side| median_signal(side.ridge, inner, outer));
    let reference = usize::from(strength[1] > strength[0]);
    let other = 1 - reference;
    let mut follows = [false; 2];
    follows[reference] = strength[reference] >= rule.reference_sigma;
    follows[other] = strength[other] >= rule.follow_sigma;
    let direction = ends_deg[reference];
    let half_width = rule.half_width_beams * beam.projected_fwhm(direction);
    // A resolved jet needs a wider strip: its own median width, where it is measured well.
    let widths: Vec<f64> = sides[reference]
        .ridge
        .points
        .iter()
        .filter(|p| {
            p.distance >= inner && p.distance < outer && p.signal_to_noise() >= rule.follow_sigma
        })
        .filter_map(|p| p.width.best())
        .collect();
    let mut sorted = widths;
    let own = crate::stats::median(&mut sorted).unwrap_or(0.0) * rule.half_width_beams;
    let strip = Strip { inner, outer, half_width: half_width.max(own) };
    Some(PlacedStrip { strip, reference, follows, axis_deg: ends_deg, lobe: lobes })
}

/// A hot spot this many times brighter than the faintest place of the ridge on its way from
/// the core ends in a lobe; else it is a knot of a jet that goes on.
const LOBE_CONTRAST: f64 = 2.0;
/// The highest and the lowest of some ten beams of noise lie this many rms apart.
const CONTRAST_SIGMA: f64 = 6.0;
/// A hot spot nearer than this many beam majors to the strip's inner end leaves no jet to
/// compare it with: it is taken as a lobe's, unless the ridge goes on as far beyond it.
const LOBE_ROOM_BEAMS: f64 = 2.0;

/// Where a side's lobe begins; `None` where no lobe stands out from the jet.
///
/// Walking from the hot spot towards the core, the lobe ends where the ridge has fallen below
/// twice the jet (its median brightness from the strip's inner end half way to the hot spot),
/// below 3 rms at the least; near a hot spot too close to see the jet alone, below 0.7 of it.
fn lobe_start(
    ridge: &Ridge,
    hotspot: f64,
    brightness: f64,
    inner: f64,
    beam_major: f64,
) -> Option<f64> {
    let room = LOBE_ROOM_BEAMS * beam_major;
    let goes_on = ridge.points.last().is_some_and(|p| p.distance > hotspot + room);
    let rms = ridge.points.iter().find(|p| p.distance >= inner).map_or(0.0, |p| p.rms);
    if hotspot < inner + room && !goes_on {
        return Some(hotspot);
    }
    let before = |from: f64, to: f64| {
        ridge.points.iter().filter(move |p| p.distance >= from && p.distance <= to)
    };
    let faintest = before(0.75 * inner, hotspot).map(|p| p.brightness).fold(brightness, f64::min);
    if brightness < LOBE_CONTRAST * faintest.max(0.0)
        || brightness < faintest + CONTRAST_SIGMA * rms
    {
        return None;
    }
    let mut jet: Vec<f64> =
        before(inner, (0.5 * hotspot).max(inner)).map(|p| p.brightness).collect();
    let jet = crate::stats::median(&mut jet).unwrap_or(0.0);
    let threshold = (2.0 * jet).max(3.0 * rms).min(0.7 * brightness);
    let mut start = hotspot;
    for point in ridge.points.iter().rev().filter(|p| p.distance <= hotspot) {
        if point.brightness < threshold {
            break;
        }
        start = point.distance;
    }
    Some(start)
}

/// Median signal-to-noise of a ridge between two distances; 0 where it has no point there.
fn median_signal(ridge: &Ridge, inner: f64, outer: f64) -> f64 {
    let mut signal: Vec<f64> = ridge
        .points
        .iter()
        .filter(|p| p.distance >= inner && p.distance < outer)
        .map(RidgePoint::signal_to_noise)
        .collect();
    crate::stats::median(&mut signal).unwrap_or(0.0)
}

impl StripPair {
    /// The pair with its noise multiplied (≥ 1: residuals near the core, structure beyond the
    /// correlation).
    pub fn inflated(mut self, factor: f64) -> Self {
        let square = factor * factor;
        self.variance = self.variance.map(|v| v * square);
        self.covariance *= square;
        self
    }
}

/// Measures both sides in matched strips between the radial `ends`, the whole strip's or
/// those of a piece of it.
pub fn measure_strips(
    window: &Window,
    frame: &LocalFrame,
    around: &PolarCells,
    ridges: [&Ridge; 2],
    placed: &PlacedStrip,
    ends: (f64, f64),
    (noise, correlation): (&Noise, &NoiseCorrelation),
) -> StripPair {
    let fluxes = [0, 1].map(|side| {
        let bearing = |d: f64| placed.bearing(ridges, side, d);
        sum_strip(window, frame, around, &bearing, ends, placed.strip.half_width)
    });
    let variance = [0, 1].map(|k| {
        fluxes[k].weights.as_ref().map_or(0.0, |w| correlation.aperture_variance(w, noise))
    });
    let covariance = match (&fluxes[0].weights, &fluxes[1].weights) {
        (Some(a), Some(b)) => correlation.aperture_covariance(a, b, noise),
        _ => 0.0,
    };
    StripPair { fluxes, variance, covariance }
}

/// Two noisy fluxes, their variances and covariance.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct FluxPair {
    /// Flux over which the ratio is taken.
    pub numerator: f64,
    /// Flux by which it is divided.
    pub denominator: f64,
    /// Variance of the numerator.
    pub numerator_variance: f64,
    /// Variance of the denominator.
    pub denominator_variance: f64,
    /// Their covariance.
    pub covariance: f64,
}

/// Ratio of two noisy fluxes that are truly ≥ 0.
///
/// Where both stand `value_sigma` above their errors: the value with its 68 and 95 % intervals
/// from the profile likelihood of the two fluxes, which for Gaussian errors is Fieller's
/// (1954, J. R. Stat. Soc. B 16, 175): all R with |N − R D| ≤ z √(σ_N² − 2 R cov + R² σ_D²).
/// Where only one does: a one-sided limit, the quantile of the posterior of N/D for a flat
/// prior on both fluxes ≥ 0. Such a limit holds at least as often as stated, also when the
/// faint flux is truly zero or happens to be measured negative. Where neither does: missing.
pub fn ratio(pair: FluxPair, value_sigma: f64, confidence: f64) -> Measurement {
    let FluxPair {
        numerator: n,
        denominator: d,
        numerator_variance: vn,
        denominator_variance: vd,
        ..
    } = pair;
    if !(vn > 0.0 && vd > 0.0 && n.is_finite() && d.is_finite()) {
        return Measurement::missing(Because::OutOfDomain);
    }
    let strong = |flux: f64, variance: f64| flux >= value_sigma * variance.sqrt();
    match (strong(n, vn), strong(d, vd)) {
        (true, true) => {
            let value = n / d;
            let (Some((low, high)), Some((low95, high95))) =
                (fieller(pair, 1.0), fieller(pair, 1.959_963_984_540_054))
            else {
                return Measurement::missing(Because::OutOfDomain);
            };
            Measurement::value(value, value - low, high - value).with_ci95(low95.max(0.0), high95)
        }
        (true, false) => posterior_lower_limit(pair, confidence)
            .map_or(Measurement::missing(Because::OutOfDomain), |b| {
                Measurement::lower_limit(b, confidence)
            }),
        (false, true) => {
            let turned = FluxPair {
                numerator: d,
                denominator: n,
                numerator_variance: vd,
                denominator_variance: vn,
                covariance: pair.covariance,
            };
            posterior_lower_limit(turned, confidence)
                .filter(|b| *b > 0.0)
                .map_or(Measurement::missing(Because::OutOfDomain), |b| {
                    Measurement::upper_limit(1.0 / b, confidence)
                })
        }
        (false, false) => Measurement::missing(Because::BothSidesBelowNoise),
    }
}

/// Both ends of Fieller's interval at `z` standard deviations; `None` where it is unbounded.
fn fieller(pair: FluxPair, z: f64) -> Option<(f64, f64)> {
    let z2 = z * z;
    let a = pair.denominator * pair.denominator - z2 * pair.denominator_variance;
    let b = pair.numerator * pair.denominator - z2 * pair.covariance;
    let c = pair.numerator * pair.numerator - z2 * pair.numerator_variance;
    let discriminant = b * b - a * c;
    (a > 0.0 && discriminant >= 0.0).then(|| {
        let root = discriminant.sqrt();
        ((b - root) / a, (b + root) / a)
    })
}

/// The bound B with P(N/D > B) = confidence under the posterior of both fluxes (≥ 0, flat).
///
/// P(N > B D) is found by integrating over D ≥ 0: for each D the numerator's conditional
/// distribution is Gaussian. Simpson's rule over ±8σ; bisection on B.
fn posterior_lower_limit(pair: FluxPair, confidence: f64) -> Option<f64> {
    let sn = pair.numerator_variance.sqrt();
    let sd = pair.denominator_variance.sqrt();
    let rho = (pair.covariance / (sn * sd)).clamp(-0.999, 0.999);
    let conditional_sigma = sn * (1.0 - rho * rho).sqrt();
    let low = (pair.denominator - 8.0 * sd).max(0.0);
    let high = (pair.denominator + 8.0 * sd).max(sd * 0.5).max(low + sd);
    let steps = 800;
    let h = (high - low) / f64::from(steps);
    // Beyond ±8σ the tail is 0 or 1 to 1e-15.
    let upper_tail = |x: f64| match x {
        x if x > 8.0 => 0.0,
        x if x < -8.0 => 1.0,
        x => 0.5 * libm::erfc(x / std::f64::consts::SQRT_2),
    };
    // Scaled by the weight at the lower end so that a very negative flux does not underflow.
    let u0 = ((low - pair.denominator) / sd).max(0.0);
    let nodes: Vec<(f64, f64, f64)> = (0..=steps)
        .map(|k| {
            let d = low + f64::from(k) * h;
            let u = (d - pair.denominator) / sd;
            let simpson = match k {
                k if k == 0 || k == steps => 1.0,
                k if k % 2 == 1 => 4.0,
                _ => 2.0,
            };
            let weight = simpson * (-0.5 * (u * u - u0 * u0)).exp();
            (d, pair.numerator + rho * sn * u, weight)
        })
        .collect();
    let all: f64 =
        nodes.iter().map(|(_, mean, weight)| weight * upper_tail(-mean / conditional_sigma)).sum();
    let probability = |bound: f64| -> f64 {
        let above: f64 = nodes
            .iter()
            .map(|(d, mean, weight)| weight * upper_tail((bound * d - mean) / conditional_sigma))
            .sum();
        above / all
    };
    let mut lower = 0.0;
    let mut upper = (pair.numerator + 8.0 * sn) / (1e-3 * sd).max(pair.denominator.abs() * 1e-3);
    if !(upper.is_finite() && probability(upper) < confidence) {
        return None;
    }
    for _ in 0..200 {
        let middle = 0.5 * (lower + upper);
        if probability(middle) >= confidence {
            lower = middle;
        } else {
            upper = middle;
        }
        if upper - lower <= 1e-8 * upper {
            break;
        }
    }
    Some(lower)
}

/// Upper bound at `confidence` of a flux that is truly ≥ 0, measured as `flux` ± `sigma`:
/// the posterior quantile for a flat prior. Never below what a boundary-free limit gives.
pub fn positive_upper_limit(flux: f64, sigma: f64, confidence: f64) -> f64 {
    // P(F < U | F ≥ 0) = confidence; with Q the upper tail: Q((U − f)/σ) = (1 − c) Q(−f/σ).
    let tail = (1.0 - confidence) * 0.5 * libm::erfc(-flux / sigma / std::f64::consts::SQRT_2);
    if tail > 1e-300 {
        flux - sigma * normal_deviate(tail)
    } else {
        // Far below zero the posterior is an exponential of scale σ²/|flux|.
        sigma * sigma / flux.abs() * -(1.0 - confidence).ln()
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn pair(n: f64, d: f64, sn: f64, sd: f64, rho: f64) -> FluxPair {
        FluxPair {
            numerator: n,
            denominator: d,
            numerator_variance: sn * sn,
            denominator_variance: sd * sd,
            covariance: rho * sn * sd,
        }
    }

    #[test]
    fn strong_fluxes_give_first_order_errors() {
        // For S/N → ∞ Fieller's interval is R √(1/snr_n² + 1/snr_d²): first-order propagation.
        let Measurement::Value { value, minus, plus, ci95 } =
            ratio(pair(1000.0, 500.0, 1.0, 1.0, 0.0), 3.0, 0.95)
        else {
            panic!("a value")
        };
        let expected = 2.0 * (1e-3f64.powi(2) + 2e-3f64.powi(2)).sqrt();
        assert!((value - 2.0).abs() < 1e-12);
        assert!(
            (minus - expected).abs() < 0.01 * expected && (plus - expected).abs() < 0.01 * expected
        );
        let [low, high] = ci95.expect("not Gaussian, so given");
        assert!(((high - low) / (plus + minus) - 1.959_96).abs() < 0.01);
    }

    #[test]
    fn interval_and_limit_hold_as_often_as_they_say() {
        // Frequencies over Gaussian draws; quantiles stand for random numbers, so the test is
        // exact to the grid: 400 × 400 equal-probability cells.
        let deviates: Vec<f64> =
            (0..400).map(|k| normal_deviate((f64::from(k) + 0.5) / 400.0)).collect();
        for (truth_n, truth_d) in [(40.0, 8.0), (20.0, 20.0)] {
            let (mut inside68, mut inside95) = (0, 0);
            for a in &deviates {
                for b in &deviates {
                    if let Measurement::Value { value, minus, plus, ci95 } =
                        ratio(pair(truth_n + a, truth_d + b, 1.0, 1.0, 0.0), 1.5, 0.95)
                    {
                        let truth = truth_n / truth_d;
                        inside68 += u32::from((value - minus..=value + plus).contains(&truth));
                        let [low, high] = ci95.expect("given");
                        inside95 += u32::from((low..=high).contains(&truth));
                    }
                }
            }
            let share = |n: u32| f64::from(n) / 160_000.0;
            // Fieller's intervals are exact; 0.5 % is the grid's and the 1.5σ gate's share.
            assert!((share(inside68) - 0.6827).abs() < 0.005, "{}", share(inside68));
            assert!((share(inside95) - 0.95).abs() < 0.005, "{}", share(inside95));
        }
        // Limits: hold at least as often as stated, at a true flux of 0, 1 and 2σ.
        let few: Vec<f64> = (0..40).map(|k| normal_deviate((f64::from(k) + 0.5) / 40.0)).collect();
        for truth_d in [0.0, 1.0, 2.0] {
            let (mut held, mut all) = (0, 0);
            for a in &few {
                for b in &few {
                    if let Measurement::LowerLimit { lower_limit, .. } =
                        ratio(pair(20.0 + a, truth_d + b, 1.0, 1.0, 0.0), 3.0, 0.95)
                    {
                        all += 1;
                        held += i32::from(lower_limit * truth_d <= 20.0);
                    }
                }
            }
            assert!(all > 1000);
            let share = f64::from(held) / f64::from(all);
            assert!(share >= 0.945, "true flux {truth_d}: {share}");
        }
    }

    #[test]
    fn ratio_turns_over_with_its_sides() {
        let there = ratio(pair(12.0, 0.4, 1.0, 1.0, 0.2), 3.0, 0.95);
        let back = ratio(pair(0.4, 12.0, 1.0, 1.0, 0.2), 3.0, 0.95);
        match (there, back) {
            (
                Measurement::LowerLimit { lower_limit, .. },
                Measurement::UpperLimit { upper_limit, .. },
            ) => {
                // Bisected to 1e-8 in either direction.
                assert!((lower_limit * upper_limit - 1.0).abs() < 2e-8);
            }
            other => panic!("limits expected, got {other:?}"),
        }
        assert!(ratio(pair(1.0, 1.0, 1.0, 1.0, 0.0), 3.0, 0.95).is_missing());
    }

    #[test]
    fn upper_limit_of_a_positive_flux() {
        // f = 0: U = σ Φ⁻¹(1 − 0.05/2) = 1.960σ, the half-normal's 95 % point.
        assert!((positive_upper_limit(0.0, 1.0, 0.95) - 1.959_964).abs() < 1e-5);
        // Far above zero it is the boundary-free limit f + 1.645σ.
        assert!((positive_upper_limit(20.0, 1.0, 0.95) - 21.644_854).abs() < 1e-5);
        // Far below zero: exponential tail, −ln(0.05)/|f| to 1/f²; continuous with the other branch.
        let deep = positive_upper_limit(-30.0, 1.0, 0.95);
        assert!((deep - 2.995_73 / 30.0).abs() < 0.01 * deep, "{deep}");
    }
}
