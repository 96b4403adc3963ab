//! A twin-jet radio source from intrinsic numbers: speeds, angle to the line of sight and
//! fluxes in, Gaussians on the sky out.
//!
//! The two jets are alike in their own frames. What makes them differ on the sky is the boost
//! δ^p of each piece (p = 2 + α for a continuous flow, 3 + α for blobs; Scheuer & Readhead
//! 1979, Nature 277, 182; Ryle & Longair 1967, MNRAS 136, 123), the light travel time between
//! the ends, and the surroundings. At equal projected distances the two show the same piece of
//! jet, so that their ratio there is the closed form of
//! [`crate::physics::beaming::jet_to_counter_jet_ratio`] at that piece's speed.
//!
//! Side 0 is the approaching one. Lengths are arcsec as projected, along the side's path.

use serde::Serialize;

use super::noise::{Draws, stream_seed};
use super::parameters::Parameters;
use crate::constants::FWHM_PER_SIGMA;
use crate::physics::beaming::{
    Flow, apparent_speed, arm_length_ratio, doppler_factor, proper_motion_mas_per_year,
    speed_from_lorentz_factor,
};
use crate::physics::cosmology::{Cosmology, Distance};
use crate::units::SkyOffset;

/// FWHM of a Gaussian with the variance of an even segment, over the segment's length.
const SEGMENT_FWHM: f64 = FWHM_PER_SIGMA * 0.288_675_134_594_812_9;

/// Most pieces a jet is cut into.
const MOST_PIECES: f64 = 20_000.0;

/// What a piece of the source is.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Part {
    /// The core.
    Core,
    /// Smooth jet.
    Jet,
    /// A knot of a jet.
    Knot,
    /// A hot spot.
    Hotspot,
    /// A lobe.
    Lobe,
    /// The bridge between the ends.
    Bridge,
    /// The halo about the core.
    Halo,
    /// A plume or tail.
    Plume,
    /// A lobe of the older, outer pair.
    OuterLobe,
}

/// An elliptical Gaussian on the sky, before the beam.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct SkyGaussian {
    /// What it belongs to.
    pub part: Part,
    /// The side it belongs to, where it has one.
    pub side: Option<usize>,
    /// Its centre, arcsec from the core.
    pub offset: SkyOffset,
    /// Flux density in mJy.
    pub flux_mjy: f64,
    /// FWHM along [`Self::pa_deg`] in arcsec.
    pub along_arcsec: f64,
    /// FWHM across it in arcsec.
    pub across_arcsec: f64,
    /// Position angle of the first axis.
    pub pa_deg: f64,
}

/// A piece of a path with constant curvature.
#[derive(Clone, Copy, Debug)]
struct Arc {
    /// Where it begins, along the path.
    from: f64,
    /// Position there.
    origin: SkyOffset,
    /// Direction there, degrees.
    direction_deg: f64,
    /// Turn per arcsec, degrees.
    turn_per_arcsec: f64,
}

impl Arc {
    fn at(&self, distance: f64) -> (SkyOffset, f64) {
        let s = distance - self.from;
        let turn = self.turn_per_arcsec * s;
        let direction_deg = self.direction_deg + turn;
        // A chord of an arc: s · sin(τ/2)/(τ/2), half-way between the two directions.
        let half = 0.5 * turn.to_radians();
        let chord = if half.abs() < 1e-9 { s } else { s * libm::sin(half) / half };
        let step = SkyOffset::polar(chord, self.direction_deg + 0.5 * turn);
        (self.origin.plus(step), direction_deg)
    }
}

/// The path of one side's jet on the sky, on through plume and tail.
#[derive(Clone, Debug)]
pub struct Path {
    arcs: Vec<Arc>,
    /// Where the path ends: the arm, and the plume beyond the jet's end.
    pub length_arcsec: f64,
    swing: Swing,
}

/// Sideways swing of a projected helix.
#[derive(Clone, Copy, Debug)]
struct Swing {
    amplitude: f64,
    period: f64,
    phase_deg: f64,
    sign: f64,
}

impl Path {
    /// Offset from the core and direction of the path (degrees) at a length along it.
    pub fn at(&self, distance_arcsec: f64) -> (SkyOffset, f64) {
        let arc = self.arcs.iter().rev().find(|arc| arc.from <= distance_arcsec);
        let Some(arc) = arc.or(self.arcs.first()) else { return (SkyOffset::default(), 0.0) };
        let (offset, direction_deg) = arc.at(distance_arcsec);
        let Swing { amplitude, period, phase_deg, sign } = self.swing;
        if amplitude <= 0.0 {
            return (offset, direction_deg);
        }
        let wave = 2.0 * std::f64::consts::PI / period;
        let phase = phase_deg.to_radians();
        let (sin, cos) = libm::sincos(wave * distance_arcsec + phase);
        let aside = sign * amplitude * (sin - libm::sin(phase));
        let slope_deg = libm::atan(sign * amplitude * wave * cos).to_degrees();
        let swung = offset.plus(SkyOffset::polar(aside, direction_deg + 90.0));
        (swung, direction_deg + slope_deg)
    }

    /// The first length along the path at which the distance from the core reaches `radius`;
    /// `None` where the path ends nearer.
    pub fn reaching(&self, radius_arcsec: f64) -> Option<f64> {
        const STEPS: usize = 400;
        let radius = |t: f64| self.at(t).0.radius();
        let step = self.length_arcsec / STEPS as f64;
        let end = (1..=STEPS).map(|i| i as f64 * step).find(|&t| radius(t) >= radius_arcsec)?;
        let (mut low, mut high) = (end - step, end);
        for _ in 0..60 {
            let middle = 0.5 * (low + high);
            if radius(middle) >= radius_arcsec {
                high = middle;
            } else {
                low = middle;
            }
        }
        Some(high)
    }
}

/// The made source of one epoch.
#[derive(Clone, Debug)]
pub struct TwinSource {
    /// Everything that shines.
    pub parts: Vec<SkyGaussian>,
    /// The paths of the two sides.
    pub paths: [Path; 2],
    /// Lengths of the two arms along their paths.
    pub arms_arcsec: [f64; 2],
    /// End of each jet along its path.
    pub jet_to_arcsec: [f64; 2],
    /// Distance, where the scenario gives one.
    pub distance: Option<Distance>,
    /// Exponent p of the boost of the smooth jets.
    pub exponent: f64,
    /// Speed of the jets where they begin.
    pub speed: f64,
    /// Speed of the innermost flow.
    pub core_speed: f64,
    jet: JetLaw,
}

/// When and how a source is looked at.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Look {
    /// Frequency in GHz.
    pub frequency_ghz: f64,
    /// Years since the first epoch.
    pub years: f64,
    /// Seed of the irregularities.
    pub seed: u64,
}

/// Why numbers make no source.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum SourceError {
    /// A length in kpc without a distance.
    #[error("arms.length_kpc needs source.redshift or source.distance_mpc to become an angle")]
    NoDistance,
    /// No length at all.
    #[error("no length of the arms: give arms.length_arcsec or arms.length_kpc")]
    NoLength,
    /// A redshift without a distance.
    #[error("source.redshift: {0}")]
    Cosmology(#[from] crate::physics::CosmologyError),
    /// Moving knots without a distance.
    #[error("knots.motion = \"moving\" needs source.redshift or source.distance_mpc")]
    NoMotion,
}

/// Brightness, speed and width along a jet, alike on both sides.
#[derive(Clone, Copy, Debug)]
struct JetLaw {
    start: f64,
    mean_arm: f64,
    fade: f64,
    speed: f64,
    end_speed: f64,
    slowing: (f64, f64),
    widths: (f64, f64),
    width_end: f64,
    width_exponent: f64,
    exponent: f64,
    viewing_angle_deg: f64,
}

impl JetLaw {
    /// Speed at a length along the path.
    fn speed_at(&self, t: f64) -> f64 {
        let share = t / self.mean_arm;
        let (from, to) = self.slowing;
        let done = if to > from { ((share - from) / (to - from)).clamp(0.0, 1.0) } else { 0.0 };
        self.speed + done * (self.end_speed - self.speed)
    }

    /// Brightness per length in the jet's own frame, 1 at the core.
    fn unbeamed(&self, t: f64) -> f64 {
        libm::exp(-self.fade * t / self.mean_arm)
    }

    /// Brightness per length as seen on a side.
    fn seen(&self, side: usize, t: f64) -> f64 {
        self.unbeamed(t) * boost(self.speed_at(t), self.viewing_angle_deg, side, self.exponent)
    }

    /// FWHM across at a length along the path.
    fn width(&self, t: f64) -> f64 {
        let (inner, outer) = self.widths;
        let span = (self.width_end - self.start).max(f64::MIN_POSITIVE);
        let share = ((t - self.start) / span).max(0.0);
        inner + (outer - inner) * libm::pow(share, self.width_exponent)
    }
}

/// The boost δ^p of a side (0 approaching, 1 receding).
fn boost(speed: f64, viewing_angle_deg: f64, side: usize, exponent: f64) -> f64 {
    let angle = if side == 0 { viewing_angle_deg } else { 180.0 - viewing_angle_deg };
    doppler_factor(speed, angle).map_or(0.0, |delta| libm::pow(delta, exponent))
}

/// ∫ f over [a, b] by Simpson's rule on four parts.
fn simpson(f: impl Fn(f64) -> f64, a: f64, b: f64) -> f64 {
    let h = (b - a) / 4.0;
    (f(a) + 4.0 * f(a + h) + 2.0 * f(a + 2.0 * h) + 4.0 * f(b - h) + f(b)) * h / 3.0
}

/// Speed, from a Lorentz factor where one is given.
fn speed(given: f64, lorentz_factor: Option<f64>) -> f64 {
    lorentz_factor.and_then(speed_from_lorentz_factor).unwrap_or(given)
}

/// Two numbers with this mean and ratio.
fn pair(mean: f64, ratio: f64) -> [f64; 2] {
    [2.0 * mean * ratio / (1.0 + ratio), 2.0 * mean / (1.0 + ratio)]
}

/// Builds the source. `beam_minor_arcsec` sets how finely jets are cut: pieces as long as the
/// beam's standard deviation leave ripples of 1e-8.
///
/// # Errors
/// Where numbers that need each other are not all there.
pub fn twin_source(
    parameters: &Parameters,
    beam_minor_arcsec: f64,
    look: &Look,
) -> Result<TwinSource, SourceError> {
    let p = parameters;
    let theta_deg = p.source.viewing_angle_deg;
    let distance = distance(p)?;
    let mean_arm = mean_arm(p, distance)?;
    let by_light = arm_length_ratio(p.arms.advance_speed, theta_deg).unwrap_or(1.0);
    let arms = pair(mean_arm, p.arms.environment_ratio * by_light);
    let jet_to = arms.map(|arm| (p.jet.end_share * arm).max(p.jet.start_arcsec));
    let paths = [0, 1].map(|side| path(p, side, arms[side], jet_to[side]));
    let flow = if p.jet.flow == "blob" { Flow::Blob } else { Flow::Continuous };
    let exponent = flow.exponent(p.jet.spectral_index);
    let jet_speed = speed(p.jet.speed, p.jet.lorentz_factor);
    let jet = JetLaw {
        start: p.jet.start_arcsec,
        mean_arm,
        fade: p.jet.fade,
        speed: jet_speed,
        end_speed: p.jet.end_speed.unwrap_or(jet_speed),
        slowing: (p.jet.slowing_from, p.jet.slowing_to),
        widths: (p.jet.inner_width_arcsec, p.jet.width_arcsec),
        width_end: p.jet.end_share * mean_arm,
        width_exponent: p.jet.width_exponent,
        exponent,
        viewing_angle_deg: theta_deg,
    };
    let mut source = TwinSource {
        parts: Vec::new(),
        paths,
        arms_arcsec: arms,
        jet_to_arcsec: jet_to,
        distance,
        exponent,
        speed: jet_speed,
        core_speed: speed(p.core.speed, p.core.lorentz_factor),
        jet,
    };
    let spectrum = |index: f64| libm::pow(look.frequency_ghz / p.map.frequency_ghz, -index);
    source.add_core(p, spectrum(p.core.spectral_index));
    source.add_jets(p, beam_minor_arcsec, look, spectrum(p.jet.spectral_index))?;
    let steep = spectrum(p.lobes.spectral_index);
    source.add_hotspots(p, steep);
    source.add_lobes(p, look.seed, steep);
    source.add_bridge(p, look.seed, steep);
    source.add_plumes(p, look.seed, steep);
    source.add_outer_lobes(p, look.seed, steep);
    if p.halo.flux_density_mjy > 0.0 {
        let flux = p.halo.flux_density_mjy * steep;
        let width = p.halo.fwhm_arcsec;
        source.add(Part::Halo, None, SkyOffset::default(), flux, (width, width, 0.0));
    }
    Ok(source)
}

/// The distance, from the one given or the redshift.
fn distance(p: &Parameters) -> Result<Option<Distance>, SourceError> {
    Ok(match (p.source.distance_mpc, p.source.redshift) {
        (Some(mpc), _) => Some(Distance::from_distance_mpc(mpc)?),
        (None, Some(z)) => Some(Distance::from_redshift(z, &Cosmology::default())?),
        (None, None) => None,
    })
}

/// Mean projected length of an arm in arcsec.
fn mean_arm(p: &Parameters, distance: Option<Distance>) -> Result<f64, SourceError> {
    match (p.arms.length_arcsec, p.arms.length_kpc, distance) {
        (Some(arcsec), ..) => Ok(arcsec),
        (None, Some(kpc), Some(distance)) => {
            let sine = libm::sin(p.source.viewing_angle_deg.to_radians());
            Ok((kpc * sine / distance.kpc_per_arcsec()).max(1e-9))
        }
        (None, Some(_), None) => Err(SourceError::NoDistance),
        (None, None, _) => Err(SourceError::NoLength),
    }
}

/// The path of a side: straight, bent between two shares of its arm, turned on in its plume.
fn path(p: &Parameters, side: usize, arm: f64, jet_to: f64) -> Path {
    let start_deg = p.source.position_angle_deg + if side == 0 { 0.0 } else { 180.0 };
    // Inversion symmetry turns both sides the same way, mirror symmetry against each other.
    let sign = if side == 1 && p.bend.shape == "mirror" { -1.0 } else { 1.0 };
    let plume = if p.plumes.flux_density_mjy > 0.0 { p.plumes.length_arcsec } else { 0.0 };
    let length_arcsec = arm.max(jet_to + plume);
    let mut turns: Vec<(f64, f64, f64)> = Vec::new();
    let (from, to) = (p.bend.from * arm, p.bend.to * arm);
    if p.bend.shape != "none" && to > from {
        turns.push((from, to, sign * p.bend.angle_deg));
    }
    if plume > 0.0 && p.plumes.turn_deg != 0.0 {
        turns.push((jet_to, jet_to + plume, sign * p.plumes.turn_deg));
    }
    let mut cuts: Vec<f64> = turns.iter().flat_map(|turn| [turn.0, turn.1]).collect();
    cuts.push(0.0);
    cuts.sort_by(f64::total_cmp);
    cuts.dedup();
    let mut arcs: Vec<Arc> = Vec::with_capacity(cuts.len());
    for &from in &cuts {
        let turn_per_arcsec = turns
            .iter()
            .filter(|turn| turn.0 <= from && from < turn.1)
            .map(|turn| turn.2 / (turn.1 - turn.0))
            .sum();
        let (origin, direction_deg) =
            arcs.last().map_or((SkyOffset::default(), start_deg), |arc| arc.at(from));
        arcs.push(Arc { from, origin, direction_deg, turn_per_arcsec });
    }
    let swing = Swing {
        amplitude: p.bend.helix_amplitude_arcsec,
        period: p.bend.helix_period_arcsec,
        phase_deg: p.bend.helix_phase_deg,
        sign,
    };
    Path { arcs, length_arcsec, swing }
}

impl TwinSource {
    /// Speed of the jets at a length along the path.
    pub fn speed_at(&self, distance_arcsec: f64) -> f64 {
        self.jet.speed_at(distance_arcsec)
    }

    /// FWHM across the jets at a length along the path, arcsec, before the beam.
    pub fn jet_width_at(&self, distance_arcsec: f64) -> f64 {
        self.jet.width(distance_arcsec)
    }

    /// Flux density of everything, mJy.
    pub fn total_flux_mjy(&self) -> f64 {
        self.parts.iter().map(|part| part.flux_mjy).sum()
    }

    /// Flux density of one kind of part, on one side where asked, mJy.
    pub fn flux_of_mjy(&self, part: Part, side: Option<usize>) -> f64 {
        self.parts
            .iter()
            .filter(|piece| piece.part == part && (side.is_none() || piece.side == side))
            .map(|piece| piece.flux_mjy)
            .sum()
    }

    fn add(
        &mut self,
        part: Part,
        side: Option<usize>,
        offset: SkyOffset,
        flux_mjy: f64,
        (along_arcsec, across_arcsec, pa_deg): (f64, f64, f64),
    ) {
        if flux_mjy > 0.0 && flux_mjy.is_finite() {
            self.parts.push(SkyGaussian {
                part,
                side,
                offset,
                flux_mjy,
                along_arcsec,
                across_arcsec,
                pa_deg,
            });
        }
    }

    /// The core: both innermost flows boosted with p = 2 + α.
    fn add_core(&mut self, p: &Parameters, spectrum: f64) {
        let exponent = Flow::Continuous.exponent(p.core.spectral_index);
        let theta_deg = p.source.viewing_angle_deg;
        let boosts: f64 =
            [0, 1].map(|side| boost(self.core_speed, theta_deg, side, exponent)).iter().sum();
        let unbeamed = p.core.unbeamed_flux_density_mjy.unwrap_or(0.0) * boosts;
        let flux = p.core.flux_density_mjy.unwrap_or(unbeamed) * spectrum;
        let width = p.core.fwhm_arcsec;
        self.add(Part::Core, None, SkyOffset::default(), flux, (width, width, 0.0));
    }

    /// Smooth jets and their knots.
    fn add_jets(
        &mut self,
        p: &Parameters,
        beam_minor_arcsec: f64,
        look: &Look,
        spectrum: f64,
    ) -> Result<(), SourceError> {
        let (jet, start) = (self.jet, self.jet.start);
        let mut piece = 0.9 * beam_minor_arcsec / FWHM_PER_SIGMA;
        if p.bend.helix_amplitude_arcsec > 0.0 {
            piece = piece.min(p.bend.helix_period_arcsec / 40.0);
        }
        let longest = (self.jet_to_arcsec[0].max(self.jet_to_arcsec[1]) - start).max(0.0);
        piece = piece.max(longest / MOST_PIECES).min(longest.max(1e-12));
        let pieces = |to: f64| {
            let count = ((to - start) / piece).ceil().max(0.0) as usize;
            (0..count).map(move |i| {
                let from = start + i as f64 * piece;
                (from, (from + piece).min(to))
            })
        };
        // Flux of a jet in its own frame per unit of the law's brightness, over the mean arm.
        let sum = |to: f64, f: &dyn Fn(f64) -> f64| -> f64 {
            pieces(to).map(|(a, b)| simpson(f, a, b)).sum()
        };
        let approaching = sum(self.jet_to_arcsec[0], &|t| jet.seen(0, t));
        let own_frame = sum(p.jet.end_share * jet.mean_arm, &|t| jet.unbeamed(t));
        let factor = match (p.jet.flux_density_mjy, p.jet.unbeamed_flux_density_mjy) {
            (Some(seen), _) if approaching > 0.0 => seen / approaching,
            (None, Some(unbeamed)) if own_frame > 0.0 => unbeamed / own_frame,
            _ => return Ok(()),
        } * spectrum;
        let in_knots = if p.knots.count > 0 { p.knots.flux_share } else { 0.0 };
        for side in [0, 1] {
            for (a, b) in pieces(self.jet_to_arcsec[side]) {
                let flux = factor * (1.0 - in_knots) * simpson(|t| jet.seen(side, t), a, b);
                let middle = 0.5 * (a + b);
                let (offset, direction_deg) = self.paths[side].at(middle);
                let shape = (SEGMENT_FWHM * (b - a), jet.width(middle), direction_deg);
                self.add(Part::Jet, Some(side), offset, flux, shape);
            }
        }
        if in_knots > 0.0 {
            self.add_knots(p, look, factor * in_knots * own_frame / p.knots.count as f64)?;
        }
        Ok(())
    }

    /// Knots, evenly spaced over the mean arm at the first epoch; `flux` is that of one in its
    /// own frame. Moving ones are blobs: they run with the flow, and the receding one of a pair
    /// is seen nearer by the light travel time.
    fn add_knots(&mut self, p: &Parameters, look: &Look, flux: f64) -> Result<(), SourceError> {
        let jet = self.jet;
        let theta_deg = p.source.viewing_angle_deg;
        let moving = p.knots.motion == "moving";
        let end = p.jet.end_share * jet.mean_arm;
        let (moved, exponent) = if moving {
            let distance = self.distance.ok_or(SourceError::NoMotion)?;
            let speed = apparent_speed(jet.speed, theta_deg).unwrap_or(0.0);
            let motion = proper_motion_mas_per_year(speed, distance.transverse_comoving_mpc());
            let blob = Flow::Blob.exponent(p.jet.spectral_index);
            (motion.unwrap_or(0.0) * 1e-3 * look.years, blob)
        } else {
            (0.0, jet.exponent)
        };
        let behind = 1.0 / arm_length_ratio(jet.speed, theta_deg).unwrap_or(1.0);
        for i in 0..p.knots.count {
            let share = (i as f64 + 0.5) / p.knots.count as f64;
            let ahead = jet.start + share * (end - jet.start) + moved;
            for side in [0, 1] {
                let t = if moving && side == 1 { ahead * behind } else { ahead };
                if t > self.jet_to_arcsec[side] {
                    continue;
                }
                let weight = jet.unbeamed(t) * boost(jet.speed_at(t), theta_deg, side, exponent);
                let (offset, _) = self.paths[side].at(t);
                let width = p.knots.fwhm_arcsec;
                self.add(Part::Knot, Some(side), offset, flux * weight, (width, width, 0.0));
            }
        }
        Ok(())
    }

    fn add_hotspots(&mut self, p: &Parameters, spectrum: f64) {
        let fluxes = pair(p.hotspots.flux_density_mjy * spectrum, p.hotspots.flux_ratio);
        for side in [0, 1] {
            let (offset, _) = self.paths[side].at(self.arms_arcsec[side]);
            let width = p.hotspots.fwhm_arcsec;
            self.add(Part::Hotspot, Some(side), offset, fluxes[side], (width, width, 0.0));
        }
    }

    /// Lobes fall back from the ends and brighten towards them.
    fn add_lobes(&mut self, p: &Parameters, seed: u64, spectrum: f64) {
        let fluxes = pair(p.lobes.flux_density_mjy * spectrum, p.lobes.flux_ratio);
        let width = p.lobes.width_arcsec;
        for side in [0, 1] {
            let arm = self.arms_arcsec[side];
            let reach = p.lobes.length_share * arm;
            // The head's edge, not its middle, lies near the hot spot.
            let head = arm - (0.25 * width).min(0.5 * reach);
            let cloud = Cloud {
                part: Part::Lobe,
                side: Some(side),
                from: arm - reach,
                to: head,
                flux: fluxes[side],
                seed: stream_seed(seed, side as u64, "lobe"),
                texture: p.lobes.texture,
            };
            self.add_cloud(&cloud, |share| (0.3 + 0.7 * share, width));
        }
    }

    /// The bridge lies over both arms and the core.
    fn add_bridge(&mut self, p: &Parameters, seed: u64, spectrum: f64) {
        let total: f64 = self.arms_arcsec.iter().sum();
        for side in [0, 1] {
            let cloud = Cloud {
                part: Part::Bridge,
                side: Some(side),
                from: 0.0,
                to: 0.9 * self.arms_arcsec[side],
                flux: p.bridge.flux_density_mjy * spectrum * self.arms_arcsec[side] / total,
                seed: stream_seed(seed, side as u64, "bridge"),
                texture: p.lobes.texture,
            };
            self.add_cloud(&cloud, |_| (1.0, p.bridge.width_arcsec));
        }
    }

    /// Plumes widen and fade beyond the jets' ends.
    fn add_plumes(&mut self, p: &Parameters, seed: u64, spectrum: f64) {
        let fluxes = pair(p.plumes.flux_density_mjy * spectrum, p.plumes.flux_ratio);
        let widening = 2.0 * libm::tan(0.5 * p.plumes.opening_deg.to_radians());
        for side in [0, 1] {
            let from = self.jet_to_arcsec[side];
            let cloud = Cloud {
                part: Part::Plume,
                side: Some(side),
                from,
                to: from + p.plumes.length_arcsec,
                flux: fluxes[side],
                seed: stream_seed(seed, side as u64, "plume"),
                texture: p.lobes.texture,
            };
            let width = self.jet.width(from).max(0.02 * p.plumes.length_arcsec);
            self.add_cloud(&cloud, |share| {
                let fading = libm::exp(-p.plumes.fade * share);
                (fading, width + widening * share * p.plumes.length_arcsec)
            });
        }
    }

    /// A chain of Gaussians along a side's path, irregular by its texture. `law` gives
    /// brightness per length (any scale) and width for a share of the way.
    fn add_cloud(&mut self, cloud: &Cloud, law: impl Fn(f64) -> (f64, f64)) {
        let length = cloud.to - cloud.from;
        if cloud.flux <= 0.0 || length <= 0.0 || cloud.side.is_none() {
            return;
        }
        let side = cloud.side.unwrap_or(0);
        let mut draws = Draws::new(cloud.seed);
        let mut pieces = Vec::new();
        let mut share = 0.0;
        while share < 1.0 && pieces.len() < 4000 {
            let (_, width) = law(share);
            let step = (0.35 * width / length).clamp(1.0 / 2000.0, 0.25).min(1.0 - share);
            let middle = share + 0.5 * step;
            let (brightness, width) = law(middle);
            let texture = cloud.texture;
            let weight = brightness * step * libm::exp(0.7 * texture * draws.normal());
            let aside = 0.22 * texture * width * draws.normal();
            let across = width * (1.0 - 0.45 * texture * draws.uniform());
            let (offset, direction_deg) = self.paths[side].at(cloud.from + middle * length);
            let offset = offset.plus(SkyOffset::polar(aside, direction_deg + 90.0));
            let along = (SEGMENT_FWHM * step * length).max(0.4 * width).min(width);
            pieces.push((offset, weight, (along, across, direction_deg)));
            share += step;
        }
        let sum: f64 = pieces.iter().map(|piece| piece.1).sum();
        for (offset, weight, shape) in pieces {
            self.add(cloud.part, cloud.side, offset, cloud.flux * weight / sum, shape);
        }
    }

    /// An older pair of lobes farther out, on an axis that may be turned.
    fn add_outer_lobes(&mut self, p: &Parameters, seed: u64, spectrum: f64) {
        let fluxes = pair(p.outer.flux_density_mjy * spectrum, p.outer.flux_ratio);
        let width = p.outer.width_arcsec;
        for side in [0, 1] {
            let pa_deg = p.source.position_angle_deg
                + p.outer.turn_deg
                + if side == 0 { 0.0 } else { 180.0 };
            let far = p.outer.length_ratio * self.arms_arcsec[side];
            let mut draws = Draws::new(stream_seed(seed, side as u64, "outer"));
            let weights: Vec<f64> =
                (0..5).map(|_| libm::exp(0.7 * p.lobes.texture * draws.normal())).collect();
            let sum: f64 = weights.iter().sum();
            for (i, weight) in weights.iter().enumerate() {
                let along = far - (0.4 + 0.4 * i as f64) * width;
                let aside = 0.2 * p.lobes.texture * width * draws.normal();
                let offset = SkyOffset::polar(along.max(0.0), pa_deg)
                    .plus(SkyOffset::polar(aside, pa_deg + 90.0));
                let shape = (0.7 * width, width, pa_deg);
                self.add(Part::OuterLobe, Some(side), offset, fluxes[side] * weight / sum, shape);
            }
        }
    }
}

/// Diffuse emission along a side's path.
struct Cloud {
    part: Part,
    side: Option<usize>,
    from: f64,
    to: f64,
    flux: f64,
    seed: u64,
    texture: f64,
}
