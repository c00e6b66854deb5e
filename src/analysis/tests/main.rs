//! Integration tests: one module a subject.
#![allow(clippy::unwrap_used, missing_docs)]

#[path = "../../../tests/need.rs"]
mod need;

mod circuit;
mod quantity;
mod recording_flyback;
mod waveform;
