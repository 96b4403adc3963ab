//! Elliptical Gaussian components of one source, fitted jointly to its pixels.
//!
//! Offsets are taken in units of the beam (its axes turned onto the coordinate axes, each
//! FWHM scaled to 1), so that an unresolved component is a circle of width 1. A shape is the
//! symmetric matrix F in brightness = A exp(−4 ln 2 |F d|²); its eigenvalues are the inverse
//! FWHM in beams. Steps are taken along its own axes, so no angle becomes undetermined for a
//! round component. The least-squares fit is unweighted (Levenberg–Marquardt on the normal
//! equations, analytic derivatives).
//!
//! Components start at the prominent local maxima. One is added at the largest significant
//! residual, or one is split along its major axis, where χ² falls by more than p ln N and a
//! threshold: p further parameters, N independent samples of the noise (Schwarz 1978, Annals
//! of Statistics 6, 461, with samples in place of pixels). χ² is per independent sample,
//! allows for a model error of a fixed share of the brightness, and is divided by the better
//! fit's own reduced χ² near the new components where that exceeds 1: a map with errors beyond
//! its noise asks for more.
//!
//! Errors are those of the linear estimator under the measured noise correlation C,
//! (JᵀJ)⁻¹ JᵀCJ (JᵀJ)⁻¹. They hold no model error: of a smooth lobe described by two
//! Gaussians they say where a Gaussian would be found again.

use crate::extent::resolution_limit;
use crate::map::beam::{Axis, Beam};
use crate::map::geometry::LocalFrame;
use crate::measurement::{Because, Measurement};
use crate::noise::{Noise, NoiseCorrelation};
use crate::source::core::Peak;
use crate::stats::normal_deviate;
use crate::units::{Pixel, SkyOffset};
use crate::window::Window;

mod fit;
mod pixels;
#[cfg(test)]
mod tests;

use self::fit::{Fit, Gaussian, Limits, covariance, minimise, without};
use self::pixels::Pixels;

/// How components are found and fitted.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct ComponentSettings {
    /// Most components of one source. Default 12.
    pub most_components: usize,
    /// Signal-to-noise of a local maximum, or of a residual, that starts a component.
    /// Default 5.
    pub detection_sigma: f64,
    /// Least distance of two starts, in beams. Default 0.7.
    pub separation_beams: f64,
    /// Model error as a share of the local brightness: what calibration errors and shapes
    /// that are no Gaussians leave. Default 0.04 (own choice on real survey maps).
    pub model_error: f64,
    /// Gain of the criterion that makes a further component worth having. Default 20: odds
    /// of e¹⁰ (own choice on real survey maps: what they hold beyond noise is no Gaussian).
    pub least_gain: f64,
    /// A component longer than this many beams is tried as two. Default 1.25.
    pub split_beams: f64,
    /// Smallest FWHM of a component in beams. Default 0.95.
    pub least_width_beams: f64,
    /// Most evaluations of the model in the last fit. Default 30.
    pub evaluations_per_fit: usize,
    /// Most evaluations for one source. Default 200.
    pub evaluations: usize,
    /// Confidence of upper limits. Default 0.95.
    pub confidence: f64,
}

impl Default for ComponentSettings {
    fn default() -> Self {
        Self {
            most_components: 12,
            detection_sigma: 5.0,
            separation_beams: 0.7,
            model_error: 0.04,
            least_gain: 20.0,
            split_beams: 1.25,
            least_width_beams: 0.95,
            evaluations_per_fit: 30,
            evaluations: 200,
            confidence: 0.95,
        }
    }
}

/// A shape with the beam taken off, sky units and degrees.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct DeconvolvedShape {
    /// FWHM of the major axis; upper limit where it is below the resolution limit.
    pub major: Measurement,
    /// FWHM of the minor axis; upper limit where it is below the resolution limit.
    pub minor: Measurement,
    /// Position angle of the major axis, [0, 180); missing where that is not resolved.
    pub position_angle_deg: Measurement,
}

/// A fitted elliptical Gaussian.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Component {
    /// Centre on the map.
    pub pixel: Pixel,
    /// 1σ of the centre along each axis (root mean square of both), sky units.
    pub position_sigma: f64,
    /// Peak, map unit.
    pub peak: f64,
    /// 1σ of the peak from noise, map unit.
    pub peak_sigma: f64,
    /// Peak over the local rms: how high it stands, whatever it is blended with.
    pub signal_to_noise: f64,
    /// Integral, map unit × pixels: peak · π/(4 ln 2) · major · minor / pixel area.
    pub flux: f64,
    /// 1σ of the integral from noise, map unit × pixels.
    pub flux_sigma: f64,
    /// FWHM of the major axis as fitted and its 1σ, sky units.
    pub major: (f64, f64),
    /// FWHM of the minor axis as fitted and its 1σ, sky units.
    pub minor: (f64, f64),
    /// Position angle of the major axis as fitted, undirected, [0, 180).
    pub pa_deg: f64,
    /// Its 1σ, at most 90° (a round component).
    pub pa_sigma_deg: f64,
    /// The shape with the beam taken off.
    pub deconvolved: DeconvolvedShape,
}

/// All components of a source, and how well they describe it.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct FitReport {
    /// Components by falling flux.
    pub components: Vec<Component>,
    /// Root mean square of the residual over the noise, over the fitted pixels.
    pub residual_rms_over_noise: f64,
    /// Evaluations of the model.
    pub evaluations: usize,
    /// Whether the last fit converged.
    pub converged: bool,
    /// Whether a significant residual was left because the number of components or of
    /// evaluations was used up.
    pub truncated: bool,
}

/// Fits components to the source's own pixels, grown by half a beam.
///
/// `peaks` are the local maxima of the source, brightest first, in map pixels. Nothing is
/// returned where the source has fewer usable pixels than one component has parameters.
pub fn fit_components(
    window: &Window,
    peaks: &[Peak],
    beam: &Beam,
    frame: &LocalFrame,
    (noise, correlation): (&Noise, &NoiseCorrelation),
    settings: &ComponentSettings,
) -> FitReport {
    let Some(pixels) = Pixels::of(window, beam, frame, correlation) else {
        return FitReport::default();
    };
    let limits = Limits {
        narrowest: settings.least_width_beams,
        widest: pixels.extent().max(1.5),
        evaluations: settings.evaluations_per_fit.min(SEARCH_EVALUATIONS),
        precision: 1e-2,
    };
    // A source of very many pixels gets fewer evaluations, at least those of its first fit.
    let budget = settings.evaluations.min(MOST_PIXEL_EVALUATIONS / pixels.value.len().max(1));
    let mut search = Search { pixels: &pixels, limits, settings, budget, spent: 0 };
    let starts = starts(window, peaks, &pixels, settings);
    let Some((fit, truncated)) = search.run(starts) else {
        return FitReport { evaluations: search.spent, ..FitReport::default() };
    };
    let last = Limits { evaluations: settings.evaluations_per_fit, precision: 1e-4, ..limits };
    let fit = search.polished(fit, &last);
    // Where the Gaussians do not describe the source, what is left counts as noise of the same
    // correlation (common practice: errors times the square root of the reduced χ²).
    let misfit = pixels.residual_over_noise(&fit.residual);
    let excess = misfit.powi(2).max(1.0);
    let covariances = covariance(&pixels, &fit, correlation).map(|mut list| {
        list.iter_mut().flatten().flatten().for_each(|value| *value *= excess);
        list
    });
    let mut components: Vec<Component> = fit
        .gaussians
        .iter()
        .enumerate()
        .filter_map(|(k, gaussian)| {
            let covariance = covariances.as_ref().and_then(|list| list.get(k));
            component(gaussian, covariance, &pixels, beam, frame, noise, settings)
        })
        .collect();
    components.sort_by(|a, b| b.flux.total_cmp(&a.flux));
    FitReport {
        components,
        residual_rms_over_noise: misfit,
        evaluations: search.spent,
        converged: fit.converged,
        truncated,
    }
}

/// Distance between the two outermost components that are features of the source, its 1σ
/// and their indices. A feature stands 5 rms above the noise, holds at least 3 % of the flux of
/// the brightest component and reaches a twentieth of the highest peak (own thresholds, set
/// on real survey maps); both are compared with the second largest where there are three or
/// more, so that one dominant core does not outshine all others. With fewer than two: `None`.
pub fn outermost_separation(
    components: &[Component],
    frame: &LocalFrame,
) -> Option<(f64, f64, (usize, usize))> {
    let reference = |of: fn(&Component) -> f64| {
        let (first, second) = components
            .iter()
            .map(of)
            .fold((0.0, 0.0), |(a, b), v| if v > a { (v, a) } else { (a, f64::max(b, v)) });
        if components.len() > 2 { second } else { first }
    };
    let (most, highest) = (reference(|c| c.flux), reference(|c| c.peak));
    let features: Vec<usize> = (0..components.len())
        .filter(|&k| {
            components.get(k).is_some_and(|c| {
                c.signal_to_noise >= FEATURE_SIGMA
                    && c.flux >= FEATURE_FLUX * most
                    && c.peak >= FEATURE_PEAK * highest
            })
        })
        .collect();
    let mut best: Option<(f64, f64, (usize, usize))> = None;
    for (n, &i) in features.iter().enumerate() {
        for &j in features.iter().skip(n + 1) {
            let (Some(a), Some(b)) = (components.get(i), components.get(j)) else { continue };
            let separation = frame.separation(a.pixel, b.pixel);
            if best.is_none_or(|(most, ..)| separation > most) {
                best = Some((separation, a.position_sigma.hypot(b.position_sigma), (i, j)));
            }
        }
    }
    best.filter(|(separation, sigma, _)| separation.is_finite() && sigma.is_finite())
}

/// Peak over the rms of a feature.
const FEATURE_SIGMA: f64 = 5.0;
/// Flux of a feature over that of the brightest component.
const FEATURE_FLUX: f64 = 0.03;
/// Peak of a feature over the highest one: the middle of a faint halo is no feature.
const FEATURE_PEAK: f64 = 0.05;
/// Most evaluations times pixels for one source.
const MOST_PIXEL_EVALUATIONS: usize = 1_000_000;
/// Evaluations of one fit while the number of components is searched for.
const SEARCH_EVALUATIONS: usize = 20;
/// A local maximum starts a component where the brightness falls by this many rms towards
/// every brighter one.
const PROMINENCE_SIGMA: f64 = 3.0;
/// Most residuals of one fit that are tried as a further component.
const MOST_RESIDUALS: usize = 6;
/// Peak below which a fitted component is dropped, in rms.
const LEAST_PEAK_SIGMA: f64 = 2.0;
/// Two components of like size closer than this, in beams, are one.
const DUPLICATE_BEAMS: f64 = 0.35;

/// A beam-shaped component on every prominent local maximum, or on the brightest pixel.
fn starts(
    window: &Window,
    peaks: &[Peak],
    pixels: &Pixels,
    settings: &ComponentSettings,
) -> Vec<Gaussian> {
    let mut kept: Vec<(Pixel, Gaussian)> = Vec::new();
    let mut sorted: Vec<&Peak> = peaks
        .iter()
        .filter(|p| {
            p.pixel.x.is_finite()
                && p.pixel.y.is_finite()
                && p.value.is_finite()
                && p.value > 0.0
                && p.signal_to_noise >= settings.detection_sigma
        })
        .collect();
    sorted.sort_by(|a, b| b.value.total_cmp(&a.value));
    for peak in sorted {
        if kept.len() >= settings.most_components {
            break;
        }
        let at = pixels.beams(peak.pixel);
        let needed = PROMINENCE_SIGMA * window.rms_at(peak.pixel).unwrap_or(0.0);
        let stands = kept.iter().all(|(pixel, other)| {
            let steps = ((pixel.distance_px(peak.pixel) / 0.7).ceil() as usize).clamp(2, 500);
            let lowest = (1..steps)
                .filter_map(|k| {
                    let t = k as f64 / steps as f64;
                    window.bilinear(Pixel::new(
                        pixel.x + t * (peak.pixel.x - pixel.x),
                        pixel.y + t * (peak.pixel.y - pixel.y),
                    ))
                })
                .fold(f64::INFINITY, f64::min);
            let apart = (at[0] - other.centre[0]).hypot(at[1] - other.centre[1]);
            apart >= settings.separation_beams && peak.value - lowest >= needed
        });
        if stands && pixels.holds(at) {
            kept.push((peak.pixel, Gaussian::beam_shaped(peak.value, at, 1.1)));
        }
    }
    if kept.is_empty()
        && let Some((value, at)) = pixels.brightest()
    {
        return vec![Gaussian::beam_shaped(value, at, 1.1)];
    }
    kept.into_iter().map(|(_, gaussian)| gaussian).collect()
}

/// The search for the number of components.
struct Search<'a> {
    pixels: &'a Pixels,
    limits: Limits,
    settings: &'a ComponentSettings,
    /// Most evaluations of the search.
    budget: usize,
    spent: usize,
}

impl Search<'_> {
    /// The best fit found, and whether something significant had to be left.
    fn run(&mut self, starts: Vec<Gaussian>) -> Option<(Fit, bool)> {
        let mut best = self.fit_and_prune(starts)?;
        let mut whole = Vec::new();
        let mut truncated = false;
        // Where the residual of this very fit was tried already.
        let mut tried: Vec<[f64; 2]> = Vec::new();
        while self.can_gain(&best) {
            let residual =
                self.pixels.highest_residual(&best.residual, self.settings.model_error, &tried);
            let significant =
                residual.filter(|found| found.significance > self.settings.detection_sigma);
            if best.gaussians.len() >= self.settings.most_components || self.spent >= self.budget {
                truncated = significant.is_some();
                break;
            }
            let mut trials = Vec::new();
            if let Some(found) = significant.filter(|_| tried.len() < MOST_RESIDUALS) {
                tried.push(found.at);
                let new = Gaussian::beam_shaped(found.amplitude, found.at, 1.1);
                trials.push((best.gaussians.clone(), vec![new], Some(found.at)));
            }
            if let Some(k) = self.longest(&best, &whole) {
                whole.extend(best.gaussians.get(k).copied());
                let mut others = best.gaussians.clone();
                let two = split(&others.remove(k));
                trials.push((others, two, None));
            }
            if trials.is_empty() {
                break;
            }
            for (others, new, place) in trials {
                // Only what lies near the new ones moves with them.
                let (mut free, held): (Vec<Gaussian>, Vec<Gaussian>) =
                    others.into_iter().partition(|g| new.iter().any(|n| g.is_near(n)));
                free.extend(new);
                if let Some(fit) = self.fit_beside(&held, free)
                    && self.gain(&best, &fit, place) > self.settings.least_gain
                {
                    best = fit;
                    tried.clear();
                    break;
                }
            }
        }
        Some((best, truncated))
    }

    /// The brightest elongated component that was not yet tried as two.
    fn longest(&self, fit: &Fit, whole: &[Gaussian]) -> Option<usize> {
        let tried = |g: &Gaussian| {
            whole.iter().any(|w| {
                let moved = (w.centre[0] - g.centre[0]).hypot(w.centre[1] - g.centre[1]);
                moved < 0.1 && (w.longest() / g.longest() - 1.0).abs() < 0.1
            })
        };
        (0..fit.gaussians.len())
            .filter(|&k| {
                fit.gaussians.get(k).is_some_and(|g| {
                    g.longest() > self.settings.split_beams
                        && g.amplitude > self.settings.detection_sigma * self.pixels.rms
                        && !tried(g)
                })
            })
            .max_by(|&a, &b| {
                let flux = |k: usize| fit.gaussians.get(k).map_or(0.0, Gaussian::volume);
                flux(a).total_cmp(&flux(b))
            })
    }

    /// The fit brought to the minimum; itself where a component would be lost there.
    fn polished(&mut self, fit: Fit, limits: &Limits) -> Fit {
        let Some(last) = minimise(self.pixels, &self.pixels.value, fit.gaussians.clone(), limits)
        else {
            return fit;
        };
        self.spent += last.evaluations;
        if self.pruned(&last.gaussians).len() == last.gaussians.len() { last } else { fit }
    }

    /// Whether a perfect fit would gain enough.
    fn can_gain(&self, fit: &Fit) -> bool {
        let independent = self.pixels.independent();
        let chi = self.pixels.chi_squared(&fit.residual, self.settings.model_error);
        chi - 0.5 * independent > 6.0 * independent.ln().max(1.0) + self.settings.least_gain
    }

    /// What the second fit gains: (χ²₁ − χ²₂)/max(1, χ²₂/N) − (p₂ − p₁) ln N. A component that
    /// stands at a place of its own is judged by the reduced χ² near it: what is not yet
    /// described elsewhere says nothing of it. Two halves of one are judged by that of the
    /// whole source (no place).
    fn gain(&self, first: &Fit, second: &Fit, place: Option<[f64; 2]>) -> f64 {
        let model_error = self.settings.model_error;
        let chi = |fit: &Fit| self.pixels.chi_squared(&fit.residual, model_error);
        let reduced = self.pixels.reduced_near(&second.residual, model_error, place);
        let independent = self.pixels.independent();
        let more = second.gaussians.len() as f64 - first.gaussians.len() as f64;
        (chi(first) - chi(second)) / reduced.max(1.0) - 6.0 * more * independent.ln().max(1.0)
    }

    /// Fits, drops what is no component, and fits again until nothing is dropped.
    fn fit_and_prune(&mut self, gaussians: Vec<Gaussian>) -> Option<Fit> {
        self.fit_beside(&[], gaussians)
    }

    /// The same beside Gaussians that are held; the fit holds all.
    fn fit_beside(&mut self, held: &[Gaussian], mut gaussians: Vec<Gaussian>) -> Option<Fit> {
        let target = without(self.pixels, held);
        for _ in 0..4 {
            if gaussians.is_empty() {
                return None;
            }
            let mut fit = minimise(self.pixels, &target, gaussians, &self.limits)?;
            self.spent += fit.evaluations;
            let kept = self.pruned(&fit.gaussians);
            if kept.len() == fit.gaussians.len() {
                fit.gaussians.extend_from_slice(held);
                return Some(fit);
            }
            gaussians = kept;
        }
        None
    }

    /// The components without faint ones, those outside the source, and duplicates.
    fn pruned(&self, gaussians: &[Gaussian]) -> Vec<Gaussian> {
        let mut sorted: Vec<Gaussian> = gaussians
            .iter()
            .filter(|g| {
                g.is_finite()
                    && g.amplitude > LEAST_PEAK_SIGMA * self.pixels.rms
                    && self.pixels.holds(g.centre)
            })
            .copied()
            .collect();
        sorted.sort_by(|a, b| b.amplitude.total_cmp(&a.amplitude));
        let mut kept: Vec<Gaussian> = Vec::new();
        for g in sorted {
            let twin = kept.iter().any(|other| {
                let apart = (g.centre[0] - other.centre[0]).hypot(g.centre[1] - other.centre[1]);
                let ratio = g.volume() / g.amplitude / (other.volume() / other.amplitude);
                apart < DUPLICATE_BEAMS && (0.5..2.0).contains(&ratio)
            });
            if !twin {
                kept.push(g);
            }
        }
        kept
    }
}

/// Two equal beam-shaped components along a component's major axis with its integral and its
/// second moment.
fn split(g: &Gaussian) -> Vec<Gaussian> {
    let axes = g.axes();
    let excess = (g.longest().powi(2) - 1.0).max(0.1).sqrt();
    // Two equal points at ±h add h² to the variance, FWHM² = 8 ln 2 · variance.
    let half = excess / crate::constants::FWHM_PER_SIGMA;
    let width = (1.0 / axes.narrow).max(1.05);
    let amplitude = 0.5 * g.volume() / (width * width);
    [half, -half]
        .into_iter()
        .map(|h| {
            let at = [g.centre[0] + h * axes.long[0], g.centre[1] + h * axes.long[1]];
            Gaussian::beam_shaped(amplitude, at, width)
        })
        .collect()
}

/// A Gaussian in beams as a component on the sky, with its errors.
fn component(
    gaussian: &Gaussian,
    covariance: Option<&[[f64; 6]; 6]>,
    pixels: &Pixels,
    beam: &Beam,
    frame: &LocalFrame,
    noise: &Noise,
    settings: &ComponentSettings,
) -> Option<Component> {
    let pixel = pixels.map_pixel(gaussian.centre);
    let rms = noise.rms(pixel.x, pixel.y);
    let area_per_pixel = beam.solid_angle() / frame.mean_scale().powi(2);
    let flux = gaussian.volume() * area_per_pixel;
    let axes = gaussian.axes();
    let shape = sky_shape(gaussian, beam);
    let signal = (gaussian.amplitude / rms.max(f64::MIN_POSITIVE)).max(1.0);
    let propagated = |gradient: [f64; 6]| {
        covariance.map(|c| {
            let sum: f64 = (0..6)
                .flat_map(|i| (0..6).map(move |j| (i, j)))
                .map(|(i, j)| gradient[i] * c[i][j] * gradient[j])
                .sum();
            sum.max(0.0).sqrt()
        })
    };
    // Derivatives of the shape on the sky with respect to the three shape parameters, by
    // central differences: the functions are smooth on the scale of the step.
    let mut slopes = [[0.0; 6]; 3];
    for (index, scale) in [(3, axes.narrow), (4, axes.wide), (5, axes.wide)] {
        let step = 1e-4 * scale;
        let shifted = |sign: f64| {
            let mut change = [0.0; 6];
            change[index] = sign * step;
            sky_shape(&gaussian.changed(change), beam)
        };
        let (up, down) = (shifted(1.0), shifted(-1.0));
        slopes[0][index] = (up.0 - down.0) / (2.0 * step);
        slopes[1][index] = (up.1 - down.1) / (2.0 * step);
        let turn = crate::units::wrap_difference_deg(2.0 * (up.2 - down.2)) / 2.0;
        slopes[2][index] = turn / (2.0 * step);
    }
    // Where the normal equations cannot be inverted: a point source of the same peak.
    let relative = 1.22 / signal;
    let peak_sigma = propagated([1.0, 0.0, 0.0, 0.0, 0.0, 0.0]).unwrap_or(rms);
    let flux_slope =
        [flux / gaussian.amplitude, 0.0, 0.0, -flux / axes.narrow, -flux / axes.wide, 0.0];
    let flux_sigma = propagated(flux_slope).unwrap_or(2.24 * flux / signal);
    let position_sigma = covariance.map_or(0.6 * shape.0 / signal, |c| {
        let along = |v: [f64; 2]| {
            // Beams along the beam's axes to sky units.
            (v[0] * beam.major).powi(2) + (v[1] * beam.minor).powi(2)
        };
        let cross = axes.short[0] * axes.long[0] * beam.major.powi(2)
            + axes.short[1] * axes.long[1] * beam.minor.powi(2);
        let sum = c[1][1] * along(axes.short) + c[2][2] * along(axes.long) + 2.0 * c[1][2] * cross;
        (0.5 * sum.max(0.0)).sqrt()
    });
    let major = (shape.0, propagated(slopes[0]).unwrap_or(relative * shape.0));
    let minor = (shape.1, propagated(slopes[1]).unwrap_or(relative * shape.1));
    let pa_sigma_deg = propagated(slopes[2]).unwrap_or(90.0).min(90.0);
    let out = Component {
        pixel,
        position_sigma,
        peak: gaussian.amplitude,
        peak_sigma,
        signal_to_noise: gaussian.amplitude / rms.max(f64::MIN_POSITIVE),
        flux,
        flux_sigma,
        major,
        minor,
        pa_deg: shape.2,
        pa_sigma_deg,
        deconvolved: deconvolve(beam, (major, minor), (shape.2, pa_sigma_deg), signal, settings),
    };
    let finite = [
        pixel.x,
        pixel.y,
        position_sigma,
        out.peak,
        peak_sigma,
        flux,
        flux_sigma,
        major.0,
        major.1,
        minor.0,
        minor.1,
        shape.2,
        pa_sigma_deg,
    ];
    finite.iter().all(|v| v.is_finite()).then_some(out)
}

/// Major and minor FWHM in sky units and position angle of a Gaussian given in beams.
fn sky_shape(gaussian: &Gaussian, beam: &Beam) -> (f64, f64, f64) {
    let axes = gaussian.axes();
    let along = SkyOffset::polar(1.0, beam.pa_deg);
    let across = SkyOffset::polar(1.0, beam.pa_deg + 90.0);
    let on_sky = |v: [f64; 2], length: f64| {
        along.times(length * v[0] * beam.major).plus(across.times(length * v[1] * beam.minor))
    };
    // Two conjugate half-diameters: second moments are the sum of their outer products.
    let a = on_sky(axes.short, 1.0 / axes.narrow);
    let b = on_sky(axes.long, 1.0 / axes.wide);
    let east = a.east * a.east + b.east * b.east;
    let north = a.north * a.north + b.north * b.north;
    let mixed = a.east * a.north + b.east * b.north;
    let (mean, half) = (0.5 * (east + north), (0.5 * (north - east)).hypot(mixed));
    let angle = 0.5 * (2.0 * mixed).atan2(north - east).to_degrees();
    (
        (mean + half).max(0.0).sqrt(),
        (mean - half).max(0.0).sqrt(),
        crate::units::wrap_undirected_deg(angle),
    )
}

/// The shape with the beam taken off: upper limits where an axis is below the resolution
/// limit of its direction.
fn deconvolve(
    beam: &Beam,
    (major, minor): ((f64, f64), (f64, f64)),
    (pa_deg, pa_sigma_deg): (f64, f64),
    signal: f64,
    settings: &ComponentSettings,
) -> DeconvolvedShape {
    let found = beam.deconvolve((major.0, minor.0, pa_deg));
    let z = normal_deviate(settings.confidence);
    let axis = |axis: Axis, fitted: (f64, f64), direction_deg: f64| {
        let width = beam.reach_along(direction_deg);
        let limit = resolution_limit(width, signal);
        // From d² = fitted² − beam²: δd = fitted δfitted / d.
        match axis {
            Axis::Resolved(size) if size > limit && size > fitted.0 * fitted.1 / size * z => {
                Measurement::symmetric(size, fitted.0 * fitted.1 / size)
            }
            other => {
                let squared = other.width().unwrap_or(0.0).powi(2) + 2.0 * z * fitted.0 * fitted.1;
                Measurement::upper_limit(limit.max(squared.max(0.0).sqrt()), settings.confidence)
            }
        }
    };
    let direction = found.pa_deg.unwrap_or(pa_deg);
    let long = axis(found.major, major, direction);
    let short = axis(found.minor, minor, direction + 90.0);
    let position_angle_deg = match (long.best(), found.pa_deg) {
        (Some(size), Some(pa)) => {
            // The beam's roundness leaves a smaller elongation: the angle is known worse.
            let elongation = major.0.powi(2) - minor.0.powi(2);
            let own = size.powi(2) - found.minor.width().map_or(0.0, |m| m * m);
            let factor = if own > 0.0 { (elongation / own).max(1.0) } else { 1.0 };
            Measurement::symmetric(pa, (pa_sigma_deg * factor).min(90.0))
        }
        _ => Measurement::missing(Because::Unresolved),
    };
    DeconvolvedShape { major: long, minor: short, position_angle_deg }
}
