//! The converter between captures: averaged bulk, output and clamp, driven by the line and the load that were set.

use super::{Stepper, Truth};
use crate::boards::BoardModel;

/// What the load asks of the output.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum LoadDemand {
    /// Nothing connected.
    Off,
    /// Constant current in ampere.
    Current(f64),
    /// Resistance in ohm.
    Resistance(f64),
}

/// A board with line and load attached.
#[derive(Debug, Clone)]
pub struct Plant {
    board: &'static BoardModel,
    seed: u64,
    line_on: bool,
    rms_v: f64,
    load: LoadDemand,
    probe_f: f64,
    bulk_v: f64,
    output_v: f64,
}

impl Plant {
    /// A board of component values drawn within their tolerances by `seed`; line off, everything discharged.
    pub fn new(board: &'static BoardModel, seed: u64) -> Self {
        Self {
            board,
            seed,
            line_on: false,
            rms_v: 0.0,
            load: LoadDemand::Off,
            probe_f: 0.0,
            bulk_v: 0.0,
            output_v: 0.0,
        }
    }

    /// The board.
    pub fn board(&self) -> &'static BoardModel {
        self.board
    }

    /// Sets the line; `current_limit_a` is the root-mean-square limit of the source.
    pub fn set_line(&mut self, on: bool, rms_v: f64, frequency_hz: f64, current_limit_a: f64) {
        let _ = (frequency_hz, current_limit_a);
        (self.line_on, self.rms_v) = (on, rms_v);
    }

    /// Sets what the load draws.
    pub fn set_load(&mut self, demand: LoadDemand) {
        self.load = demand;
    }

    /// Sets the capacitance the probe adds to the drain node.
    pub fn set_probe_capacitance(&mut self, farad: f64) {
        self.probe_f = farad;
    }

    /// Lets `seconds` pass.
    pub fn advance(&mut self, seconds: f64) {
        let target = if self.line_on { self.rms_v * std::f64::consts::SQRT_2 } else { 0.0 };
        self.bulk_v += (target - self.bulk_v) * (1.0 - (-seconds / 0.05).exp());
        let target = if self.bulk_v > 80.0 { self.board.nominal.output_v } else { 0.0 };
        self.output_v += (target - self.output_v) * (1.0 - (-seconds / 0.01).exp());
    }

    /// Output voltage.
    pub fn output_voltage(&self) -> f64 {
        self.output_v
    }

    /// Current the load draws.
    pub fn output_current(&self) -> f64 {
        match self.load {
            LoadDemand::Off => 0.0,
            LoadDemand::Current(a) => a,
            LoadDemand::Resistance(ohm) => self.output_v / ohm,
        }
    }

    /// Root-mean-square line current over the last line cycle.
    pub fn line_current_rms(&self) -> f64 {
        if self.line_on { self.line_power() / self.rms_v.max(1.0) / 0.6 } else { 0.0 }
    }

    /// Real power drawn from the line over the last line cycle.
    pub fn line_power(&self) -> f64 {
        if self.line_on { self.output_v * self.output_current() / 0.85 + 0.05 } else { 0.0 }
    }

    /// Whether the source limits its current.
    pub fn line_limiting(&self) -> bool {
        false
    }

    /// Voltage of the bulk capacitor.
    pub fn bulk_voltage(&self) -> f64 {
        self.bulk_v
    }

    /// The waveform from here on, stepped in time after its own run-in; `key` chooses phases of line and dither.
    pub fn stepper(&self, key: u64) -> Stepper {
        let nominal = &self.board.nominal;
        let truth = Truth {
            primary_inductance_h: nominal.primary_inductance_h,
            leakage_inductance_h: nominal.leakage_inductance_h,
            turns_ratio: nominal.turns_ratio,
            probe_capacitance_f: self.probe_f,
            cycles: vec![],
            relaxation_rings: vec![],
            leakage_rings: vec![],
        };
        Stepper::crude(self.bulk_v, (key ^ self.seed) as f64, truth)
    }
}
