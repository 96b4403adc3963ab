//! The radio core: which spot it is, why, how sure, and its flux.
//!
//! The observer's own choice is used as it is. A known host comes next: the compact
//! component at it, or its position where none stands there. Without either, the core is a
//! compact component in the middle of the source, or the bright compact end of a one-sided
//! one; the confidence is then the probability that it is, from a few features whose weights
//! were learnt where the core is known.

use super::core_fit::{FitContext, Placing, PointFit, PositionError, fit_point};
use crate::map::beam::Beam;
use crate::map::geometry::LocalFrame;
use crate::record::CoreBasis;
use crate::units::Pixel;
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

/// The chosen core.
#[derive(Clone, Debug, PartialEq)]
pub struct Core {
    /// Position on the map; `None` where no core could be chosen.
    pub pixel: Option<Pixel>,
    /// 1σ along each axis, sky units: the mean over all directions.
    pub position_sigma: f64,
    /// The same with its directions.
    pub position_error: PositionError,
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
/// 1σ along each axis of a core that only the host marks, in beam majors.
pub const HOST_SIGMA_BEAMS: f64 = 0.25;
/// Signal-to-noise a beam-shaped component needs to count as detected.
pub const CORE_DETECTION_SIGMA: f64 = 3.0;

impl Core {
    /// The same core where a fit finds it.
    pub fn fitted(self, fit: PointFit) -> Self {
        Self {
            pixel: Some(fit.pixel),
            position_sigma: fit.position.sigma(),
            position_error: fit.position,
            fit: Some(fit),
            peak_upper: None,
            ..self
        }
    }

    /// The same core with nothing of its own above the jets that start there: the host marks it
    /// where it is known, and all brightness at its place bounds its own.
    pub fn hidden(self, host: Option<Pixel>, context: &FitContext, z_confidence: f64) -> Self {
        let pixel = host.filter(|_| self.basis == CoreBasis::Host).or(self.pixel);
        let at_host = PositionError::round(HOST_SIGMA_BEAMS * context.beam.major);
        let position_error =
            if self.basis == CoreBasis::Given { self.position_error } else { at_host };
        Self {
            pixel,
            position_sigma: position_error.sigma(),
            position_error,
            fit: None,
            peak_upper: pixel.and_then(|at| brightness_bound(context.window, at, z_confidence)),
            ..self
        }
    }
}

/// Upper bound of what a component at a place can add to the brightness there.
fn brightness_bound(window: &Window, at: Pixel, z_confidence: f64) -> Option<f64> {
    let (brightness, rms) = window.cubic(at).zip(window.rms_at(at))?;
    Some(brightness.max(0.0) + z_confidence * rms)
}

/// Whether a component is detected.
pub fn is_detected(fit: &PointFit) -> bool {
    fit.peak > CORE_DETECTION_SIGMA * fit.peak_sigma
}

/// Chooses the core among the source's peaks.
///
/// `ends` are the two farthest points of the source's contour; `z_confidence` the normal deviate of the limits' confidence.
pub fn choose_core(
    context: &FitContext,
    peaks: &[Peak],
    known: KnownCore,
    ends: [Pixel; 2],
    z_confidence: f64,
) -> Core {
    let FitContext { window, beam, frame, .. } = *context;
    let fit_at = |start: Pixel, free: bool| {
        fit_point(context, start, if free { Placing::Free } else { Placing::fixed(beam) })
    };
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
    let detected = fit.filter(is_detected);
    // All brightness at the place bounds the core's own, whatever lies under it.
    let peak_upper =
        if detected.is_some() { None } else { brightness_bound(window, pixel, z_confidence) };
    Core {
        pixel: Some(pixel),
        position_sigma: 0.0,
        position_error: PositionError::default(),
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
        && is_detected(&fit)
        && distance(fit.pixel) <= reach
    {
        return Core {
            pixel: Some(fit.pixel),
            position_sigma: fit.position.sigma(),
            position_error: fit.position,
            basis: CoreBasis::Host,
            confidence: 0.95,
            rivals: shared(0.95),
            fit: Some(fit),
            peak_upper: None,
        };
    }
    let mut core = at_position(host, CoreBasis::Host, fit_at(host, false), window, z_confidence);
    core.position_sigma = HOST_SIGMA_BEAMS * beam.major;
    core.position_error = PositionError::round(core.position_sigma);
    core.confidence = if rivals.is_empty() { 0.9 } else { 0.7 };
    core.rivals = shared(core.confidence);
    core
}

/// Where a candidate stands among the peaks.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Standing {
    /// The source has one peak.
    Alone,
    /// Between the outermost peaks.
    Between,
    /// At one end.
    AtEnd,
}

/// What speaks for a candidate where neither core nor host is known.
#[derive(Clone, Copy, Debug)]
struct Evidence {
    standing: Standing,
    /// Share of the peak that is beam-shaped: 1 for a point on nothing.
    compact: f64,
    /// 1 half-way between the outermost peaks, 0 at them.
    central: f64,
    /// Decadic logarithm of its brightness over the brightest other peak's, −1.5 to 1.5; 1
    /// where there is no other.
    outshines: f64,
    /// Distance from the line through the contour's far ends over their distance.
    aside: f64,
}

impl Evidence {
    /// Logarithm of the odds against "none of them": a conditional logit (McFadden 1974, in
    /// Frontiers in Econometrics, ed. Zarembka, 105). The weights are those of greatest
    /// likelihood for 1080 made maps of all built-in scenarios and 160 real ones, the host
    /// withheld; the real ones together count twice as much as the made ones.
    fn log_odds(&self) -> f64 {
        let by_standing = match self.standing {
            Standing::Alone => 1.4,
            Standing::Between => -6.9 + 5.8 * self.central + 1.7 * self.outshines,
            Standing::AtEnd => -5.7 + 3.7 * self.outshines,
        };
        by_standing + 5.4 * self.compact - 6.2 * self.aside
    }
}

/// A candidate where neither core nor host is known.
struct Candidate {
    peak: Peak,
    fit: PointFit,
    /// Place along the source's longest chord, 0 to 1 from end to end.
    along: f64,
    basis: CoreBasis,
    /// Odds against "none of them".
    odds: f64,
}

/// Peaks fainter than this share of the brightest do not count as the source's outermost.
const OUTERMOST_BRIGHTNESS: f64 = 0.02;
/// A peak this central, or less, stands at an end.
const END_CENTRALITY: f64 = 0.1;
/// No choice without a host is surer than this: of the surest real ones one in ten fails.
const SUREST: f64 = 0.95;

/// The core where neither it nor the host is known.
///
/// Every compact peak is a candidate, and so is "none of them". Between the outermost peaks a
/// candidate counts by how central it is, at an end by how much it outshines the rest (two
/// alike are hot spots); everywhere by how compact it is and how near the source's axis.
/// [`Evidence::log_odds`] makes that a probability, which is the confidence. Where "none of
/// them" is likelier than the best, no core is chosen.
fn core_without_host(
    peaks: &[Peak],
    ends: [Pixel; 2],
    beam: &Beam,
    frame: &LocalFrame,
    fit_at: impl Fn(Pixel, bool) -> Option<PointFit>,
) -> Core {
    let axis = frame.difference(ends[0], ends[1]);
    let length = axis.radius().max(f64::MIN_POSITIVE);
    let place = |pixel: Pixel| frame.difference(ends[0], pixel).dot(axis) / (length * length);
    let brightest = peaks.iter().map(|p| p.value).fold(0.0, f64::max);
    let outer = peaks.iter().filter(|p| p.value >= OUTERMOST_BRIGHTNESS * brightest);
    let (low, high) = outer.fold((f64::INFINITY, f64::NEG_INFINITY), |(low, high), p| {
        (low.min(place(p.pixel)), high.max(place(p.pixel)))
    });
    let alone = (high - low) * length < 0.5 * beam.major;
    let evidence = |index: usize, peak: &Peak, fit: &PointFit| {
        let along = place(peak.pixel);
        let central = if alone {
            0.0
        } else {
            (1.0 - (2.0 * (along - low) / (high - low) - 1.0).abs()).max(0.0)
        };
        let others = peaks.iter().enumerate().filter(|(k, _)| *k != index);
        let rival = others.map(|(_, p)| p.value).fold(0.0, f64::max);
        let foot = axis.times(along);
        Evidence {
            standing: if alone {
                Standing::Alone
            } else if central > END_CENTRALITY {
                Standing::Between
            } else {
                Standing::AtEnd
            },
            compact: (fit.peak / peak.value.max(fit.peak)).clamp(0.0, 1.0),
            central,
            outshines: if rival > 0.0 {
                (peak.value / rival).max(1e-9).log10().clamp(-1.5, 1.5)
            } else {
                1.0
            },
            aside: frame.difference(ends[0], peak.pixel).minus(foot).radius() / length,
        }
    };
    let mut candidates: Vec<Candidate> = peaks
        .iter()
        .enumerate()
        .filter_map(|(index, peak)| {
            let fit = fit_at(peak.pixel, true)?;
            let wanders = frame.separation(fit.pixel, peak.pixel) > 0.75 * beam.major;
            if !is_detected(&fit) || wanders {
                return None;
            }
            let evidence = evidence(index, peak, &fit);
            let along = place(peak.pixel);
            let is_central = match evidence.standing {
                Standing::Alone => (along - 0.5).abs() < 0.2,
                Standing::Between => true,
                Standing::AtEnd => false,
            };
            let basis = if is_central { CoreBasis::CompactCentral } else { CoreBasis::OneSidedEnd };
            Some(Candidate { peak: *peak, fit, along, basis, odds: evidence.log_odds().exp() })
        })
        .collect();
    // Equal odds: the more central one, so that no order of the peaks decides.
    candidates.sort_by(|a, b| {
        let by_odds = b.odds.total_cmp(&a.odds);
        by_odds.then((a.along - 0.5).abs().total_cmp(&(b.along - 0.5).abs()))
    });
    let total = 1.0 + candidates.iter().map(|c| c.odds).sum::<f64>();
    let Some((best, others)) = candidates.split_first().filter(|(best, _)| best.odds >= 1.0) else {
        return Core {
            pixel: None,
            position_sigma: 0.0,
            position_error: PositionError::default(),
            basis: CoreBasis::None,
            confidence: 0.0,
            rivals: candidates.iter().map(|c| (c.peak, c.odds / total)).collect(),
            fit: None,
            peak_upper: None,
        };
    };
    Core {
        pixel: Some(best.fit.pixel),
        position_sigma: best.fit.position.sigma(),
        position_error: best.fit.position,
        basis: best.basis,
        confidence: (best.odds / total).min(SUREST),
        rivals: others.iter().map(|c| (c.peak, c.odds / total)).collect(),
        fit: Some(best.fit),
        peak_upper: None,
    }
}
