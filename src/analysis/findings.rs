//! What one analysis found, as plain data: rings, circuit values, cycles and doubts. Absent values are `None`, and a
//! doubt says why.

use crate::{budget::Budget, pieces::NodePieces, quantity::Measured};
use serde::{Deserialize, Serialize};

/// What the analysis may know about the board and the probe; all SI. Everything is optional: less is found without it.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize)]
pub struct BoardFacts {
    /// Primary self-inductance in henry (a stated tolerance enters as a rectangular distribution).
    pub primary_inductance_h: Option<Measured>,
    /// Capacitance of the probe at the drain node in farad.
    pub probe_capacitance_f: Option<Measured>,
    /// Nominal switching period, or the one learnt at a heavier load, in seconds: the unit in which gaps are counted.
    pub switching_period_s: Option<f64>,
    /// The parts on the drain node, as far as they are stated.
    #[serde(default)]
    pub pieces: NodePieces,
    /// How far the instruments can be trusted.
    #[serde(default)]
    pub accuracy: Accuracy,
    /// Whether the controller leaves out cycles (`false`: it folds its frequency back); `None` where it is not known.
    pub skips_cycles: Option<bool>,
}

/// Relative half-widths within which the scales of the measurement lie.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Accuracy {
    /// The scope's time base.
    pub time_base: f64,
    /// The scope's vertical gain.
    pub vertical_gain: f64,
    /// The probe's attenuation.
    pub probe_factor: f64,
}

impl Default for Accuracy {
    /// What most scopes and probes keep (common practice); a station file may state better.
    fn default() -> Self {
        Self { time_base: 50e-6, vertical_gain: 0.03, probe_factor: 0.02 }
    }
}

/// How a recording is to be read.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Subject {
    /// The drain voltage of a switching converter.
    Drain,
    /// A bare ring-down without switching cycles.
    RingDown,
}

/// Everything one analysis found. Quantities are SI with the unit in the name.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize)]
pub struct Findings {
    /// Relaxation ring, combined over the rings of the record (in `RingDown`, the one ring).
    pub relaxation_ring: Option<Ring>,
    /// Leakage ring, combined over the rings of the record.
    pub leakage_ring: Option<Ring>,
    /// Small-signal capacitance of the drain node at the bulk voltage, probe included.
    pub node_capacitance_f: Option<Measured>,
    /// Leakage inductance referred to the primary.
    pub leakage_inductance_h: Option<Measured>,
    /// Reflected output voltage on the plateau at the demagnetisation knee.
    pub reflected_voltage_v: Option<Measured>,
    /// Bulk voltage during the relaxation ring (its centre).
    pub bulk_voltage_v: Option<Measured>,
    /// Highest drain voltage in the record.
    pub peak_drain_voltage_v: Option<Measured>,
    /// Average rate of turn-ons in the record.
    pub turn_on_rate_hz: Option<Measured>,
    /// Peak-to-peak of the cycle period over the mean is not enough to say: every cycle as it was classified.
    pub cycles: Vec<Cycle>,
    /// Uncertainty budget of every circuit value and voltage.
    #[serde(default)]
    pub budgets: Vec<Budget>,
    /// Every ring that was fitted, accepted or not: what the report draws.
    pub ring_fits: Vec<RingFit>,
    /// Typed reasons to trust a value less, or not at all.
    pub doubts: Vec<Doubt>,
}

impl Findings {
    /// Highest drain voltage above the bulk voltage: where a clamp limits it, the clamp's level.
    pub fn release_v(&self) -> Option<f64> {
        Some(self.peak_drain_voltage_v?.value - self.bulk_voltage_v?.value)
    }
}

/// Parameters of a ring.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Ring {
    /// Undamped frequency, `sqrt(wd^2 + gamma^2) / 2 pi`.
    pub frequency_hz: Measured,
    /// Frequency as it rings.
    pub damped_frequency_hz: Measured,
    /// Envelope decay rate gamma in 1/s.
    pub decay_per_s: Measured,
    /// `w0 / (2 gamma)`.
    pub quality_factor: Measured,
    /// Amplitude in volts at which decay and quality factor hold: that at the start of the window. The frequency is that of small
    /// swings.
    #[serde(default)]
    pub amplitude_v: f64,
    /// Undamped frequency by a model with a free capacitance law, where the ring's own has none: many rings together may tell what
    /// one cannot.
    #[serde(default)]
    pub alternative_hz: Option<Measured>,
}

/// One switching cycle: from a turn-on to the next.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Cycle {
    /// Turn-on, in the time of the record.
    pub start_s: f64,
    /// Turn-off.
    pub turn_off_s: f64,
    /// End of demagnetisation; `None` in continuous conduction or where the record ends before it.
    pub end_of_demagnetisation_s: Option<f64>,
    /// Next turn-on, or the end of the record.
    pub end_s: f64,
    /// Conduction mode.
    pub mode: CycleMode,
}

/// Conduction mode of one cycle.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum CycleMode {
    /// The secondary still conducts at the next turn-on.
    Continuous,
    /// The relaxation ring is cut by the next regular turn-on.
    Discontinuous,
    /// At least one following switching period was left out: the relaxation ring runs on.
    Skipped,
    /// The record begins or ends inside the cycle, so that its mode cannot be told.
    Incomplete,
}

/// Which ring of the drain waveform.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum RingKind {
    /// Primary inductance with the node capacitance, after demagnetisation.
    Relaxation,
    /// Leakage inductance with the node capacitance, after the clamp's release.
    Leakage,
}

/// One fitted ring. Its parameters are those of `v(t) = offset + slope t + amplitude exp(-decay t) cos(2 pi damped_frequency t +
/// phase)`, with `t` counted from `start_s`; where the samples asked for more than that, `curve` has the rest, and the parameters
/// are those at small swings, of the beginning.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct RingFit {
    /// Which ring.
    pub kind: RingKind,
    /// Start of the fitted window in the time of the record; `t = 0` of the model.
    pub start_s: f64,
    /// End of the fitted window.
    pub end_s: f64,
    /// Parameters in the order of [`RingFit::PARAMETERS`], SI.
    #[serde(deserialize_with = "null_is_nan::array")]
    pub parameters: [f64; 6],
    /// The curve that was fitted, which may be more than a damped sinusoid.
    #[serde(default)]
    pub curve: FittedCurve,
    /// Covariance of the parameters, row by row; not finite where it could not be had.
    #[serde(deserialize_with = "null_is_nan::list")]
    pub covariance: Vec<f64>,
    /// Standard deviation of the residuals in volts.
    #[serde(deserialize_with = "null_is_nan::one")]
    pub residual_v: f64,
    /// Why the iteration stopped.
    pub stopped: String,
    /// Whether the ring was accepted; a doubt says why not.
    pub accepted: bool,
}

impl RingFit {
    /// Names of the parameters, in order.
    pub const PARAMETERS: [&'static str; 6] =
        ["amplitude_v", "decay_per_s", "damped_frequency_hz", "phase_rad", "offset_v", "slope_v_per_s"];

    /// Level that the ring stands on in the middle of its window, in volts: of a relaxation ring the bulk voltage.
    pub fn level_v(&self) -> f64 {
        self.parameters[4] + 0.5 * self.parameters[5] * (self.end_s - self.start_s)
    }

    /// The model at `t_s` seconds after [`RingFit::start_s`], in volts.
    pub fn model_v(&self, t_s: f64) -> f64 {
        let [amplitude, decay, frequency, phase, offset, slope] = self.parameters;
        offset
            + slope * t_s
            + amplitude * (-decay * t_s).exp() * (std::f64::consts::TAU * frequency * t_s + phase).cos()
    }
}

/// What a fitted ring stands on.
#[derive(Debug, Clone, Copy, Default, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum FittedFloor {
    /// Offset and slope.
    #[default]
    Straight,
    /// Offset, slope and curvature.
    Bent,
    /// Offset and an exponential droop.
    Drooping,
}

/// The fitted curve as the solver knows it; [`curve_v`](crate::fit::curve_v) draws it. Empty where a parameter set alone was stored.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize)]
pub struct FittedCurve {
    /// Unit of time in seconds.
    pub span_s: f64,
    /// What the ring stands on.
    pub floor: FittedFloor,
    /// Degree of the capacitance law of the circuit equation; `None` for a damped sinusoid.
    pub law_degree: Option<usize>,
    /// Whether the loss depends on amplitude.
    pub core_loss: bool,
    /// Nonlinear parameters: decay, angle, then those of the model.
    pub nonlinear: Vec<f64>,
    /// Linear parameters: amplitudes, then the floor's terms.
    pub linear: Vec<f64>,
}

/// A typed reason to trust a value less or not at all.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Doubt {
    /// Which kind.
    pub name: DoubtName,
    /// One sentence: what was seen, and what to change on the bench.
    pub sentence: String,
}

/// Kinds of doubt.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum DoubtName {
    /// Samples stand at the end of the vertical range.
    Clipped,
    /// The vertical step is large against the ring.
    CoarseSteps,
    /// So few samples an on-state that turn-ons may have been missed.
    CoarseSampling,
    /// Fewer samples a ring period than a fit needs.
    TooFewPoints,
    /// Fewer ring periods than a fit needs.
    TooFewPeriods,
    /// No relaxation ring stands in the record.
    NoRelaxationRing,
    /// No leakage ring could be told from the plateau.
    NoLeakageRing,
    /// No ring at all: noise, or an aperiodic decay.
    NoRing,
    /// One damped sinusoid does not describe the record.
    NotOneRing,
    /// No switching cycles were recognised.
    NoSwitchingCycles,
    /// Every cycle is in continuous conduction.
    ContinuousConduction,
    /// The waveform collapses periodically: protection or restart, not regulation.
    ProtectionOrRestart,
    /// The ring frequency moves with amplitude: the node capacitance depends on voltage.
    AmplitudeDependent,
    /// The covariance could not be trusted.
    CovarianceUnusable,
    /// The board facts needed for a circuit value were not given.
    BoardFactMissing,
    /// A textbook relation was used where the node's capacitance at the plateau is not known.
    TextbookValue,
    /// Rings of one record do not lie together.
    RingsDisagree,
    /// The mean of the record drifts.
    Drifting,
    /// Simulated or played-back data.
    Simulated,
}

/// A refused fit may hold numbers that are not finite; JSON writes them as `null`, which is read back as NaN.
mod null_is_nan {
    use serde::{Deserialize, Deserializer};

    pub(super) fn one<'de, D: Deserializer<'de>>(source: D) -> Result<f64, D::Error> {
        Ok(Option::deserialize(source)?.unwrap_or(f64::NAN))
    }

    pub(super) fn list<'de, D: Deserializer<'de>>(source: D) -> Result<Vec<f64>, D::Error> {
        Ok(Vec::<Option<f64>>::deserialize(source)?.into_iter().map(|value| value.unwrap_or(f64::NAN)).collect())
    }

    pub(super) fn array<'de, D: Deserializer<'de>>(source: D) -> Result<[f64; 6], D::Error> {
        Ok(<[Option<f64>; 6]>::deserialize(source)?.map(|value| value.unwrap_or(f64::NAN)))
    }
}
