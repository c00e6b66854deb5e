//! `ringstep` measures the parasitics of offline flyback power supplies on a live bench.
//!
//! Acquiring, each layer importing only those before it: `transport` (bytes on a wire), `scpi` (messages and sessions),
//! `instrument` (what a scope, a load and a source can do, and the dialects that say how), `station` (the instruments of
//! one bench, its files and limits), `sequence` (the plan, step by step). Analysing is the package
//! [`ringstep_analysis`]. Keeping and showing: `record` (the run folder), `report`.

pub mod instrument;
pub mod record;
pub mod sequence;
pub mod station;
