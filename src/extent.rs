//! Sizes on the sky: largest extent, length of each side, width across, and what the beam
//! adds to them.

use crate::map::beam::Beam;
use crate::map::geometry::LocalFrame;
use crate::measurement::Measurement;
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
    /// 1σ by which noise moves the contour along the extent.
    pub sigma: f64,
}

/// An extent between two ends of a contour.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Extent {
    /// Distance between the ends, sky units.
    pub length: f64,
    /// Directed position angle from the first to the second end.
    pub direction_deg: f64,
    /// The ends.
    pub ends: [End; 2],
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

/// 1σ per axis of a peak's position in extended emission: noise, and a twentieth of the beam
/// for the slope it stands on, which moves a maximum whatever its S/N (a floor of up to a
/// tenth of the beam is common practice).
pub fn feature_sigma(beam_fwhm: f64, signal_to_noise: f64) -> f64 {
    position_sigma(beam_fwhm, signal_to_noise).hypot(0.05 * beam_fwhm)
}

/// An end is the farthest of all points of a noisy contour: it scatters this many times more
/// than a point fixed beforehand (measured on made maps of doubles: 1.7 to 1.8).
pub const FARTHEST_POINT: f64 = 1.75;

impl Extent {
    /// Measures an extent between two contour points.
    ///
    /// `peaks` are the source's local maxima with their brightness; the one nearest to an end
    /// gives the beam's reach there. The error of an end is rms over the brightness gradient
    /// along the extent.
    pub fn between(
        window: &Window,
        frame: &LocalFrame,
        beam: &Beam,
        level: f64,
        peaks: &[(Pixel, f64)],
        points: [Pixel; 2],
    ) -> Self {
        let chord = frame.difference(points[0], points[1]);
        let direction_deg = chord.position_angle_deg();
        let fwhm = beam.reach_along(direction_deg);
        let end = |pixel: Pixel, outward_deg: f64| {
            let peak = peaks
                .iter()
                .min_by(|a, b| {
                    frame.separation(a.0, pixel).total_cmp(&frame.separation(b.0, pixel))
                })
                .map_or(level, |p| p.1);
            let step = SkyOffset::polar(0.25 * beam.minor, outward_deg);
            let sample = |sign: f64| window.bilinear(frame.moved(pixel, step.times(sign)));
            let slope = match (sample(-1.0), sample(1.0)) {
                (Some(inside), Some(outside)) => (inside - outside) / (2.0 * step.radius()),
                _ => 0.0,
            };
            let rms = window.rms_at(pixel).unwrap_or(0.0);
            // No steeper than noise allows to tell: a flat edge is unsure by up to a beam.
            let sigma = (rms / slope.max(f64::MIN_POSITIVE)).min(beam.major);
            End { pixel, reach: beam_reach(peak, level, fwhm), sigma }
        };
        let ends = [end(points[0], direction_deg + 180.0), end(points[1], direction_deg)];
        Self { length: chord.radius(), direction_deg, ends }
    }

    /// 1σ of the length.
    pub fn sigma(&self) -> f64 {
        FARTHEST_POINT * self.ends[0].sigma.hypot(self.ends[1].sigma)
    }

    /// The length with its error; a lower limit where the contour is cut off.
    pub fn size(&self, cut_off: bool, confidence: f64) -> Measurement {
        if cut_off {
            Measurement::lower_limit(self.length, confidence)
        } else {
            Measurement::symmetric(self.length, self.sigma())
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
        let value = self.length - self.ends[0].reach - self.ends[1].reach;
        let sigma = self.sigma();
        if cut_off {
            return Measurement::lower_limit(value.max(0.0), confidence);
        }
        // The longest chord of a noisy contour is biased outwards: two errors are not enough.
        if value > resolution.max(3.0 * sigma) {
            Measurement::symmetric(value, sigma)
        } else {
            Measurement::upper_limit((value.max(0.0) + z * sigma).max(resolution), confidence)
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
