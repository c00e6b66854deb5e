//! The converter: time-stepped circuit equations for captures, an averaged model for the time between them, and the truth
//! about what a capture holds. Written from circuit physics alone.

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
