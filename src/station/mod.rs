//! The instruments of one bench, the board on it, and the files that describe both.

mod board;
mod cautions;
mod config;

pub use board::*;
pub use cautions::*;
pub use config::*;
