//! Integration tests: one module a subject.
#![allow(clippy::unwrap_used, missing_docs)]

mod cli;
mod files;
mod instruments;
mod invented;
mod layering;
mod need;
mod preflight;
mod record;
