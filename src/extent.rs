//! Sizes on the sky: largest extent, length of each side, width across, and what the beam
//! adds to them.

use crate::edge::{OutlinePoint, Wander, wander_of_outline};
use crate::map::beam::Beam;
use crate::map::geometry::LocalFrame;
use crate::measurement::Measurement;
use crate::stats::normal_deviate;
use crate::units::{Pixel, SkyOffset};
use crate::window::Window;

/// One end of an extent.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct End {
    /// Where the contour's point is.
    pub pixel: Pixel,
    /// Half the distance by which the beam alone carries the contour beyond an unresolved
    /// feature as bright as the one nearest to this end.
    pub reach: f64,
    /// How unsure that is: another feature as near would give another reach.
    pub reach_sigma: f64,
    /// How noise moves the contour's outermost point there.
    pub wander: Wander,
}

/// An extent between two ends of a contour.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Extent {
    /// Distance between the ends as the contour has them, sky units.
    pub raw_length: f64,
    /// Directed position angle from the first to the second end.
    pub direction_deg: f64,
    /// The ends.
    pub ends: [End; 2],
}

/// What an extent is measured on.
#[derive(Clone, Copy)]
pub struct Outline<'a> {
    /// The map around the source.
    pub window: &'a Window,
    /// Any local frame of it.
    pub frame: &'a LocalFrame,
    /// The beam.
    pub beam: &'a Beam,
    /// Level of the contour, map unit.
    pub level: f64,
    /// Points of the contour.
    pub contour: &'a [Pixel],
    /// The source's local maxima with their brightness.
    pub peaks: &'a [(Pixel, f64)],
}

/// Distance from an unresolved feature of brightness `peak` to the contour at `level`, for a
/// beam of width `fwhm` along the direction: ½ b √log₂(S/contour), where a Gaussian beam has
/// fallen to the level. Zero where the peak does not reach the level.
pub fn beam_reach(peak: f64, level: f64, fwhm: f64) -> f64 {
    if level > 0.0 && peak > level { 0.5 * fwhm * (peak / level).log2().sqrt() } else { 0.0 }
}

/// Smallest size that can be told from a point along an axis: b √[(4 ln 2/π) ln(S/N/(S/N − 1))]
/// (Lobanov 2005, astro-ph/0503225; Kovalev et al. 2005, AJ 130, 2473; from memory).
pub fn resolution_limit(fwhm: f64, signal_to_noise: f64) -> f64 {
    let snr = signal_to_noise.max(1.5);
    fwhm * (4.0 * std::f64::consts::LN_2 / std::f64::consts::PI * (snr / (snr - 1.0)).ln()).sqrt()
}

/// 1σ per axis of a point's position from noise alone: 0.60 FWHM over S/N, the linear error
/// of an unweighted fit in noise smoothed by the beam.
pub fn position_sigma(beam_fwhm: f64, signal_to_noise: f64) -> f64 {
    0.60 * beam_fwhm / signal_to_noise.max(1.0)
}

/// 1σ of a local maximum's place along a direction: where the noise's gradient (1.67 rms over
/// the beam's FWHM, for noise smoothed by the beam) cancels that of the brightness, which grows
/// with distance as the curvature seen on the map. At most a beam.
pub fn maximum_sigma(
    window: &Window,
    frame: &LocalFrame,
    beam: &Beam,
    pixel: Pixel,
    pa_deg: f64,
) -> f64 {
    let width = beam.reach_along(pa_deg);
    let step = SkyOffset::polar(0.4 * width, pa_deg);
    let at = |factor: f64| window.bilinear(frame.moved(pixel, step.times(factor)));
    let (Some(before), Some(top), Some(after)) = (at(-1.0), at(0.0), at(1.0)) else {
        return beam.major;
    };
    let rms = window.rms_at(pixel).unwrap_or(0.0);
    let curvature = (2.0 * top - before - after).max(f64::MIN_POSITIVE) / step.dot(step);
    let gradient = (4.0 * std::f64::consts::LN_2).sqrt() * rms / width;
    (gradient / curvature).min(beam.major)
}

/// Points of the contour farther than this many beams from an end do not become the end.
const NEAR_BEAMS: f64 = 3.0;

impl Outline<'_> {
    /// The extent between two points of the contour, whose distance is the largest.
    pub fn between(&self, points: [Pixel; 2]) -> Extent {
        let chord = self.frame.difference(points[0], points[1]);
        let (length, pa_deg) = (chord.radius(), chord.position_angle_deg());
        self.extent(points, length, pa_deg, |k, p| self.frame.separation(points[1 - k], p) - length)
    }

    /// The extent along a direction between the two points that lie farthest out in it.
    pub fn along(&self, points: [Pixel; 2], pa_deg: f64) -> Extent {
        let unit = SkyOffset::polar(1.0, pa_deg);
        let chord = self.frame.difference(points[0], points[1]).dot(unit);
        let unit = unit.times(if chord < 0.0 { -1.0 } else { 1.0 });
        let outward = [unit.times(-1.0), unit];
        self.extent(points, chord.abs(), unit.position_angle_deg(), |k, p| {
            self.frame.difference(points[k], p).dot(outward[k])
        })
    }

    /// `behind`: how far out a point lies against end k.
    fn extent(
        &self,
        points: [Pixel; 2],
        raw_length: f64,
        direction_deg: f64,
        behind: impl Fn(usize, Pixel) -> f64,
    ) -> Extent {
        let fwhm = self.beam.reach_along(direction_deg);
        let ends = [0, 1].map(|k| {
            let pixel = points[k];
            let (reach, reach_sigma) = self.reach(pixel, fwhm);
            let outward_deg = direction_deg + if k == 0 { 180.0 } else { 0.0 };
            let wander = self.wander(pixel, outward_deg, |p| behind(k, p));
            End { pixel, reach, reach_sigma, wander }
        });
        Extent { raw_length, direction_deg, ends }
    }

    /// The beam's reach at an end, from the feature nearest to it. How unsure it is follows from
    /// the second nearest, which counts the more the less farther it is, in beams.
    fn reach(&self, end: Pixel, fwhm: f64) -> (f64, f64) {
        let mut near: Vec<(f64, f64)> =
            self.peaks.iter().map(|p| (self.frame.separation(p.0, end), p.1)).collect();
        near.sort_by(|a, b| a.0.total_cmp(&b.0));
        let of = |peak: f64| beam_reach(peak, self.level, fwhm);
        match near.as_slice() {
            [] => (0.0, 0.0),
            [only] => (of(only.1), 0.0),
            [first, second, ..] => {
                let farther = (second.0 - first.0) / self.beam.mean_fwhm();
                let share = 0.5 * (-farther * farther).exp();
                (of(first.1), (share * (1.0 - share)).sqrt() * (of(first.1) - of(second.1)).abs())
            }
        }
    }

    /// How noise moves the outermost point of the contour near one of its points.
    fn wander(&self, end: Pixel, outward_deg: f64, behind: impl Fn(Pixel) -> f64) -> Wander {
        let unit = SkyOffset::polar(1.0, outward_deg);
        let across = SkyOffset::polar(1.0, outward_deg + 90.0);
        let width = self.beam.projected_fwhm(outward_deg);
        let near = NEAR_BEAMS * width.max(self.beam.minor);
        let rms = self.window.rms_at(end).unwrap_or(0.0);
        let points: Vec<OutlinePoint> = self
            .contour
            .iter()
            .filter_map(|&p| {
                let offset = self.frame.difference(end, p);
                let aside = offset.dot(across);
                if aside.abs() > near || offset.dot(unit).abs() > near {
                    return None;
                }
                let (slope, change) = self.fading(p, unit)?;
                let reach = behind(p).min(0.0);
                Some(OutlinePoint { reach, aside: aside / width, slope, change })
            })
            .collect();
        wander_of_outline(&points, rms / self.level.max(f64::MIN_POSITIVE))
    }

    /// How the brightness falls outwards at a point of the contour: slope of its logarithm
    /// and half its change, from the distances inwards at which it has doubled and doubled
    /// again: far enough that noise does not make the slope. `None` where it does not fall.
    fn fading(&self, at: Pixel, unit: SkyOffset) -> Option<(f64, f64)> {
        let beam = self.beam.minor;
        let inside = |direction: SkyOffset, distance: f64| {
            self.window.bilinear(self.frame.moved(at, direction.times(-distance)))
        };
        let drop = |direction: SkyOffset| {
            Some(inside(direction, 0.5 * beam)? - inside(direction, -0.5 * beam)?)
        };
        let (outward, aside) =
            (drop(unit)?, drop(SkyOffset::new(-unit.north, unit.east)).unwrap_or(0.0));
        if outward <= 0.0 {
            return None;
        }
        // The contour moves along its normal; only the share along the extent counts.
        let cosine = outward / outward.hypot(aside);
        let normal = SkyOffset::new(
            unit.east * outward - unit.north * aside,
            unit.north * outward + unit.east * aside,
        );
        let normal = normal.times(1.0 / normal.radius());
        let step = 0.125 * beam;
        let (mut doubled, mut highest) = ([None; 2], (self.level, 0.0));
        let mut before = self.level;
        for k in 1..=MOST_STEPS {
            let distance = f64::from(k) * step;
            let Some(value) = inside(normal, distance) else { break };
            for (found, factor) in doubled.iter_mut().zip([2.0, 4.0]) {
                let wanted = factor * self.level;
                if found.is_none() && value >= wanted {
                    let back = step * (value - wanted) / (value - before).max(f64::MIN_POSITIVE);
                    *found = Some(distance - back.min(step));
                }
            }
            if value > highest.0 {
                highest = (value, distance);
            }
            before = value;
            if doubled[1].is_some() {
                break;
            }
        }
        let two = std::f64::consts::LN_2;
        let least = 0.5 / self.beam.major;
        let (slope, change) = match doubled {
            [Some(d), Some(e)] if e > d => {
                let slope = two * (e * e - 2.0 * d * d) / (d * e * (e - d));
                let change = (slope * d - two) / (d * d);
                // A profile that flattens outwards counts as straight.
                if change > 0.0 { (slope, change) } else { (two / d, 0.0) }
            }
            [Some(d), _] => (two / d, 0.0),
            _ if highest.1 > 0.0 => ((highest.0 / self.level).ln() / highest.1, 0.0),
            _ => (least, 0.0),
        };
        Some((slope.max(least) / cosine, change / (cosine * cosine)))
    }
}

/// Steps of an eighth of a beam inwards over which the brightness is looked at: four beams.
const MOST_STEPS: u32 = 32;

impl Extent {
    /// The length without what noise has carried its ends out.
    pub fn length(&self) -> f64 {
        (self.raw_length - self.ends[0].wander.bias - self.ends[1].wander.bias).max(0.0)
    }

    /// 1σ of the length downwards and upwards.
    pub fn sigma(&self) -> (f64, f64) {
        let [a, b] = self.ends.map(|end| end.wander);
        (a.minus.hypot(b.minus), a.plus.hypot(b.plus))
    }

    /// A length of this extent with its intervals, and one more error in quadrature.
    fn with_errors(&self, value: f64, more: f64) -> Measurement {
        let (minus, plus) = self.sigma();
        let [a, b] = self.ends.map(|end| end.wander);
        let (low, high) = (a.minus95.hypot(b.minus95), a.plus95.hypot(b.plus95));
        Measurement::value(value, minus.hypot(more), plus.hypot(more))
            .with_ci95(value - low.hypot(1.96 * more), value + high.hypot(1.96 * more))
    }

    /// The length with its error; a lower limit where the contour is cut off.
    pub fn size(&self, cut_off: bool, confidence: f64) -> Measurement {
        if cut_off {
            let least = self.length() - normal_deviate(confidence) * self.sigma().0;
            Measurement::lower_limit(least, confidence)
        } else {
            self.with_errors(self.length(), 0.0)
        }
    }

    /// The length with each end moved in by the beam's reach there; an upper limit where what
    /// is left cannot be told from a point.
    pub fn deconvolved(
        &self,
        cut_off: bool,
        resolution: f64,
        confidence: f64,
        z: f64,
    ) -> Measurement {
        let [a, b] = &self.ends;
        let value = self.length() - a.reach - b.reach;
        let unsure = a.reach_sigma.hypot(b.reach_sigma);
        let (minus, plus) = self.sigma();
        let (minus, plus) = (minus.hypot(unsure), plus.hypot(unsure));
        if cut_off {
            return Measurement::lower_limit((value - z * minus).max(0.0), confidence);
        }
        if value > resolution.max(3.0 * minus) {
            self.with_errors(value, unsure)
        } else {
            Measurement::upper_limit((value.max(0.0) + z * plus).max(resolution), confidence)
        }
    }
}

/// The two points of a list that lie farthest apart across a direction (position angle).
pub fn widest_across(
    points: &[Pixel],
    frame: &LocalFrame,
    direction_deg: f64,
) -> Option<[Pixel; 2]> {
    let across = SkyOffset::polar(1.0, direction_deg + 90.0);
    let key = |p: &Pixel| frame.offset(*p).dot(across);
    let low = points.iter().min_by(|a, b| key(a).total_cmp(&key(b)))?;
    let high = points.iter().max_by(|a, b| key(a).total_cmp(&key(b)))?;
    Some([*low, *high])
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn reach_is_where_the_beam_falls_to_the_level() {
        // A Gaussian of FWHM b is at 2^(−4 r²/b²) of its peak: 1/16 at r = b.
        assert!((beam_reach(16.0, 1.0, 5.0) - 5.0).abs() < 1e-12);
        assert!((beam_reach(2.0, 1.0, 5.0) - 2.5).abs() < 1e-12);
        assert_eq!(beam_reach(0.5, 1.0, 5.0).to_bits(), 0f64.to_bits());
    }

    #[test]
    fn resolution_limit_matches_the_published_form() {
        // Own numbers for the published formula: 0.304 93 b at S/N 10, 0.094 179 b at 100.
        assert!((resolution_limit(1.0, 10.0) - 0.304_93).abs() < 1e-5);
        assert!((resolution_limit(1.0, 100.0) - 0.094_179).abs() < 1e-6);
    }
}
