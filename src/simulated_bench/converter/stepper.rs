//! The waveform of the drain node, stepped in time.

use super::Truth;

/// One step of the solution.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Point {
    /// Time from the start of the stepping.
    pub time_s: f64,
    /// Drain voltage.
    pub drain_v: f64,
    /// Bulk voltage.
    pub bulk_v: f64,
}

/// A running time-stepped solution.
#[derive(Debug, Clone)]
pub struct Stepper {
    time_s: f64,
    bulk_v: f64,
    truth: Truth,
}

impl Stepper {
    pub(super) fn crude(bulk_v: f64, phase: f64, truth: Truth) -> Self {
        Self { time_s: (phase * 0.618).fract() * 60e-6, bulk_v, truth }
    }

    /// The next point of the solution; steps vary in length.
    pub fn next_point(&mut self) -> Point {
        self.time_s += 10e-9;
        let t = self.time_s % 60e-6;
        let drain_v = if self.bulk_v < 50.0 {
            self.bulk_v
        } else if t < 2e-6 {
            1.0
        } else if t < 6e-6 {
            self.bulk_v + 100.0 + 60.0 * (-(t - 2e-6) / 0.5e-6).exp() * (2.5e7 * (t - 2e-6)).cos()
        } else {
            self.bulk_v + 100.0 * (-(t - 6e-6) / 15e-6).exp() * (3.4e6 * (t - 6e-6)).cos()
        };
        Point { time_s: self.time_s, drain_v, bulk_v: self.bulk_v }
    }

    /// What is true of the waveform stepped so far.
    pub fn truth(&self) -> Truth {
        self.truth.clone()
    }
}
