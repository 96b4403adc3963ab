//! Integration tests, in one binary.

mod cli;
mod demo;
mod hostile;
mod invariance;
mod published;
mod schema;
mod support;
mod truth;
