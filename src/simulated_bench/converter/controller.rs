//! The peak-current controller: at each clock it decides whether to turn on, up to which current, and when the next clock
//! comes.

use crate::boards::{ControllerParts, LightLoad};

/// What the controller remembers from clock to clock.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Controller {
    /// Current command, as a share of the highest peak current.
    pub(super) command: f64,
    /// Phase of the dither, in its periods.
    pub(super) dither_phase: f64,
    /// Whether it switches, and since when.
    pub(super) activity: Activity,
    /// How long full command has been asked for.
    pub(super) overloaded_s: f64,
    skipping: bool,
}

/// Whether the controller switches.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) enum Activity {
    /// Too little bulk voltage.
    Waiting,
    /// Switching since so many seconds.
    Running(f64),
    /// Pausing after an overload or a collapse of its supply, since so many seconds.
    Pausing(f64),
}

/// What one clock brings.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Clock {
    /// Peak current at which to turn off again; `None` leaves this clock out.
    pub(super) peak_a: Option<f64>,
    /// Time to the next clock.
    pub(super) period_s: f64,
    /// Whether protection keeps the converter from switching.
    pub(super) protecting: bool,
}

impl Controller {
    /// At rest, with that phase of the dither.
    pub(super) fn new(dither_phase: f64) -> Self {
        Self { command: 0.0, dither_phase, activity: Activity::Waiting, overloaded_s: 0.0, skipping: false }
    }

    /// Share of the soft start that is done, 0 to 1; zero while it does not switch.
    pub(super) fn soft_start(&self, parts: &ControllerParts) -> f64 {
        match self.activity {
            Activity::Running(since_s) => (since_s / parts.soft_start_s).min(1.0),
            Activity::Waiting | Activity::Pausing(_) => 0.0,
        }
    }

    /// Current command that the output voltage asks for, 0 to 1.
    pub(super) fn asked(&self, parts: &ControllerParts, output_v: f64) -> f64 {
        let share = self.soft_start(parts);
        let reference_v = parts.reference_v * share;
        ((reference_v - output_v) / parts.droop_v).clamp(0.0, 0.15 + 0.85 * share)
    }

    /// Protection and start-up: lets `seconds` pass.
    pub(super) fn pass(&mut self, parts: &ControllerParts, bulk_v: f64, seconds: f64) {
        let full = self.command > 0.98;
        self.activity = match self.activity {
            Activity::Waiting if bulk_v > parts.start_v => Activity::Running(0.0),
            Activity::Waiting => Activity::Waiting,
            Activity::Pausing(_) | Activity::Running(_) if bulk_v < parts.stop_v => Activity::Waiting,
            Activity::Pausing(since_s) if since_s + seconds >= parts.restart_s => Activity::Running(0.0),
            Activity::Pausing(since_s) => Activity::Pausing(since_s + seconds),
            Activity::Running(since_s) => {
                self.overloaded_s =
                    if full && since_s > parts.soft_start_s { self.overloaded_s + seconds } else { 0.0 };
                let collapsed = parts.supply_lasts_s.is_some_and(|lasts_s| since_s > lasts_s);
                if collapsed || self.overloaded_s > parts.overload_s {
                    self.overloaded_s = 0.0;
                    Activity::Pausing(0.0)
                } else {
                    Activity::Running(since_s + seconds)
                }
            }
        };
    }

    /// One clock.
    pub(super) fn clock(&mut self, parts: &ControllerParts, output_v: f64, bulk_v: f64, since_last_s: f64) -> Clock {
        self.pass(parts, bulk_v, since_last_s);
        let running = matches!(self.activity, Activity::Running(_));
        let asked = if running { self.asked(parts, output_v) } else { 0.0 };
        self.command += (asked - self.command) * (1.0 - (-since_last_s / parts.amplifier_s).exp());
        if !running {
            self.command = 0.0;
        }
        let on = running && self.wants_pulse(parts);
        Clock {
            peak_a: on.then(|| parts.peak_a * self.command.max(parts.smallest_share)),
            period_s: self.next_period(parts, running),
            protecting: matches!(self.activity, Activity::Pausing(_)),
        }
    }

    fn wants_pulse(&mut self, parts: &ControllerParts) -> bool {
        match parts.light_load {
            LightLoad::Skip { hysteresis } => {
                let level = parts.smallest_share + if self.skipping { hysteresis } else { 0.0 };
                self.skipping = self.command < level;
                !self.skipping
            }
            LightLoad::Fold { .. } => self.command > 1e-3,
        }
    }

    fn next_period(&mut self, parts: &ControllerParts, running: bool) -> f64 {
        let mut frequency_hz = parts.clock_hz;
        if let (LightLoad::Fold { lowest_hz }, true) = (parts.light_load, running) {
            frequency_hz = (frequency_hz * self.command / parts.smallest_share).clamp(lowest_hz, frequency_hz);
        }
        let triangle = 4.0 * (self.dither_phase.rem_euclid(1.0) - 0.5).abs() - 1.0;
        let period_s = (1.0 + parts.dither * triangle) / frequency_hz;
        self.dither_phase = (self.dither_phase + period_s * parts.dither_hz).fract();
        period_s
    }
}
