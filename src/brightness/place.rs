//! Where the strips lie: their ends, bearings and width, from ridges and from what lies beside
//! the jets, never from what a strip itself holds.

use super::strip::{PolarCells, Strip, eliminate, powers};
use crate::map::beam::Beam;
use crate::map::geometry::LocalFrame;
use crate::noise::Noise;
use crate::ridge::{Ridge, RidgePoint};
use crate::units::wrap_difference_deg;
use crate::window::Window;

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
    /// Signal-to-noise, of the whole ridge inside the strip, from which the fainter side's own
    /// ridge is followed.
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
    // Whatever outshines the jet ends the strip, also where more follows beyond it.
    let shortest = inner + (LEAST_LENGTH_BEAMS + 1.0) * beam.major;
    let bright = sides.iter().filter_map(|side| bright_feature(side.ridge, inner, beam.major));
    outer = outer.min(bright.fold(f64::INFINITY, f64::min).max(shortest));
    let outer = outer - beam.major;
    if outer - inner < beam.major {
        return None;
    }
    let strength = sides.map(|side| median_signal(side.ridge, inner, outer));
    // As many independent points as beams: the ridge as a whole stands so high.
    let beams = ((outer - inner) / beam.major).max(1.0);
    let reference = usize::from(strength[1] > strength[0]);
    let other = 1 - reference;
    let mut follows = [false; 2];
    follows[reference] = strength[reference] >= rule.reference_sigma;
    follows[other] = strength[other] >= LEAST_FOLLOW_SIGMA
        && strength[other] * beams.sqrt() >= rule.follow_sigma;
    let direction = ends_deg[reference];
    let jet_fwhm = beam.projected_fwhm(direction);
    let strip = Strip { inner, outer, half_width: rule.half_width_beams * jet_fwhm, jet_fwhm };
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

/// A ridge fainter than this (median of its points) is never followed. At this signal-to-noise a
/// crest that follows the noise is too bright by 1/(4 S/N²) = 1.6 %, a fraction of the error of
/// a strip only a few beams long.
const LEAST_FOLLOW_SIGMA: f64 = 4.0;

/// A place of the ridge this many times brighter than the jet where the strip begins is a hot
/// spot or an inner lobe, not a knot of the jet.
const FEATURE_CONTRAST: f64 = 3.5;
/// And by at least so many rms.
const FEATURE_SIGMA: f64 = 5.0;

/// Distance from the core at which a feature begins that outshines the jet: where the ridge
/// last stood at twice the jet's brightness before it. The jet's brightness is the median over
/// the strip's first two beams.
fn bright_feature(ridge: &Ridge, inner: f64, beam_major: f64) -> Option<f64> {
    let start = inner + 2.0 * beam_major;
    let first = ridge.points.iter().filter(|p| p.distance >= inner && p.distance < start);
    let mut jet: Vec<f64> = first.map(|p| p.brightness).collect();
    let jet = crate::stats::median(&mut jet)?;
    let (at, _) = ridge.points.iter().enumerate().find(|(_, p)| {
        p.distance >= inner
            && p.brightness > FEATURE_CONTRAST * jet
            && p.brightness > jet + FEATURE_SIGMA * p.rms
    })?;
    let before = ridge.points.get(..at)?;
    let foot = before.iter().rev().find(|p| p.brightness < 2.0 * jet);
    foot.map(|p| p.distance)
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
/// Emission beside the jet that rises to this many times its usual level there begins a lobe
/// or a flare.
const FLARE_CONTRAST: f64 = 2.0;
/// And by at least so many errors of its mean over half a beam along the jet, in two such
/// pieces one after the other.
const FLARE_SIGMA: f64 = 4.0;
/// However soon a flare begins, so many beam majors of the strip are kept where there is room.
const LEAST_LENGTH_BEAMS: f64 = 1.5;

impl PlacedStrip {
    /// The same with a strip that ends one beam short of where the emission beside either jet
    /// rises: where a lobe or a plume begins that the ridge itself does not show. Only the
    /// bands beside the strip are looked at.
    pub fn short_of_flares(
        mut self,
        window: &Window,
        frame: &LocalFrame,
        around: &PolarCells,
        ridges: [&Ridge; 2],
        beam: &Beam,
        (noise, beam_px): (&Noise, f64),
    ) -> Self {
        let flare = [0, 1]
            .into_iter()
            .filter_map(|side| {
                self.flare(window, frame, around, ridges, side, beam, (noise, beam_px))
            })
            .fold(f64::INFINITY, f64::min);
        let shortest = self.strip.inner + LEAST_LENGTH_BEAMS * beam.major;
        let end = (flare - beam.major).min(self.usable_until(around, ridges, beam));
        self.strip.outer = self.strip.outer.min(end.max(shortest));
        self
    }

    /// Distance from the core up to which either strip holds usable pixels: a gap longer than
    /// two beams, or one that reaches the end, ends it (another source, the map's edge).
    fn usable_until(&self, around: &PolarCells, ridges: [&Ridge; 2], beam: &Beam) -> f64 {
        let Strip { inner, outer, half_width, .. } = self.strip;
        let step = 0.5 * beam.major;
        let count = ((outer - inner) / step).ceil().max(0.0) as usize;
        let mut bins = vec![(0_usize, 0_usize); count];
        for cell in around.between(inner, outer) {
            let bearing = self.bearing(ridges, self.reference, cell.radius);
            let turn = wrap_difference_deg(cell.bearing_deg - bearing);
            let index = ((cell.radius - inner) / step).floor().max(0.0) as usize;
            if cell.radius * turn.to_radians().abs() <= half_width
                && let Some(bin) = bins.get_mut(index)
            {
                bin.0 += usize::from(cell.pair_usable);
                bin.1 += 1;
            }
        }
        let mut gap = 0;
        for (index, (usable, all)) in bins.iter().enumerate() {
            gap = if 2 * usable < *all { gap + 1 } else { 0 };
            if gap > 4 || (gap > 0 && index + 1 == count) {
                return inner + (index + 1 - gap) as f64 * step;
            }
        }
        outer
    }

    /// Distance from the core at which the emission beside one side's jet rises.
    #[expect(clippy::too_many_arguments, reason = "each is one plain input")]
    fn flare(
        &self,
        window: &Window,
        frame: &LocalFrame,
        around: &PolarCells,
        ridges: [&Ridge; 2],
        side: usize,
        beam: &Beam,
        (noise, beam_px): (&Noise, f64),
    ) -> Option<f64> {
        let (band_inner, band_outer) = self.strip.bands();
        let (inner, outer) = (self.strip.inner, self.strip.outer + beam.major);
        let step = 0.5 * beam.major;
        let count = ((outer - inner) / step).floor().max(0.0) as usize;
        let mut bins = vec![(0.0, 0.0); count];
        for cell in around.between(inner, outer) {
            let turn =
                wrap_difference_deg(cell.bearing_deg - self.bearing(ridges, side, cell.radius));
            let across = cell.radius * turn.to_radians().abs();
            let is_beside = across >= band_inner && across <= band_outer && turn.abs() < 80.0;
            let index = ((cell.radius - inner) / step).floor().max(0.0) as usize;
            if let Some(bin) = bins.get_mut(index).filter(|_| is_beside && cell.pair_usable) {
                bin.0 += window.brightness[[cell.row, cell.column]];
                bin.1 += 1.0;
            }
        }
        let rms = noise.rms(frame.origin.x, frame.origin.y);
        let level = |bin: &(f64, f64)| (bin.1 > 0.0).then(|| bin.0 / bin.1);
        let mut levels: Vec<f64> = bins.iter().filter_map(level).collect();
        let usual = crate::stats::quantile(&mut levels, 0.25)?.max(0.0);
        let rises = |bin: &(f64, f64)| {
            let error = rms * (beam_px / bin.1.max(1.0)).sqrt();
            level(bin).is_some_and(|level| {
                level > FLARE_CONTRAST * usual && level > usual + FLARE_SIGMA * error
            })
        };
        let first = bins.windows(2).position(|pair| pair.iter().all(rises))?;
        Some(inner + first as f64 * step)
    }
}

/// Widths tried for a resolved jet, in widths of an unresolved one.
const JET_WIDTHS: [f64; 11] = [1.0, 1.06, 1.13, 1.2, 1.3, 1.42, 1.56, 1.75, 2.0, 2.3, 2.7];
/// Gain in χ² for which a jet is taken as wider than the beam.
const WIDTH_GAIN: f64 = 1.0;
/// How far across a jet's width is looked for, in widths of an unresolved one.
const WIDTH_REACH: f64 = 3.5;

impl PlacedStrip {
    /// The same with a strip as much wider than the beam as the reference side's jet: of the
    /// Gaussians tried on a base of fourth order the one that leaves least, where that is
    /// significant. Both sides get the same width.
    pub fn fitted_to_jet(
        mut self,
        window: &Window,
        frame: &LocalFrame,
        around: &PolarCells,
        ridges: [&Ridge; 2],
        noise: (&Noise, f64),
    ) -> Self {
        let factor = self.jet_width(window, frame, around, ridges, noise);
        self.strip.half_width *= factor;
        self.strip.jet_fwhm *= factor;
        self
    }

    /// Width of the reference side's jet in widths of an unresolved one. `beam_px` is the
    /// beam's solid angle: so many pixels share their noise.
    fn jet_width(
        &self,
        window: &Window,
        frame: &LocalFrame,
        around: &PolarCells,
        ridges: [&Ridge; 2],
        (noise, beam_px): (&Noise, f64),
    ) -> f64 {
        let Strip { inner, outer, jet_fwhm, .. } = self.strip;
        let mut samples: Vec<(f64, f64)> = Vec::new();
        for cell in around.between(inner, outer) {
            if !cell.pair_usable {
                continue;
            }
            let bearing = self.bearing(ridges, self.reference, cell.radius);
            let turn = wrap_difference_deg(cell.bearing_deg - bearing);
            let across = cell.radius * turn.to_radians() / jet_fwhm;
            if turn.abs() < 80.0 && across.abs() <= WIDTH_REACH {
                samples.push((across, window.brightness[[cell.row, cell.column]]));
            }
        }
        let origin = frame.origin;
        let rms = noise.rms(origin.x, origin.y).max(f64::MIN_POSITIVE);
        let scatter = rms * rms * beam_px.max(1.0);
        let chi_square = |width: f64| -> Option<f64> {
            let design = |x: f64| {
                let p = powers(x / WIDTH_REACH);
                let q = x / width;
                [(-4.0 * std::f64::consts::LN_2 * q * q).exp(), p[0], p[1], p[2], p[3], p[4]]
            };
            let mut matrix = [[0.0; 6]; 6];
            let mut right = [0.0; 6];
            for &(x, value) in &samples {
                let d = design(x);
                for k in 0..6 {
                    right[k] += d[k] * value;
                    for l in 0..6 {
                        matrix[k][l] += d[k] * d[l];
                    }
                }
            }
            let solution = eliminate(matrix, right)?;
            let explained: f64 = solution.iter().zip(&right).map(|(a, b)| a * b).sum();
            (solution[0] > 0.0).then_some(-explained / scatter)
        };
        let Some(narrow) = chi_square(JET_WIDTHS[0]) else { return 1.0 };
        let mut best = (narrow - WIDTH_GAIN, 1.0);
        for &width in &JET_WIDTHS[1..] {
            match chi_square(width) {
                Some(found) if found < best.0 => best = (found, width),
                _ => {}
            }
        }
        best.1
    }
}
