//! The truth about what was captured, one JSON line an acquisition, and which outputs were on. Tests and the last lines of
//! a demonstration read it; no instrument does. Times are in the time base of the scope: zero is the trigger.

use crate::converter::Truth;
use serde_json::{Value, json};
use std::{
    fs::{File, OpenOptions},
    io::{self, Write},
    path::Path,
};

/// The file of truths; without a path it keeps nothing.
#[derive(Debug, Default)]
pub struct TruthFile {
    file: Option<File>,
    state: Option<(bool, bool)>,
}

impl TruthFile {
    /// Opens the file for appending.
    ///
    /// # Errors
    /// If it cannot be opened.
    pub fn open(path: Option<&Path>) -> io::Result<Self> {
        let file = path.map(|path| OpenOptions::new().create(true).append(true).open(path)).transpose()?;
        Ok(Self { file, state: None })
    }

    /// Notes which outputs are on, if that has changed.
    pub fn state(&mut self, source_on: bool, load_on: bool) {
        if self.state.replace((source_on, load_on)) != Some((source_on, load_on)) {
            self.final_state();
        }
    }

    /// Notes which outputs are on at the end.
    pub fn final_state(&mut self) {
        if let Some((source_on, load_on)) = self.state {
            self.line(&json!({"state": {"source_on": source_on, "load_on": load_on}}));
        }
    }

    /// Notes an acquisition: what it was taken with, then what it holds.
    pub fn acquisition(&mut self, mut line: Value, truth: Value) {
        if let (Value::Object(line), Value::Object(truth)) = (&mut line, truth) {
            line.extend(truth);
        }
        self.line(&line);
    }

    fn line(&mut self, value: &Value) {
        let Some(file) = &mut self.file else { return };
        // One write a line: a reader never sees a part of one.
        if let Err(error) = file.write_all(format!("{value}\n").as_bytes()) {
            eprintln!("simulated bench: failed to write the truth file: {error}; no more is written to it");
            self.file = None;
        }
    }
}

/// What is true of a window, in the time base whose zero stands at `trigger_s` of the stepped waveform. `from_s` and
/// `to_s` are the ends of the window in that time base.
pub fn of_window(truth: &Truth, trigger_s: f64, from_s: f64, to_s: f64) -> Value {
    let inside = |start_s: f64, end_s: f64| end_s - trigger_s >= from_s && start_s - trigger_s <= to_s;
    let cycles: Vec<Value> = truth
        .cycles
        .iter()
        .enumerate()
        .filter(|(index, cycle)| {
            let end_s = truth.cycles.get(index + 1).map_or(f64::INFINITY, |next| next.turn_on_s);
            inside(cycle.turn_on_s, end_s)
        })
        .map(|(_, cycle)| {
            json!({
                "start_s": cycle.turn_on_s - trigger_s,
                "turn_off_s": cycle.turn_off_s.map(|t| t - trigger_s),
                "end_of_demagnetisation_s": cycle.demagnetised_s.map(|t| t - trigger_s),
                "mode": cycle.mode,
            })
        })
        .collect();
    let relaxation = truth.relaxation_rings.iter().filter(|ring| inside(ring.start_s, ring.end_s));
    let leakage = truth.leakage_rings.iter().filter(|ring| inside(ring.start_s, ring.end_s));
    json!({
        "cycles": cycles,
        "relaxation_rings": relaxation.map(|ring| json!({
            "start_s": ring.start_s - trigger_s, "end_s": ring.end_s - trigger_s, "bulk_v": ring.bulk_v,
            "capacitance_f": ring.node_capacitance_f, "frequency_hz": ring.frequency_hz,
        })).collect::<Vec<_>>(),
        "leakage_rings": leakage.map(|ring| json!({
            "start_s": ring.start_s - trigger_s, "end_s": ring.end_s - trigger_s,
            "capacitance_f": ring.node_capacitance_f, "frequency_hz": ring.frequency_hz,
        })).collect::<Vec<_>>(),
        "primary_inductance_h": truth.primary_inductance_h,
        "leakage_inductance_h": truth.leakage_inductance_h,
        "turns_ratio": truth.turns_ratio,
        "probe_capacitance_f": truth.probe_capacitance_f,
    })
}
