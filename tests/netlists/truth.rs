//! The truth beside each netlist, as scripts/make_netlist_truths.py computes it from the circuit's equations.

use serde::Deserialize;
use std::path::PathBuf;

/// Boards of the Norrsund Harbour Works that have a netlist.
pub(super) const BOARDS: [&str; 6] = ["beacon", "foghorn", "tidegauge", "winch", "pumphouse", "semaphore"];

/// True values of one board.
#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
#[allow(dead_code)]
pub(super) struct Truth {
    pub(super) bulk_voltage_v: f64,
    /// At the knee, where the secondary current dies.
    pub(super) reflected_voltage_v: f64,
    pub(super) primary_inductance_h: f64,
    pub(super) leakage_inductance_h: f64,
    pub(super) switching_period_s: f64,
    pub(super) record_start_s: f64,
    pub(super) record_end_s: f64,
    /// At the start of the plateau: the bias of the leakage ring.
    pub(super) plateau_reflected_voltage_v: f64,
    pub(super) relaxation: TrueRing,
    pub(super) leakage: TrueRing,
    pub(super) cycles: Vec<TrueCycle>,
}

/// One natural mode of the linearised circuit.
#[derive(Clone, Copy, Deserialize)]
#[serde(deny_unknown_fields)]
#[allow(dead_code)]
pub(super) struct TrueRing {
    pub(super) frequency_hz: f64,
    pub(super) damped_frequency_hz: f64,
    pub(super) decay_per_s: f64,
    pub(super) quality_factor: f64,
    /// Where the impedance of the drain node is real: within 0.1 % of the undamped frequency.
    pub(super) resonance_hz: f64,
    pub(super) node_capacitance_f: f64,
}

/// One cycle as the gate makes it.
#[derive(Clone, Deserialize)]
#[serde(deny_unknown_fields)]
#[allow(dead_code)]
pub(super) struct TrueCycle {
    pub(super) start_s: f64,
    pub(super) turn_off_s: f64,
    pub(super) end_s: f64,
    pub(super) mode: String,
}

impl Truth {
    /// Reads the truth of a board.
    pub(super) fn read(board: &str) -> Self {
        serde_json::from_str(&std::fs::read_to_string(netlist(board).with_extension("json")).unwrap()).unwrap()
    }
}

/// Path of a board's netlist.
pub(super) fn netlist(board: &str) -> PathBuf {
    PathBuf::from(env!("CARGO_MANIFEST_DIR")).join("tests/netlists").join(board).with_extension("cir")
}
