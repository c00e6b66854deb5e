//! The instruments of one bench, the board on it, the files that describe both, and the way out: everything off.

mod board;
mod by_hand;
mod cautions;
mod config;
mod connect;
mod parts;
mod safe_off;

pub use board::*;
pub use by_hand::{ByHandLoad, ByHandSource, Operator};
pub use cautions::*;
pub use config::*;
pub use connect::{Connected, connect, open_dialect};
pub use safe_off::{OffState, SafeOff, SafeOffReport};
