//! Made maps with known truth: what a given source would look like through a given beam and
//! noise.
//!
//! The same input gives the same bytes on every machine and with any number of threads: random
//! numbers come from a named generator, transcendental functions from `libm`, and sums run in
//! a fixed order.

pub mod noise;
pub mod observe;
pub mod parameters;
pub mod scene;
pub mod source;
pub mod truth;

pub use scene::{
    Amount, GaussianComponent, GaussianShape, NoiseKind, Scene, add_gaussian, jet, unit_noise,
};
#[cfg(test)]
mod tests;
