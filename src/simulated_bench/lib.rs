//! A simulated bench: an offline flyback converter stepped in time from its circuit equations, and the instruments around
//! it. It knows nothing of the program that measures it.

pub mod boards;
pub mod converter;
pub mod faults;
pub mod instruments;
pub mod process;
pub mod truth;
pub mod wires;
