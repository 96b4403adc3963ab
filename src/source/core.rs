//! The radio core: which spot it is, why, how sure, and its flux.
//!
//! The observer's own choice is used as it is. A known host comes next: the compact
//! component at it, or its position where none stands there. Without either, the core is a
//! compact component in the middle of the source, or the bright compact end of a one-sided
//! one. Confidences are ranks between the candidates, not yet calibrated frequencies.

use crate::extent::position_sigma;
use crate::map::beam::Beam;
use crate::map::geometry::LocalFrame;
use crate::noise::{ApertureWeights, Noise, NoiseCorrelation};
use crate::record::CoreBasis;
use crate::units::{Pixel, SkyOffset};
use crate::window::Window;

/// A local maximum of the source.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Peak {
    /// Position on the map.
    pub pixel: Pixel,
    /// Brightness, map unit.
    pub value: f64,
    /// Brightness over local rms.
    pub signal_to_noise: f64,
}

/// A beam-shaped component on a sloping base, fitted at one place.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct PointFit {
    /// Fitted position on the map.
    pub pixel: Pixel,
    /// Peak of the beam-shaped part, map unit.
    pub peak: f64,
    /// Its error from the map's correlated noise, map unit.
    pub peak_sigma: f64,
    /// Level of the base under it, map unit.
    pub base: f64,
    /// 1σ of the position along each axis, sky units.
    pub position_sigma: f64,
    /// rms of the fit's residuals, map unit.
    pub residual: f64,
}

/// The chosen core.
#[derive(Clone, Debug, PartialEq)]
pub struct Core {
    /// Position on the map; `None` where no core could be chosen.
    pub pixel: Option<Pixel>,
    /// 1σ along each axis, sky units.
    pub position_sigma: f64,
    /// What the choice rests on.
    pub basis: CoreBasis,
    /// 0 to 1.
    pub confidence: f64,
    /// Other candidates with their share of the confidence.
    pub rivals: Vec<(Peak, f64)>,
    /// The beam-shaped component at the core, where one is significant.
    pub fit: Option<PointFit>,
    /// Upper bound of the core's peak where none is significant, map unit.
    pub peak_upper: Option<f64>,
}

/// What the observer knows of the core.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct KnownCore {
    /// The observer's own choice.
    pub given: Option<Pixel>,
    /// The host galaxy.
    pub host: Option<Pixel>,
}

/// A component within this many beam majors of the host is taken as the core.
const HOST_REACH_BEAMS: f64 = 0.6;
/// Signal-to-noise a beam-shaped component needs to count as detected.
pub const CORE_DETECTION_SIGMA: f64 = 3.0;

/// Chooses the core among the source's peaks.
///
/// `ends` are the two farthest points of the source's contour; `frame` any local frame of
/// the map; `z_confidence` the normal deviate of the limits' confidence.
#[expect(clippy::too_many_arguments, reason = "each is one plain input of the stage")]
pub fn choose_core(
    window: &Window,
    peaks: &[Peak],
    known: KnownCore,
    ends: [Pixel; 2],
    beam: &Beam,
    frame: &LocalFrame,
    noise: (&Noise, &NoiseCorrelation),
    z_confidence: f64,
) -> Core {
    let fit_at = |start: Pixel, free: bool| fit_point(window, start, free, beam, frame, noise);
    if let Some(pixel) = known.given {
        let mut core =
            at_position(pixel, CoreBasis::Given, fit_at(pixel, false), window, z_confidence);
        core.confidence = 1.0;
        return core;
    }
    if let Some(host) = known.host {
        return core_at_host(window, peaks, host, beam, frame, z_confidence, fit_at);
    }
    core_without_host(peaks, ends, beam, frame, fit_at)
}

/// A core at a fixed position: the beam-shaped component there, or its upper bound.
fn at_position(
    pixel: Pixel,
    basis: CoreBasis,
    fit: Option<PointFit>,
    window: &Window,
    z_confidence: f64,
) -> Core {
    let detected = fit.filter(|f| f.peak > CORE_DETECTION_SIGMA * f.peak_sigma);
    // All brightness at the place bounds the core's own, whatever lies under it.
    let peak_upper = if detected.is_some() {
        None
    } else {
        window
            .cubic(pixel)
            .zip(window.rms_at(pixel))
            .map(|(b, rms)| b.max(0.0) + z_confidence * rms)
    };
    Core {
        pixel: Some(pixel),
        position_sigma: 0.0,
        basis,
        confidence: 1.0,
        rivals: Vec::new(),
        fit: detected,
        peak_upper,
    }
}

/// The core where the host is known.
fn core_at_host(
    window: &Window,
    peaks: &[Peak],
    host: Pixel,
    beam: &Beam,
    frame: &LocalFrame,
    z_confidence: f64,
    fit_at: impl Fn(Pixel, bool) -> Option<PointFit>,
) -> Core {
    let distance = |pixel: Pixel| frame.separation(host, pixel);
    let reach = HOST_REACH_BEAMS * beam.major;
    let near = peaks
        .iter()
        .filter(|peak| distance(peak.pixel) <= reach)
        .max_by(|a, b| a.value.total_cmp(&b.value));
    let rivals: Vec<(Peak, f64)> = peaks
        .iter()
        .filter(|p| distance(p.pixel) > reach && distance(p.pixel) <= 2.0 * beam.major)
        .map(|p| (*p, reach / distance(p.pixel)))
        .collect();
    // Rivals share what the choice leaves.
    let shared = |confidence: f64| -> Vec<(Peak, f64)> {
        let total: f64 = rivals.iter().map(|(_, weight)| weight).sum();
        rivals.iter().map(|(p, weight)| (*p, (1.0 - confidence) * weight / total)).collect()
    };
    if let Some(peak) = near
        && let Some(fit) = fit_at(peak.pixel, true)
        && fit.peak > CORE_DETECTION_SIGMA * fit.peak_sigma
        && distance(fit.pixel) <= reach
    {
        return Core {
            pixel: Some(fit.pixel),
            position_sigma: fit.position_sigma,
            basis: CoreBasis::Host,
            confidence: 0.95,
            rivals: shared(0.95),
            fit: Some(fit),
            peak_upper: None,
        };
    }
    let mut core = at_position(host, CoreBasis::Host, fit_at(host, false), window, z_confidence);
    core.position_sigma = 0.25 * beam.major;
    core.confidence = if rivals.is_empty() { 0.9 } else { 0.7 };
    core.rivals = shared(core.confidence);
    core
}

/// A candidate where neither core nor host is known.
struct Candidate {
    peak: Peak,
    fit: PointFit,
    /// Place along the source's longest chord, 0 to 1 from end to end.
    along: f64,
    basis: CoreBasis,
    weight: f64,
}

/// Peaks fainter than this share of the brightest do not count as the source's outermost.
const OUTERMOST_BRIGHTNESS: f64 = 0.02;
/// Ends whose peaks are less alike than this speak for a one-sided source.
const LEAST_EVENNESS: f64 = 0.2;

/// The core where neither it nor the host is known.
///
/// Between the outermost peaks a candidate counts by how compact and how central it is. An
/// outermost peak is the core only of a one-sided source: it must outshine every other peak
/// by more than two to one; two alike are hot spots, and then no core is chosen. Candidates
/// in between count for less the less alike the two ends are.
fn core_without_host(
    peaks: &[Peak],
    ends: [Pixel; 2],
    beam: &Beam,
    frame: &LocalFrame,
    fit_at: impl Fn(Pixel, bool) -> Option<PointFit>,
) -> Core {
    let axis = frame.difference(ends[0], ends[1]);
    let length = axis.radius();
    let place =
        |pixel: Pixel| frame.difference(ends[0], pixel).dot(axis) / (length * length).max(1e-300);
    let brightest = peaks.iter().map(|p| p.value).fold(0.0, f64::max);
    let outer = peaks.iter().filter(|p| p.value >= OUTERMOST_BRIGHTNESS * brightest);
    let (low, high) = outer.fold((f64::INFINITY, f64::NEG_INFINITY), |(low, high), p| {
        (low.min(place(p.pixel)), high.max(place(p.pixel)))
    });
    // A source whose one end outshines the other by far is a core with a jet to one side, and
    // what lies between are knots.
    let end_value = |end: f64| {
        let at_end = peaks.iter().filter(|p| (place(p.pixel) - end).abs() < 1e-9);
        at_end.map(|p| p.value).fold(0.0, f64::max)
    };
    let (one, other) = (end_value(low), end_value(high));
    let evenness = one.min(other) / one.max(other).max(f64::MIN_POSITIVE);
    let two_sided = (evenness / LEAST_EVENNESS).min(1.0);
    let mut candidates: Vec<Candidate> = peaks
        .iter()
        .filter_map(|peak| {
            let fit = fit_at(peak.pixel, true)?;
            let wanders = frame.separation(fit.pixel, peak.pixel) > 0.75 * beam.major;
            if fit.peak <= CORE_DETECTION_SIGMA * fit.peak_sigma || wanders {
                return None;
            }
            let along = place(peak.pixel);
            // Share of the peak that is beam-shaped: 1 for a point on nothing.
            let compact = (fit.peak / peak.value.max(fit.peak)).clamp(0.0, 1.0);
            let central = (1.0 - (2.0 * (along - low) / (high - low) - 1.0).abs()).max(0.0);
            let single = (high - low) * length < 0.5 * beam.major;
            let rival = peaks
                .iter()
                .filter(|other| frame.separation(other.pixel, peak.pixel) > 0.5 * beam.major)
                .map(|other| other.value / peak.value)
                .fold(0.0, f64::max);
            let (basis, fitness) = if single && (along - 0.5).abs() < 0.2 {
                (CoreBasis::CompactCentral, 1.0)
            } else if !single && central > 0.1 {
                // Neither end is brighter than this one: it is the core of what lies around.
                let leads = peak.value >= one.max(other);
                (CoreBasis::CompactCentral, if leads { central } else { central * two_sided })
            } else {
                (CoreBasis::OneSidedEnd, (1.0 - 2.0 * rival).max(0.0))
            };
            Some(Candidate { peak: *peak, fit, along, basis, weight: compact.powi(2) * fitness })
        })
        .collect();
    // Equal weights: the more central one, so that no order of the peaks decides.
    candidates.sort_by(|a, b| {
        let by_weight = b.weight.total_cmp(&a.weight);
        by_weight.then((a.along - 0.5).abs().total_cmp(&(b.along - 0.5).abs()))
    });
    let total: f64 = candidates.iter().map(|c| c.weight).sum();
    let Some((best, others)) = candidates.split_first().filter(|(best, _)| best.weight > 0.05)
    else {
        return Core {
            pixel: None,
            position_sigma: 0.0,
            basis: CoreBasis::None,
            confidence: 0.0,
            rivals: candidates.iter().map(|c| (c.peak, 0.0)).collect(),
            fit: None,
            peak_upper: None,
        };
    };
    Core {
        pixel: Some(best.fit.pixel),
        position_sigma: best.fit.position_sigma,
        basis: best.basis,
        confidence: (best.weight / total * best.weight.sqrt().min(1.0)).clamp(0.0, 0.9),
        rivals: others.iter().map(|c| (c.peak, c.weight / total)).collect(),
        fit: Some(best.fit),
        peak_upper: None,
    }
}

/// What a beam-shaped component is fitted on.
#[derive(Clone, Copy)]
enum Base<'a> {
    /// A sloping plane, inside one beam major.
    Plane,
    /// A level, and jets that start at the place in these directions, inside 1.5 beam majors.
    Jets(&'a [f64]),
}

/// Least-squares fit of a beam-shaped component on a sloping plane inside one beam major of
/// the start. The position moves by Gauss–Newton steps where `free`. The error of the peak is
/// that of the linear estimator under the map's measured noise correlation.
///
/// The plane takes jet and lobe emission off only as far as it is smooth over two beams; see
/// [`fit_point_on_jets`].
pub fn fit_point(
    window: &Window,
    start: Pixel,
    free: bool,
    beam: &Beam,
    frame: &LocalFrame,
    noise: (&Noise, &NoiseCorrelation),
) -> Option<PointFit> {
    fit_on(window, start, free, Base::Plane, beam, frame, noise)
}

/// The same at a place from which jets start in known directions (position angles, one or
/// two): each is a line of constant brightness that begins at the place, seen through the
/// beam. The position stays.
pub fn fit_point_on_jets(
    window: &Window,
    place: Pixel,
    bearings_deg: &[f64],
    beam: &Beam,
    frame: &LocalFrame,
    noise: (&Noise, &NoiseCorrelation),
) -> Option<PointFit> {
    fit_on(window, place, false, Base::Jets(bearings_deg), beam, frame, noise)
}

/// Brightness at an offset from the start of a half-line of unit brightness in a direction,
/// through the beam: a Gaussian across, an error function along.
///
/// A line across an elliptical beam is blurred along it by the beam's cut in its direction;
/// that the two are not independent for a tilted beam is left out.
pub(super) fn half_line(beam: &Beam, offset: SkyOffset, bearing_deg: f64) -> f64 {
    let along = offset.dot(SkyOffset::polar(1.0, bearing_deg));
    let across = offset.dot(SkyOffset::polar(1.0, bearing_deg + 90.0));
    let width = beam.projected_fwhm(bearing_deg);
    let length = beam.reach_along(bearing_deg);
    let profile = (-4.0 * std::f64::consts::LN_2 * (across / width).powi(2)).exp();
    profile * 0.5 * libm::erfc(-2.0 * std::f64::consts::LN_2.sqrt() * along / length)
}

fn fit_on(
    window: &Window,
    start: Pixel,
    free: bool,
    base: Base,
    beam: &Beam,
    frame: &LocalFrame,
    (noise, correlation): (&Noise, &NoiseCorrelation),
) -> Option<PointFit> {
    let scale = frame.mean_scale();
    let beams = match base {
        Base::Plane => 1.0,
        Base::Jets(_) => 1.5,
    };
    let reach_px = (beams * beam.major / scale).max(2.0);
    let mut centre = start;
    let mut solution = None;
    for step in 0..6 {
        let cells = cells_within(window, start, reach_px);
        let moving = free && step < 5;
        if !free && step < 5 {
            continue;
        }
        let columns = match (base, moving) {
            (_, true) => 6,
            (Base::Jets([_]), false) => 3,
            _ => 4,
        };
        if cells.len() < columns + 2 {
            return None;
        }
        let design: Vec<[f64; 6]> = cells
            .iter()
            .map(|&(r, c)| {
                let d = frame.difference(centre, window.pixel(r, c));
                let g = beam.profile(d);
                let slope = beam.log_gradient(d);
                let moved = [-slope.east * g, -slope.north * g];
                match base {
                    Base::Plane => {
                        [1.0, g, d.east / beam.major, d.north / beam.major, moved[0], moved[1]]
                    }
                    Base::Jets(bearings) => {
                        let jet =
                            |k: usize| bearings.get(k).map_or(0.0, |b| half_line(beam, d, *b));
                        [1.0, g, jet(0), jet(1), moved[0], moved[1]]
                    }
                }
            })
            .collect();
        let values: Vec<f64> = cells.iter().map(|&(r, c)| window.brightness[[r, c]]).collect();
        let fit = linear_fit(&design, &values, columns)?;
        if moving {
            let amplitude = fit.coefficients[1];
            if amplitude <= 0.0 {
                return None;
            }
            let limit = 0.3 * beam.major;
            let shift =
                SkyOffset::new(fit.coefficients[4] / amplitude, fit.coefficients[5] / amplitude);
            let size = shift.radius();
            let shift = if size > limit { shift.times(limit / size) } else { shift };
            centre = frame.moved(centre, shift);
            if frame.separation(start, centre) > beam.major {
                return None;
            }
        }
        solution = Some((fit, cells));
    }
    let (fit, cells) = solution?;
    let estimator = fit.estimator(1);
    let weights = ApertureWeights::from_cells(
        cells.iter().zip(&estimator).map(|(&(r, c), &w)| (window.x0 + c, window.y0 + r, w)),
    )?;
    let peak_sigma = correlation.aperture_variance(&weights, noise).max(0.0).sqrt();
    let peak = fit.coefficients[1];
    let signal = peak / peak_sigma.max(f64::MIN_POSITIVE);
    Some(PointFit {
        pixel: centre,
        peak,
        peak_sigma,
        base: fit.coefficients[0]
            + match base {
                Base::Plane => 0.0,
                // A half-line stands at half its brightness at its start.
                Base::Jets(_) => 0.5 * fit.coefficients[2..].iter().sum::<f64>(),
            },
        position_sigma: position_sigma((beam.major * beam.minor).sqrt(), signal),
        residual: fit.residual_rms,
    })
}

/// Usable cells of the window within a distance of a map position.
pub fn cells_within(window: &Window, centre: Pixel, radius_px: f64) -> Vec<(usize, usize)> {
    let (cx, cy) = (centre.x - window.x0 as f64, centre.y - window.y0 as f64);
    let low = |v: f64| (v - radius_px).ceil().max(0.0) as usize;
    let high = |v: f64, n: usize| ((v + radius_px).floor().min(n as f64 - 1.0)).max(-1.0) as i64;
    let mut cells = Vec::new();
    for r in low(cy) as i64..=high(cy, window.rows()) {
        for c in low(cx) as i64..=high(cx, window.columns()) {
            let (ru, cu) = (r as usize, c as usize);
            if (r as f64 - cy).hypot(c as f64 - cx) <= radius_px && window.usable(ru, cu) {
                cells.push((ru, cu));
            }
        }
    }
    cells
}

/// A linear least-squares solution by normal equations and Cholesky's factor.
struct LinearFit {
    coefficients: Vec<f64>,
    inverse: Vec<Vec<f64>>,
    design: Vec<[f64; 6]>,
    residual_rms: f64,
}

impl LinearFit {
    /// The weights with which each sample enters one coefficient.
    fn estimator(&self, index: usize) -> Vec<f64> {
        let row = &self.inverse[index];
        self.design.iter().map(|d| row.iter().zip(d).map(|(a, b)| a * b).sum()).collect()
    }
}

fn linear_fit(design: &[[f64; 6]], values: &[f64], columns: usize) -> Option<LinearFit> {
    let mut normal = vec![vec![0.0; columns]; columns];
    let mut right = vec![0.0; columns];
    for (d, &v) in design.iter().zip(values) {
        for i in 0..columns {
            right[i] += d[i] * v;
            for j in 0..columns {
                normal[i][j] += d[i] * d[j];
            }
        }
    }
    let inverse = invert_symmetric(&normal)?;
    let coefficients: Vec<f64> =
        inverse.iter().map(|row| row.iter().zip(&right).map(|(a, b)| a * b).sum()).collect();
    let squares: f64 = design
        .iter()
        .zip(values)
        .map(|(d, v)| (v - d.iter().zip(&coefficients).map(|(a, b)| a * b).sum::<f64>()).powi(2))
        .sum();
    let freedom = values.len().saturating_sub(columns).max(1);
    Some(LinearFit {
        coefficients,
        inverse,
        design: design.to_vec(),
        residual_rms: (squares / freedom as f64).sqrt(),
    })
}

/// Inverse of a symmetric positive-definite matrix by Gauss–Jordan elimination with scaling;
/// `None` where it is singular to working precision.
pub(super) fn invert_symmetric(matrix: &[Vec<f64>]) -> Option<Vec<Vec<f64>>> {
    let n = matrix.len();
    let scale: Vec<f64> = (0..n).map(|i| matrix[i][i].sqrt()).collect();
    if scale.iter().any(|s| !(s.is_finite() && *s > 0.0)) {
        return None;
    }
    let mut a: Vec<Vec<f64>> = (0..n)
        .map(|i| {
            let mut row: Vec<f64> = (0..n).map(|j| matrix[i][j] / (scale[i] * scale[j])).collect();
            row.extend((0..n).map(|j| f64::from(u8::from(i == j))));
            row
        })
        .collect();
    for k in 0..n {
        let pivot = (k..n).max_by(|&p, &q| a[p][k].abs().total_cmp(&a[q][k].abs()))?;
        a.swap(k, pivot);
        let p = a[k][k];
        if p.abs() < 1e-10 {
            return None;
        }
        for v in &mut a[k] {
            *v /= p;
        }
        let pivot_row = a[k].clone();
        for (i, row) in a.iter_mut().enumerate() {
            if i != k {
                let factor = row[k];
                for (v, q) in row.iter_mut().zip(&pivot_row) {
                    *v -= factor * q;
                }
            }
        }
    }
    Some((0..n).map(|i| (0..n).map(|j| a[i][n + j] / (scale[i] * scale[j])).collect()).collect())
}

#[cfg(test)]
mod tests {
    use ndarray::Array2;

    use super::*;
    use crate::map::description::{MapDescription, Rows};
    use crate::map::geometry::SkyGeometry;

    const SIZE: usize = 61;

    fn frame() -> LocalFrame {
        let description =
            MapDescription { pixel_scale_arcsec: Some([0.5, 0.5]), ..MapDescription::default() };
        SkyGeometry::new(SIZE, SIZE, &description, Rows::BottomUp)
            .local_frame(Pixel::new(30.0, 30.0))
    }

    fn beam() -> Beam {
        Beam { major: 3.0, minor: 2.0, pa_deg: 30.0 }
    }

    /// Points of given brightness on a sloping base.
    fn window(points: &[(Pixel, f64)], level: f64, slope: f64) -> Window {
        let frame = frame();
        let beam = beam();
        let brightness = Array2::from_shape_fn((SIZE, SIZE), |(r, c)| {
            let at = Pixel::new(c as f64, r as f64);
            let sky: f64 =
                points.iter().map(|(p, b)| b * beam.profile(frame.difference(*p, at))).sum();
            sky + level + slope * frame.offset(at).east
        });
        Window {
            x0: 0,
            y0: 0,
            rms: Array2::from_elem((SIZE, SIZE), 0.1),
            member: Array2::from_elem((SIZE, SIZE), true),
            foreign: Array2::from_elem((SIZE, SIZE), false),
            brightness,
        }
    }

    fn noise() -> (Noise, NoiseCorrelation) {
        (Noise::uniform(SIZE, SIZE, 0.0, 0.1), NoiseCorrelation::white())
    }

    fn peak(pixel: Pixel, value: f64) -> Peak {
        Peak { pixel, value, signal_to_noise: value / 0.1 }
    }

    #[test]
    fn a_point_on_a_slope_is_recovered_exactly() {
        let truth = Pixel::new(31.3, 28.6);
        let window = window(&[(truth, 5.0)], 0.7, 0.1);
        let (noise, correlation) = noise();
        let start = Pixel::new(31.0, 29.0);
        let fit = fit_point(&window, start, true, &beam(), &frame(), (&noise, &correlation))
            .expect("a fit");
        // Noise-free and linear but for the position, which converges quadratically.
        assert!(fit.pixel.distance_px(truth) < 1e-6, "{:?}", fit.pixel);
        assert!((fit.peak - 5.0).abs() < 1e-6);
        assert!(fit.residual < 1e-6);
    }

    #[test]
    fn jets_that_start_at_the_core_are_taken_off() {
        // A line of points half a pixel apart for each jet, summed through the beam: brightness
        // 3 and 1 per beam on the ridge, at 30° and 200°.
        let core = Pixel::new(30.0, 30.0);
        let frame = frame();
        let mut points = vec![(core, 5.0)];
        for (bearing, level) in [(30.0, 3.0), (200.0, 1.0)] {
            let step = 0.1;
            // Points of peak p every `step` along a line add up to p · (cut of the beam along
            // the line) · 1.0645 / step.
            let peak = level * step / (1.064_467 * beam().reach_along(bearing));
            for k in 0..130 {
                let d = (f64::from(k) + 0.5) * step;
                points.push((frame.moved(core, SkyOffset::polar(d, bearing)), peak));
            }
        }
        let window = window(&points, 0.2, 0.0);
        let (noise, correlation) = noise();
        let noise = (&noise, &correlation);
        let on_jets = fit_point_on_jets(&window, core, &[30.0, 200.0], &beam(), &frame, noise);
        let peak = on_jets.expect("a fit").peak;
        assert!((peak - 5.0).abs() < 0.03, "{peak}");
        // What a sloping plane makes of it: part of the jets' start counts as core.
        let on_plane = fit_point(&window, core, false, &beam(), &frame, noise).expect("a fit");
        assert!(on_plane.peak > 5.5, "{}", on_plane.peak);
    }

    #[test]
    fn error_of_the_peak_is_the_scatter_of_fits() {
        // White noise at a fixed position: 400 draws; their scatter is known to 3.5 %.
        let (noise, correlation) = noise();
        let at = Pixel::new(30.0, 30.0);
        let clean = window(&[(at, 5.0)], 0.0, 0.0);
        let mut peaks = Vec::new();
        let mut stated = 0.0;
        for seed in 0..400 {
            let mut noisy = clean.clone();
            noisy.brightness +=
                &(crate::simulate::unit_noise(SIZE, SIZE, crate::simulate::NoiseKind::White, seed)
                    * 0.1);
            let fit = fit_point(&noisy, at, false, &beam(), &frame(), (&noise, &correlation))
                .expect("a fit");
            peaks.push(fit.peak);
            stated = fit.peak_sigma;
        }
        let mean = peaks.iter().sum::<f64>() / 400.0;
        let scatter = (peaks.iter().map(|p| (p - mean).powi(2)).sum::<f64>() / 399.0).sqrt();
        assert!((scatter / stated - 1.0).abs() < 0.11, "{scatter} against {stated}");
        assert!((mean - 5.0).abs() < 4.0 * stated / 20.0);
    }

    #[test]
    fn the_host_marks_the_core_and_bounds_its_flux() {
        let (noise, correlation) = noise();
        let lobes = [(Pixel::new(18.0, 30.0), 8.0), (Pixel::new(42.0, 30.0), 8.0)];
        let choose = |window: &Window, known: KnownCore, peaks: &[Peak]| {
            let ends = [Pixel::new(14.0, 30.0), Pixel::new(46.0, 30.0)];
            choose_core(
                window,
                peaks,
                known,
                ends,
                &beam(),
                &frame(),
                (&noise, &correlation),
                1.645,
            )
        };
        let lobe_peaks: Vec<Peak> = lobes.iter().map(|(p, v)| peak(*p, *v)).collect();
        let host = KnownCore { host: Some(Pixel::new(30.0, 30.0)), given: None };

        let without = choose(&window(&lobes, 0.0, 0.0), host, &lobe_peaks);
        assert_eq!(without.basis, CoreBasis::Host);
        assert!(without.fit.is_none());
        // Nothing there: the bound is the noise's, 1.645 × 0.1.
        assert!((without.peak_upper.expect("a bound") - 0.1645).abs() < 1e-3);

        let mut all = lobes.to_vec();
        all.push((Pixel::new(30.4, 30.2), 2.0));
        let mut peaks = lobe_peaks.clone();
        peaks.push(peak(Pixel::new(30.4, 30.2), 2.0));
        let with = choose(&window(&all, 0.0, 0.0), host, &peaks);
        assert!(with.pixel.expect("a core").distance_px(Pixel::new(30.4, 30.2)) < 0.01);
        assert!((with.fit.expect("a fit").peak - 2.0).abs() < 0.01);

        // Without a host the compact one in the middle is chosen, without one nothing is.
        let found = choose(&window(&all, 0.0, 0.0), KnownCore::default(), &peaks);
        assert_eq!(found.basis, CoreBasis::CompactCentral);
        assert!(found.pixel.expect("a core").distance_px(Pixel::new(30.4, 30.2)) < 0.01);

        // Two alike are hot spots: no core is invented.
        let none = choose(&window(&lobes, 0.0, 0.0), KnownCore::default(), &lobe_peaks);
        assert_eq!((none.basis, none.pixel), (CoreBasis::None, None));
        // A bright end with a knot of a fifth is a core with a one-sided jet.
        let jet = [(Pixel::new(18.0, 30.0), 10.0), (Pixel::new(38.0, 30.0), 2.0)];
        let jet_peaks: Vec<Peak> = jet.iter().map(|(p, v)| peak(*p, *v)).collect();
        let end = choose(&window(&jet, 0.0, 0.0), KnownCore::default(), &jet_peaks);
        assert_eq!(end.basis, CoreBasis::OneSidedEnd);
        assert!(end.pixel.expect("a core").distance_px(Pixel::new(18.0, 30.0)) < 0.01);

        let given = KnownCore { given: Some(Pixel::new(25.0, 31.0)), host: host.host };
        let used = choose(&window(&all, 0.0, 0.0), given, &peaks);
        assert_eq!((used.basis, used.pixel), (CoreBasis::Given, given.given));
    }

    #[test]
    fn inverse_times_matrix_is_one() {
        let m = vec![vec![4.0, 1.0, 0.5], vec![1.0, 3.0, 0.2], vec![0.5, 0.2, 2.0]];
        let inverse = invert_symmetric(&m).expect("positive definite");
        for (i, row) in inverse.iter().enumerate() {
            for j in 0..3 {
                let product: f64 = row.iter().zip(&m).map(|(a, line)| a * line[j]).sum();
                assert!((product - f64::from(u8::from(i == j))).abs() < 1e-12);
            }
        }
        assert!(invert_symmetric(&[vec![1.0, 1.0], vec![1.0, 1.0]]).is_none());
    }
}
