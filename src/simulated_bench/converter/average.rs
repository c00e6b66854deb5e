//! The converter averaged over its switching cycles: power against command, the slow motion of bulk, output and clamp, and
//! the periodic state it settles into.

use super::{
    circuit::{Circuit, Drive},
    controller::{Activity, Controller},
    stepper::Line,
};
use crate::boards::{ClampLevel, ControllerParts, LightLoad};

/// Share of the input power that reaches the rectifier.
const EFFICIENCY: f64 = 0.9;
/// Resistance of start-up network and sensing across the bulk capacitor.
const BLEED_OHM: f64 = 1.5e6;
/// How fast the regulated output follows its target.
const LOOP_S: f64 = 300e-6;
/// Steps in half a line period of the settled state.
const ORBIT_STEPS: usize = 200;

/// The slow state.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Slow {
    /// Bulk voltage.
    pub(super) bulk_v: f64,
    /// Output voltage.
    pub(super) output_v: f64,
    /// Clamp level above the bulk.
    pub(super) clamp_v: f64,
    /// Controller.
    pub(super) controller: Controller,
}

/// The state it settles into: periodic with half the line period.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Orbit {
    /// The state at equal steps of half a line period.
    pub(super) states: Vec<Slow>,
    /// Whether the source limits its current somewhere on the way.
    pub(super) limiting: bool,
    /// Root-mean-square line current.
    pub(super) line_rms_a: f64,
    /// Line power.
    pub(super) line_w: f64,
}

impl Orbit {
    /// The state at that phase of the line, in line periods.
    pub(super) fn at(&self, phase: f64) -> Slow {
        let position = (2.0 * phase).rem_euclid(1.0) * self.states.len() as f64;
        self.states[(position as usize).min(self.states.len() - 1)]
    }
}

/// The averaged converter.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Average<'a> {
    pub(super) circuit: &'a Circuit,
    pub(super) control: &'a ControllerParts,
}

impl Average<'_> {
    /// Current into the output capacitor at that command.
    fn output_a(&self, command: f64, bulk_v: f64, output_v: f64) -> f64 {
        let (p, c) = (&self.circuit.parts, self.control);
        let share = command.max(c.smallest_share);
        let reflected_v = self.circuit.reflected_v(output_v.max(0.1));
        let inductance_h = p.magnetising_h + p.leakage_h;
        let (asked_a, period_s) = (share * c.peak_a, 1.0 / c.clock_hz);
        let peak_a = asked_a / (1.0 + c.slope_a_per_s * inductance_h / bulk_v.max(1.0));
        let duration_s = inductance_h * peak_a * (1.0 / bulk_v.max(1.0) + 1.0 / reflected_v);
        let power_w = if duration_s < period_s {
            0.5 * inductance_h * peak_a * peak_a * c.clock_hz
        } else {
            let duty = reflected_v / (reflected_v + bulk_v.max(1.0));
            let ripple_a = bulk_v * duty * period_s / inductance_h;
            bulk_v * duty * (asked_a - c.slope_a_per_s * duty * period_s - 0.5 * ripple_a).max(0.0)
        };
        let thinned = power_w * (command / share).min(1.0);
        EFFICIENCY * thinned / (output_v.max(0.1) + p.rectifier.drop_v)
    }

    /// Command at which the output carries `load_a`, if any up to `highest`.
    fn command_for(&self, load_a: f64, highest: f64, bulk_v: f64, output_v: f64) -> Option<f64> {
        if self.output_a(highest, bulk_v, output_v) < load_a {
            return None;
        }
        let (mut low, mut high) = (0.0, highest);
        for _ in 0..30 {
            let middle = 0.5 * (low + high);
            if self.output_a(middle, bulk_v, output_v) < load_a { low = middle } else { high = middle }
        }
        Some(high)
    }

    /// Output voltage that asks for that command.
    fn output_v_for(&self, command: f64, reference_v: f64) -> f64 {
        let c = self.control;
        let asked = match c.light_load {
            LightLoad::Skip { hysteresis } => command.max(c.smallest_share + 0.5 * hysteresis),
            LightLoad::Fold { .. } => command,
        };
        (reference_v - c.droop_v * asked).max(0.0)
    }

    /// Level the clamp settles at for that peak current and rate.
    fn clamp_target_v(&self, slow: &Slow, peak_a: f64, rate_hz: f64) -> f64 {
        let p = &self.circuit.parts;
        match p.clamp.level {
            ClampLevel::Zener { volt } => volt,
            ClampLevel::Capacitor { bleed_ohm, .. } => {
                // V^2/R = 0.5 L I^2 f V/(V - Vr)
                let reflected_v = self.circuit.reflected_v(slow.output_v);
                let drive = 0.5 * p.leakage_h * peak_a * peak_a * rate_hz * bleed_ohm;
                0.5 * (reflected_v + (reflected_v * reflected_v + 4.0 * drive).sqrt())
            }
        }
    }

    /// Lets `h` seconds pass; returns the line current.
    pub(super) fn advance(&self, slow: &mut Slow, drive: &Drive, h: f64) -> f64 {
        let (p, c) = (&self.circuit.parts, self.control);
        slow.controller.pass(c, slow.bulk_v, h);
        let load_a = drive.output_a(slow.output_v);
        let running = matches!(slow.controller.activity, Activity::Running(_));
        let mut into_output_a = 0.0;
        if running {
            let share = slow.controller.soft_start(c);
            let highest = 0.15 + 0.85 * share;
            let most_a = self.output_a(highest, slow.bulk_v, slow.output_v);
            let needed = self.command_for(load_a, highest, slow.bulk_v, slow.output_v);
            let target_v = self.output_v_for(needed.unwrap_or(highest), c.reference_v * share);
            let wanted_a = load_a + p.output_f * (target_v - slow.output_v) / LOOP_S.max(2.0 * h);
            into_output_a = wanted_a.clamp(0.0, most_a);
            let full = needed.is_none() || wanted_a >= most_a;
            slow.controller.command = if full { highest } else { needed.unwrap_or(highest) };
        } else {
            slow.controller.command = 0.0;
        }
        let command = slow.controller.command;
        slow.output_v = (slow.output_v + (into_output_a - load_a) / p.output_f * h).max(0.0);
        if let ClampLevel::Capacitor { farad, bleed_ohm } = p.clamp.level {
            let rate_hz = c.clock_hz * (command / c.smallest_share).min(1.0);
            let peak_a = c.peak_a * command.max(c.smallest_share);
            let target_v = if running { self.clamp_target_v(slow, peak_a, rate_hz) } else { 0.0 };
            slow.clamp_v += (target_v - slow.clamp_v) * (1.0 - (-h / (farad * bleed_ohm)).exp());
        }
        let line_a = self.circuit.line_a(slow.bulk_v, drive);
        let input_w = into_output_a * (slow.output_v + p.rectifier.drop_v) / EFFICIENCY;
        let drawn_a = input_w / slow.bulk_v.max(10.0) + slow.bulk_v / BLEED_OHM;
        slow.bulk_v = (slow.bulk_v + (line_a - drawn_a) / p.bulk_f * h).max(0.0);
        line_a
    }

    /// The periodic state it settles into on that line and load, if it stays in regulation.
    pub(super) fn orbit(&self, line: &Line, drive: &Drive) -> Option<Orbit> {
        let peak_v = line.peak_v?;
        let clamp_v = match self.circuit.parts.clamp.level {
            ClampLevel::Zener { volt } => volt,
            ClampLevel::Capacitor { .. } => self.circuit.reflected_v(self.control.reference_v),
        };
        let mut controller = Controller::new(0.0);
        controller.activity = Activity::Running(self.control.soft_start_s);
        let output_v = self.control.reference_v - self.control.droop_v;
        let mut slow = Slow { bulk_v: peak_v, output_v, clamp_v, controller };
        let h = 0.5 / line.frequency_hz / ORBIT_STEPS as f64;
        let mut last_v = f64::INFINITY;
        for _ in 0..200 {
            let mut states = Vec::with_capacity(ORBIT_STEPS);
            let (mut square, mut energy_j, mut limiting) = (0.0, 0.0, false);
            for index in 0..ORBIT_STEPS {
                states.push(slow);
                let at = Line { phase: 0.0, ..*line };
                let line_v = at.voltage(index as f64 * h);
                let drive = Drive { line_v, ..*drive };
                let line_a = self.advance(&mut slow, &drive, h);
                limiting |= line_a > 0.0 && line_a >= line.limit_a;
                square += line_a * line_a;
                energy_j += line_a * line_v.unwrap_or(0.0) * h;
            }
            if !matches!(slow.controller.activity, Activity::Running(_)) {
                return None;
            }
            if (slow.bulk_v - last_v).abs() < 1e-4 {
                let line_rms_a = (square / ORBIT_STEPS as f64).sqrt();
                return Some(Orbit { states, limiting, line_rms_a, line_w: energy_j * 2.0 * line.frequency_hz });
            }
            last_v = slow.bulk_v;
        }
        None
    }
}
