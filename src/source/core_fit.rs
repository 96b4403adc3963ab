//! The core's flux and place: a beam-shaped component, fitted together with what it stands on.
//!
//! The first look at a peak puts it on a sloping plane ([`fit_point`]). Once the ridges are
//! traced the core is fitted again together with its jets ([`fit_core`]): each a line of
//! emission that begins at the core and follows its ridge. What is not known of a jet (how its
//! brightness runs along it, its exact direction) and of the core (whether it is a little
//! resolved) enters as further terms of expected size 0, whose spread is read off the map: a
//! Gaussian prior. The answer is then linear in the pixels, and its error has two parts, both
//! exact for such an estimator: the noise, under the measured correlation, and what the terms
//! of their spread would add to it.

use crate::map::beam::Beam;
use crate::map::geometry::LocalFrame;
use crate::noise::{ApertureWeights, Noise, NoiseCorrelation};
use crate::ridge::Ridge;
use crate::units::{Pixel, SkyOffset};
use crate::window::Window;

/// Variances and covariance of a position, squared sky units.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct PositionError {
    /// Variance towards east.
    pub east_east: f64,
    /// Variance towards north.
    pub north_north: f64,
    /// Covariance of the two.
    pub east_north: f64,
}

impl PositionError {
    /// The same error along every axis.
    pub fn round(sigma: f64) -> Self {
        Self { east_east: sigma * sigma, north_north: sigma * sigma, east_north: 0.0 }
    }

    /// 1σ along an axis, the mean over all directions.
    pub fn sigma(&self) -> f64 {
        (0.5 * (self.east_east + self.north_north)).max(0.0).sqrt()
    }

    /// Correlation of the two axes, −1 to 1.
    pub fn correlation(&self) -> f64 {
        let scale = (self.east_east * self.north_north).sqrt();
        if scale > 0.0 { (self.east_north / scale).clamp(-1.0, 1.0) } else { 0.0 }
    }
}

/// A beam-shaped component and what it stands on, fitted at one place.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct PointFit {
    /// Fitted position on the map.
    pub pixel: Pixel,
    /// Peak of the beam-shaped part, map unit.
    pub peak: f64,
    /// Its error, map unit: noise, and what is not known of the emission under it.
    pub peak_sigma: f64,
    /// The part of that from the map's correlated noise, map unit.
    pub peak_noise: f64,
    /// Brightness under it, map unit.
    pub base: f64,
    /// Error of the position.
    pub position: PositionError,
    /// rms of the fit's residuals, map unit.
    pub residual: f64,
}

/// What lies under a core is as bright as this share of it: blended.
const BLENDED_BASE: f64 = 0.5;
/// What is not known of the emission under a core makes this share of it unsure: blended.
const BLENDED_UNSURE: f64 = 0.1;

impl PointFit {
    /// Whether what lies under the component weighs as much as itself, or could not be told from
    /// it (a first knot within a beam, say) to a tenth, noise apart.
    pub fn is_blended(&self) -> bool {
        let unknown = (self.peak_sigma.powi(2) - self.peak_noise.powi(2)).max(0.0).sqrt();
        self.base > BLENDED_BASE * self.peak || unknown > BLENDED_UNSURE * self.peak
    }
}

/// What is known of the place before the fit.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Placing {
    /// Nothing: the fit finds it near the start.
    Free,
    /// The start is the place to this 1σ along each axis, sky units.
    Near(f64),
}

/// A place that is not to move: known to a millionth of a beam.
const FIXED_BEAMS: f64 = 1e-6;

impl Placing {
    /// The place is the start itself.
    pub fn fixed(beam: &Beam) -> Self {
        Self::Near(FIXED_BEAMS * beam.minor)
    }
}

/// Number of the column of the core's peak, and of the first of the two of its shift.
const PEAK: usize = 1;
const SHIFT: usize = 2;
/// A Gaussian's integral over its FWHM and peak: √(π / (4 ln 2)).
const LINE_PER_PEAK: f64 = 1.064_467_019_431_226_2;
/// The core is fitted on the pixels within this many beams with jets, without in one.
const JET_REACH_BEAMS: f64 = 1.25;
/// Spacing of the points that make a jet's line, in beams: its ripple is 10⁻⁷.
const LINE_STEP_BEAMS: f64 = 0.25;
/// A jet's line goes on this many beams beyond the fitted pixels.
const LINE_BEYOND_BEAMS: f64 = 0.8;
/// Places of the beam-shaped pieces by which a jet differs from a smooth line, in beams.
const PIECES_BEAMS: [f64; 3] = [0.25, 0.75, 1.25];
/// Pieces this many beams apart are alike to 1/e.
const PIECES_ALIKE_BEAMS: f64 = 0.5;
/// First guess of the pieces' spread, as a share of the jet's flux in half a beam.
const PIECES_SHARE: f64 = 0.3;
/// Spread of the change of a jet's brightness along a beam, as a share of it.
const RAMP_SHARE: f64 = 0.3;
/// Spread of a jet's direction at the core about that of its ridge, radian.
const BEARING_SPREAD: f64 = 0.1;
/// Spread of the core's squared size over the beam's: sizes up to a fifth of the beam.
const SIZE_SPREAD: f64 = 0.04;
/// White noise that stands in for correlated noise when noise is weighed against the spread of
/// the terms: this share of its power at the largest scales.
const NOISE_SHARE: f64 = 0.2;
/// Rounds in which the spread of the pieces is read off the map.
const SPREAD_ROUNDS: usize = 8;
/// Steps of the fit at the most, and the step of the place (beams) below which it has settled.
const MOST_STEPS: usize = 6;
const SETTLED_BEAMS: f64 = 1e-7;
/// Longest step of the place, and the farthest it may go from the start, in beams.
const LONGEST_STEP_BEAMS: f64 = 0.3;
const FARTHEST_BEAMS: f64 = 1.0;

/// What the fit is made on.
#[derive(Clone, Copy)]
pub struct FitContext<'a> {
    /// The map around the source.
    pub window: &'a Window,
    /// The beam.
    pub beam: &'a Beam,
    /// Any local frame of the map.
    pub frame: &'a LocalFrame,
    /// Noise and its correlation.
    pub noise: (&'a Noise, &'a NoiseCorrelation),
}

/// A beam-shaped component on a sloping plane, inside one beam of the start. The plane takes
/// jet and lobe emission off only as far as it is smooth over two beams. The error of the
/// position is that of the noise along each axis, not of the slope.
pub fn fit_point(context: &FitContext, start: Pixel, placing: Placing) -> Option<PointFit> {
    settle(context, start, placing, &[])?.point(context, false)
}

/// The component together with the jets that start at it. `ridges` are traced from `origin`
/// and reach beyond one beam; without any this is [`fit_point`] with the position's full error.
pub fn fit_core(
    context: &FitContext,
    start: Pixel,
    placing: Placing,
    ridges: &[&Ridge],
    origin: Pixel,
) -> Option<PointFit> {
    let jets: Vec<Jet> = ridges.iter().map(|ridge| Jet { ridge, origin }).collect();
    settle(context, start, placing, &jets)?.point(context, true)
}

/// A jet whose ridge was traced from the origin.
struct Jet<'a> {
    ridge: &'a Ridge,
    origin: Pixel,
}

impl Jet<'_> {
    /// Direction from a centre near the ridge's origin to the ridge at a distance; within a
    /// beam of the core, where the core hides the ridge, to where it is a beam away.
    fn bearing_deg(&self, context: &FitContext, centre: Pixel, distance: f64) -> f64 {
        let distance = distance.max(context.beam.major);
        let on_ridge = SkyOffset::polar(distance, self.ridge.bearing_at(distance));
        let shift = context.frame.difference(self.origin, centre);
        on_ridge.minus(shift).position_angle_deg()
    }
}

/// How wide a term's coefficient spreads about 0 before the fit.
#[derive(Clone, Copy, PartialEq)]
enum Spread {
    /// No bound.
    Free,
    /// A standard deviation.
    Width(f64),
    /// A piece of this jet, at this place of [`PIECES_BEAMS`].
    Piece(usize, usize),
}

/// The terms of the fit over its pixels, about one centre.
struct Terms {
    columns: Vec<Vec<f64>>,
    spreads: Vec<Spread>,
}

impl Terms {
    fn add(&mut self, column: Vec<f64>, spread: Spread) -> usize {
        self.columns.push(column);
        self.spreads.push(spread);
        self.columns.len() - 1
    }
}

/// The fit as it stands.
struct Solution {
    cells: Vec<(usize, usize)>,
    terms: Terms,
    centre: Pixel,
    /// Spread of each jet's pieces, map unit.
    pieces: Vec<f64>,
    weight: f64,
    normal: Vec<Vec<f64>>,
    inverse: Vec<Vec<f64>>,
    coefficients: Vec<f64>,
    /// Columns of the jets' lines.
    lines: Vec<usize>,
    residual: f64,
}

/// Gauss–Newton steps of the place, each a linear fit of all terms.
fn settle(context: &FitContext, start: Pixel, placing: Placing, jets: &[Jet]) -> Option<Solution> {
    let FitContext { window, beam, frame, noise: (_, correlation) } = *context;
    let cells = cells_around(context, start, if jets.is_empty() { 1.0 } else { JET_REACH_BEAMS });
    let offsets: Vec<Pixel> = cells.iter().map(|&(r, c)| window.pixel(r, c)).collect();
    let values: Vec<f64> = cells.iter().map(|&(r, c)| window.brightness[[r, c]]).collect();
    let rms = window.rms_at(start)?.max(f64::MIN_POSITIVE);
    let weight = 1.0 / (rms * rms * (NOISE_SHARE * correlation.sum()).max(1.0));
    let mut centre = start;
    let mut last: Option<Solution> = None;
    for step in 0..MOST_STEPS {
        let (terms, lines) = terms_about(context, &offsets, centre, placing, jets, last.as_ref());
        if cells.len() < terms.columns.len().min(6) + 2 {
            return None;
        }
        let (normal, right) = normal_equations(&terms.columns, &values, weight);
        // Where a place is known the prior pulls the shift towards it.
        let mut pull = vec![0.0; right.len()];
        if let (Spread::Width(width), Some(last)) = (terms.spreads[SHIFT], &last) {
            let back = frame.difference(centre, start).times(last.coefficients[PEAK]);
            (pull[SHIFT], pull[SHIFT + 1]) =
                (back.east / (width * width), back.north / (width * width));
        }
        let right: Vec<f64> = right.iter().zip(&pull).map(|(a, b)| a + b).collect();
        let first_pieces = last.as_ref().map_or(Vec::new(), |last| last.pieces.clone());
        let mut solution = Solution {
            residual: 0.0,
            centre,
            pieces: first_pieces,
            weight,
            inverse: Vec::new(),
            coefficients: Vec::new(),
            cells: Vec::new(),
            normal,
            terms,
            lines,
        };
        solution.solve(&right, rms)?;
        if step == 0 {
            solution.guess_pieces();
        } else if !jets.is_empty() {
            for _ in 1..SPREAD_ROUNDS {
                solution.read_pieces(rms);
                solution.solve(&right, rms)?;
            }
        }
        let peak = solution.coefficients[PEAK];
        if peak <= 0.0 {
            return None;
        }
        let shift = SkyOffset::new(
            solution.coefficients[SHIFT] / peak,
            solution.coefficients[SHIFT + 1] / peak,
        );
        let size = beam_distance(beam, shift);
        let shift =
            if size > LONGEST_STEP_BEAMS { shift.times(LONGEST_STEP_BEAMS / size) } else { shift };
        centre = frame.moved(centre, shift);
        if beam_distance(beam, frame.difference(start, centre)) > FARTHEST_BEAMS {
            return None;
        }
        solution.centre = centre;
        let enough = if jets.is_empty() { 1 } else { 3 };
        let settled = size < SETTLED_BEAMS || (!jets.is_empty() && size < 1e-3);
        last = Some(solution);
        if step + 1 >= enough && settled {
            break;
        }
    }
    let mut solution = last?;
    solution.residual = solution.residual_rms(&values);
    solution.cells = cells;
    Some(solution)
}

/// The terms of the fit about a centre; jets' details only once a first fit is there.
fn terms_about(
    context: &FitContext,
    pixels: &[Pixel],
    centre: Pixel,
    placing: Placing,
    jets: &[Jet],
    last: Option<&Solution>,
) -> (Terms, Vec<usize>) {
    let FitContext { beam, frame, .. } = *context;
    let offsets: Vec<SkyOffset> = pixels.iter().map(|p| frame.difference(centre, *p)).collect();
    let core: Vec<f64> = offsets.iter().map(|d| beam.profile(*d)).collect();
    let moved = |axis: SkyOffset| -> Vec<f64> {
        let pairs = offsets.iter().zip(&core);
        pairs.map(|(d, g)| -beam.log_gradient(*d).dot(axis) * g).collect()
    };
    // The first step does not know the peak yet: it leaves the place free and is taken back by
    // the later ones.
    let shift_spread = match (placing, last) {
        (Placing::Near(sigma), Some(last)) => Spread::Width(sigma * last.coefficients[PEAK]),
        (Placing::Near(sigma), None) => {
            let brightest = context
                .window
                .bilinear(centre)
                .map_or(0.0, f64::abs)
                .max(context.window.rms_at(centre).unwrap_or(0.0));
            Spread::Width(sigma * brightest.max(f64::MIN_POSITIVE))
        }
        (Placing::Free, _) => Spread::Free,
    };
    let mut terms = Terms { columns: Vec::new(), spreads: Vec::new() };
    terms.add(vec![1.0; pixels.len()], Spread::Free);
    terms.add(core.clone(), Spread::Free);
    terms.add(moved(SkyOffset::new(1.0, 0.0)), shift_spread);
    terms.add(moved(SkyOffset::new(0.0, 1.0)), shift_spread);
    if jets.is_empty() {
        terms.add(offsets.iter().map(|d| d.east / beam.major).collect(), Spread::Free);
        terms.add(offsets.iter().map(|d| d.north / beam.major).collect(), Spread::Free);
        return (terms, Vec::new());
    }
    if let Some(last) = last {
        let wider = offsets.iter().zip(&core).map(|(d, g)| broadened(beam, *d) * g).collect();
        terms.add(wider, Spread::Width(SIZE_SPREAD * last.coefficients[PEAK]));
    }
    let mut lines = Vec::new();
    for (index, jet) in jets.iter().enumerate() {
        let outwards = jet.bearing_deg(context, centre, 0.0);
        let unit = beam.reach_along(outwards);
        let at = |beams: f64, turn_deg: f64| {
            let bearing = jet.bearing_deg(context, centre, beams * unit) + turn_deg;
            SkyOffset::polar(beams * unit, bearing)
        };
        let line = |turn_deg: f64| -> [Vec<f64>; 2] {
            let count = ((JET_REACH_BEAMS + LINE_BEYOND_BEAMS) / LINE_STEP_BEAMS) as usize;
            let mut sums = [vec![0.0; pixels.len()], vec![0.0; pixels.len()]];
            for k in 0..count {
                let beams = (k as f64 + 0.5) * LINE_STEP_BEAMS;
                let point = at(beams, turn_deg);
                for (i, d) in offsets.iter().enumerate() {
                    let b = beam.profile(d.minus(point)) * LINE_STEP_BEAMS / LINE_PER_PEAK;
                    sums[0][i] += b;
                    sums[1][i] += b * beams;
                }
            }
            sums
        };
        let [level, ramp] = line(0.0);
        lines.push(terms.add(level, Spread::Free));
        let Some(last) = last else { continue };
        let brightness = last.coefficients[last.lines[index]].abs();
        let turn_deg = (0.5 * BEARING_SPREAD).to_degrees();
        let ([right, _], [left, _]) = (line(turn_deg), line(-turn_deg));
        let turned = right.iter().zip(&left).map(|(a, b)| (a - b) / BEARING_SPREAD).collect();
        terms.add(turned, Spread::Width(BEARING_SPREAD * brightness));
        terms.add(ramp, Spread::Width(RAMP_SHARE * brightness));
        for (place, &beams) in PIECES_BEAMS.iter().enumerate() {
            let point = at(beams, 0.0);
            let piece = offsets.iter().map(|d| beam.profile(d.minus(point))).collect();
            terms.add(piece, Spread::Piece(index, place));
        }
    }
    (terms, lines)
}

/// Change of a beam-shaped component's logarithm when a round source of FWHM θ blurs it, per
/// (θ/√(major·minor))²: ½ θ²/(8 ln 2) times the Laplacian. The component's flux stays.
fn broadened(beam: &Beam, offset: SkyOffset) -> f64 {
    let eight_ln2 = 8.0 * std::f64::consts::LN_2;
    let slope = beam.log_gradient(offset);
    let trace = eight_ln2 * (beam.major.powi(-2) + beam.minor.powi(-2));
    0.5 * beam.major * beam.minor / eight_ln2 * (slope.dot(slope) - trace)
}

/// Length of an offset in beams: its length over that of the beam's cut along it.
fn beam_distance(beam: &Beam, offset: SkyOffset) -> f64 {
    let radius = offset.radius();
    if radius > 0.0 { radius / beam.reach_along(offset.position_angle_deg()) } else { 0.0 }
}

/// Usable cells within this many beams of a place, at least two pixels around.
fn cells_around(context: &FitContext, centre: Pixel, beams: f64) -> Vec<(usize, usize)> {
    let FitContext { window, beam, frame, .. } = *context;
    let reach_px = (beams * beam.major / frame.mean_scale()).max(2.0);
    let mut cells = cells_within(window, centre, reach_px);
    cells.retain(|&(r, c)| {
        let at = window.pixel(r, c);
        at.distance_px(centre) <= 2.0 || beam_distance(beam, frame.difference(centre, at)) <= beams
    });
    cells
}

impl Solution {
    /// Covariance of the terms with a bound before the fit; 0 for the others.
    fn spread_matrix(&self, rms: f64) -> Vec<Vec<f64>> {
        let n = self.terms.spreads.len();
        let least = 1e-3 * rms;
        let mut matrix = vec![vec![0.0; n]; n];
        for (i, a) in self.terms.spreads.iter().enumerate() {
            match *a {
                Spread::Free => {}
                Spread::Width(width) => matrix[i][i] = width.max(f64::MIN_POSITIVE).powi(2),
                Spread::Piece(jet, place) => {
                    for (j, b) in self.terms.spreads.iter().enumerate() {
                        if let Spread::Piece(other, second) = *b
                            && other == jet
                        {
                            let spread = self.pieces[jet].max(least);
                            matrix[i][j] = spread * spread * alike(place, second);
                        }
                    }
                }
            }
        }
        matrix
    }

    /// The coefficients, under the spread as it stands.
    fn solve(&mut self, right: &[f64], rms: f64) -> Option<()> {
        let mut matrix = self.normal.clone();
        let precisions = piece_precisions()?;
        for (i, a) in self.terms.spreads.iter().enumerate() {
            match *a {
                Spread::Free => {}
                Spread::Width(width) => matrix[i][i] += width.max(1e-150).powi(-2),
                Spread::Piece(jet, place) => {
                    let spread = self.pieces[jet].max(1e-3 * rms);
                    for (j, b) in self.terms.spreads.iter().enumerate() {
                        if let Spread::Piece(other, second) = *b
                            && other == jet
                        {
                            matrix[i][j] += precisions[place][second] / (spread * spread);
                        }
                    }
                }
            }
        }
        self.inverse = invert_symmetric(&matrix)?;
        let rows = self.inverse.iter();
        self.coefficients =
            rows.map(|row| row.iter().zip(right).map(|(a, b)| a * b).sum()).collect();
        self.coefficients.iter().all(|c: &f64| c.is_finite()).then_some(())
    }

    /// A first spread of the pieces: a share of what half a beam of the jet's line shines, or
    /// of its error where that is more.
    fn guess_pieces(&mut self) {
        let share = PIECES_SHARE * 0.5 / LINE_PER_PEAK;
        self.pieces = self
            .lines
            .iter()
            .map(|&k| share * self.coefficients[k].max(self.inverse[k][k].sqrt()))
            .collect();
    }

    /// The spread of the pieces as the fit shows it: one round of expectation and maximisation
    /// (Dempster, Laird & Rubin 1977, J. R. Stat. Soc. B 39, 1).
    fn read_pieces(&mut self, rms: f64) {
        let Some(precisions) = piece_precisions() else { return };
        for jet in 0..self.pieces.len() {
            let columns: Vec<(usize, usize)> = self
                .terms
                .spreads
                .iter()
                .enumerate()
                .filter_map(|(i, spread)| match *spread {
                    Spread::Piece(own, place) if own == jet => Some((i, place)),
                    _ => None,
                })
                .collect();
            let mut sum = 0.0;
            for &(i, a) in &columns {
                for &(j, b) in &columns {
                    let second = self.coefficients[i] * self.coefficients[j] + self.inverse[i][j];
                    sum += precisions[a][b] * second;
                }
            }
            let mean = sum / columns.len().max(1) as f64;
            self.pieces[jet] = mean.max(0.0).sqrt().max(1e-3 * rms);
        }
    }

    fn residual_rms(&self, values: &[f64]) -> f64 {
        let columns = &self.terms.columns;
        let squares: f64 = values
            .iter()
            .enumerate()
            .map(|(i, v)| {
                let model: f64 =
                    columns.iter().zip(&self.coefficients).map(|(x, c)| x[i] * c).sum();
                (v - model).powi(2)
            })
            .sum();
        (squares / values.len().saturating_sub(columns.len()).max(1) as f64).sqrt()
    }

    /// The weights with which the pixels enter one coefficient.
    fn estimator(&self, index: usize) -> Vec<f64> {
        let row = &self.inverse[index];
        let columns = &self.terms.columns;
        (0..self.cells.len())
            .map(|i| self.weight * columns.iter().zip(row).map(|(x, a)| x[i] * a).sum::<f64>())
            .collect()
    }

    /// What the component is, with its errors; the position's from all terms where `full`.
    fn point(&self, context: &FitContext, full: bool) -> Option<PointFit> {
        let FitContext { window, noise: (noise, correlation), .. } = *context;
        let variance = |weights: &[f64]| -> Option<f64> {
            let cells = self.cells.iter().zip(weights);
            let weights = ApertureWeights::from_cells(
                cells.map(|(&(r, c), &w)| (window.x0 + c, window.y0 + r, w)),
            )?;
            Some(correlation.aperture_variance(&weights, noise).max(0.0))
        };
        let rms = window.rms_at(self.centre).unwrap_or(0.0);
        let spread = self.spread_matrix(rms);
        // How each coefficient answers to each term: 1 to itself where nothing bounds it.
        let response = |index: usize| -> Vec<f64> {
            let n = self.terms.spreads.len();
            (0..n)
                .map(|j| {
                    let through: f64 =
                        (0..n).map(|k| self.inverse[index][k] * self.normal[k][j]).sum();
                    through - f64::from(u8::from(index == j))
                })
                .collect()
        };
        let unknown = |a: &[f64], b: &[f64]| -> f64 {
            let row = |i: usize| spread[i].iter().zip(b).map(|(s, y)| s * y).sum::<f64>();
            a.iter().enumerate().map(|(i, x)| x * row(i)).sum()
        };
        let peak = self.coefficients[PEAK];
        let (weights, answer) = (self.estimator(PEAK), response(PEAK));
        let noise_variance = variance(&weights)?;
        let peak_variance = noise_variance + unknown(&answer, &answer).max(0.0);
        let peak_sigma = peak_variance.sqrt();
        let position = if full {
            let axes = [self.estimator(SHIFT), self.estimator(SHIFT + 1)];
            let answers = [response(SHIFT), response(SHIFT + 1)];
            let both: Vec<f64> = axes[0].iter().zip(&axes[1]).map(|(a, b)| a + b).collect();
            let (east, north) = (variance(&axes[0])?, variance(&axes[1])?);
            let cross = 0.5 * (variance(&both)? - east - north);
            let over = (peak * peak).max(f64::MIN_POSITIVE);
            PositionError {
                east_east: (east + unknown(&answers[0], &answers[0]).max(0.0)) / over,
                north_north: (north + unknown(&answers[1], &answers[1]).max(0.0)) / over,
                east_north: (cross + unknown(&answers[0], &answers[1])) / over,
            }
        } else {
            let signal = peak / peak_sigma.max(f64::MIN_POSITIVE);
            PositionError::round(crate::extent::position_sigma(context.beam.mean_fwhm(), signal))
        };
        // A half-line stands at half its brightness at its start.
        let jets: f64 = self.lines.iter().map(|&k| 0.5 * self.coefficients[k]).sum();
        Some(PointFit {
            pixel: self.centre,
            peak,
            peak_sigma,
            peak_noise: noise_variance.sqrt(),
            base: self.coefficients[0] + jets,
            position,
            residual: self.residual,
        })
    }
}

/// How alike two pieces of a jet are.
fn alike(a: usize, b: usize) -> f64 {
    (-(PIECES_BEAMS[a] - PIECES_BEAMS[b]).abs() / PIECES_ALIKE_BEAMS).exp()
}

/// The inverse of the pieces' correlation.
fn piece_precisions() -> Option<Vec<Vec<f64>>> {
    let n = PIECES_BEAMS.len();
    let matrix: Vec<Vec<f64>> = (0..n).map(|a| (0..n).map(|b| alike(a, b)).collect()).collect();
    invert_symmetric(&matrix)
}

/// Normal matrix and right side of a least-squares fit with equal weights.
fn normal_equations(
    columns: &[Vec<f64>],
    values: &[f64],
    weight: f64,
) -> (Vec<Vec<f64>>, Vec<f64>) {
    let dot = |a: &[f64], b: &[f64]| weight * a.iter().zip(b).map(|(x, y)| x * y).sum::<f64>();
    let n = columns.len();
    let mut normal = vec![vec![0.0; n]; n];
    for i in 0..n {
        for j in 0..=i {
            let sum = dot(&columns[i], &columns[j]);
            normal[i][j] = sum;
            normal[j][i] = sum;
        }
    }
    (normal, columns.iter().map(|column| dot(column, values)).collect())
}

/// Usable cells of the window within a distance of a map position.
pub(super) fn cells_within(window: &Window, centre: Pixel, radius_px: f64) -> Vec<(usize, usize)> {
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
