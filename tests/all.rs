//! Integration tests, in one binary.

mod demo;
mod published;
mod support;
mod truth;
