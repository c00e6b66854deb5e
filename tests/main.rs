//! Integration tests: one module a subject.
#![allow(clippy::unwrap_used, missing_docs)]

mod drivers;
mod files;
mod instruments;
mod need;
mod scpi;
mod transport;
