//! Everything that turns samples of a flyback converter's drain voltage into numbers.
//!
//! The layers, each importing only those before it: [`quantity`] (units and printing), [`budget`] (what an uncertainty is
//! made of), [`pieces`] (what data sheets say of the parts), [`waveform`] (samples, quality, decoding), [`cycles`] (where each switching cycle and ring begins and ends),
//! [`fit`] (ring parameters with covariance), [`circuit`] (capacitance and leakage). [`findings`] holds the results as plain
//! data and [`analyse`] is the one entry.
//! No clock, file, socket or thread is used here.

pub mod budget;
pub mod circuit;
pub mod cycles;
mod entry;
pub mod findings;
pub mod fit;
pub mod pieces;
pub mod quantity;
pub mod waveform;

pub use entry::analyse;
