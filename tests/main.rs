//! Integration tests: one module a subject.
#![allow(clippy::unwrap_used, missing_docs)]

mod by_hand;
mod drivers;
mod files;
mod instruments;
mod need;
mod safe_off;
mod scpi;
mod transport;
