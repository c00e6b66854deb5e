//! Integration tests: one module a subject.
#![allow(clippy::unwrap_used, missing_docs)]

mod need;
mod netlists;
