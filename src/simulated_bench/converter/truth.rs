//! What a stretch of the stepped waveform really holds: cycles, rings, and the small-signal values they obey. Read by tests
//! and by whoever compares a measurement with it, never by an instrument.

use serde::Serialize;

/// How a switching cycle ended.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum ConductionMode {
    /// The secondary still conducted at the next turn-on.
    Continuous,
    /// The secondary had stopped, and the next regular clock turned on.
    Discontinuous,
    /// The secondary had stopped, and at least one clock was left out.
    Skipped,
    /// Protection ended the switching after this cycle.
    Hiccup,
    /// The stepping has not reached the next turn-on yet.
    Unfinished,
}

/// One switching cycle.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct CycleTruth {
    /// Gate turn-on.
    pub turn_on_s: f64,
    /// Gate turn-off; `None` before it is reached.
    pub turn_off_s: Option<f64>,
    /// End of secondary conduction; `None` in continuous conduction or before it is reached.
    pub demagnetised_s: Option<f64>,
    /// How the cycle ended.
    pub mode: ConductionMode,
}

/// One relaxation ring: from the end of secondary conduction to the next turn-on.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct RelaxationRingTruth {
    /// End of secondary conduction.
    pub start_s: f64,
    /// Next turn-on, or the present end of the stepping.
    pub end_s: f64,
    /// Mean bulk voltage between the two.
    pub bulk_v: f64,
    /// Small-signal capacitance of the drain node at that bulk voltage, probe and added capacitor included: `1/(w0^2 Lp)` of
    /// the slow mode of the linearised network.
    pub node_capacitance_f: f64,
    /// Undamped small-signal frequency at that bulk voltage.
    pub frequency_hz: f64,
}

/// One leakage ring: from the release of the clamp to the end of secondary conduction.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct LeakageRingTruth {
    /// Last release of the clamp diode.
    pub start_s: f64,
    /// End of secondary conduction or the next turn-on.
    pub end_s: f64,
    /// Undamped small-signal frequency at the plateau, the secondary conducting.
    pub frequency_hz: f64,
    /// Small-signal capacitance of the drain node at the plateau.
    pub node_capacitance_f: f64,
}

/// Everything that is true of a stretch of the waveform.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Truth {
    /// Primary self-inductance: magnetising plus leakage.
    pub primary_inductance_h: f64,
    /// Leakage inductance referred to the primary.
    pub leakage_inductance_h: f64,
    /// Turns ratio, primary over secondary.
    pub turns_ratio: f64,
    /// Capacitance of the probe on the drain node.
    pub probe_capacitance_f: f64,
    /// Cycles in order.
    pub cycles: Vec<CycleTruth>,
    /// Relaxation rings in order.
    pub relaxation_rings: Vec<RelaxationRingTruth>,
    /// Leakage rings in order.
    pub leakage_rings: Vec<LeakageRingTruth>,
}
