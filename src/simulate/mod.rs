//! Made maps with known truth: what a given source would look like through a given beam and
//! noise.
//!
//! The same input gives the same bytes on every machine and with any number of threads: random
//! numbers come from a named generator, transcendental functions from `libm`, and sums run in
//! a fixed order.
//!
//! ```text
//! TOML ─scenario─► Parameters of one source ─source─► Gaussians on the sky
//!   ─observe─► noise-free canvas ─truth─► Truth
//!   ─made, noise─► brightness, description, stored form
//! ```

pub mod made;
pub mod noise;
pub mod observe;
pub mod parameters;
pub mod scenario;
pub mod scene;
pub mod source;
pub mod truth;

pub use made::{ByteOrder, Dtype, FileFormat, Format, Made, MadeMap, MakeError, make_map};
pub use noise::{NoiseKind, unit_noise};
pub use parameters::Parameters;
pub use scenario::{Epoch, Scenario, ScenarioError, parameter_page};
pub use scene::{Amount, GaussianComponent, GaussianShape, Scene, add_gaussian, jet};
pub use source::{Look, Part, TwinSource};
pub use truth::{Aperture, Truth};

#[cfg(test)]
mod tests;
