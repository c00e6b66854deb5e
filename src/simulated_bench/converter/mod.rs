//! The converter: time-stepped circuit equations for captures, an averaged model for the time between them, and the truth
//! about what a capture holds. Written from circuit physics alone.
//!
//! Left out on purpose: impedance of the output capacitor, inductance of the line, coupling of the board's own supply, and
//! the gate's drive (the channel current ramps instead). Winding capacitance is one lump on the drain.

mod average;
pub mod circuit;
mod controller;
pub mod junction;
pub mod plant;
mod recorder;
pub mod stepper;
pub mod truth;

pub use plant::{LoadDemand, Plant};
pub use stepper::{Point, Stepper};
pub use truth::{ConductionMode, CycleTruth, LeakageRingTruth, RelaxationRingTruth, Truth};
