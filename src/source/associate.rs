//! Which connected regions are one source: the region at the host (or the map's middle),
//! its partner on the other side, and fragments that lie along them.
//!
//! A lobe torn off its core is told from an unrelated neighbour by how many groups like it
//! chance would bring: the density of regions at least as bright, times the area in which
//! the group would have been accepted. The thresholds are our own, set on real survey maps.

use crate::map::geometry::LocalFrame;
use crate::regions::Region;
use crate::units::{Pixel, SkyOffset};

/// Where the source is looked for.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Anchor {
    /// Position on the map.
    pub pixel: Pixel,
    /// Whether it is a known host or core (else the map's middle).
    pub is_known: bool,
}

/// The regions taken as one source.
#[derive(Clone, Debug, PartialEq)]
pub struct SourceRegions {
    /// Indices into the list of regions, ascending.
    pub members: Vec<usize>,
    /// Expected number of chance groups as good as the joined one; 0 where nothing was joined.
    pub chance: f64,
}

impl SourceRegions {
    /// The regions themselves, out of the map's list.
    pub fn of(&self, regions: &[Region]) -> Vec<Region> {
        self.members.iter().filter_map(|&k| regions.get(k).cloned()).collect()
    }
}

/// Chance pairs above which joining is refused where the region at the anchor is extended:
/// it is then most likely the whole source.
const CHANCE_WITH_EXTENDED: f64 = 0.001;
/// The same where the region at the anchor is compact: it may be the core of a wide double.
const CHANCE_WITH_COMPACT: f64 = 0.02;
/// The same where nothing lies at the anchor: a source is then most likely a double around it.
const CHANCE_WITHOUT_CORE: f64 = 0.5;
/// A region at the anchor that stays within this many beam majors of it is compact.
const COMPACT_BEAMS: f64 = 1.75;
/// Partners fainter than this share of the peak at the anchor could be its sidelobes.
const SIDELOBE_SHARE: f64 = 0.015;
/// Chance counterparts above which a one-sided region at the anchor stays alone.
const CHANCE_COUNTERPART: f64 = 0.05;
/// Chance singles above which a lone region away from a known host is not its source.
const CHANCE_SINGLE: f64 = 0.3;
/// Gap, in beam majors, over which a fragment is taken as part of its neighbour.
const FRAGMENT_GAP_BEAMS: f64 = 1.5;
/// From this confidence in chance upwards the joining is called unsure.
pub const CHANCE_UNSURE: f64 = 0.1;

/// One region as seen from the anchor.
struct Seen {
    /// Distance of its nearest pixel, sky units.
    nearest: f64,
    /// Its farthest pixel from the anchor.
    farthest: SkyOffset,
    /// Highest brightness.
    peak: f64,
    /// Flux-weighted middle from the anchor, sky units.
    middle: SkyOffset,
    /// Summed brightness.
    flux: f64,
    /// Regions at least as bright, per sky area, not counting those at the anchor.
    density: f64,
}

impl Seen {
    /// Unrelated regions at least as bright expected within its distance.
    fn chance_singles(&self) -> f64 {
        self.density * std::f64::consts::PI * self.middle.radius().powi(2)
    }
}

/// Joins regions to one source; `None` where no region can be the anchor's.
///
/// `beam` is the beam's major axis and `map_area` the map's area, both in the frame's units.
pub fn associate(
    regions: &[Region],
    anchor: Anchor,
    frame: &LocalFrame,
    beam: f64,
    map_area: f64,
) -> Option<SourceRegions> {
    let mut seen: Vec<Seen> = regions
        .iter()
        .map(|region| {
            let nearest = region
                .runs
                .iter()
                .map(|run| {
                    // The nearest point of a run to the anchor lies at its ends or beside it.
                    let x = anchor.pixel.x.clamp(run.x0 as f64, run.x1 as f64);
                    frame.offset(Pixel::new(x, run.y as f64)).radius()
                })
                .fold(f64::INFINITY, f64::min);
            let farthest = region
                .runs
                .iter()
                .flat_map(|run| [run.x0, run.x1].map(|x| Pixel::new(x as f64, run.y as f64)))
                .map(|p| frame.offset(p))
                .max_by(|a, b| a.radius().total_cmp(&b.radius()))
                .unwrap_or_default();
            Seen {
                nearest,
                farthest,
                peak: region.peak.value,
                middle: frame.offset(Pixel::new(region.centroid.0, region.centroid.1)),
                flux: region.sum,
                density: 0.0,
            }
        })
        .collect();
    let reach = if anchor.is_known { 1.0 } else { 2.0 } * beam;
    let at_anchor: Vec<usize> = (0..seen.len()).filter(|&i| seen[i].nearest <= reach).collect();
    for i in 0..seen.len() {
        let brighter = (0..seen.len())
            .filter(|j| !at_anchor.contains(j) && seen[*j].flux >= seen[i].flux)
            .count();
        seen[i].density = brighter.max(1) as f64 / map_area;
    }

    let mut members = at_anchor.clone();
    let mut chance = 0.0;
    // Pairs are added from the inside outwards: lobes around a core, outer lobes around those.
    while let Some(partners) = best_partners(&seen, &members, beam) {
        members.extend(partners.regions);
        chance += partners.chance;
    }
    if members.is_empty() {
        let i = (0..seen.len()).min_by(|&a, &b| seen[a].nearest.total_cmp(&seen[b].nearest))?;
        let expected = seen[i].density * std::f64::consts::PI * seen[i].nearest.powi(2);
        if anchor.is_known && expected > CHANCE_SINGLE {
            return None;
        }
        members.push(i);
        if anchor.is_known {
            chance = expected;
        }
    }
    join_fragments(regions, &seen, &mut members, frame, beam);
    members.sort_unstable();
    members.dedup();
    Some(SourceRegions { members, chance })
}

/// What lies at the anchor, as far as partners are judged by it.
struct Middle {
    /// Summed brightness of its regions.
    flux: f64,
    /// Direction of its longest arm, where it is extended.
    axis: Option<SkyOffset>,
    /// Partners fainter than this could be sidelobes.
    least_peak: f64,
}

impl Middle {
    fn new(seen: &[Seen], at_anchor: &[usize], beam: f64) -> Self {
        let flux = at_anchor.iter().map(|&i| seen[i].flux).sum();
        let brightest = at_anchor.iter().map(|&i| seen[i].peak).fold(0.0, f64::max);
        let longest = at_anchor
            .iter()
            .map(|&i| seen[i].farthest)
            .max_by(|a, b| a.radius().total_cmp(&b.radius()))
            .filter(|far| far.radius() > COMPACT_BEAMS * beam);
        Self { flux, axis: longest, least_peak: SIDELOBE_SHARE * brightest }
    }

    fn allowed(&self) -> f64 {
        if self.flux <= 0.0 {
            CHANCE_WITHOUT_CORE
        } else if self.axis.is_none() {
            CHANCE_WITH_COMPACT
        } else {
            CHANCE_WITH_EXTENDED
        }
    }

    /// Rank in [0, 1] of how well a direction lies along the middle's own axis; `None` where
    /// it has none.
    fn alignment(&self, direction: SkyOffset) -> Option<f64> {
        let axis = self.axis?;
        let cosine = axis.dot(direction).abs() / (axis.radius() * direction.radius());
        Some((cosine.min(1.0).acos().to_degrees() / 90.0).max(0.05))
    }

    /// Factor by which partners that hold less than the middle itself are less credible.
    fn faintness(&self, partners: f64) -> f64 {
        (self.flux / partners.max(f64::MIN_POSITIVE)).max(1.0)
    }
}

/// Regions that complete the source, and the expected number of chance groups as good.
struct Partners {
    chance: f64,
    regions: Vec<usize>,
}

/// The pair or counterpart that completes the source best, where chance would rarely bring it.
fn best_partners(seen: &[Seen], members: &[usize], beam: f64) -> Option<Partners> {
    let middle = Middle::new(seen, members, beam);
    let pair = best_pair(seen, members, &middle, beam).filter(|p| p.chance <= middle.allowed());
    let counterpart =
        best_counterpart(seen, members, &middle, beam).filter(|p| p.chance <= CHANCE_COUNTERPART);
    match (pair, counterpart) {
        (Some(a), Some(b)) => Some(if b.chance < a.chance { b } else { a }),
        (a, b) => a.or(b),
    }
}

/// The pair of regions on opposite sides of the anchor that chance explains worst.
fn best_pair(seen: &[Seen], at_anchor: &[usize], middle: &Middle, beam: f64) -> Option<Partners> {
    let mut best: Option<Partners> = None;
    for i in 0..seen.len() {
        for j in i + 1..seen.len() {
            let (a, b) = (&seen[i], &seen[j]);
            let faint = a.peak.min(b.peak) < middle.least_peak;
            if faint || at_anchor.contains(&i) || at_anchor.contains(&j) {
                continue;
            }
            let Some(mut ranks) = match_ranks(a, b, beam) else { continue };
            ranks.extend(middle.alignment(a.middle.minus(b.middle)));
            let chance = a.chance_singles()
                * b.chance_singles()
                * combined_rank(&ranks)
                * middle.faintness(a.flux + b.flux);
            if best.as_ref().is_none_or(|found| chance < found.chance) {
                best = Some(Partners { chance, regions: vec![i, j] });
            }
        }
    }
    best
}

/// The region that completes a one-sided region at the anchor on the other side.
fn best_counterpart(
    seen: &[Seen],
    at_anchor: &[usize],
    middle: &Middle,
    beam: f64,
) -> Option<Partners> {
    // A side that has its counterpart already is not one-sided.
    let one_sided = |k: usize| {
        seen[k].middle.radius() > 1.5 * beam
            && !at_anchor.iter().any(|&m| {
                m != k && seen[m].middle.dot(seen[k].middle) < 0.0 && seen[m].middle.radius() > beam
            })
    };
    let mut best: Option<Partners> = None;
    for i in at_anchor.iter().copied().filter(|&i| one_sided(i)) {
        for j in (0..seen.len()).filter(|j| !at_anchor.contains(j)) {
            if seen[j].peak < middle.least_peak {
                continue;
            }
            let Some(ranks) = match_ranks(&seen[i], &seen[j], beam) else { continue };
            let chance = seen[j].chance_singles() * combined_rank(&ranks);
            if best.as_ref().is_none_or(|found| chance < found.chance) {
                best = Some(Partners { chance, regions: vec![j] });
            }
        }
    }
    best
}

/// How well two regions match as the two sides of one source, as ranks in [0, 1]: departure
/// from opposition, arm ratio, flux ratio. `None` where they do not match at all.
fn match_ranks(a: &Seen, b: &Seen, beam: f64) -> Option<Vec<f64>> {
    let (ra, rb) = (a.middle.radius(), b.middle.radius());
    let cosine = a.middle.dot(b.middle) / (ra * rb).max(f64::MIN_POSITIVE);
    let departure_deg = (180.0 - cosine.clamp(-1.0, 1.0).acos().to_degrees()).max(5.0);
    let arm_ratio = ra.max(rb) / ra.min(rb).max(0.5 * beam);
    let flux_ratio = a.flux.max(b.flux) / a.flux.min(b.flux).max(f64::MIN_POSITIVE);
    if departure_deg > 75.0 || arm_ratio > 4.0 || flux_ratio > 50.0 {
        return None;
    }
    Some(vec![
        departure_deg / 90.0,
        (arm_ratio.ln() / 4f64.ln()).clamp(0.05, 1.0),
        (flux_ratio.ln() / 50f64.ln()).clamp(0.05, 1.0),
    ])
}

/// Chance that the product of `n` uniform ranks is as small as this one:
/// x Σ (−ln x)^k / k!, k < n (Fisher's combination of independent tests).
fn combined_rank(ranks: &[f64]) -> f64 {
    let x: f64 = ranks.iter().product();
    let mut term = 1.0;
    let mut sum = 0.0;
    for k in 0..ranks.len() {
        sum += term;
        term *= -x.ln() / (k as f64 + 1.0);
    }
    (x * sum).min(1.0)
}

/// Adds regions within a small gap of a member, and regions in the corridor between the
/// anchor and a member, until none is left to add.
fn join_fragments(
    regions: &[Region],
    seen: &[Seen],
    members: &mut Vec<usize>,
    frame: &LocalFrame,
    beam: f64,
) {
    let gap_px = FRAGMENT_GAP_BEAMS * beam / frame.mean_scale();
    loop {
        let found = (0..regions.len()).find(|k| {
            !members.contains(k)
                && members.iter().any(|&m| {
                    gap_below(&regions[m], &regions[*k], gap_px)
                        || in_corridor(seen[*k].middle, seen[m].middle, beam)
                })
        });
        match found {
            Some(k) => members.push(k),
            None => return,
        }
    }
}

/// Whether `point` lies between the anchor and `end`, within a beam of the line.
fn in_corridor(point: SkyOffset, end: SkyOffset, beam: f64) -> bool {
    let length = end.radius();
    if length <= 2.0 * beam {
        return false;
    }
    let along = point.dot(end) / length;
    let across = (point.radius().powi(2) - along * along).max(0.0).sqrt();
    along > 0.0 && along < length && across <= beam
}

/// Whether two regions come within `gap_px` of each other.
fn gap_below(a: &Region, b: &Region, gap_px: f64) -> bool {
    let box_gap = |a0: usize, a1: usize, b0: usize, b1: usize| {
        (b0 as f64 - a1 as f64).max(a0 as f64 - b1 as f64).max(0.0)
    };
    if box_gap(a.bbox.x0, a.bbox.x1, b.bbox.x0, b.bbox.x1)
        .hypot(box_gap(a.bbox.y0, a.bbox.y1, b.bbox.y0, b.bbox.y1))
        > gap_px
    {
        return false;
    }
    a.runs.iter().any(|p| {
        b.runs.iter().any(|q| {
            let dy = p.y.abs_diff(q.y) as f64;
            dy <= gap_px && box_gap(p.x0, p.x1, q.x0, q.x1).hypot(dy) <= gap_px
        })
    })
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::map::description::{MapDescription, Rows};
    use crate::map::geometry::SkyGeometry;
    use crate::regions::{Peak, PixelBox, Run};

    const SIZE: usize = 300;
    const BEAM: f64 = 4.0;

    /// A square region of side 2 h + 1 about a pixel.
    fn square(x: usize, y: usize, h: usize, peak: f64) -> Region {
        let runs: Vec<Run> = (y - h..=y + h).map(|y| Run { y, x0: x - h, x1: x + h }).collect();
        let area_px = runs.len() * (2 * h + 1);
        Region {
            area_px,
            peak: Peak { x: x as f64, y: y as f64, value: peak, snr: peak },
            peak_snr: peak,
            sum: 0.3 * peak * area_px as f64,
            centroid: (x as f64, y as f64),
            bbox: PixelBox { x0: x - h, y0: y - h, x1: x + h, y1: y + h },
            touches_edge: false,
            touches_blank: false,
            runs,
        }
    }

    fn joined(regions: &[Region], is_known: bool) -> Option<Vec<usize>> {
        let geometry = SkyGeometry::new(SIZE, SIZE, &MapDescription::default(), Rows::BottomUp);
        let anchor = Anchor { pixel: Pixel::new(149.5, 149.5), is_known };
        let frame = geometry.local_frame(anchor.pixel);
        associate(regions, anchor, &frame, BEAM, (SIZE * SIZE) as f64).map(|s| s.members)
    }

    #[test]
    fn two_lobes_around_an_empty_host_are_one_source() {
        let regions =
            [square(190, 160, 5, 40.0), square(111, 141, 5, 30.0), square(40, 250, 2, 20.0)];
        assert_eq!(joined(&regions, true), Some(vec![0, 1]));
    }

    #[test]
    fn a_neighbour_is_not_a_lobe_of_a_compact_host() {
        // A core of 300 rms and one source of 20 rms to one side.
        let regions = [square(149, 150, 3, 300.0), square(200, 170, 2, 20.0)];
        assert_eq!(joined(&regions, true), Some(vec![0]));
    }

    #[test]
    fn faint_pairs_around_a_very_bright_core_are_sidelobes() {
        // Perfectly opposite and equal, but 0.5 % of the core's peak.
        let regions =
            [square(149, 150, 4, 2000.0), square(169, 150, 2, 10.0), square(130, 149, 2, 10.0)];
        assert_eq!(joined(&regions, true), Some(vec![0]));
        // The same pair at 10 % of a fainter core is a pair of lobes.
        let regions =
            [square(149, 150, 3, 100.0), square(179, 150, 3, 10.0), square(120, 149, 3, 10.0)];
        assert_eq!(joined(&regions, true), Some(vec![0, 1, 2]));
    }

    #[test]
    fn a_fragment_across_a_small_gap_belongs_and_one_across_a_wide_gap_does_not() {
        // Gaps of 5 px = 1.25 beams and of 14 px = 3.5 beams.
        let near = [square(149, 150, 5, 50.0), square(162, 150, 3, 8.0)];
        assert_eq!(joined(&near, true), Some(vec![0, 1]));
        let far = [square(149, 150, 5, 50.0), square(171, 150, 3, 8.0)];
        assert_eq!(joined(&far, true), Some(vec![0]));
    }

    #[test]
    fn nothing_near_a_known_host_is_no_source_but_the_middle_takes_the_nearest() {
        let regions = [square(20, 20, 4, 50.0)];
        assert_eq!(joined(&regions, true), None);
        assert_eq!(joined(&regions, false), Some(vec![0]));
        assert_eq!(joined(&[], false), None);
    }

    #[test]
    fn combined_rank_is_the_distribution_of_a_product() {
        // One rank: itself. Two: x (1 − ln x), closed form.
        assert!((combined_rank(&[0.3]) - 0.3).abs() < 1e-15);
        let x: f64 = 0.2 * 0.5;
        assert!((combined_rank(&[0.2, 0.5]) - x * (1.0 - x.ln())).abs() < 1e-15);
        assert!((combined_rank(&[1.0, 1.0, 1.0]) - 1.0).abs() < 1e-15);
    }
}
