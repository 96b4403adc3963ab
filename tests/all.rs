//! Integration tests: one binary, so that the library is linked once.

mod cli;
mod hostile;
mod invariance;
mod published;
mod schema;
mod support;
