//! jetspan: measures the jets of active galaxies on radio maps.
pub mod constants;
pub mod measurement;
pub mod units;
