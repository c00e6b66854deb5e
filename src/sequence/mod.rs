//! The plan carried out step by step on a station, emitting plain events; terminal, record and page only listen.

pub mod event;
mod plan;
mod preflight;

pub use plan::*;
pub use preflight::*;
