//! The source on the map: which regions belong to it, its contour, peaks, core, ridges and
//! sides, in the order in which each needs the one before.

pub mod associate;
pub mod core;
pub mod core_fit;
#[cfg(test)]
mod core_tests;
pub mod hotspot;
pub mod sides;

use image::{GrayImage, Luma};
use imageproc::region_labelling::{Connectivity, connected_components};
use ndarray::Array2;

use crate::contour::{contour_lines, farthest_pair};
use crate::grid::Grid;
use crate::map::beam::Beam;
use crate::map::geometry::{LocalFrame, SkyGeometry};
use crate::noise::{Noise, NoiseCorrelation};
use crate::record::CoreBasis;
use crate::regions::{self, Region, local_maxima, region_mask};
use crate::ridge::{Ridge, RidgeContext, trace_ridges};
use crate::units::Pixel;
use crate::window::Window;

use self::associate::SourceRegions;
use self::core::{Core, HOST_SIGMA_BEAMS, KnownCore, Peak, choose_core, is_detected};
use self::core_fit::{FitContext, Placing, PointFit, fit_core};
use self::sides::{FeatureInput, SideFeatures, find_features, side_of};

/// What the source stages need to know of the map.
#[derive(Clone, Copy)]
pub struct SourceInput<'a> {
    /// Brightness, map unit.
    pub grid: &'a dyn Grid,
    /// Noise model.
    pub noise: &'a Noise,
    /// Correlation of the noise.
    pub correlation: &'a NoiseCorrelation,
    /// Geometry of the map.
    pub geometry: &'a SkyGeometry,
    /// Working beam, plane units.
    pub beam: &'a Beam,
    /// All regions of the map.
    pub regions: &'a [Region],
    /// The source's regions.
    pub chosen: &'a SourceRegions,
    /// What the observer knows of the core.
    pub known: KnownCore,
    /// Direction of the jet side where the observer knows it.
    pub jet_side_pa_deg: Option<f64>,
    /// Lowest level the contour may have, map unit.
    pub least_level: f64,
    /// Threshold of the outline in rms.
    pub outline_sigma: f64,
    /// Normal deviate of the limits' confidence.
    pub z_confidence: f64,
}

/// The source, from contour to sides.
#[derive(Clone, Debug)]
pub struct SourceModel {
    /// The map around the source, background removed.
    pub window: Window,
    /// The same with the core's beam-shaped component taken off.
    pub coreless: Window,
    /// Level of the contour, map unit.
    pub level: f64,
    /// Points of the contour.
    pub contour: Vec<Pixel>,
    /// Whether the contour's outer parts meet the map's edge or a blank patch.
    pub cut_off: bool,
    /// The same for each side.
    pub side_cut: [bool; 2],
    /// The two contour points farthest apart.
    pub ends: [Pixel; 2],
    /// Local maxima, brightest first.
    pub peaks: Vec<Peak>,
    /// The highest of them; the regions' brightest pixel where none stands out.
    pub peak: Peak,
    /// The core.
    pub core: Core,
    /// Local frame about the core, or about the flux-weighted middle.
    pub frame: LocalFrame,
    /// Flux-weighted middle.
    pub middle: Pixel,
    /// Ridges and features of the sides, where there is a core to measure them from.
    pub sides: Option<([Ridge; 2], [SideFeatures; 2])>,
}

/// Peaks closer together than this many beam minors are one.
const PEAK_SEPARATION_BEAMS: f64 = 0.7;

/// Models the source; `None` where its contour has no extent (all its pixels fall below the
/// contour level, a clipped map say).
pub fn model_source(input: &SourceInput) -> Option<SourceModel> {
    let members = input.chosen.of(input.regions);
    let brightest = members.iter().max_by(|a, b| a.peak_snr.total_cmp(&b.peak_snr))?;
    let weight: f64 = members.iter().map(|r| r.sum).sum();
    let middle = Pixel::new(
        members.iter().map(|r| r.sum * r.centroid.0).sum::<f64>() / weight,
        members.iter().map(|r| r.sum * r.centroid.1).sum::<f64>() / weight,
    );
    if !(middle.x.is_finite() && middle.y.is_finite()) {
        return None;
    }
    let rough = input.geometry.local_frame(middle);
    let window = cut_window(input, &members, middle, &rough);

    let local_rms = input.noise.rms(brightest.peak.x, brightest.peak.y);
    let level = (input.outline_sigma * local_rms).max(input.least_level);
    // Edge and neighbours: the contour is drawn on the source's own pixels and their rim.
    let least_px = 0.5 * input.beam.area_px(input.geometry);
    let own = islands_above(&window, level, least_px);
    let lines = contour_lines(&OwnContour { window: &window, own: &own, level }, level, None);
    let on_map = |p: &Pixel| Pixel::new(p.x + window.x0 as f64, p.y + window.y0 as f64);
    let open_ends: Vec<Pixel> = lines
        .iter()
        .filter(|line| !line.is_closed())
        .flat_map(|line| line.points.first().into_iter().chain(line.points.last()))
        .map(on_map)
        .collect();
    let points: Vec<Pixel> = lines.iter().flat_map(|line| &line.points).map(on_map).collect();
    let (first, second, _) = farthest_pair(points.iter().copied(), &rough.to_sky)?;
    let ends = [first, second];

    let scale = rough.mean_scale();
    let peaks: Vec<Peak> = local_maxima(
        input.grid,
        input.noise,
        &members,
        PEAK_SEPARATION_BEAMS * input.beam.minor / scale,
        input.outline_sigma + 1.0,
    )
    .into_iter()
    .map(|p| as_peak(p, |x, y| input.noise.background(x, y)))
    .collect();

    let background = |x: f64, y: f64| input.noise.background(x, y);
    let pixels: Vec<Peak> = members.iter().map(|r| as_peak(r.peak, background)).collect();
    let brightest_pixel = highest(&pixels)?;

    let fitting = FitContext {
        window: &window,
        beam: input.beam,
        frame: &rough,
        noise: (input.noise, input.correlation),
    };
    let mut core = choose_core(&fitting, &peaks, input.known, ends, input.z_confidence);
    let trace = |core: &Core| {
        let frame = input.geometry.local_frame(core.pixel.unwrap_or(middle));
        let coreless = without_core(&window, core, input.beam, &frame);
        let ridges = core.pixel.map(|_| {
            let context = RidgeContext {
                frame: &frame,
                beam: input.beam,
                outline_sigma: input.outline_sigma,
                hint_deg: input.jet_side_pa_deg,
                z_confidence: input.z_confidence,
            };
            trace_ridges(&coreless, &context)
        });
        (frame, coreless, ridges)
    };
    let (mut frame, mut coreless, mut ridges) = trace(&core);
    for _ in 0..MOST_RETRACES {
        let Some(at) = core.pixel else { break };
        let fit = match refit_core(&fitting, &core, ridges.as_ref()) {
            Refit::Found(fit) => fit,
            Refit::Unsettled => break,
            Refit::Hidden => {
                let had_fit = core.fit.is_some();
                core = core.hidden(input.known.host, &fitting, input.z_confidence);
                if had_fit {
                    (frame, coreless, ridges) = trace(&core);
                }
                break;
            }
        };
        core = core.fitted(fit);
        let shift = frame.difference(at, fit.pixel);
        if shift.radius() > RETRACE_BEAMS * input.beam.minor {
            (frame, coreless, ridges) = trace(&core);
        } else {
            // The ridges stay where they are and are seen from the new place.
            frame = input.geometry.local_frame(fit.pixel);
            coreless = without_core(&window, &core, input.beam, &frame);
            ridges = ridges.map(|pair| pair.map(|ridge| ridge.seen_from(shift)));
            break;
        }
    }
    let sides = ridges.map(|ridges| {
        let detected = core.fit.is_some();
        let features = find_features(&FeatureInput {
            peaks: &peaks,
            contour: &points,
            ridges: &ridges,
            frame: &frame,
            beam: input.beam,
            core_detected: detected,
            window: &coreless,
            noise: (input.noise, input.correlation),
        });
        (ridges, features)
    });
    let side_cut = sides.as_ref().map_or([!open_ends.is_empty(); 2], |(ridges, features)| {
        cut_sides(&open_ends, ridges, features, &frame)
    });
    Some(SourceModel {
        window,
        coreless,
        level,
        contour: points,
        cut_off: side_cut.contains(&true),
        side_cut,
        ends,
        peak: highest(&peaks).unwrap_or(brightest_pixel),
        peaks,
        core,
        frame,
        middle,
        sides,
    })
}

/// A maximum of the map with the background taken off.
fn as_peak(peak: regions::Peak, background: impl Fn(f64, f64) -> f64) -> Peak {
    Peak {
        pixel: Pixel::new(peak.x, peak.y),
        value: peak.value - background(peak.x, peak.y),
        signal_to_noise: peak.snr,
    }
}

fn highest(peaks: &[Peak]) -> Option<Peak> {
    peaks.iter().max_by(|a, b| a.value.total_cmp(&b.value)).copied()
}

/// A contour that is open this far out, as a share of the side's length, cuts the side off; a
/// hole nearer to the core does not.
const CUT_BEYOND: f64 = 0.8;

/// Which sides are cut off by the map's edge or a blank patch.
fn cut_sides(
    open_ends: &[Pixel],
    ridges: &[Ridge; 2],
    features: &[SideFeatures; 2],
    frame: &LocalFrame,
) -> [bool; 2] {
    let mut cut = [false; 2];
    for &end in open_ends {
        let offset = frame.offset(end);
        let side = side_of(ridges, offset);
        let length = features[side].farthest.map_or(0.0, |(_, far)| far.radius());
        cut[side] |= offset.radius() >= CUT_BEYOND * length;
    }
    cut
}

/// A core that moves farther than this many beam minors has its ridges traced again.
const RETRACE_BEAMS: f64 = 0.1;
/// Ridges are traced again this often at the most.
const MOST_RETRACES: usize = 2;

/// What a fit of the core together with its jets says.
enum Refit {
    /// The core stands out.
    Found(PointFit),
    /// Nothing stands out above the jets.
    Hidden,
    /// There is no such fit: what was known stays.
    Unsettled,
}

/// The core again, together with the jets that start at it.
///
/// The observer's own choice stays where it is. A core that was not found at its host is
/// looked for once more within the host's error: its jets may have hidden it. A jet's own crest
/// may have been taken for one.
fn refit_core(fitting: &FitContext, core: &Core, ridges: Option<&[Ridge; 2]>) -> Refit {
    let beam = fitting.beam;
    let jets: Vec<&Ridge> = ridges
        .iter()
        .flat_map(|pair| pair.iter())
        .filter(|ridge| ridge.points.last().is_some_and(|p| p.distance > beam.major))
        .collect();
    let Some(start) = core.pixel else { return Refit::Unsettled };
    let placing = match (core.basis, core.fit) {
        (CoreBasis::Given, _) => Placing::fixed(beam),
        (_, None) => Placing::Near(HOST_SIGMA_BEAMS * beam.major),
        (_, Some(_)) => Placing::Free,
    };
    match fit_core(fitting, start, placing, &jets, start) {
        Some(fit) if is_detected(&fit) => Refit::Found(fit),
        None if jets.is_empty() => Refit::Unsettled,
        _ => Refit::Hidden,
    }
}

/// The source's pixels at or above the level, without islands smaller than `least_px`: where
/// the level lies above the local outline (noise that varies, a clipped map), crumbs remain
/// that would carry the contour far out.
fn islands_above(window: &Window, level: f64, least_px: f64) -> Array2<bool> {
    let above = |r: usize, c: usize| window.member[[r, c]] && window.brightness[[r, c]] >= level;
    let (rows, columns) = window.brightness.dim();
    let shape = (u32::try_from(columns).unwrap_or(0), u32::try_from(rows).unwrap_or(0));
    // Labels count in u32; a single pixel is an island of its own.
    if rows * columns < 4 || shape.0 == 0 || shape.1 == 0 {
        return Array2::from_shape_fn((rows, columns), |(r, c)| above(r, c));
    }
    let mask = GrayImage::from_fn(shape.0, shape.1, |x, y| {
        Luma([u8::from(above(y as usize, x as usize))])
    });
    let labels = connected_components(&mask, Connectivity::Eight, Luma([0u8]));
    let mut area = vec![0.0; labels.pixels().map(|p| p.0[0] as usize + 1).max().unwrap_or(1)];
    for label in labels.pixels() {
        area[label.0[0] as usize] += 1.0;
    }
    let largest = area.iter().skip(1).copied().fold(0.0, f64::max);
    Array2::from_shape_fn((rows, columns), |(r, c)| {
        let label = labels.get_pixel(c as u32, r as u32).0[0] as usize;
        label > 0 && area[label] >= least_px.min(largest)
    })
}

/// The window as the contour sees it: pixels that are not the source's own lie just below
/// the level, so that the line closes around the source where the rms varies or a neighbour
/// touches.
struct OwnContour<'a> {
    window: &'a Window,
    own: &'a Array2<bool>,
    level: f64,
}

impl Grid for OwnContour<'_> {
    fn rows(&self) -> usize {
        self.window.rows()
    }

    fn columns(&self) -> usize {
        self.window.columns()
    }

    fn value(&self, x: usize, y: usize) -> f64 {
        let value = Grid::value(self.window, x, y);
        let own = self.own.get((y, x)).copied().unwrap_or(false);
        // A blank pixel stays blank: the line is open there.
        if own || value.is_nan() { value } else { value.min(0.999 * self.level) }
    }
}

/// The window holds the source, the same turned by 180° about its middle or known core (for
/// the counter-jet's strip), and four beams around.
fn cut_window(
    input: &SourceInput,
    members: &[Region],
    middle: Pixel,
    frame: &LocalFrame,
) -> Window {
    let centre = input.known.given.or(input.known.host).unwrap_or(middle);
    let margin = 4.0 * input.beam.major / frame.mean_scale() + 2.0;
    let (mut x_low, mut x_high, mut y_low, mut y_high) = (f64::MAX, f64::MIN, f64::MAX, f64::MIN);
    for region in members {
        let b = region.bbox;
        for x in
            [b.x0 as f64, b.x1 as f64, 2.0 * centre.x - b.x0 as f64, 2.0 * centre.x - b.x1 as f64]
        {
            x_low = x_low.min(x - margin);
            x_high = x_high.max(x + margin);
        }
        for y in
            [b.y0 as f64, b.y1 as f64, 2.0 * centre.y - b.y0 as f64, 2.0 * centre.y - b.y1 as f64]
        {
            y_low = y_low.min(y - margin);
            y_high = y_high.max(y + margin);
        }
    }
    let (columns, rows) = (input.grid.columns(), input.grid.rows());
    let low = |v: f64| v.floor().max(0.0) as usize;
    let high = |v: f64, n: usize| (v.ceil().max(0.0) as usize).min(n.saturating_sub(1));
    let (x0, y0) = (low(x_low).min(columns - 1), low(y_low).min(rows - 1));
    let (x1, y1) = (high(x_high, columns).max(x0), high(y_high, rows).max(y0));
    let shape = (y1 - y0 + 1, x1 - x0 + 1);

    let mut brightness = Array2::from_elem(shape, f64::NAN);
    let mut rms = Array2::zeros(shape);
    let (mut values, mut base, mut sigma) = (Vec::new(), Vec::new(), Vec::new());
    for y in y0..=y1 {
        input.grid.row_into(y, &mut values);
        input.noise.row_into(y, &mut base, &mut sigma);
        for x in x0..=x1 {
            brightness[[y - y0, x - x0]] = values[x] - base[x];
            rms[[y - y0, x - x0]] = sigma[x];
        }
    }
    let member_mask = region_mask(columns, rows, members, 0.0);
    let others: Vec<Region> = input
        .regions
        .iter()
        .enumerate()
        .filter(|(k, _)| !input.chosen.members.contains(k))
        .map(|(_, region)| region.clone())
        .collect();
    let grow = input.beam.major / frame.mean_scale();
    let near_members = region_mask(columns, rows, members, 0.5 * grow);
    let foreign_mask = region_mask(columns, rows, &others, grow);
    let foreign_core = region_mask(columns, rows, &others, 0.0);
    Window {
        x0,
        y0,
        brightness,
        rms,
        member: Array2::from_shape_fn(shape, |(r, c)| member_mask.get(x0 + c, y0 + r)),
        foreign: Array2::from_shape_fn(shape, |(r, c)| {
            let (x, y) = (x0 + c, y0 + r);
            foreign_core.get(x, y) || (foreign_mask.get(x, y) && !near_members.get(x, y))
        }),
    }
}

/// The window with the core's beam-shaped component taken off.
fn without_core(window: &Window, core: &Core, beam: &Beam, frame: &LocalFrame) -> Window {
    let mut coreless = window.clone();
    if let Some(fit) = core.fit {
        for ((r, c), value) in coreless.brightness.indexed_iter_mut() {
            let d = frame.difference(fit.pixel, window.pixel(r, c));
            *value -= fit.peak * beam.profile(d);
        }
    }
    coreless
}
