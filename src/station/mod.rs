//! The instruments of one bench, the board on it, and the files that describe both.

mod board;
mod config;

pub use board::*;
pub use config::*;
