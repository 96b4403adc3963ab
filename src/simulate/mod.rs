//! Made maps with known truth: what a given source would look like through a given beam and
//! noise.
//!
//! The same input gives the same bytes on every machine and with any number of threads: random
//! numbers come from a named generator, transcendental functions from `libm`, and sums run in
//! a fixed order.

pub mod noise;
pub mod parameters;
pub mod scenario;
pub mod scene;

pub use scenario::{Epoch, Scenario, ScenarioError, parameter_page};
pub use scene::{Amount, GaussianComponent, GaussianShape, NoiseKind, Scene, jet, unit_noise};
