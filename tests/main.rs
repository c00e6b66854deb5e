//! Integration tests: one module a subject.
#![allow(clippy::unwrap_used, missing_docs, unreachable_pub)]

mod added;
mod added_run;
mod by_hand;
mod cli;
mod dialects;
mod drivers;
mod end_to_end;
mod files;
mod fit;
mod instruments;
mod invented;
mod layering;
mod need;
mod netlists;
mod preflight;
mod record;
mod report;
mod safe_off;
mod scpi;
mod seeds;
mod transport;
