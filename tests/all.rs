//! Integration tests.

mod published;
