//! Integration tests, in one binary.
#![allow(clippy::panic, reason = "helpers of tests stand outside the test functions")]

mod calibration;
mod cli;
mod demo;
mod hostile;
mod invariance;
mod published;
mod schema;
mod simulate;
mod support;
mod survey;
mod truth;
