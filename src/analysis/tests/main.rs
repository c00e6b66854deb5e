//! Integration tests: one module a subject.
#![allow(clippy::unwrap_used, missing_docs, unreachable_pub)]

#[path = "../../../tests/need.rs"]
mod need;

mod acceptance;
mod added;
mod budget;
mod budget_laws;
mod circuit;
mod cycles;
mod drain;
mod estimator;
mod estimator_intervals;
mod fit;
mod generate;
mod joint;
mod nist;
mod oracle;
mod quantity;
mod recording_flyback;
mod recordings_rlc;
mod small_signal;
mod waveform;
