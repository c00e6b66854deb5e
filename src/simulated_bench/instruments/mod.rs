//! The instruments on the bench: an oscilloscope, a load and a line source around one board, each with its own dialect,
//! status and error queue.

pub mod bench;
pub mod device;
pub mod error;
pub mod load;
pub mod parameter;
pub mod pattern;
pub mod scope;
pub mod source;
pub mod status;
pub mod syntax;

pub use bench::{Bench, SharedBench};
pub use device::{Device, Instrument};
pub use error::ScpiError;
