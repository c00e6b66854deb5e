//! The waveform stepped in time: steps of the circuit between events, the events that change what conducts, and a record of
//! what happened.

use super::{
    Truth,
    circuit::{Branches, Channel, Circuit, Conduction, Drive, State},
    controller::Controller,
    recorder::Recorder,
};
use crate::boards::ControllerParts;

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

/// The rectified line: amplitude and phase of a sine.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Line {
    /// Peak after the bridge's drop; `None` with the line off.
    pub(super) peak_v: Option<f64>,
    /// Frequency.
    pub(super) frequency_hz: f64,
    /// Phase at time zero, in line periods.
    pub(super) phase: f64,
    /// Highest current.
    pub(super) limit_a: f64,
}

impl Line {
    /// Rectified voltage at that time.
    pub(super) fn voltage(&self, time_s: f64) -> Option<f64> {
        self.peak_v
            .map(|peak_v| peak_v * (std::f64::consts::TAU * (self.frequency_hz * time_s + self.phase)).sin().abs())
    }
}

/// A running time-stepped solution.
#[derive(Debug, Clone)]
pub struct Stepper {
    circuit: Circuit,
    control: ControllerParts,
    controller: Controller,
    line: Line,
    drive: Drive,
    time_s: f64,
    state: State,
    on: Conduction,
    next_clock_s: f64,
    last_clock_s: f64,
    peak_a: f64,
    turn_on_s: f64,
    period_s: f64,
    settled_until_s: f64,
    step_scale: f64,
    longest_step_s: f64,
    recorder: Recorder,
}

/// Longest step while channel, clamp or body diode are at work.
const EDGE_STEP_S: f64 = 1e-9;
/// Longest step shortly after an event, and how long "shortly" is.
const FRESH_STEP_S: f64 = 2e-9;
const FRESH_S: f64 = 150e-9;
/// Longest step while the leakage rings, and otherwise.
const CALM_STEP_S: f64 = 7e-9;
const QUIET_STEP_S: f64 = 12e-9;
/// Longest step while nothing moves.
const IDLE_STEP_S: f64 = 1e-6;
/// Ring amplitude below which nothing is taken to move.
const IDLE_V: f64 = 0.5e-3;

impl Stepper {
    pub(super) fn new(
        circuit: Circuit,
        control: ControllerParts,
        controller: Controller,
        line: Line,
        drive: Drive,
        state: State,
    ) -> Self {
        let reflected_f = circuit.least_reflected_f(state.bulk_v.max(1.0), control.reference_v);
        let fastest_s = (circuit.parts.leakage_h * reflected_f).sqrt();
        Self {
            circuit,
            control,
            controller,
            line,
            drive,
            time_s: 0.0,
            state: State { drain_v: state.bulk_v, winding_v: 0.0, leakage_a: 0.0, magnetising_a: 0.0, ..state },
            on: Conduction { channel: Channel::Off, body: false, clamp: false, rectifier: false },
            next_clock_s: 1.0 / control.clock_hz,
            last_clock_s: 0.0,
            peak_a: 0.0,
            turn_on_s: 0.0,
            period_s: 1.0 / control.clock_hz,
            settled_until_s: 0.0,
            step_scale: 1.0,
            // Runge-Kutta of fourth order is stable to 2.8 rad a step; the secondary's own ring is the fastest.
            longest_step_s: 1.7 * fastest_s,
            recorder: Recorder::new(&circuit),
        }
    }

    /// Steps shortened by `scale`: the solution must not depend on it.
    #[must_use]
    pub fn with_step_scale(mut self, scale: f64) -> Self {
        self.step_scale = scale;
        self
    }

    /// The circuit that is stepped.
    pub fn circuit(&self) -> &Circuit {
        &self.circuit
    }

    /// Its present voltages, currents and charges.
    pub fn state(&self) -> &State {
        &self.state
    }

    /// What is true of the waveform stepped so far.
    pub fn truth(&self) -> Truth {
        self.recorder.truth(&self.circuit, &self.state, self.time_s)
    }

    /// Starts time and record anew, with other phases of line and dither and another bulk voltage.
    pub(super) fn restart(&mut self, line: Line, dither_phase: f64, bulk_v: f64) {
        let shift_v = bulk_v - self.state.bulk_v;
        self.line = line;
        self.controller.dither_phase = dither_phase;
        self.state.bulk_v += shift_v;
        self.rebase();
    }

    /// Runs for `seconds` and forgets what happened.
    pub(super) fn run_in(&mut self, seconds: f64) {
        let end_s = self.time_s + seconds;
        while self.time_s < end_s {
            self.next_point();
        }
        self.rebase();
    }

    fn rebase(&mut self) {
        let past_s = self.time_s;
        self.line.phase = (self.line.phase + past_s * self.line.frequency_hz).fract();
        for time_s in [&mut self.next_clock_s, &mut self.last_clock_s, &mut self.turn_on_s, &mut self.settled_until_s] {
            *time_s -= past_s;
        }
        match &mut self.on.channel {
            Channel::Rising(since_s) | Channel::Falling(since_s, _) => *since_s -= past_s,
            Channel::Off | Channel::On => {}
        }
        self.time_s = 0.0;
        self.recorder = Recorder::new(&self.circuit);
    }

    /// The next point of the solution; steps vary in length.
    pub fn next_point(&mut self) -> Point {
        if self.time_s >= self.next_clock_s {
            self.clock();
        }
        self.drive.line_v = self.line.voltage(self.time_s);
        if self.is_idle() {
            self.idle_step()
        } else {
            self.circuit_step()
        }
        Point { time_s: self.time_s, drain_v: self.state.drain_v, bulk_v: self.state.bulk_v }
    }

    fn is_idle(&self) -> bool {
        let s = &self.state;
        let nothing_on = self.on.channel == Channel::Off && !self.on.clamp && !self.on.rectifier && !self.on.body;
        // 1 kohm is below the ring's characteristic impedance on every board: a current in millivolts.
        nothing_on
            && (s.drain_v - s.bulk_v).abs() < IDLE_V
            && s.winding_v.abs() < IDLE_V
            && s.magnetising_a.abs() * 1e3 < IDLE_V
            && s.leakage_a.abs() * 1e3 < IDLE_V
    }

    fn idle_step(&mut self) {
        let h = (self.next_clock_s - self.time_s).clamp(1e-12, IDLE_STEP_S);
        let quiet =
            State { drain_v: self.state.bulk_v, winding_v: 0.0, leakage_a: 0.0, magnetising_a: 0.0, ..self.state };
        let rates = self.circuit.rates(self.time_s, &quiet, &self.on, &self.drive);
        let next = quiet.plus(h, &rates);
        let next = State { drain_v: next.bulk_v, winding_v: 0.0, leakage_a: 0.0, magnetising_a: 0.0, ..next };
        self.recorder.pass(h, next.bulk_v);
        self.state = next;
        self.time_s += h;
    }

    fn circuit_step(&mut self) {
        let (limit_s, landing) = self.next_landing();
        let wanted = self.wanted_step();
        let h = wanted.min(limit_s - self.time_s);
        let lands = h >= limit_s - self.time_s - 1e-15;
        let next = self.circuit.step(self.time_s, h, &self.state, &self.on, &self.drive);
        if self.event_at(self.time_s + h, &next).is_none() {
            self.accept(h, next);
            if lands && landing {
                self.land();
            }
            return;
        }
        let (mut low, mut high, mut found) = (0.0, h, next);
        while high - low > 2e-13 {
            let middle = 0.5 * (low + high);
            let trial = self.circuit.step(self.time_s, middle, &self.state, &self.on, &self.drive);
            if self.event_at(self.time_s + middle, &trial).is_some() {
                (high, found) = (middle, trial);
            } else {
                low = middle;
            }
        }
        let event = self.event_at(self.time_s + high, &found);
        self.accept(high, found);
        if let Some(event) = event {
            self.apply(event);
        }
    }

    fn accept(&mut self, h: f64, next: State) {
        self.recorder.pass(h, 0.5 * (self.state.bulk_v + next.bulk_v));
        self.state = next;
        self.time_s += h;
    }

    fn wanted_step(&self) -> f64 {
        let step_s = match self.on.channel {
            Channel::Rising(_) | Channel::Falling(..) => EDGE_STEP_S,
            _ if self.on.clamp || self.on.body => EDGE_STEP_S,
            _ if self.time_s < self.settled_until_s => FRESH_STEP_S,
            _ if self.on.rectifier => CALM_STEP_S,
            _ => QUIET_STEP_S,
        };
        step_s.min(self.longest_step_s) * self.step_scale
    }

    /// The time the next step may not pass, and whether something happens there besides a clock.
    fn next_landing(&self) -> (f64, bool) {
        let own_s = match self.on.channel {
            Channel::Falling(since_s, _) => since_s + self.circuit.parts.turn_off_s,
            Channel::On => self.turn_on_s + self.control.longest_duty * self.period_s,
            Channel::Off | Channel::Rising(_) => f64::INFINITY,
        };
        if own_s <= self.next_clock_s { (own_s.max(self.time_s + 1e-13), true) } else { (self.next_clock_s, false) }
    }

    fn land(&mut self) {
        match self.on.channel {
            Channel::Falling(..) => self.on.channel = Channel::Off,
            Channel::On => self.apply(Event::Peak),
            Channel::Off | Channel::Rising(_) => {}
        }
    }

    fn event_at(&self, time_s: f64, s: &State) -> Option<Event> {
        let b = self.circuit.branches(time_s, s, &self.on);
        let p = &self.circuit.parts;
        let channel = match self.on.channel {
            Channel::Rising(_) if s.drain_v <= p.on_ohm * b.primary_a.max(0.0) => Some(Event::Saturated),
            Channel::On if self.reached_peak(time_s, &b) => Some(Event::Peak),
            _ => None,
        };
        let clamp_v = s.bulk_v + s.clamp_v + p.clamp.diode.drop_v;
        let drain_free = self.on.channel != Channel::On;
        channel
            .or_else(|| (self.on.clamp && b.clamp_a < 0.0 && s.clamp_c <= 0.0).then_some(Event::ClampReleases))
            .or_else(|| (!self.on.clamp && drain_free && s.drain_v > clamp_v).then_some(Event::ClampConducts))
            .or_else(|| {
                (self.on.rectifier && b.rectifier_a < 0.0 && s.rectifier_c <= 0.0).then_some(Event::RectifierBlocks)
            })
            .or_else(|| {
                let reached = s.winding_v < -self.circuit.reflected_v(s.output_v);
                (!self.on.rectifier && reached).then_some(Event::RectifierConducts)
            })
            .or_else(|| {
                (!self.on.body && drain_free && s.drain_v < -p.body_v && b.primary_a < b.channel_a)
                    .then_some(Event::BodyConducts)
            })
            .or_else(|| (self.on.body && b.primary_a > b.channel_a).then_some(Event::BodyBlocks))
    }

    fn reached_peak(&self, time_s: f64, b: &Branches) -> bool {
        let on_s = time_s - self.turn_on_s;
        on_s > self.control.blanking_s && b.primary_a > self.peak_a - self.control.slope_a_per_s * on_s
    }

    fn apply(&mut self, event: Event) {
        let b = self.circuit.branches(self.time_s, &self.state, &self.on);
        self.settled_until_s = self.time_s + FRESH_S;
        match event {
            Event::Saturated => self.on.channel = Channel::On,
            Event::Peak => {
                self.on.channel = Channel::Falling(self.time_s, b.primary_a.max(0.0));
                self.recorder.turn_off(self.time_s);
            }
            Event::ClampConducts => {
                self.on.clamp = true;
                self.state.clamp_c = 0.0;
                self.recorder.interrupted();
            }
            Event::ClampReleases => {
                self.on.clamp = false;
                self.recorder.clamp_releases(self.time_s, self.on.rectifier, &self.state);
            }
            Event::RectifierConducts => {
                self.on.rectifier = true;
                self.state.rectifier_c = 0.0;
                self.recorder.interrupted();
            }
            Event::RectifierBlocks => {
                self.on.rectifier = false;
                let gate_off = matches!(self.on.channel, Channel::Off | Channel::Falling(..));
                self.recorder.rectifier_blocks(self.time_s, gate_off, &self.circuit, &self.state);
            }
            Event::BodyConducts => {
                self.on.body = true;
                self.state.drain_v = -self.circuit.parts.body_v;
            }
            Event::BodyBlocks => {
                self.on.body = false;
                self.recorder.body_blocks(self.time_s, &self.state);
            }
        }
    }

    fn clock(&mut self) {
        let since_s = self.time_s - self.last_clock_s;
        self.last_clock_s = self.time_s;
        let clock = self.controller.clock(&self.control, self.state.output_v, self.state.bulk_v, since_s);
        self.next_clock_s = self.time_s + clock.period_s;
        if clock.protecting {
            self.recorder.protects();
        }
        let Some(peak_a) = clock.peak_a else {
            self.recorder.skips();
            return;
        };
        if !matches!(self.on.channel, Channel::Off) {
            return;
        }
        self.period_s = clock.period_s;
        self.peak_a = peak_a;
        self.turn_on_s = self.time_s;
        self.settled_until_s = self.time_s + FRESH_S;
        self.recorder.turn_on(self.time_s, self.on.rectifier, &self.circuit, &self.state);
        // With the body diode conducting there is no voltage for the channel to bring down.
        self.on.channel = if self.on.body { Channel::On } else { Channel::Rising(self.time_s) };
        self.on.body = false;
    }
}

/// What changes which devices conduct.
#[derive(Debug, Clone, Copy, PartialEq)]
enum Event {
    Saturated,
    Peak,
    ClampConducts,
    ClampReleases,
    RectifierConducts,
    RectifierBlocks,
    BodyConducts,
    BodyBlocks,
}
