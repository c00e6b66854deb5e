//! What rings say about the circuit: node capacitance from the relaxation ring, leakage inductance from the leakage ring, with their
//! uncertainty budgets.

pub mod added;
mod parts;
mod resonance;
pub mod straight_line;
mod values;

pub use parts::{CapacitancePart, ConstantPart, constant_part};
pub use resonance::{Known, other_element};
pub use values::{CircuitValues, Observed, RingObservation};
