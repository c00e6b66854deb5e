//! A board with line, load and probe attached: what stays between captures. An averaged model carries it through time; once
//! settled, its state depends on board, seed and settings alone, never on how long one waited.

use super::{
    Stepper,
    average::{Average, Orbit, Slow},
    circuit::{Circuit, Drive},
    controller::{Activity, Controller},
    stepper::Line,
};
use crate::boards::{BoardModel, ClampLevel, ControllerParts};
use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;
use std::sync::OnceLock;

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
    circuit: Circuit,
    control: ControllerParts,
    line: Line,
    load: LoadDemand,
    slow: Slow,
    line_square: f64,
    line_w: f64,
    limiting_s: f64,
    pauses: u32,
    at_rest: bool,
    orbit: OnceLock<Option<Orbit>>,
    steady: OnceLock<Stepper>,
}

/// Step of the averaged model.
const STEP_S: f64 = 50e-6;
/// How often it is asked whether that has settled.
const SETTLING_S: f64 = 10e-3;
/// Drop of the bridge rectifier.
const BRIDGE_V: f64 = 1.6;
/// Peak current of the source over its root-mean-square limit.
const CREST_FACTOR: f64 = 3.0;
/// Run-in of the steady state from the averaged one, and of each capture from the steady state.
const STEADY_S: f64 = 4e-3;
const RUN_IN_S: f64 = 0.5e-3;

impl Plant {
    /// A board of component values drawn within their tolerances by `seed`; line off, everything discharged.
    pub fn new(board: &'static BoardModel, seed: u64) -> Self {
        let parts = board.parts.specimen(board.nominal.primary_inductance_tolerance, seed);
        let clamp_v = match parts.clamp.level {
            ClampLevel::Zener { volt } => volt,
            ClampLevel::Capacitor { .. } => 0.0,
        };
        Self {
            board,
            seed,
            circuit: Circuit::new(parts, 0.0),
            control: board.controller,
            line: Line { peak_v: None, frequency_hz: 50.0, phase: 0.0, limit_a: 0.0 },
            load: LoadDemand::Off,
            slow: Slow { bulk_v: 0.0, output_v: 0.0, clamp_v, controller: Controller::new(0.0) },
            line_square: 0.0,
            line_w: 0.0,
            limiting_s: f64::INFINITY,
            pauses: 0,
            at_rest: false,
            orbit: OnceLock::new(),
            steady: OnceLock::new(),
        }
    }

    /// The board.
    pub fn board(&self) -> &'static BoardModel {
        self.board
    }

    /// This specimen's circuit.
    pub fn circuit(&self) -> &Circuit {
        &self.circuit
    }

    /// Sets the line; `current_limit_a` is the root-mean-square limit of the source, whose peaks reach three times that.
    pub fn set_line(&mut self, on: bool, rms_v: f64, frequency_hz: f64, current_limit_a: f64) {
        let peak_v = on.then(|| (rms_v * std::f64::consts::SQRT_2 - BRIDGE_V).max(0.0));
        let line = Line { peak_v, frequency_hz, phase: self.line.phase, limit_a: CREST_FACTOR * current_limit_a };
        if line != self.line {
            self.line = line;
            self.unsettle();
        }
    }

    /// Sets what the load draws.
    pub fn set_load(&mut self, demand: LoadDemand) {
        if demand != self.load {
            self.load = demand;
            self.unsettle();
        }
    }

    /// Sets the capacitance the probe adds to the drain node.
    pub fn set_probe_capacitance(&mut self, farad: f64) {
        if farad != self.circuit.probe_f {
            self.circuit.probe_f = farad;
            self.unsettle();
        }
    }

    /// Solders a capacitor from drain to source, or takes it away again with zero.
    pub fn set_added_capacitance(&mut self, farad: f64) {
        if farad != self.circuit.added_f {
            self.circuit.added_f = farad;
            self.unsettle();
        }
    }

    fn unsettle(&mut self) {
        (self.at_rest, self.pauses) = (false, 0);
        (self.orbit, self.steady) = (OnceLock::new(), OnceLock::new());
    }

    /// Lets `seconds` pass.
    pub fn advance(&mut self, seconds: f64) {
        let mut left_s = seconds;
        while left_s > 0.0 {
            let h = if self.at_rest { left_s } else { left_s.min(SETTLING_S) };
            left_s -= h;
            if self.at_rest { self.rest(h) } else { self.settle(h) }
        }
    }

    fn rest(&mut self, seconds: f64) {
        self.line.phase = (self.line.phase + seconds * self.line.frequency_hz).fract();
        if let Some(orbit) = self.settled_orbit() {
            let (slow, limiting, rms_a, line_w) =
                (orbit.at(self.line.phase), orbit.limiting, orbit.line_rms_a, orbit.line_w);
            self.slow = slow;
            (self.line_square, self.line_w) = (rms_a * rms_a, line_w);
            self.limiting_s = if limiting { 0.0 } else { self.limiting_s + seconds };
        }
    }

    fn settle(&mut self, seconds: f64) {
        let mut left_s = seconds;
        while left_s > 0.0 {
            let h = left_s.min(STEP_S);
            left_s -= h;
            self.slow_step(h);
            self.line.phase = (self.line.phase + h * self.line.frequency_hz).fract();
        }
        if self.has_settled() {
            self.at_rest = true;
            self.rest(0.0);
        }
    }

    fn slow_step(&mut self, h: f64) {
        let drive = Drive { line_v: self.line.voltage(0.0), ..self.drive() };
        let was_pausing = matches!(self.slow.controller.activity, Activity::Pausing(_));
        let average = Average { circuit: &self.circuit, control: &self.control };
        let line_a = average.advance(&mut self.slow, &drive, h);
        if !was_pausing && matches!(self.slow.controller.activity, Activity::Pausing(_)) {
            self.pauses += 1;
        }
        let share = 1.0 - (-h * self.line.frequency_hz).exp();
        self.line_square += (line_a * line_a - self.line_square) * share;
        self.line_w += (line_a * drive.line_v.unwrap_or(0.0) - self.line_w) * share;
        let limited = line_a > 0.0 && line_a >= self.line.limit_a;
        self.limiting_s = if limited { 0.0 } else { self.limiting_s + h };
    }

    fn has_settled(&self) -> bool {
        let soft_started = match self.slow.controller.activity {
            Activity::Running(since_s) => since_s > self.control.soft_start_s,
            Activity::Waiting | Activity::Pausing(_) => false,
        };
        let shutting_down = self.pauses >= 2 || self.slow.controller.overloaded_s > 0.0;
        soft_started
            && !shutting_down
            && self.settled_orbit().is_some_and(|orbit| {
                let settled = orbit.at(self.line.phase);
                // A source that still limits an inrush may pass by the orbit without staying there.
                self.line_limiting() == orbit.limiting
                    && (settled.bulk_v - self.slow.bulk_v).abs() < 0.5
                    && (settled.output_v - self.slow.output_v).abs() < 5e-3
                    && (settled.clamp_v - self.slow.clamp_v).abs() < 2.0
            })
    }

    fn settled_orbit(&self) -> Option<&Orbit> {
        let average = Average { circuit: &self.circuit, control: &self.control };
        self.orbit.get_or_init(|| average.orbit(&self.line, &self.drive())).as_ref()
    }

    fn drive(&self) -> Drive {
        let preload_s = 1.0 / self.circuit.parts.preload_ohm;
        let (load_a, load_s) = match self.load {
            LoadDemand::Off => (0.0, preload_s),
            LoadDemand::Current(a) => (a, preload_s),
            LoadDemand::Resistance(ohm) => (0.0, preload_s + 1.0 / ohm),
        };
        Drive { line_v: None, line_limit_a: self.line.limit_a, load_a, load_s }
    }

    /// Output voltage.
    pub fn output_voltage(&self) -> f64 {
        self.slow.output_v
    }

    /// Current the load draws, without the board's own preload.
    pub fn output_current(&self) -> f64 {
        let drive = self.drive();
        drive.output_a(self.slow.output_v) - self.slow.output_v / self.circuit.parts.preload_ohm
    }

    /// Root-mean-square line current, over about a line cycle.
    pub fn line_current_rms(&self) -> f64 {
        self.line_square.sqrt()
    }

    /// Real power drawn from the line, over about a line cycle.
    pub fn line_power(&self) -> f64 {
        self.line_w
    }

    /// Whether the source has limited its current within the last line cycle.
    pub fn line_limiting(&self) -> bool {
        self.limiting_s < 1.0 / self.line.frequency_hz
    }

    /// Voltage of the bulk capacitor.
    pub fn bulk_voltage(&self) -> f64 {
        self.slow.bulk_v
    }

    /// Whether the averaged state has settled, so that captures depend on the settings and the key alone.
    pub fn is_settled(&self) -> bool {
        self.at_rest || self.pauses >= 2
    }

    /// The waveform from here on, stepped in time after its own run-in; `key` chooses the phases of line and dither.
    pub fn stepper(&self, key: u64) -> Stepper {
        let mut rng = ChaCha8Rng::seed_from_u64(self.seed);
        rng.set_stream(key);
        let (line_phase, dither_phase) = (rng.random::<f64>(), rng.random::<f64>());
        let line = Line { phase: line_phase, ..self.line };
        if let (true, Some(orbit)) = (self.at_rest, self.settled_orbit()) {
            let mut stepper = self.steady.get_or_init(|| self.steady_state(orbit)).clone();
            let early = line_phase - RUN_IN_S * line.frequency_hz;
            stepper.restart(Line { phase: early, ..line }, dither_phase, orbit.at(early).bulk_v);
            stepper.run_in(RUN_IN_S);
            return stepper;
        }
        if self.pauses >= 2 {
            return self.pausing(line, dither_phase, rng.random::<f64>());
        }
        let mut slow = self.slow;
        slow.controller.dither_phase = dither_phase;
        self.stepper_from(&slow, self.line)
    }

    fn steady_state(&self, orbit: &Orbit) -> Stepper {
        let mut slow = orbit.states[0];
        slow.controller.activity = Activity::Running(self.control.soft_start_s);
        slow.controller.command = (self.control.reference_v - slow.output_v) / self.control.droop_v;
        let mut stepper = self.stepper_from(&slow, Line { phase: 0.0, ..self.line });
        stepper.run_in(STEADY_S);
        stepper
    }

    /// Somewhere in the pause of an endless row of restarts; `share` says where.
    fn pausing(&self, line: Line, dither_phase: f64, share: f64) -> Stepper {
        let since_s = share * self.control.restart_s;
        let mut controller = Controller::new(dither_phase);
        controller.activity = Activity::Pausing(since_s);
        let mut slow = Slow { bulk_v: line.peak_v.unwrap_or(0.0), controller, ..self.slow };
        slow.output_v = self.control.reference_v;
        let drive = self.drive();
        for _ in 0..(since_s / STEP_S) as usize {
            slow.output_v -= drive.output_a(slow.output_v) / self.circuit.parts.output_f * STEP_S;
        }
        slow.output_v = slow.output_v.max(0.0);
        if let ClampLevel::Capacitor { .. } = self.circuit.parts.clamp.level {
            slow.clamp_v = 0.0;
        }
        self.stepper_from(&slow, line)
    }

    fn stepper_from(&self, slow: &Slow, line: Line) -> Stepper {
        let state = super::circuit::State {
            bulk_v: slow.bulk_v,
            output_v: slow.output_v,
            clamp_v: slow.clamp_v,
            ..Default::default()
        };
        Stepper::new(self.circuit, self.control, slow.controller, line, self.drive(), state)
    }
}
