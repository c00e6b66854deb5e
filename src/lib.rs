//! `ringstep` measures the parasitics of offline flyback power supplies on a live bench.
//!
//! Acquiring, each layer importing only those before it: `transport` (bytes on a wire), `scpi` (messages and sessions),
//! `instrument` (what a scope, a load and a source can do, and the dialects that say how), `station` (the instruments of
//! one bench, its files and limits), `sequence` (the plan, step by step). Beside them `files` holds any file a user writes
//! against what it should be. Analysing is the package
//! [`ringstep_analysis`]. Keeping and showing: `record` (the run folder), `report`.
//!
//! [`guide`] says what the measured values mean and how they are found.

pub mod files;
#[doc = include_str!("guide/values.md")]
pub mod guide {}
pub mod instrument;
pub mod record;
pub mod report;
pub mod scpi;
pub mod sequence;
pub mod station;
pub mod transport;
