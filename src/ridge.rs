//! Ridge lines: one per side, traced outwards from the core.
//!
//! The brightness around the core is sampled on circles. On each side the ridge is the path
//! through the circles that gathers most signal-to-noise against a penalty on turning
//! (dynamic programming, Viterbi 1967, IEEE Trans. IT 13, 260), so that a gap does not stop
//! it and a noise peak does not turn it. Each point is then moved to the crest of its own
//! transverse profile. "Bearing of the ridge at d" is the direction from the core to the
//! ridge's point at radial distance d.

use crate::constants::FWHM_PER_SIGMA;
use crate::edge::{ProfilePoint, Wander, last_above};
use crate::map::beam::Beam;
use crate::map::geometry::LocalFrame;
use crate::measurement::{Because, Measurement};
use crate::stats::{median, normal_deviate, normal_probability};
use crate::units::{SkyOffset, wrap_difference_deg, wrap_directed_deg};
use crate::window::Window;

/// One point of a ridge, offsets from the core in sky units.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct RidgePoint {
    /// Radial distance from the core.
    pub distance: f64,
    /// Bearing from the core.
    pub bearing_deg: f64,
    /// Offset from the core.
    pub offset: SkyOffset,
    /// Brightness on the crest, map unit, core taken off.
    pub brightness: f64,
    /// Local rms, map unit.
    pub rms: f64,
    /// FWHM across the ridge, sky units.
    pub width: Measurement,
    /// The same with the beam's projected width taken off.
    pub width_deconvolved: Measurement,
    /// The beam's projected width there.
    pub beam_width: f64,
    /// Share of the width's 1σ that comes from the diffuse emission under the ridge, sky units.
    pub width_model: f64,
}

impl RidgePoint {
    /// 1σ of its place across the ridge: 0.30 W²/b over the signal-to-noise, where the noise's
    /// gradient cancels that of a Gaussian profile of FWHM W (the beam's b where W is not
    /// known); no more than such a profile's own standard deviation.
    pub fn aside_sigma(&self) -> f64 {
        let width = self.width.best().unwrap_or(self.beam_width).max(self.beam_width);
        let sigma = 0.30 * width * width / (self.beam_width * self.signal_to_noise().max(1.0));
        sigma.min(width / FWHM_PER_SIGMA)
    }

    /// Brightness over local rms.
    pub fn signal_to_noise(&self) -> f64 {
        self.brightness / self.rms.max(f64::MIN_POSITIVE)
    }
}

/// The ridge of one side.
#[derive(Clone, Debug, PartialEq)]
pub struct Ridge {
    /// Direction in which the side starts.
    pub start_deg: f64,
    /// Whether anything of this side stands above the outline threshold beyond one beam.
    pub detected: bool,
    /// Points at growing distance, up to the last one above the outline threshold.
    pub points: Vec<RidgePoint>,
    /// Where it ends.
    pub end: Option<RidgeEnd>,
}

/// The end of a ridge: where it last stands at the outline threshold, freed from what noise
/// has added to it.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct RidgeEnd {
    /// Offset from the core.
    pub offset: SkyOffset,
    /// How noise moves it along the ridge.
    pub along: Wander,
    /// 1σ across the ridge, sky units.
    pub across: f64,
    /// Change of the bearing with distance there, degrees per sky unit.
    pub turn_deg: f64,
}

impl RidgeEnd {
    /// 1σ of the bearing from the core, degrees.
    pub fn bearing_sigma_deg(&self) -> f64 {
        let aside = (self.across / self.offset.radius().max(f64::MIN_POSITIVE)).to_degrees();
        aside.hypot(self.turn_deg * self.along.sigma())
    }
}

impl Ridge {
    /// Bearing at a radial distance: interpolated, the first or last point's beyond the ends,
    /// the starting direction where there is no point.
    pub fn bearing_at(&self, distance: f64) -> f64 {
        let (Some(first), Some(last)) = (self.points.first(), self.points.last()) else {
            return self.start_deg;
        };
        if distance <= first.distance {
            return first.bearing_deg;
        }
        if distance >= last.distance {
            return last.bearing_deg;
        }
        let next = self.points.partition_point(|p| p.distance <= distance);
        let (a, b) = (&self.points[next - 1], &self.points[next]);
        let t = (distance - a.distance) / (b.distance - a.distance);
        wrap_directed_deg(a.bearing_deg + t * wrap_difference_deg(b.bearing_deg - a.bearing_deg))
    }

    /// The same without the points that have blank pixels within a distance: beside a hole the
    /// crest is the hole's edge. Between those left the bearing is interpolated.
    pub fn away_from_blanks(&self, window: &Window, frame: &LocalFrame, distance: f64) -> Self {
        let clear = |point: &&RidgePoint| {
            (0..8).all(|k| {
                let beside = SkyOffset::polar(distance, f64::from(k) * 45.0);
                window.usable_nearest(frame.pixel(point.offset.plus(beside)))
            })
        };
        Self { points: self.points.iter().filter(clear).copied().collect(), ..self.clone() }
    }

    /// The same ridge seen from a place a little way from the core it was traced from: its
    /// points stay, their offsets change.
    pub fn seen_from(mut self, shift: SkyOffset) -> Self {
        for point in &mut self.points {
            point.offset = point.offset.minus(shift);
            point.distance = point.offset.radius();
            point.bearing_deg = point.offset.position_angle_deg();
        }
        let mut farthest = 0.0;
        self.points.retain(|point| {
            let is_farther = point.distance > farthest;
            farthest = point.distance.max(farthest);
            is_farther
        });
        self
    }

    /// Length along the ridge from the core to its end with its 1σ downwards and upwards; the
    /// core's own error is not counted. `beam` is the beam's mean width.
    ///
    /// Chords of a beam's length join the points that stand above the threshold, straight over
    /// gaps between them. Noise that moves points aside lengthens each chord c by s²/c on the
    /// mean (s: 1σ of a point across the ridge, bounded by how far crests are looked for), which
    /// is taken off. How sure the path is
    /// follows from chords three times as long: a path that winds within a few beams is told
    /// from one that wanders with noise or between several crests only as well as the two agree.
    pub fn length(&self, beam: f64, threshold: f64) -> Option<(f64, f64, f64)> {
        let end = self.end.as_ref()?;
        let (fine, noise, unsure) = self.chords(end.offset, beam, threshold);
        let (coarse, ..) = self.chords(end.offset, 3.0 * beam, threshold);
        let path = unsure.hypot(0.5 * (fine - noise - coarse));
        let length = (fine - noise).max(end.offset.radius());
        Some((length, end.along.minus.hypot(path), end.along.plus.hypot(path)))
    }

    /// Sum of chords of at least a length, what noise adds to it on the mean, and how unsure
    /// that is: half of what it would add if crests were looked for without bound.
    fn chords(&self, end: SkyOffset, least: f64, threshold: f64) -> (f64, f64, f64) {
        let mut previous = SkyOffset::default();
        let (mut sum, mut noise, mut unsure) = (0.0, 0.0, 0.0);
        let inside = end.radius() - least;
        let bright = |p: &&RidgePoint| p.signal_to_noise() >= threshold;
        for point in self.points.iter().filter(bright).filter(|p| p.distance < inside) {
            let step = point.offset.minus(previous).radius();
            if step >= least {
                sum += step;
                let aside = point.aside_sigma();
                noise += aside.min(CREST_REACH * point.beam_width).powi(2) / step;
                unsure += 0.5 * aside * aside / step;
                previous = point.offset;
            }
        }
        (sum + end.minus(previous).radius(), noise, unsure)
    }
}

/// Fewest points from which an opening angle or an exponent is taken.
const LEAST_WIDTHS: usize = 3;
/// Error of a width beside the noise, as a share of the beam's: interpolation between pixels
/// and the beam as described.
const WIDTH_SHARE: f64 = 0.01;
/// An exponent needs points whose distances differ by this factor.
const LEAST_SPAN: f64 = 1.5;

impl Ridge {
    fn between(&self, (inner, outer): (f64, f64)) -> impl Iterator<Item = &RidgePoint> {
        self.points.iter().filter(move |p| p.distance >= inner && p.distance < outer)
    }

    /// Full opening angle 2 atan(½ w/d), w the width with the beam taken off and d the distance
    /// from the core: that of the median of w²/d² over the points between two distances. A point
    /// that noise makes narrower than the beam counts with its negative square, so that the
    /// median of unresolved points has no bias. An upper limit where it is not 2σ above zero.
    pub fn opening_angle_deg(
        &self,
        ends: (f64, f64),
        beam_major: f64,
        confidence: f64,
    ) -> Measurement {
        let mut squares = Vec::new();
        let (mut variance, mut share) = (0.0, 0.0);
        for point in self.between(ends) {
            let Measurement::Value { value: width, minus, .. } = point.width else { continue };
            let area = point.distance * point.distance;
            squares.push((width * width - point.beam_width * point.beam_width) / area);
            let noise = (minus * minus - point.width_model * point.width_model).max(0.0).sqrt();
            variance += (2.0 * width * noise / area).powi(2);
            // What all points have in common does not average out.
            let common = (WIDTH_SHARE * point.beam_width).hypot(point.width_model);
            share += 2.0 * width * common / area;
        }
        let count = squares.len() as f64;
        let Some(square) = median(&mut squares).filter(|_| squares.len() >= LEAST_WIDTHS) else {
            return Measurement::missing(Because::Unresolved);
        };
        // Points within a beam share their noise; a median scatters 1.25 times more than a mean.
        let beams = ((ends.1 - ends.0) / beam_major).clamp(1.0, count);
        let sigma = (1.25 * (variance / count / beams).sqrt()).hypot(share / count);
        let angle = |square: f64| 2.0 * (0.5 * square.max(0.0).sqrt()).atan().to_degrees();
        if square >= 2.0 * sigma {
            Measurement::symmetric(square, sigma)
                .with_ci95(square - 1.96 * sigma, square + 1.96 * sigma)
                .increasing(angle)
        } else {
            let z = normal_deviate(confidence);
            Measurement::upper_limit(angle(square.max(0.0) + z * sigma), confidence)
        }
    }

    /// Exponent k of width ∝ distance^k: slope of ln(deconvolved width) against ln(distance),
    /// weighted by the widths' errors, over resolved points between two distances. `None` with
    /// too few of them or too short a span.
    pub fn width_exponent(&self, ends: (f64, f64)) -> Option<f64> {
        let points: Vec<(f64, f64, f64)> = self
            .between(ends)
            .filter_map(|p| match p.width_deconvolved {
                Measurement::Value { value, minus, .. } if value > 0.0 && minus > 0.0 => {
                    Some((p.distance.ln(), value.ln(), (value / minus).powi(2)))
                }
                _ => None,
            })
            .collect();
        let (first, last) = (points.first()?.0, points.last()?.0);
        if points.len() < 2 * LEAST_WIDTHS || last - first < LEAST_SPAN.ln() {
            return None;
        }
        let total: f64 = points.iter().map(|p| p.2).sum();
        let mean =
            |f: fn(&(f64, f64, f64)) -> f64| points.iter().map(|p| p.2 * f(p)).sum::<f64>() / total;
        let (x, y) = (mean(|p| p.0), mean(|p| p.1));
        let product: f64 = points.iter().map(|p| p.2 * (p.0 - x) * (p.1 - y)).sum();
        let square: f64 = points.iter().map(|p| p.2 * (p.0 - x).powi(2)).sum();
        (square > 0.0).then(|| product / square)
    }
}

/// Brightness around the core on circles.
struct Polar {
    step: f64,
    first: f64,
    angles: usize,
    /// Signal-to-noise per circle and angle; NaN where the map has nothing usable.
    signal: Vec<Vec<f64>>,
}

impl Polar {
    fn distance(&self, circle: usize) -> f64 {
        self.first + circle as f64 * self.step
    }

    fn angle_deg(&self, index: usize) -> f64 {
        index as f64 * 360.0 / self.angles as f64
    }
}

/// What the tracing needs to know beside the window.
#[derive(Clone, Copy, Debug)]
pub struct RidgeContext<'a> {
    /// Frame whose origin is the core.
    pub frame: &'a LocalFrame,
    /// The beam.
    pub beam: &'a Beam,
    /// Signal-to-noise at which a ridge ends.
    pub outline_sigma: f64,
    /// Direction of one side where the observer or the source's shape tells it.
    pub hint_deg: Option<f64>,
    /// Normal deviate of the limits' confidence.
    pub z_confidence: f64,
}

/// Two sides are never started closer together than this.
const LEAST_SIDE_ANGLE_DEG: f64 = 60.0;
/// Weight of turning against gathered signal in the path.
const TURN_PENALTY: f64 = 0.6;
/// More circles than this are never used: the step grows instead.
const MOST_CIRCLES: usize = 400;

/// Traces the ridges of both sides on a window from which the core has been taken off.
pub fn trace_ridges(window: &Window, context: &RidgeContext) -> [Ridge; 2] {
    let polar = sample_polar(window, context);
    let starts = starting_directions(&polar, context);
    let mut ridges =
        starts.map(|start_deg| Ridge { start_deg, detected: false, points: Vec::new(), end: None });
    for side in 0..2 {
        let (own, other) = (starts[side], starts[1 - side]);
        let path = best_path(&polar, own, other);
        (ridges[side].points, ridges[side].end) = crest_points(window, context, &polar, &path);
        ridges[side].detected =
            ridges[side].points.last().is_some_and(|p| p.distance > context.beam.major);
    }
    // An undetected side starts opposite the detected one.
    for side in 0..2 {
        if !ridges[side].detected && ridges[1 - side].detected {
            ridges[side].points.clear();
            ridges[side].end = None;
            ridges[side].start_deg = wrap_directed_deg(starts[1 - side] + 180.0);
        }
    }
    ridges
}

fn sample_polar(window: &Window, context: &RidgeContext) -> Polar {
    let beam = context.beam;
    let mut farthest: f64 = 0.0;
    for ((r, c), &member) in window.member.indexed_iter() {
        if member {
            farthest = farthest.max(context.frame.offset(window.pixel(r, c)).radius());
        }
    }
    let first = 0.5 * beam.minor;
    // Somewhat farther: how the brightness fades beyond its end tells how sure the end is.
    let farthest = farthest + 1.5 * beam.major;
    let fine = (beam.minor / 3.0).max(0.5 * context.frame.mean_scale());
    let circles = (((farthest - first) / fine).ceil().max(1.0) as usize).min(MOST_CIRCLES);
    let step = ((farthest - first) / circles as f64).max(f64::MIN_POSITIVE);
    let wanted = std::f64::consts::TAU * farthest / step;
    // A multiple of 8, so that quarter turns and mirrored maps give the same angles.
    let angles = ((wanted / 8.0).ceil() as usize * 8).clamp(72, 1440);
    let mut polar = Polar { step, first, angles, signal: Vec::with_capacity(circles + 1) };
    for circle in 0..=circles {
        let radius = polar.distance(circle);
        polar.signal.push(
            (0..angles)
                .map(|k| {
                    let at = context.frame.pixel(SkyOffset::polar(radius, polar.angle_deg(k)));
                    match (window.bilinear(at), window.rms_at(at)) {
                        (Some(b), Some(rms)) if rms > 0.0 => b / rms,
                        _ => f64::NAN,
                    }
                })
                .collect(),
        );
    }
    polar
}

/// What a signal-to-noise adds to a path: nothing below 2σ, then logarithmic, so that a hot
/// spot does not outweigh the whole jet.
fn gain(signal: f64) -> f64 {
    if signal > 2.0 { (signal - 1.0).ln() } else { 0.0 }
}

/// The two directions with most emission beyond one beam, at least 60° apart; opposite
/// directions are preferred.
fn starting_directions(polar: &Polar, context: &RidgeContext) -> [f64; 2] {
    let n = polar.angles;
    let mut raw = vec![0.0; n];
    for circle in 0..polar.signal.len() {
        if polar.distance(circle) < context.beam.major {
            continue;
        }
        for (sum, &signal) in raw.iter_mut().zip(&polar.signal[circle]) {
            if signal > context.outline_sigma {
                *sum += gain(signal);
            }
        }
    }
    // Boxcar of ±15°.
    let half = (n as f64 * 15.0 / 360.0).round() as usize;
    let smooth: Vec<f64> =
        (0..n).map(|k| (0..=2 * half).map(|j| raw[(k + n + j - half) % n]).sum()).collect();
    let angle = |k: usize| polar.angle_deg(k);
    let argmax = |weight: &dyn Fn(usize) -> f64| -> Option<f64> {
        let best = (0..n).map(weight).fold(0.0, f64::max);
        if best <= 0.0 {
            return None;
        }
        // The middle of a flat top: the vector mean of all angles within rounding of the best.
        let (mut east, mut north) = (0.0, 0.0);
        for k in 0..n {
            if weight(k) >= best * (1.0 - 1e-9) {
                let (sin, cos) = angle(k).to_radians().sin_cos();
                east += sin;
                north += cos;
            }
        }
        Some(wrap_directed_deg(east.atan2(north).to_degrees()))
    };
    let first = context.hint_deg.or_else(|| argmax(&|k| smooth[k])).unwrap_or(0.0);
    let second = argmax(&|k| {
        let apart = wrap_difference_deg(angle(k) - first).abs();
        if apart < LEAST_SIDE_ANGLE_DEG {
            return 0.0;
        }
        smooth[k] * (1.0 - apart.to_radians().cos() + 1.0) / 3.0
    })
    .unwrap_or_else(|| wrap_directed_deg(first + 180.0));
    [first, second]
}

/// The best path of one side: an angle index per circle. Angles nearer to the other side's
/// start are closed to it.
fn best_path(polar: &Polar, own_deg: f64, other_deg: f64) -> Vec<usize> {
    let n = polar.angles;
    let open: Vec<bool> = (0..n)
        .map(|k| {
            let to_own = wrap_difference_deg(polar.angle_deg(k) - own_deg).abs();
            let to_other = wrap_difference_deg(polar.angle_deg(k) - other_deg).abs();
            to_own <= to_other && to_own <= 100.0
        })
        .collect();
    let circles = polar.signal.len();
    let closed = f64::NEG_INFINITY;
    let angle_step = std::f64::consts::TAU / n as f64;
    let mut score: Vec<f64> = (0..n)
        .map(|k| {
            if !open[k] {
                return closed;
            }
            let apart = wrap_difference_deg(polar.angle_deg(k) - own_deg).to_radians();
            gain_or_zero(polar.signal[0][k]) - 0.2 * apart * apart
        })
        .collect();
    let mut back: Vec<Vec<u16>> = Vec::with_capacity(circles);
    back.push(Vec::new());
    for circle in 1..circles {
        let radius = polar.distance(circle);
        // The path turns by up to 45° against the radius within one step.
        let reach = ((polar.step / (radius * angle_step)).floor() as usize).clamp(1, n / 16);
        let cost = TURN_PENALTY * (radius * angle_step / polar.step).powi(2);
        let mut next = vec![closed; n];
        let mut from = vec![0u16; n];
        for k in 0..n {
            if !open[k] {
                continue;
            }
            let mut best = closed;
            let mut best_from = k;
            for distance in 0..=reach {
                for candidate in [(k + n - distance) % n, (k + distance) % n] {
                    let value = score[candidate] - cost * (distance * distance) as f64;
                    if value > best {
                        best = value;
                        best_from = candidate;
                    }
                }
            }
            next[k] = best + gain_or_zero(polar.signal[circle][k]);
            from[k] = best_from as u16;
        }
        score = next;
        back.push(from);
    }
    let mut k = (0..n).max_by(|&a, &b| score[a].total_cmp(&score[b])).unwrap_or(0);
    let mut path = vec![0; circles];
    for circle in (0..circles).rev() {
        path[circle] = k;
        if circle > 0 {
            k = usize::from(back[circle][k]);
        }
    }
    path
}

fn gain_or_zero(signal: f64) -> f64 {
    if signal.is_finite() { gain(signal) } else { 0.0 }
}

/// Moves the path to the crest of each transverse profile, smooths it over a beam and keeps
/// it to its last crest above the outline threshold.
fn crest_points(
    window: &Window,
    context: &RidgeContext,
    polar: &Polar,
    path: &[usize],
) -> (Vec<RidgePoint>, Option<RidgeEnd>) {
    let beam = context.beam;
    let on_circle = |distance: f64, bearing: f64| {
        window.cubic(context.frame.pixel(SkyOffset::polar(distance, bearing)))
    };
    // Crest near the path on each circle: (distance, bearing, weight, whether it is a crest
    // and not the flank of something beside the path).
    let raw: Vec<(f64, f64, f64, bool)> = path
        .iter()
        .enumerate()
        .map(|(circle, &k)| {
            let distance = polar.distance(circle);
            let bearing = polar.angle_deg(k);
            let fine_deg = (0.15 * beam.minor / distance).to_degrees();
            let samples: Vec<Option<f64>> =
                (-4..=4).map(|j| on_circle(distance, bearing + f64::from(j) * fine_deg)).collect();
            let crest = crest_of(&samples).map_or(0.0, |j| j - 4.0);
            let signal = polar.signal[circle][k];
            let weight = if signal.is_finite() { signal.clamp(0.0, 50.0) } else { 0.0 };
            (distance, bearing + crest * fine_deg, weight, crest.abs() < 3.5)
        })
        .collect();
    let half_window = 0.5 * beam.minor;
    let mut points = Vec::with_capacity(raw.len());
    let mut last = 0;
    for &(distance, bearing, _, is_crest) in &raw {
        let mut turn = 0.0;
        let mut total = 0.0;
        for &(d, b, w, _) in &raw {
            if (d - distance).abs() <= half_window {
                let w = w + 1e-3;
                turn += w * wrap_difference_deg(b - bearing);
                total += w;
            }
        }
        let bearing_deg = wrap_directed_deg(bearing + turn / total);
        let offset = SkyOffset::polar(distance, bearing_deg);
        let at = context.frame.pixel(offset);
        let (Some(brightness), Some(rms)) = (window.cubic(at), window.rms_at(at)) else { continue };
        let above = brightness >= context.outline_sigma * rms;
        if is_crest && above && is_member(window, context.frame, offset) {
            last = points.len() + 1;
        }
        points.push(RidgePoint {
            distance,
            bearing_deg,
            offset,
            brightness,
            rms,
            width: Measurement::missing(Because::Unresolved),
            width_deconvolved: Measurement::missing(Because::Unresolved),
            beam_width: beam.mean_fwhm(),
            width_model: 0.0,
        });
    }
    let profile = points.clone();
    points.truncate(last);
    for k in 0..points.len() {
        let direction = local_direction(&points, k);
        let (width, deconvolved, model) = transverse_width(window, context, &points[k], direction);
        points[k].width = width;
        points[k].width_deconvolved = deconvolved;
        points[k].width_model = model;
        points[k].beam_width = context.beam.projected_fwhm(direction);
    }
    let end = ridge_end(&points, &profile, context);
    (points, end)
}

/// A point's crest is looked for within 0.6 beams of the path and averaged over a beam: its
/// scatter is no more than this many beams.
const CREST_REACH: f64 = 0.2;
/// Beams inside a ridge's last point from which on its end is looked for.
const END_BEAMS: f64 = 3.0;

/// Where a ridge ends. `profile` holds its points and those beyond.
///
/// A crest is the highest of all places across the ridge: for a Gaussian profile of FWHM W and
/// brightness B and noise smoothed by a beam of FWHM b the noise raises it by ¼ (W/b)² rms²/B
/// on the mean, and moves it aside by 0.30 W²/b · rms/B (both where the noise's gradient,
/// 1.67 rms/b, cancels that of the profile, 8 ln 2 B d/W²).
fn ridge_end(
    points: &[RidgePoint],
    profile: &[RidgePoint],
    context: &RidgeContext,
) -> Option<RidgeEnd> {
    let last = points.last()?;
    let beam = context.beam;
    let direction = local_direction(points, points.len() - 1);
    let beam_width = beam.projected_fwhm(direction);
    let width = points.iter().rev().find_map(|p| p.width.best()).unwrap_or(beam_width);
    let ratio = (width / beam_width).max(1.0);
    let excess: Vec<ProfilePoint> = profile
        .iter()
        .map(|p| {
            let raised = (0.25 * ratio * ratio / p.signal_to_noise().max(1.0)).min(1.0);
            let excess = p.brightness - (context.outline_sigma + raised) * p.rms;
            // What stands higher beyond the last point is no crest of this source.
            let is_foreign = p.distance > last.distance && excess > 0.0;
            let excess = if is_foreign { -p.rms } else { excess };
            ProfilePoint { distance: p.distance, excess, rms: p.rms }
        })
        .collect();
    let along_beam = beam.reach_along(direction);
    let from = (last.distance - END_BEAMS * along_beam).max(0.0);
    let (raw, along) =
        last_above(&excess, from, along_beam).unwrap_or((last.distance, Wander::default()));
    let distance = (raw - along.bias).max(0.5 * last.distance);
    let bearing_at = |d: f64| {
        let next = profile.partition_point(|p| p.distance <= d).clamp(1, profile.len().max(2) - 1);
        let (Some(a), Some(b)) = (profile.get(next - 1), profile.get(next)) else {
            return last.bearing_deg;
        };
        let t = ((d - a.distance) / (b.distance - a.distance)).clamp(0.0, 1.0);
        a.bearing_deg + t * wrap_difference_deg(b.bearing_deg - a.bearing_deg)
    };
    let bearing_deg = bearing_at(distance);
    let back = distance - (along.sigma() + along_beam).min(0.5 * distance);
    let turn_deg = wrap_difference_deg(bearing_deg - bearing_at(back))
        / (distance - back).max(f64::MIN_POSITIVE);
    let across = (0.30 * ratio * ratio * beam_width / context.outline_sigma).min(0.42 * width);
    Some(RidgeEnd {
        offset: SkyOffset::polar(distance, wrap_directed_deg(bearing_deg)),
        along,
        across,
        turn_deg,
    })
}

/// Whether an offset falls on or next to a member pixel.
fn is_member(window: &Window, frame: &LocalFrame, offset: SkyOffset) -> bool {
    let at = frame.pixel(offset);
    let (x, y) = (at.x - window.x0 as f64, at.y - window.y0 as f64);
    for dr in [0.0, 1.0] {
        for dc in [0.0, 1.0] {
            let (r, c) = (y.floor() + dr, x.floor() + dc);
            if r >= 0.0
                && c >= 0.0
                && (r as usize) < window.rows()
                && (c as usize) < window.columns()
                && window.member[[r as usize, c as usize]]
            {
                return true;
            }
        }
    }
    false
}

/// Fractional index of the highest sample, by a parabola through it and its neighbours.
fn crest_of(samples: &[Option<f64>]) -> Option<f64> {
    let at = |k: usize| samples.get(k).copied().flatten();
    let k = (0..samples.len())
        .filter(|&k| at(k).is_some())
        .max_by(|&a, &b| at(a).unwrap_or(f64::MIN).total_cmp(&at(b).unwrap_or(f64::MIN)))?;
    if k == 0 || k + 1 == samples.len() {
        return Some(k as f64);
    }
    let (Some(a), Some(b), Some(c)) = (at(k - 1), at(k), at(k + 1)) else { return Some(k as f64) };
    let curvature = a - 2.0 * b + c;
    Some(
        k as f64 + if curvature < 0.0 { (0.5 * (a - c) / curvature).clamp(-0.5, 0.5) } else { 0.0 },
    )
}

/// Direction of the ridge at a point, from its neighbours.
fn local_direction(points: &[RidgePoint], k: usize) -> f64 {
    let low = k.saturating_sub(2);
    let high = (k + 2).min(points.len() - 1);
    let from = if low == k { SkyOffset::default() } else { points[low].offset };
    let chord = points[high].offset.minus(from);
    if chord.radius() > 0.0 { chord.position_angle_deg() } else { points[k].bearing_deg }
}

/// Where the emission beside a ridge is looked at, in widths: there a Gaussian ridge itself is
/// down to 1 % and less.
const BASE_WIDTHS: (f64, f64) = (1.3, 1.8);
/// No more than this share of a crest is taken for diffuse emission.
const MOST_BASE: f64 = 0.7;

/// FWHM of the transverse profile from its half-maximum crossings, and the same with the
/// beam's projected width taken off in quadrature. Missing where the profile does not fall
/// to half on both sides within three beams, or the crest is below 5σ. Diffuse emission under
/// the ridge is taken off: the mean brightness beside it, carried under it by a parabola, where it
/// stands 2 rms high; half of what that changes counts as an error, the third number.
///
/// Error: a crossing moves by (rms / slope); the slope of a Gaussian at half maximum is
/// peak × 4 ln 2 / (2 FWHM) × 2 = peak × 1.386 / FWHM, so that both crossings together give
/// 1.02 FWHM over the crest's signal-to-noise.
fn transverse_width(
    window: &Window,
    context: &RidgeContext,
    point: &RidgePoint,
    direction_deg: f64,
) -> (Measurement, Measurement, f64) {
    let missing = Measurement::missing(Because::Unresolved);
    let signal = point.signal_to_noise();
    if signal < 5.0 {
        return (
            Measurement::missing(Because::JetNotDetected),
            Measurement::missing(Because::JetNotDetected),
            0.0,
        );
    }
    let step = 0.1 * context.beam.minor;
    let reach = (3.0 * context.beam.major / step).ceil() as usize;
    let beside = |aside: f64| {
        let across = SkyOffset::polar(aside, direction_deg + 90.0);
        window.cubic(context.frame.pixel(point.offset.plus(across)))
    };
    let crossing = |sign: f64, half: f64| -> Option<f64> {
        let mut previous = point.brightness;
        for k in 1..=reach {
            let distance = k as f64 * step;
            let value = beside(sign * distance)?;
            if value <= half {
                return Some(
                    distance - step * (half - value) / (previous - value).max(f64::MIN_POSITIVE),
                );
            }
            previous = value;
        }
        None
    };
    let between = |base: f64| {
        let half = 0.5 * (point.brightness + base);
        Some(crossing(-1.0, half)? + crossing(1.0, half)?)
    };
    let Some(raw) = between(0.0) else { return (missing, missing, 0.0) };
    // Diffuse emission under the ridge: a parabola through its brightness beside it.
    let mean = |aside: f64| Some(0.5 * (beside(-aside)? + beside(aside)?));
    let (mut width, mut base) = (raw, 0.0);
    for _ in 0..2 {
        let (Some(near), Some(far)) = (mean(BASE_WIDTHS.0 * width), mean(BASE_WIDTHS.1 * width))
        else {
            break;
        };
        if near < 2.0 * point.rms {
            break;
        }
        let (a, b) = (BASE_WIDTHS.0.powi(2), BASE_WIDTHS.1.powi(2));
        let under = (near + (near - far).max(0.0) * a / (b - a)).min(MOST_BASE * point.brightness);
        let Some(narrower) = between(under) else { return (missing, missing, 0.0) };
        (width, base) = (narrower, under);
    }
    let model = 0.5 * (raw - width).abs();
    let noise = 1.02 * width / signal * point.brightness / (point.brightness - base);
    let sigma = noise.hypot(model);
    let beam_width = context.beam.projected_fwhm(direction_deg);
    let square = width * width - beam_width * beam_width;
    let square_sigma = 2.0 * width * sigma;
    let deconvolved = if square > 2.0 * square_sigma {
        let value = square.sqrt();
        Measurement::symmetric(value, square_sigma / (2.0 * value))
    } else {
        let z = context.z_confidence;
        Measurement::upper_limit((square.max(0.0) + z * square_sigma).sqrt(), normal_probability(z))
    };
    (Measurement::symmetric(width, sigma), deconvolved, model)
}

#[cfg(test)]
mod tests {
    use ndarray::Array2;

    use super::*;
    use crate::map::description::{MapDescription, Rows};
    use crate::map::geometry::SkyGeometry;
    use crate::simulate::{GaussianShape, NoiseKind, unit_noise};
    use crate::units::Pixel;

    const SIZE: usize = 161;
    const BEAM: f64 = 5.0;

    fn frame() -> LocalFrame {
        let description =
            MapDescription { pixel_scale_arcsec: Some([1.0, 1.0]), ..MapDescription::default() };
        SkyGeometry::new(SIZE, SIZE, &description, Rows::BottomUp)
            .local_frame(Pixel::new(80.0, 80.0))
    }

    /// Two arms of beam-wide blobs along `bearing(side, d)`, of brightness `level(side, d)`.
    fn window(
        bearing: impl Fn(usize, f64) -> f64,
        level: impl Fn(usize, f64) -> f64,
        seed: Option<u64>,
    ) -> Window {
        let frame = frame();
        let beam = Beam { major: BEAM, minor: BEAM, pa_deg: 0.0 };
        let mut brightness: Array2<f64> = Array2::zeros((SIZE, SIZE));
        for side in 0..2 {
            for step in 4..110 {
                let d = 0.5 * f64::from(step);
                let at = frame.pixel(SkyOffset::polar(d, bearing(side, d)));
                // Blobs half a pixel apart: 2 × 0.94 / b of them add up to the level.
                let peak = level(side, d) * 0.5 / (1.064_467 * BEAM);
                for ((r, c), value) in brightness.indexed_iter_mut() {
                    *value +=
                        peak * beam.profile(frame.difference(at, Pixel::new(c as f64, r as f64)));
                }
            }
        }
        let member = brightness.mapv(|b| b > 3.0);
        if let Some(seed) = seed {
            let kind = NoiseKind::Smoothed(GaussianShape::circular(BEAM));
            brightness += &unit_noise(SIZE, SIZE, kind, seed);
        }
        Window {
            x0: 0,
            y0: 0,
            rms: Array2::from_elem((SIZE, SIZE), 1.0),
            foreign: Array2::from_elem((SIZE, SIZE), false),
            member,
            brightness,
        }
    }

    fn traced(window: &Window) -> [Ridge; 2] {
        let frame = frame();
        let beam = Beam { major: BEAM, minor: BEAM, pa_deg: 0.0 };
        let context = RidgeContext {
            frame: &frame,
            beam: &beam,
            outline_sigma: 3.0,
            hint_deg: None,
            z_confidence: 1.645,
        };
        trace_ridges(window, &context)
    }

    /// The two ridges with the one nearer to a direction first.
    fn nearer_first(ridges: [Ridge; 2], pa_deg: f64) -> [Ridge; 2] {
        let apart = |r: &Ridge| wrap_difference_deg(r.bearing_at(20.0) - pa_deg).abs();
        let [a, b] = ridges;
        if apart(&a) <= apart(&b) { [a, b] } else { [b, a] }
    }

    #[test]
    fn straight_arms_are_followed_at_their_bearing_and_width() {
        // 30°, so that exchanged axes or a wrong handedness show.
        let window = window(|side, _| 30.0 + 180.0 * side as f64, |_, _| 40.0, None);
        let ridges = nearer_first(traced(&window), 30.0);
        for (side, ridge) in ridges.iter().enumerate() {
            assert!(ridge.detected);
            let truth = 30.0 + 180.0 * side as f64;
            for p in ridge.points.iter().filter(|p| (10.0..48.0).contains(&p.distance)) {
                assert!(wrap_difference_deg(p.bearing_deg - truth).abs() < 0.2, "{p:?}");
                assert!((p.brightness / 40.0 - 1.0).abs() < 0.02, "{}", p.brightness);
                // A line seen through the beam is as wide as the beam, projected.
                let width = p.width.best().expect("bright enough");
                assert!((width / BEAM - 1.0).abs() < 0.02, "{width}");
                assert!(matches!(p.width_deconvolved, Measurement::UpperLimit { .. }));
            }
            let end = ridge.points.last().expect("points").distance;
            // 54.5 px, and the beam's reach at 40 rms down to 3: the last blob is a half-plane's
            // edge, brightness 3 of 40 at 0.61 b beyond it.
            assert!((end - 54.5 - 0.61 * BEAM).abs() < 2.0, "{end}");
        }
    }

    #[test]
    fn a_cone_has_its_opening_angle_and_exponent() {
        // Width 0.3 d before the beam: 2 atan(0.15) = 17.06°, exponent 1.
        let mut window = window(|_, _| 0.0, |_, _| 0.0, None);
        let frame = frame();
        for ((r, c), value) in window.brightness.indexed_iter_mut() {
            let offset = frame.offset(Pixel::new(c as f64, r as f64));
            let width = BEAM.hypot(0.3 * offset.north);
            let across = (-4.0 * std::f64::consts::LN_2 * (offset.east / width).powi(2)).exp();
            *value = if offset.north.abs() < 60.0 { 200.0 * across } else { 0.0 };
        }
        window.member = window.brightness.mapv(|b| b > 3.0);
        for ridge in traced(&window) {
            let angle = ridge.opening_angle_deg((10.0, 45.0), BEAM, 0.95);
            let value = angle.best().expect("resolved");
            assert!((value - 17.06).abs() < 2.0 * angle.sigma().expect("an error"), "{angle:?}");
            assert!((value / 17.06 - 1.0).abs() < 0.05, "{value}");
            let exponent = ridge.width_exponent((10.0, 45.0)).expect("resolved");
            assert!((exponent - 1.0).abs() < 0.1, "{exponent}");
            // Too short a span for an exponent.
            assert!(ridge.width_exponent((30.0, 40.0)).is_none());
        }
    }

    #[test]
    fn an_unresolved_jet_has_an_upper_limit_only() {
        let window = window(|side, _| 30.0 + 180.0 * side as f64, |_, _| 40.0, None);
        for ridge in traced(&window) {
            let angle = ridge.opening_angle_deg((10.0, 45.0), BEAM, 0.95);
            assert!(matches!(angle, Measurement::UpperLimit { .. }), "{angle:?}");
        }
    }

    #[test]
    fn a_bend_of_forty_degrees_is_followed() {
        let bent = |side: usize, d: f64| {
            let turn = 40.0 * ((d - 10.0) / 40.0).clamp(0.0, 1.0);
            100.0 + 180.0 * side as f64 + if side == 0 { turn } else { -turn }
        };
        let window = window(bent, |_, _| 25.0, Some(5));
        let ridges = nearer_first(traced(&window), 100.0 + 10.0);
        for (side, ridge) in ridges.iter().enumerate() {
            for p in ridge.points.iter().filter(|p| (12.0..45.0).contains(&p.distance)) {
                let off = wrap_difference_deg(p.bearing_deg - bent(side, p.distance));
                let off_px = off.to_radians() * p.distance;
                // A fifth of a beam: noise of S/N 25 and the smoothing over a beam.
                assert!(off_px.abs() < 0.2 * BEAM, "side {side} at {}: {off_px}", p.distance);
            }
        }
    }

    #[test]
    fn a_gap_does_not_end_a_ridge() {
        let gap = |_: usize, d: f64| if (22.0..34.0).contains(&d) { 0.0 } else { 30.0 };
        let window = window(|side, _| 200.0 + 180.0 * side as f64, gap, Some(6));
        for ridge in traced(&window) {
            assert!(ridge.points.last().expect("points").distance > 50.0);
        }
    }

    #[test]
    fn a_side_without_emission_is_not_detected_and_lies_opposite() {
        let window = window(|_, _| 75.0, |side, _| if side == 0 { 30.0 } else { 0.0 }, Some(7));
        let ridges = nearer_first(traced(&window), 75.0);
        assert!(ridges[0].detected && !ridges[1].detected);
        assert!(wrap_difference_deg(ridges[1].start_deg - 255.0).abs() < 5.0);
        assert!(ridges[1].points.is_empty());
    }
}
