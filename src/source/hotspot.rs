//! Where a hot spot lies and how bright it is, freed from the pull of the lobe it stands in
//! and of the jet that ends in it.
//!
//! A beam-shaped component with free place is fitted by least squares on a curved base (a
//! polynomial of second degree) within one beam. What the base does not follow pulls the
//! place by an amount that grows with the square of the fit's radius r, so that fits at r = 1
//! and 1.3 beams give the place for r → 0 (Richardson 1911, Phil. Trans. A 210, 307). A second
//! answer comes from a base with a half-line that ends at the component, as a jet does. The
//! place is the mean of the two answers; how far they lie apart, and how far the first
//! depends on the radius, is the error of the model seen on this map.

use crate::map::beam::Beam;
use crate::map::geometry::LocalFrame;
use crate::noise::{ApertureWeights, Noise, NoiseCorrelation};
use crate::source::core_fit::{cells_within, invert_symmetric};
use crate::units::{Pixel, SkyOffset};
use crate::window::Window;

/// Brightness at an offset from the start of a half-line of unit brightness in a direction,
/// through the beam: a Gaussian across, an error function along.
///
/// A line across an elliptical beam is blurred along it by the beam's cut in its direction;
/// that the two are not independent for a tilted beam is left out.
fn half_line(beam: &Beam, offset: SkyOffset, bearing_deg: f64) -> f64 {
    let along = offset.dot(SkyOffset::polar(1.0, bearing_deg));
    let across = offset.dot(SkyOffset::polar(1.0, bearing_deg + 90.0));
    let width = beam.projected_fwhm(bearing_deg);
    let length = beam.reach_along(bearing_deg);
    let profile = (-4.0 * std::f64::consts::LN_2 * (across / width).powi(2)).exp();
    profile * 0.5 * libm::erfc(-2.0 * std::f64::consts::LN_2.sqrt() * along / length)
}

/// A fitted place and brightness.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct SpotFit {
    /// Place on the map.
    pub pixel: Pixel,
    /// Covariance of the place: east-east, east-north, north-north, squared sky units.
    pub covariance: [f64; 3],
    /// Brightness of the map at the place, component and base together, map unit.
    pub brightness: f64,
    /// Its 1σ, map unit.
    pub brightness_sigma: f64,
    /// Brightness of the beam-shaped component alone, map unit.
    pub component: f64,
}

impl SpotFit {
    /// Variance of the place along a position angle, squared sky units.
    pub fn variance_along(&self, pa_deg: f64) -> f64 {
        variance_along(self.covariance, pa_deg)
    }
}

/// Variance along a position angle of a place with covariance (east-east, east-north,
/// north-north).
pub fn variance_along([ee, en, nn]: [f64; 3], pa_deg: f64) -> f64 {
    let u = SkyOffset::polar(1.0, pa_deg);
    (ee * u.east * u.east + 2.0 * en * u.east * u.north + nn * u.north * u.north).max(0.0)
}

/// Radius of the fits in beams, and of the wider one that shows the pull of what lies around.
const REACH_BEAMS: f64 = 1.0;
const WIDE_BEAMS: f64 = 1.3;
/// Share of the shift between the two that is left at radius zero.
const TO_ZERO: f64 =
    REACH_BEAMS * REACH_BEAMS / (WIDE_BEAMS * WIDE_BEAMS - REACH_BEAMS * REACH_BEAMS);
/// A fit that moves farther than this from its local maximum, in beams, has found something
/// else.
const FARTHEST_BEAMS: f64 = 0.75;
/// Most columns: component, half-line, base of six, two derivatives.
const COLUMNS: usize = 10;

/// One least-squares answer: place, brightness there, and the weight of each pixel in them.
struct Answer {
    pixel: Pixel,
    brightness: f64,
    component: f64,
    /// Cell (column, row of the map) with its weights in east, north and brightness.
    weights: Vec<(usize, usize, [f64; 3])>,
}

/// Fits the spot at a local maximum; `jet_deg` is the direction from it back to the core.
/// `None` where too few pixels are usable, or the component vanishes or wanders off.
pub fn fit_spot(
    window: &Window,
    start: Pixel,
    jet_deg: f64,
    beam: &Beam,
    frame: &LocalFrame,
    (noise, correlation): (&Noise, &NoiseCorrelation),
) -> Option<SpotFit> {
    let answer = |reach: f64, jet: Option<f64>| fit_once(window, start, reach, jet, beam, frame);
    let near = answer(REACH_BEAMS, None)?;
    let wide = answer(WIDE_BEAMS, None)?;
    let jetted = answer(REACH_BEAMS, Some(jet_deg));
    let shift = frame.difference(wide.pixel, near.pixel);
    let free = frame.moved(near.pixel, shift.times(TO_ZERO));
    // Without the second answer the first stands alone, unsure by its whole correction.
    let (other, share) = match &jetted {
        Some(jetted) => (frame.difference(free, jetted.pixel), 0.5),
        None => (shift, 0.0),
    };
    let pixel = frame.moved(free, other.times(share));
    let mut terms = vec![
        (&near, (1.0 - share) * (1.0 + TO_ZERO), 1.0 - share),
        (&wide, -(1.0 - share) * TO_ZERO, 0.0),
    ];
    if let Some(jetted) = &jetted {
        terms.push((jetted, share, share));
    }
    let weights = |index: usize| {
        ApertureWeights::from_cells(terms.iter().flat_map(|(answer, place, bright)| {
            let factor = if index == 2 { *bright } else { *place };
            answer.weights.iter().map(move |(x, y, w)| (*x, *y, factor * w[index]))
        }))
    };
    let [east, north, bright] = [weights(0)?, weights(1)?, weights(2)?];
    let variance = |w: &ApertureWeights| correlation.aperture_variance(w, noise).max(0.0);
    let model = |a: f64, b: f64, c: f64, d: f64| 0.5 * (a * b + c * d);
    let covariance = [
        variance(&east) + model(other.east, other.east, shift.east, shift.east),
        correlation.aperture_covariance(&east, &north, noise)
            + model(other.east, other.north, shift.east, shift.north),
        variance(&north) + model(other.north, other.north, shift.north, shift.north),
    ];
    let second = jetted.as_ref().map_or(wide.brightness, |jetted| jetted.brightness);
    let (d, e) = (second - near.brightness, wide.brightness - near.brightness);
    let fit = SpotFit {
        pixel,
        covariance,
        brightness: near.brightness + share * d,
        brightness_sigma: (variance(&bright) + model(d, d, e, e)).sqrt(),
        component: near.component,
    };
    let wanders = frame.separation(start, pixel) > FARTHEST_BEAMS * beam.major;
    let finite = fit.covariance.iter().chain([&fit.brightness]).all(|v| v.is_finite());
    (!wanders && finite).then_some(fit)
}

/// Columns of the design at an offset from the component (`d`) and from the start (`s`),
/// without the derivatives.
fn columns(d: SkyOffset, s: SkyOffset, jet: Option<f64>, beam: &Beam) -> ([f64; COLUMNS], usize) {
    let (x, y) = (s.east / beam.major, s.north / beam.major);
    let base = [beam.profile(d), 1.0, x, y, x * x, x * y, y * y];
    let mut row = [0.0; COLUMNS];
    row[..base.len()].copy_from_slice(&base);
    let Some(jet_deg) = jet else { return (row, base.len()) };
    row[base.len()] = half_line(beam, d, jet_deg);
    (row, base.len() + 1)
}

/// Gauss–Newton on the place, the rest linear.
fn fit_once(
    window: &Window,
    start: Pixel,
    reach_beams: f64,
    jet: Option<f64>,
    beam: &Beam,
    frame: &LocalFrame,
) -> Option<Answer> {
    let reach_px = (reach_beams * beam.major / frame.mean_scale()).max(2.0);
    // Inside an ellipse of the beam's shape: profile at that many beams.
    let edge = (-4.0 * std::f64::consts::LN_2 * reach_beams * reach_beams).exp();
    let cells: Vec<((usize, usize), SkyOffset, f64)> = cells_within(window, start, reach_px)
        .into_iter()
        .map(|(r, c)| ((r, c), frame.difference(start, window.pixel(r, c))))
        .filter(|(_, s)| beam.profile(*s) >= edge)
        .map(|((r, c), s)| ((r, c), s, window.brightness[[r, c]]))
        .collect();
    let mut moved = SkyOffset::default();
    let step = 1e-3 * beam.minor;
    for round in 0..8 {
        let rows: Vec<([f64; COLUMNS], f64)> = cells
            .iter()
            .map(|(_, s, value)| (columns(s.minus(moved), *s, jet, beam).0, *value))
            .collect();
        let count = columns(moved, moved, jet, beam).1;
        if cells.len() < count + 4 {
            return None;
        }
        let (linear, _) = solve(&rows, count)?;
        if linear[0] <= 0.0 {
            return None;
        }
        // Derivatives of component and half-line by the place, by central differences.
        let part = |d: SkyOffset| {
            let line = jet.map_or(0.0, |jet_deg| linear[count - 1] * half_line(beam, d, jet_deg));
            linear[0] * beam.profile(d) + line
        };
        let slope =
            |d: SkyOffset, by: SkyOffset| (part(d.minus(by)) - part(d.plus(by))) / (2.0 * step);
        let full: Vec<([f64; COLUMNS], f64)> = cells
            .iter()
            .zip(&rows)
            .map(|((_, s, _), (row, value))| {
                let d = s.minus(moved);
                let mut row = *row;
                row[count] = slope(d, SkyOffset::new(step, 0.0));
                row[count + 1] = slope(d, SkyOffset::new(0.0, step));
                (row, *value)
            })
            .collect();
        let (fit, inverse) = solve(&full, count + 2)?;
        let shift = SkyOffset::new(fit[count], fit[count + 1]);
        let (size, limit) = (shift.radius(), 0.3 * beam.minor);
        if round < 7 && size > 1e-5 * beam.minor {
            moved = moved.plus(if size > limit { shift.times(limit / size) } else { shift });
            if moved.radius() > beam.major {
                return None;
            }
            continue;
        }
        let (at, used) = columns(SkyOffset::default(), moved, jet, beam);
        let brightness = (0..used).map(|i| at[i] * linear[i]).sum();
        let weights = cells
            .iter()
            .zip(&full)
            .map(|(((r, c), ..), (row, _))| {
                let weight = |index: usize| -> f64 {
                    inverse[index].iter().zip(row).map(|(a, b)| a * b).sum()
                };
                let bright = (0..used).map(|i| at[i] * weight(i)).sum();
                (window.x0 + c, window.y0 + r, [weight(count), weight(count + 1), bright])
            })
            .collect();
        let pixel = frame.moved(start, moved);
        return Some(Answer { pixel, brightness, component: linear[0], weights });
    }
    None
}

/// Least-squares coefficients of the first `count` columns, and the inverse of the normal
/// matrix.
fn solve(rows: &[([f64; COLUMNS], f64)], count: usize) -> Option<([f64; COLUMNS], Vec<Vec<f64>>)> {
    let mut normal = vec![vec![0.0; count]; count];
    let mut right = [0.0; COLUMNS];
    for (row, value) in rows {
        for i in 0..count {
            right[i] += row[i] * value;
            for j in 0..count {
                normal[i][j] += row[i] * row[j];
            }
        }
    }
    let inverse = invert_symmetric(&normal)?;
    let mut out = [0.0; COLUMNS];
    for (value, row) in out.iter_mut().zip(&inverse) {
        *value = row.iter().zip(&right).map(|(a, b)| a * b).sum();
    }
    Some((out, inverse))
}

#[cfg(test)]
mod tests {
    use ndarray::Array2;

    use super::*;
    use crate::map::description::{MapDescription, Rows};
    use crate::map::geometry::SkyGeometry;
    use crate::noise::KernelEllipse;

    const SIZE: usize = 61;

    /// A point of brightness 100 at (30.3, 30.2) px on a lobe of brightness 40 and FWHM 14 px
    /// whose middle lies 5 px beside it, rms 0.1, beam 5 px.
    fn spot_on_lobe() -> (Window, LocalFrame, Beam) {
        let description =
            MapDescription { pixel_scale_arcsec: Some([1.0, 1.0]), ..MapDescription::default() };
        let frame = SkyGeometry::new(SIZE, SIZE, &description, Rows::BottomUp)
            .local_frame(Pixel::new(30.0, 30.0));
        let beam = Beam { major: 5.0, minor: 5.0, pa_deg: 0.0 };
        let lobe = Beam { major: 14.0, minor: 14.0, pa_deg: 0.0 };
        let at = |beam: &Beam, x: f64, y: f64, p: Pixel| {
            beam.profile(frame.difference(Pixel::new(x, y), p))
        };
        let brightness = Array2::from_shape_fn((SIZE, SIZE), |(r, c)| {
            let p = Pixel::new(c as f64, r as f64);
            100.0 * at(&beam, 30.3, 30.2, p) + 40.0 * at(&lobe, 25.3, 30.2, p)
        });
        let window = Window {
            x0: 0,
            y0: 0,
            rms: Array2::from_elem((SIZE, SIZE), 0.1),
            member: Array2::from_elem((SIZE, SIZE), true),
            foreign: Array2::from_elem((SIZE, SIZE), false),
            brightness,
        };
        (window, frame, beam)
    }

    #[test]
    fn the_pull_of_a_lobe_is_taken_off() {
        let (window, frame, beam) = spot_on_lobe();
        // The maximum itself is pulled by slope over curvature: 40 · 0.70 · 2 · 5 · 4 ln 2/14²
        // over 100 · 8 ln 2/5² = 0.18 px.
        let noise = Noise::uniform(SIZE, SIZE, 0.0, 0.1);
        let kernel = KernelEllipse { major_px: 5.0, minor_px: 5.0, angle_deg: 0.0 };
        let correlation = NoiseCorrelation::of_kernel(kernel);
        let fit = fit_spot(
            &window,
            Pixel::new(30.12, 30.2),
            frame.difference(Pixel::new(30.3, 30.2), Pixel::new(20.0, 30.2)).position_angle_deg(),
            &beam,
            &frame,
            (&noise, &correlation),
        )
        .expect("a spot");
        let off = fit.pixel.distance_px(Pixel::new(30.3, 30.2));
        assert!(off < 0.03, "{off}");
        // 100 and the lobe's 40 · 2^(−4 · 25/196) = 28.1.
        assert!((fit.brightness / 128.1 - 1.0).abs() < 0.01, "{}", fit.brightness);
        // What is left lies within three of its errors, and those are less than half of the pull.
        let sigma = fit.variance_along(90.0).sqrt();
        assert!(off < 3.0 * sigma && sigma < 0.08, "{off} {sigma}");
    }

    #[test]
    fn nothing_is_fitted_on_a_plane() {
        let (mut window, frame, beam) = spot_on_lobe();
        window.brightness = Array2::from_shape_fn((SIZE, SIZE), |(_, c)| 3.0 + 0.1 * c as f64);
        let noise = Noise::uniform(SIZE, SIZE, 0.0, 0.1);
        let white = (&noise, &NoiseCorrelation::white());
        let fit = fit_spot(&window, Pixel::new(30.0, 30.0), 0.0, &beam, &frame, white);
        assert!(fit.is_none_or(|spot| spot.component < 1e-6));
    }
}
