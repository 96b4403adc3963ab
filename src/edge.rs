//! How noise moves the outermost point of an outline.
//!
//! The farthest of all points of a noisy outline lies farther out than that of the outline
//! without noise: the noise is as likely to push one point out as in, but the one it has
//! pushed out most is taken. How much follows from what is seen: the map's rms over the slope
//! of the brightness at each point, the outline's shape near its end, and the length over
//! which the noise is alike (the beam). Lines of noise with the beam's correlation are laid
//! along the outline once more, and the mean by which its end then moves out is what the first
//! noise has moved it already (a bootstrap estimate of bias: Efron 1979, Ann. Stat. 7, 1);
//! the scatter is its error.

use std::sync::OnceLock;

use rand::{Rng, SeedableRng};
use rand_pcg::Pcg64Mcg;

use crate::stats::{normal_deviate, sorted_quantile};

/// What noise does to an outermost point.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Wander {
    /// How far the noise has carried it outwards, in the median.
    pub bias: f64,
    /// How far the true end may lie inside the corrected one: 1σ.
    pub minus: f64,
    /// How far it may lie beyond it: 1σ.
    pub plus: f64,
    /// The same for the 95 % interval.
    pub minus95: f64,
    /// The same for the 95 % interval.
    pub plus95: f64,
}

impl Wander {
    /// From the ends that noise makes of one.
    fn of(mut ends: Vec<f64>) -> Self {
        ends.sort_by(f64::total_cmp);
        let at = |q: f64| sorted_quantile(&ends, q).unwrap_or(0.0);
        let bias = at(0.5);
        // An end that was carried out lies farther in than it seems.
        let (minus, plus) = (at(0.841_345) - bias, bias - at(0.158_655));
        // Few lines reach that far: the tail is at least a Gaussian's.
        let (minus95, plus95) =
            ((at(0.975) - bias).max(1.96 * minus), (bias - at(0.025)).max(1.96 * plus));
        Self { bias, minus, plus, minus95, plus95 }
    }

    /// 1σ, the mean of both sides.
    pub fn sigma(&self) -> f64 {
        0.5 * (self.minus + self.plus)
    }
}

/// A point of an outline near its outermost one.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct OutlinePoint {
    /// How far out it lies against the outermost one, ≤ 0.
    pub reach: f64,
    /// Place along the outline, in beams.
    pub aside: f64,
    /// Outward slope of the logarithm of the brightness there, positive where it falls.
    pub slope: f64,
    /// Half its change with distance, ≥ 0: the logarithm falls by slope · d + change · d².
    pub change: f64,
}

impl OutlinePoint {
    /// Where the logarithm of the brightness differs by this much from that at the point.
    fn moved(&self, by: f64) -> f64 {
        let square = self.slope * self.slope - 4.0 * self.change * by;
        if self.change > 0.0 && square > 0.0 {
            // The root that goes over into −by/slope, without loss of digits.
            -2.0 * by / (self.slope + square.sqrt())
        } else if square <= 0.0 {
            // Inside a summit the profile has no such place.
            -0.5 * self.slope / self.change
        } else {
            -by / self.slope
        }
    }
}

/// Step of the lines of noise in beams, and their reach to each side in steps.
const STEP_BEAMS: f64 = 0.25;
const HALF: usize = 24;
const PLACES: usize = 2 * HALF + 1;
/// Lines drawn; each counts four times: mirrored and with either sign, so that no direction
/// along the outline is preferred.
const LINES: usize = 24;
/// No seed is better than another; this one is fixed so that a map has one record.
const SEED: u64 = 20_240_229;

/// Lines of noise of unit rms as the beam correlates it, along a straight cut.
fn lines() -> &'static [[f64; PLACES]] {
    static TABLE: OnceLock<Vec<[f64; PLACES]>> = OnceLock::new();
    TABLE.get_or_init(|| {
        const REACH: usize = 6;
        let mut generator = Pcg64Mcg::seed_from_u64(SEED);
        let mut normal = || {
            const UNIT: f64 = 1.0 / (1u64 << 53) as f64;
            normal_deviate(((generator.next_u64() >> 11) as f64 + 0.5) * UNIT)
        };
        let kernel: Vec<f64> = (0..=2 * REACH)
            .map(|k| {
                let d = STEP_BEAMS * (k as f64 - REACH as f64);
                libm::exp(-4.0 * std::f64::consts::LN_2 * d * d)
            })
            .collect();
        let mut table: Vec<[f64; PLACES]> = (0..LINES)
            .map(|_| {
                let white: Vec<f64> = (0..PLACES + 2 * REACH).map(|_| normal()).collect();
                std::array::from_fn(|i| kernel.iter().zip(&white[i..]).map(|(k, w)| k * w).sum())
            })
            .collect();
        let square: f64 = table.iter().flatten().map(|v| v * v).sum();
        let rms = (square / (LINES * PLACES) as f64).sqrt();
        table.iter_mut().flatten().for_each(|v| *v /= rms);
        table
    })
}

/// A line of noise at a place, linear between its steps and constant beyond its ends.
fn noise_at(line: &[f64; PLACES], mirror: f64, place_beams: f64) -> f64 {
    let at = (mirror * place_beams / STEP_BEAMS + HALF as f64).clamp(0.0, (PLACES - 1) as f64);
    let low = (at.floor() as usize).min(PLACES - 2);
    let t = at - low as f64;
    line[low] * (1.0 - t) + line[low + 1] * t
}

/// The end that each line of noise makes, through a function of the noise at a place.
fn ends(mut end: impl FnMut(&dyn Fn(f64) -> f64) -> f64) -> Vec<f64> {
    let mut all = Vec::with_capacity(4 * LINES);
    for line in lines() {
        for mirror in [1.0, -1.0] {
            for sign in [1.0, -1.0] {
                all.push(end(&|place| sign * noise_at(line, mirror, place)));
            }
        }
    }
    all
}

/// What noise does to the outermost of an outline's points; `noise_share` is the rms over the
/// outline's level.
///
/// Noise of n rms moves a point to where the brightness without it is level − n rms: where its
/// logarithm has fallen by −ln(1 − n rms/level). An end is carried out farther than in.
pub fn wander_of_outline(points: &[OutlinePoint], noise_share: f64) -> Wander {
    if points.is_empty() {
        return Wander::default();
    }
    let ends = ends(|noise| {
        points
            .iter()
            .map(|p| {
                let share = (noise(p.aside) * noise_share).min(MOST_SHARE);
                p.reach + p.moved((-share).ln_1p())
            })
            .fold(f64::NEG_INFINITY, f64::max)
    });
    Wander::of(ends)
}

/// Noise that takes away more than this of the level leaves no outline.
const MOST_SHARE: f64 = 0.9;

/// A point of a profile that fades outwards.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct ProfilePoint {
    /// Distance.
    pub distance: f64,
    /// Brightness above the level.
    pub excess: f64,
    /// rms of the noise.
    pub rms: f64,
}

/// Where a profile last stands above the level, and what noise does to that place. A gap
/// longer than `beam` ends it, counted from the point at `from`. `None` where the profile is
/// below the level at and beyond `from`.
pub fn last_above(profile: &[ProfilePoint], from: f64, beam: f64) -> Option<(f64, Wander)> {
    let end = crossing(profile, from, beam, &|_| 0.0)?;
    // Only what lies within the reach of the lines of noise can change the end.
    let reach = HALF as f64 * STEP_BEAMS * beam;
    let near: Vec<ProfilePoint> = profile
        .iter()
        .filter(|p| p.distance >= from && (p.distance - end).abs() <= reach)
        .copied()
        .collect();
    let ends = ends(|noise| {
        let moved = crossing(&near, from, beam, &|d| noise((d - end) / beam));
        moved.unwrap_or(from) - end
    });
    Some((end, Wander::of(ends)))
}

/// The last crossing of the level by a profile with noise added, gaps up to a beam bridged.
fn crossing(
    profile: &[ProfilePoint],
    from: f64,
    beam: f64,
    noise: &dyn Fn(f64) -> f64,
) -> Option<f64> {
    let value = |p: &ProfilePoint| p.excess + p.rms * noise(p.distance);
    let mut found: Option<f64> = None;
    for (k, p) in profile.iter().enumerate() {
        if p.distance < from {
            continue;
        }
        if p.distance - found.unwrap_or(from) > beam {
            break;
        }
        let here = value(p);
        if here < 0.0 {
            continue;
        }
        let beyond = profile.get(k + 1).map(|next| (next.distance, value(next)));
        found = Some(match beyond {
            Some((far, below)) if below < 0.0 => {
                p.distance + (far - p.distance) * here / (here - below)
            }
            _ => p.distance,
        });
    }
    found
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_pointed_end_moves_with_its_noise_and_a_flat_one_is_carried_out() {
        // One point alone: the noise's own scatter, ± scale × share, and a skewed mean of
        // scale × share²/2 in second order.
        let point = |aside: f64| OutlinePoint { reach: 0.0, aside, slope: 1.0, change: 0.0 };
        let alone = wander_of_outline(&[point(0.0)], 0.01);
        assert!((alone.sigma() / 0.01 - 1.0).abs() < 0.25, "{alone:?}");
        assert!(alone.bias.abs() < 2e-4, "{alone:?}");
        // A straight edge of eight beams: the highest of some six independent deviates lies
        // 1.2 to 1.4σ out.
        let flat: Vec<_> = (-16..=16).map(|k| point(0.25 * f64::from(k))).collect();
        let edge = wander_of_outline(&flat, 0.01);
        assert!((0.9..1.7).contains(&(edge.bias / 0.01)), "{edge:?}");
        assert!(edge.sigma() < alone.sigma(), "{edge:?}");
    }

    #[test]
    fn a_profile_ends_where_it_crosses_and_moves_by_rms_over_slope() {
        // Falls by 5 rms a beam: the end moves by a fifth of a beam.
        let profile: Vec<_> = (0..60)
            .map(|k| {
                let distance = 0.2 * f64::from(k);
                ProfilePoint { distance, excess: 5.0 * (6.03 - distance), rms: 1.0 }
            })
            .collect();
        let (end, wander) = last_above(&profile, 0.0, 1.0).expect("above");
        assert!((end - 6.03).abs() < 1e-9);
        assert!((wander.sigma() / 0.2 - 1.0).abs() < 0.35, "{wander:?}");
        assert!(last_above(&profile, 8.0, 1.0).is_none());
    }
}
