//! Integration tests, in one binary.

mod published;
mod truth;
