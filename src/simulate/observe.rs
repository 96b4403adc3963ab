//! How a made source meets the array: orientation, beam, and the sky through the beam.

use ndarray::Array2;
use serde_json::{Map, Value, json};

use super::parameters::Parameters;
use super::scene::add_gaussian;
use super::source::SkyGaussian;
use crate::constants::GAUSSIAN_AREA;
use crate::map::beam::Beam;
use crate::map::description::{DescriptionError, Layer, MapDescription, Origin, Rows, resolve};
use crate::map::geometry::{LocalFrame, SkyGeometry};
use crate::units::{Pixel, SkyOffset};

/// A Gaussian is drawn to this many of its FWHM: 1e-13 of its peak.
const REACH_FWHM: f64 = 3.3;
/// A canvas is at most this many times wider and higher than the map.
const LARGEST_CANVAS: f64 = 3.0;

/// Second moments of an elliptical Gaussian in squared FWHM: east–east, east–north,
/// north–north for one on the sky, xx, xy, yy for one on the array.
type Moments = [f64; 3];

/// Moments of a Gaussian on the sky with one axis along a position angle.
fn sky_moments(along: f64, across: f64, pa_deg: f64) -> Moments {
    let (sin, cos) = libm::sincos(pa_deg.to_radians());
    let (a, b) = (along * along, across * across);
    [a * sin * sin + b * cos * cos, (a - b) * sin * cos, a * cos * cos + b * sin * sin]
}

/// Moments under a linear map: M → J M Jᵀ.
fn transformed([ee, en, nn]: Moments, j: &[[f64; 2]; 2]) -> Moments {
    let form = |p: [f64; 2], q: [f64; 2]| {
        p[0] * q[0] * ee + (p[0] * q[1] + p[1] * q[0]) * en + p[1] * q[1] * nn
    };
    [form(j[0], j[0]), form(j[0], j[1]), form(j[1], j[1])]
}

fn area(m: &Moments) -> f64 {
    (m[0] * m[2] - m[1] * m[1]).max(0.0).sqrt()
}

/// The array on the sky as it is described, and where the source really lies on it.
#[derive(Clone, Debug)]
pub struct Observation {
    /// Number of columns.
    pub columns: usize,
    /// Number of rows.
    pub rows: usize,
    /// Sky offsets in arcsec from the core where it really is (registration errors included).
    pub frame: LocalFrame,
    /// The beam in arcsec.
    pub beam: Beam,
    /// The beam's moments on the array in px² of FWHM².
    pub beam_px: [f64; 3],
    /// The beam's solid angle in pixels.
    pub beam_area_px: f64,
}

impl Observation {
    /// The array of these parameters with the core at a pixel.
    ///
    /// # Errors
    /// Where the description made of the parameters is none.
    pub fn new(parameters: &Parameters, core: Pixel) -> Result<Self, DescriptionError> {
        let map = &parameters.map;
        let layer = Layer::from_json_text(
            &Value::Object(geometry_keys(parameters)).to_string(),
            Origin::BuiltIn,
            "made map",
        )?;
        let description: MapDescription = resolve(vec![layer])?;
        let geometry = SkyGeometry::new(map.rows, map.columns, &description, Rows::BottomUp);
        let minor = map.beam_minor_arcsec.unwrap_or(map.beam_major_arcsec);
        let beam = Beam::new(map.beam_major_arcsec, minor, map.beam_pa_deg).unwrap_or(Beam {
            major: map.beam_major_arcsec,
            minor,
            pa_deg: 0.0,
        });
        let described = described_core(parameters);
        let mut frame = geometry.local_frame(described);
        frame.origin = core;
        let on_sky = sky_moments(beam.major, beam.minor, beam.pa_deg);
        let beam_px = transformed(on_sky, &frame.to_pixel);
        Ok(Self {
            columns: map.columns,
            rows: map.rows,
            frame,
            beam,
            beam_px,
            beam_area_px: GAUSSIAN_AREA * area(&beam_px),
        })
    }

    /// A piece's moments on the array after the beam, px² of FWHM².
    fn seen_px(&self, piece: &SkyGaussian) -> Moments {
        let sky = sky_moments(piece.along_arcsec, piece.across_arcsec, piece.pa_deg);
        let own = transformed(sky, &self.frame.to_pixel);
        [0, 1, 2].map(|i| own[i] + self.beam_px[i])
    }

    /// Peak brightness of a piece after the beam in mJy/beam. Exact: the moments of
    /// Gaussians add, and the peak falls by the ratio of the solid angles.
    fn peak(&self, piece: &SkyGaussian, seen: &Moments) -> f64 {
        piece.flux_mjy * area(&self.beam_px) / area(seen)
    }

    /// Pieces as the beam shows them, ready to be looked at in many places.
    pub fn seen<'a>(&self, pieces: impl IntoIterator<Item = &'a SkyGaussian>) -> SeenPieces {
        let pieces = pieces
            .into_iter()
            .map(|piece| {
                let seen @ [xx, xy, yy] = self.seen_px(piece);
                let area = xx * yy - xy * xy;
                let inverse = [yy / area, -xy / area, xx / area];
                (self.frame.pixel(piece.offset), self.peak(piece, &seen), inverse)
            })
            .collect();
        SeenPieces { frame: self.frame, pieces }
    }

    /// Brightness of pieces at an offset from the core, mJy/beam.
    pub fn brightness_at<'a>(
        &self,
        pieces: impl IntoIterator<Item = &'a SkyGaussian>,
        offset: SkyOffset,
    ) -> f64 {
        self.seen(pieces).brightness(offset)
    }

    /// FWHM of a piece after the beam along a direction's marginal (arcsec): what it looks
    /// like when everything across the direction is summed up.
    pub fn marginal_fwhm(&self, piece: &SkyGaussian, pa_deg: f64) -> f64 {
        let own = sky_moments(piece.along_arcsec, piece.across_arcsec, piece.pa_deg);
        let beam = sky_moments(self.beam.major, self.beam.minor, self.beam.pa_deg);
        let (sin, cos) = libm::sincos(pa_deg.to_radians());
        let [ee, en, nn] = [0, 1, 2].map(|i| own[i] + beam[i]);
        (ee * sin * sin + 2.0 * en * sin * cos + nn * cos * cos).max(0.0).sqrt()
    }
}

/// Pieces of a source as the beam shows them.
pub struct SeenPieces {
    frame: LocalFrame,
    /// Centre on the array, peak in mJy/beam, inverse moments per px².
    pieces: Vec<(Pixel, f64, [f64; 3])>,
}

impl SeenPieces {
    /// Brightness at an offset from the core, mJy/beam.
    pub fn brightness(&self, offset: SkyOffset) -> f64 {
        let at = self.frame.pixel(offset);
        self.pieces
            .iter()
            .map(|(centre, peak, [xx, xy, yy])| {
                let (dx, dy) = (at.x - centre.x, at.y - centre.y);
                let q = xx * dx * dx + 2.0 * xy * dx * dy + yy * dy * dy;
                // Farther out than five FWHM a piece adds less than 1e-30 of its peak.
                if q > 25.0 { 0.0 } else { peak * libm::exp(-4.0 * std::f64::consts::LN_2 * q) }
            })
            .sum()
    }
}

/// A part of the plane of the array, which may lie beyond it: the whole source without noise.
#[derive(Clone, Debug)]
pub struct Canvas {
    /// Brightness in mJy/beam.
    pub brightness: Array2<f64>,
    /// Column of the canvas that is the array's column 0.
    pub column_0: i64,
    /// Row of the canvas that is the array's row 0.
    pub row_0: i64,
    /// Sky offsets in arcsec from the core on the canvas.
    pub frame: LocalFrame,
}

impl Canvas {
    /// An empty canvas that holds the pieces after the beam, bounded by three times the map
    /// on either side of it.
    pub fn around(observation: &Observation, pieces: &[SkyGaussian]) -> Self {
        let (mut low, mut high) = ([f64::INFINITY; 2], [f64::NEG_INFINITY; 2]);
        for piece in pieces {
            let [xx, _, yy] = observation.seen_px(piece);
            let centre = observation.frame.pixel(piece.offset);
            for (axis, (c, moment)) in [(centre.x, xx), (centre.y, yy)].into_iter().enumerate() {
                let reach = REACH_FWHM * moment.max(0.0).sqrt();
                low[axis] = low[axis].min(c - reach);
                high[axis] = high[axis].max(c + reach);
            }
        }
        let sizes = [observation.columns, observation.rows];
        let mut origin = [0_i64; 2];
        let mut shape = [1_usize; 2];
        for axis in [0, 1] {
            let size = sizes[axis] as f64;
            let margin = LARGEST_CANVAS * size;
            let from = low[axis].clamp(-margin, size).floor();
            let to = high[axis].clamp(-1.0, size + margin).ceil();
            if from <= to {
                origin[axis] = -(from as i64);
                shape[axis] = (to - from) as usize + 1;
            }
        }
        let mut frame = observation.frame;
        frame.origin.x += origin[0] as f64;
        frame.origin.y += origin[1] as f64;
        Self {
            brightness: Array2::zeros((shape[1], shape[0])),
            column_0: origin[0],
            row_0: origin[1],
            frame,
        }
    }

    /// Adds pieces of the sky as seen through the beam, sampled at the pixel centres.
    pub fn add(&mut self, observation: &Observation, pieces: &[SkyGaussian]) {
        for piece in pieces {
            let seen = observation.seen_px(piece);
            let centre = self.frame.pixel(piece.offset);
            let peak = observation.peak(piece, &seen);
            add_gaussian(&mut self.brightness, (centre.x, centre.y), peak, seen);
        }
    }

    /// Adds what lies on the array to it, times a factor.
    pub fn add_to(&self, array: &mut Array2<f64>, factor: f64) {
        let overlap = |first: i64, size: usize, own: usize| {
            let low = first.max(0);
            let high = (first + size as i64).min(own as i64).max(low);
            (low as usize, high as usize, (low - first) as usize)
        };
        let (rows, columns) = array.dim();
        let (own_rows, own_columns) = self.brightness.dim();
        let (x0, x1, to_x) = overlap(self.column_0, columns, own_columns);
        let (y0, y1, to_y) = overlap(self.row_0, rows, own_rows);
        if x1 <= x0 || y1 <= y0 {
            return;
        }
        for (y, to) in array.rows_mut().into_iter().enumerate().skip(to_y).take(y1 - y0) {
            let from = self.brightness.row(y - to_y + y0);
            for (to, from) in to.into_iter().skip(to_x).zip(from.iter().take(x1).skip(x0)) {
                *to += factor * from;
            }
        }
    }
}

/// Whether a factor leaves everything as it is.
pub fn is_one(factor: f64) -> bool {
    (factor - 1.0).abs() < f64::EPSILON
}

/// Pixel of the core as it is described: the array's middle and the offset asked for.
pub fn described_core(parameters: &Parameters) -> Pixel {
    let map = &parameters.map;
    Pixel::new(
        0.5 * (map.columns as f64 - 1.0) + map.offset_x_px,
        0.5 * (map.rows as f64 - 1.0) + map.offset_y_px,
    )
}

/// The keys of the description that say how the array lies on the sky. The core is the point
/// where the tangent plane touches the sky, so that north there is north everywhere.
pub fn geometry_keys(parameters: &Parameters) -> Map<String, Value> {
    let map = &parameters.map;
    let core = described_core(parameters);
    let mut keys = Map::new();
    let mut put = |key: &str, value: Value| {
        keys.insert(key.to_owned(), value);
    };
    let (column, row) = (map.pixel_scale_arcsec, map.pixel_scale_arcsec * map.pixel_aspect);
    put(
        "pixel_scale_arcsec",
        if is_one(map.pixel_aspect) { json!(column) } else { json!([column, row]) },
    );
    put("beam_major_arcsec", json!(map.beam_major_arcsec));
    put("beam_minor_arcsec", json!(map.beam_minor_arcsec.unwrap_or(map.beam_major_arcsec)));
    put("beam_pa_deg", json!(map.beam_pa_deg));
    put("unit", json!(map.unit));
    put("rows", json!(map.row_order));
    put("east", json!(map.east));
    put("up_pa_deg", json!(map.up_pa_deg));
    put("centre_ra_deg", json!(parameters.source.ra_deg));
    put("centre_dec_deg", json!(parameters.source.dec_deg));
    put("centre_x_px", json!(core.x));
    put("centre_y_px", json!(core.y));
    keys
}
