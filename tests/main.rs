//! Integration tests: one module a subject.
#![allow(clippy::unwrap_used, missing_docs)]

mod invented;
mod need;
mod record;
