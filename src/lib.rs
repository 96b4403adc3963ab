//! jetspan measures the jets of active galaxies on radio maps held as plain arrays or images.
//!
//! # Flow
//! ```text
//! bytes ──map::read──► StoredArray ─┐
//! text ──map::description──► MapDescription ─┴► SkyMap ──noise──► Noise, NoiseCorrelation
//!   ──regions──► [Region] ──source──► SourceModel (associate, contour, core, ridge, sides)
//!   ──brightness──► strips, R ──extent──► sizes ──class──► FR class ──physics──► Physics
//!   ──assemble──► Record ──write──► JSON | table
//! ```
//! Each arrow is a function of its inputs and settings alone: no clock, no printing. Files
//! are touched in [`cli`], [`map::read`] and [`mod@write`] only.
//!
//! # Conventions
//! - Position angles: degrees from north through east; directed ones (a jet, a side) in
//!   [0, 360), undirected ones (an axis, a beam) in [0, 180), differences in (−180, 180].
//! - Pixels: `x` = column, `y` = row as stored, 0-based, an integer is a pixel's centre.
//! - Plane units: arcsec where the pixel scale is known, else pixels.
//! - Spectral index: S ∝ ν^(−α). Powers in W/Hz, never per steradian. Widths are FWHM,
//!   opening angles are full angles.
//! - R is `sides[0]` over `sides[1]`: jet over counter-jet where sidedness is decided.
//! - Errors are 68 % intervals; limits are one-sided with their confidence (0.95 by default).
//!   Nothing is ever NaN: what is not there says why ([`measurement::Because`]).

pub mod assemble;
pub mod brightness;
pub mod class;
pub mod cli;
pub mod components;
pub mod constants;
pub mod contour;
pub mod edge;
pub mod extent;
pub mod flags;
pub mod flux;
pub mod grid;
pub mod map;
pub mod measurement;
pub mod noise;
pub mod physics;
pub mod pipeline;
pub mod quantity;
pub mod record;
pub mod regions;
pub mod ridge;
pub mod settings;
pub mod simulate;
pub mod source;
pub mod stats;
pub mod units;
pub mod window;
pub mod write;
