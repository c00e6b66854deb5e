//! The plan carried out step by step on a station, emitting plain events; terminal, record and page only listen.
//!
//! [`run`] is the one entry: it reaches the ordered safe-off on every path, whether the plan ends, an error ends it or the
//! operator stops it.

mod acquire;
mod added_capacitor;
mod added_plan;
mod bench;
mod combine;
mod descent;
mod error;
pub mod event;
mod keeper;
mod plan;
mod point;
mod preflight;
mod rings;
mod runner;
mod samples;
mod settle;
mod stop;
mod survey;

pub use added_plan::{AddedCapacitors, AddedPart};
pub use error::RunError;
pub use keeper::{KeepError, Keeper};
pub use plan::*;
pub use preflight::*;
pub use runner::{Job, outputs, run};
pub use samples::samples_of;
pub use stop::{Stop, Stopper};
