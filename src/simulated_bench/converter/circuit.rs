//! The power stage as differential equations: which diodes conduct decides which voltages are states and which are
//! algebraic, so that nothing is stiff.

use crate::boards::{ClampLevel, Parts};

/// Voltages, currents and charges of the power stage.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct State {
    /// Drain voltage.
    pub drain_v: f64,
    /// Voltage across the magnetising inductance, positive while the transistor conducts.
    pub winding_v: f64,
    /// Current in the leakage inductance.
    pub leakage_a: f64,
    /// Magnetising current.
    pub magnetising_a: f64,
    /// Clamp level above the bulk.
    pub clamp_v: f64,
    /// Charge stored in the clamp diode.
    pub clamp_c: f64,
    /// Charge stored in the rectifier, referred to the primary.
    pub rectifier_c: f64,
    /// Output voltage.
    pub output_v: f64,
    /// Bulk voltage.
    pub bulk_v: f64,
}

impl State {
    /// `self + h * rate`.
    #[inline(always)]
    pub fn plus(&self, h: f64, rate: &State) -> State {
        State {
            drain_v: self.drain_v + h * rate.drain_v,
            winding_v: self.winding_v + h * rate.winding_v,
            leakage_a: self.leakage_a + h * rate.leakage_a,
            magnetising_a: self.magnetising_a + h * rate.magnetising_a,
            clamp_v: self.clamp_v + h * rate.clamp_v,
            clamp_c: self.clamp_c + h * rate.clamp_c,
            rectifier_c: self.rectifier_c + h * rate.rectifier_c,
            output_v: self.output_v + h * rate.output_v,
            bulk_v: self.bulk_v + h * rate.bulk_v,
        }
    }
}

/// What the transistor's channel does.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Channel {
    /// Carries nothing.
    Off,
    /// Takes over current since that time.
    Rising(f64),
    /// Fully on: a resistance.
    On,
    /// Loses this current since that time.
    Falling(f64, f64),
}

/// Which devices conduct.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Conduction {
    /// Channel of the transistor.
    pub channel: Channel,
    /// Body diode of the transistor.
    pub body: bool,
    /// Clamp diode.
    pub clamp: bool,
    /// Secondary rectifier.
    pub rectifier: bool,
}

/// The algebraic quantities that go with a state.
#[derive(Debug, Clone, Copy)]
pub struct Branches {
    /// Drain voltage.
    pub drain_v: f64,
    /// Voltage across the magnetising inductance.
    pub winding_v: f64,
    /// Current through the primary from the bulk to the drain.
    pub primary_a: f64,
    /// Current in the clamp diode.
    pub clamp_a: f64,
    /// Rectifier current referred to the primary.
    pub rectifier_a: f64,
    /// Channel current while it is driven, zero otherwise.
    pub channel_a: f64,
}

/// What drives the power stage from outside.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Drive {
    /// Rectified line voltage before its series resistance; `None` with the line off.
    pub line_v: Option<f64>,
    /// Highest current of the line.
    pub line_limit_a: f64,
    /// Current the load draws.
    pub load_a: f64,
    /// Conductance of load and preload.
    pub load_s: f64,
}

/// The power stage of one specimen with a probe on its drain.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Circuit {
    /// Components.
    pub parts: Parts,
    /// Probe.
    pub probe_f: f64,
    /// A capacitor that somebody soldered from drain to source.
    pub added_f: f64,
    per: Reciprocals,
}

/// What every step would divide by.
#[derive(Debug, Clone, Copy, PartialEq)]
struct Reciprocals {
    leakage_h: f64,
    magnetising_h: f64,
    core_ohm: f64,
    turns: f64,
    output_f: f64,
    bulk_f: f64,
    line_ohm: f64,
    clamp_ohm: f64,
    clamp_f: f64,
    bleed_ohm: f64,
    clamp_storage_s: f64,
    rectifier_storage_s: f64,
    /// Conductance past the leakage inductance.
    bypass_s: f64,
    /// Share of that conductance's current that is left with the transistor on.
    on: f64,
}

impl Reciprocals {
    fn new(p: &Parts) -> Self {
        let (clamp_f, bleed_ohm) = match p.clamp.level {
            ClampLevel::Capacitor { farad, bleed_ohm } => (1.0 / farad, 1.0 / bleed_ohm),
            // A zener's level does not move.
            ClampLevel::Zener { .. } => (0.0, 0.0),
        };
        let bypass_s = 1.0 / (p.leakage_loss_ohm + p.winding_ohm);
        Self {
            leakage_h: 1.0 / p.leakage_h,
            magnetising_h: 1.0 / p.magnetising_h,
            core_ohm: 1.0 / p.core_ohm,
            turns: 1.0 / p.turns_ratio,
            output_f: 1.0 / p.output_f,
            bulk_f: 1.0 / p.bulk_f,
            line_ohm: 1.0 / p.line_ohm,
            clamp_ohm: 1.0 / p.clamp.diode.series_ohm,
            clamp_f,
            bleed_ohm,
            clamp_storage_s: 1.0 / p.clamp.diode.storage_s,
            rectifier_storage_s: 1.0 / p.rectifier.storage_s,
            bypass_s,
            on: 1.0 / (1.0 + p.on_ohm * bypass_s),
        }
    }
}

impl Circuit {
    /// The circuit of these parts with that probe.
    pub fn new(parts: Parts, probe_f: f64) -> Self {
        Self { parts, probe_f, added_f: 0.0, per: Reciprocals::new(&parts) }
    }

    /// Loss current of the core; its conductance grows with amplitude as hysteresis makes it.
    #[inline(always)]
    pub fn core_a(&self, winding_v: f64) -> f64 {
        let p = &self.parts;
        let square = winding_v * winding_v;
        let growth = p.core_growth * square / (square + p.core_growth_v * p.core_growth_v);
        winding_v * self.per.core_ohm * (1.0 + growth)
    }

    /// Capacitance from the drain to everything that stands still, at the given drain voltage and clamp node voltage.
    #[inline(always)]
    pub fn drain_f(&self, drain_v: f64, clamp_node_v: f64) -> f64 {
        let p = &self.parts;
        p.transistor.capacitance_f(drain_v)
            + p.winding_f
            + (self.probe_f + self.added_f)
            + p.clamp.diode.junction.capacitance_f(clamp_node_v - drain_v)
    }

    /// Capacitance across the secondary, reflected to the primary.
    #[inline(always)]
    pub fn reflected_f(&self, winding_v: f64, output_v: f64) -> f64 {
        let (p, per_n) = (&self.parts, self.per.turns);
        let reverse_v = output_v + winding_v * per_n;
        (p.rectifier.junction.capacitance_f(reverse_v) + p.secondary_f) * (per_n * per_n)
    }

    /// Winding voltage (positive) at which the rectifier starts to conduct.
    #[inline(always)]
    pub fn reflected_v(&self, output_v: f64) -> f64 {
        self.parts.turns_ratio * (output_v + self.parts.rectifier.drop_v)
    }

    /// Currents and algebraic voltages.
    #[inline(always)]
    pub fn branches(&self, time_s: f64, s: &State, on: &Conduction) -> Branches {
        let p = &self.parts;
        let admittance = self.per.bypass_s;
        let resistive = s.leakage_a * (1.0 - p.winding_ohm * admittance);
        // The primary current is `held - slope * winding_v` in every mode.
        let (held, slope) = if on.channel == Channel::On {
            let share = self.per.on;
            ((resistive + s.bulk_v * admittance) * share, admittance * share)
        } else {
            (resistive + (s.bulk_v - s.drain_v) * admittance, admittance)
        };
        let winding_v = if on.rectifier {
            let reflected_v = self.reflected_v(s.output_v);
            let ohm = p.turns_ratio * p.turns_ratio * p.rectifier.series_ohm;
            -(reflected_v + ohm * (s.magnetising_a + self.core_a(-reflected_v) - held)) / (1.0 + ohm * slope)
        } else {
            s.winding_v
        };
        let primary_a = held - slope * winding_v;
        let drain_v = if on.channel == Channel::On { p.on_ohm * primary_a } else { s.drain_v };
        let diode = &p.clamp.diode;
        let clamp_a = if on.clamp { (drain_v - s.bulk_v - s.clamp_v - diode.drop_v) * self.per.clamp_ohm } else { 0.0 };
        let rectifier_a = if on.rectifier { s.magnetising_a + self.core_a(winding_v) - primary_a } else { 0.0 };
        let channel_a = match on.channel {
            Channel::Off | Channel::On => 0.0,
            Channel::Rising(since_s) => p.turn_on_a_per_s * (time_s - since_s),
            Channel::Falling(since_s, from_a) => from_a * (1.0 - (time_s - since_s) / p.turn_off_s).max(0.0),
        };
        Branches { drain_v, winding_v, primary_a, clamp_a, rectifier_a, channel_a }
    }

    /// Rates of change of the state.
    #[inline(always)]
    pub fn rates(&self, time_s: f64, s: &State, on: &Conduction, drive: &Drive) -> State {
        let p = &self.parts;
        let b = self.branches(time_s, s, on);
        let drain_free = !on.body && on.channel != Channel::On;
        let series_v = s.bulk_v - b.drain_v - b.winding_v - p.winding_ohm * s.leakage_a;
        let leakage_v = series_v * p.leakage_loss_ohm * self.per.bypass_s;
        State {
            drain_v: if drain_free {
                (b.primary_a - b.channel_a - b.clamp_a) / self.drain_f(s.drain_v, s.bulk_v + s.clamp_v)
            } else {
                0.0
            },
            winding_v: if on.rectifier {
                0.0
            } else {
                (b.primary_a - s.magnetising_a - self.core_a(b.winding_v)) / self.reflected_f(b.winding_v, s.output_v)
            },
            leakage_a: leakage_v * self.per.leakage_h,
            magnetising_a: b.winding_v * self.per.magnetising_h,
            clamp_v: (b.clamp_a - s.clamp_v * self.per.bleed_ohm) * self.per.clamp_f,
            clamp_c: if on.clamp { b.clamp_a - s.clamp_c * self.per.clamp_storage_s } else { 0.0 },
            rectifier_c: if on.rectifier { b.rectifier_a - s.rectifier_c * self.per.rectifier_storage_s } else { 0.0 },
            output_v: (p.turns_ratio * b.rectifier_a - drive.output_a(s.output_v)) * self.per.output_f,
            bulk_v: (self.line_a(s.bulk_v, drive) - b.primary_a + b.clamp_a) * self.per.bulk_f,
        }
    }

    /// Current from the line into the bulk capacitor.
    #[inline(always)]
    pub fn line_a(&self, bulk_v: f64, drive: &Drive) -> f64 {
        drive.line_v.map_or(0.0, |line_v| ((line_v - bulk_v) * self.per.line_ohm).clamp(0.0, drive.line_limit_a))
    }

    /// One Runge-Kutta step of fourth order; algebraic voltages are written back into the state.
    pub fn step(&self, time_s: f64, h: f64, s: &State, on: &Conduction, drive: &Drive) -> State {
        let k1 = self.rates(time_s, s, on, drive);
        let k2 = self.rates(time_s + 0.5 * h, &s.plus(0.5 * h, &k1), on, drive);
        let k3 = self.rates(time_s + 0.5 * h, &s.plus(0.5 * h, &k2), on, drive);
        let k4 = self.rates(time_s + h, &s.plus(h, &k3), on, drive);
        let sixth = h / 6.0;
        let mut next = s.plus(sixth, &k1).plus(2.0 * sixth, &k2).plus(2.0 * sixth, &k3).plus(sixth, &k4);
        let b = self.branches(time_s + h, &next, on);
        (next.drain_v, next.winding_v) = (b.drain_v, b.winding_v);
        next
    }

    /// Slow mode of the linearised network with nothing conducting: `(w0^2, 1/(w0^2 Lp))` at that bulk voltage.
    pub fn relaxation_mode(&self, bulk_v: f64, clamp_v: f64, output_v: f64) -> (f64, f64) {
        let p = &self.parts;
        let drain_f = self.drain_f(bulk_v, bulk_v + clamp_v);
        let reflected_f = self.reflected_f(0.0, output_v);
        // (1/Lm - y Cr)(1 - y Llk Cd) - y Cd = 0 with y = w^2; the smaller root.
        let a = p.leakage_h * drain_f * reflected_f;
        let b = reflected_f + drain_f * (1.0 + p.leakage_h / p.magnetising_h);
        let c = 1.0 / p.magnetising_h;
        let square = 2.0 * c / (b + (b * b - 4.0 * a * c).sqrt());
        (square, 1.0 / (square * (p.magnetising_h + p.leakage_h)))
    }

    /// The leakage inductance with the drain node, the secondary conducting: `(w0^2, C)` at that plateau.
    pub fn leakage_mode(&self, bulk_v: f64, clamp_v: f64, output_v: f64) -> (f64, f64) {
        let plateau_v = bulk_v + self.reflected_v(output_v);
        let drain_f = self.drain_f(plateau_v, bulk_v + clamp_v);
        (1.0 / (self.parts.leakage_h * drain_f), drain_f)
    }
}

impl Drive {
    /// Current out of the output capacitor.
    #[inline(always)]
    pub fn output_a(&self, output_v: f64) -> f64 {
        // A constant-current load cannot draw from a discharged output.
        self.load_a * (2.0 * output_v).clamp(0.0, 1.0) + self.load_s * output_v
    }
}
