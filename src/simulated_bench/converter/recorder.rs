//! Keeps the truth of a stepped waveform as it goes: cycles, and the span and bulk voltage of every ring.

use super::{
    ConductionMode, CycleTruth, LeakageRingTruth, RelaxationRingTruth, Truth,
    circuit::{Circuit, State},
};

/// Collects cycles and rings while the stepper runs.
#[derive(Debug, Clone)]
pub(super) struct Recorder {
    truth: Truth,
    ring: Option<Span>,
    released_s: Option<f64>,
    skipped: bool,
    protected: bool,
}

/// A relaxation ring in progress: its start, the levels it started with, and the integral of the bulk voltage since.
#[derive(Debug, Clone, Copy)]
struct Span {
    start_s: f64,
    clamp_v: f64,
    output_v: f64,
    length_s: f64,
    bulk_v_s: f64,
}

impl Span {
    fn new(start_s: f64, state: &State) -> Self {
        Self { start_s, clamp_v: state.clamp_v, output_v: state.output_v, length_s: 0.0, bulk_v_s: 0.0 }
    }
}

impl Recorder {
    pub(super) fn new(circuit: &Circuit) -> Self {
        let p = &circuit.parts;
        Self {
            truth: Truth {
                primary_inductance_h: p.magnetising_h + p.leakage_h,
                leakage_inductance_h: p.leakage_h,
                turns_ratio: p.turns_ratio,
                probe_capacitance_f: circuit.probe_f,
                cycles: vec![],
                relaxation_rings: vec![],
                leakage_rings: vec![],
            },
            ring: None,
            released_s: None,
            skipped: false,
            protected: false,
        }
    }

    pub(super) fn truth(&self, circuit: &Circuit, state: &State, time_s: f64) -> Truth {
        let mut truth = self.truth.clone();
        truth.relaxation_rings.extend(self.relaxation_ring(circuit, time_s));
        truth.leakage_rings.extend(self.leakage_ring(circuit, state, time_s));
        truth
    }

    pub(super) fn pass(&mut self, h: f64, bulk_v: f64) {
        if let Some(ring) = &mut self.ring {
            ring.length_s += h;
            ring.bulk_v_s += h * bulk_v;
        }
    }

    pub(super) fn turn_on(&mut self, time_s: f64, rectifier_on: bool, circuit: &Circuit, state: &State) {
        let mode = match (rectifier_on, self.protected, self.skipped) {
            (true, _, _) => ConductionMode::Continuous,
            (_, true, _) => ConductionMode::Hiccup,
            (_, _, true) => ConductionMode::Skipped,
            _ => ConductionMode::Discontinuous,
        };
        if let Some(last) = self.truth.cycles.last_mut() {
            last.mode = mode;
        }
        self.truth.relaxation_rings.extend(self.relaxation_ring(circuit, time_s));
        self.truth.leakage_rings.extend(self.leakage_ring(circuit, state, time_s));
        (self.ring, self.released_s, self.skipped, self.protected) = (None, None, false, false);
        self.truth.cycles.push(CycleTruth {
            turn_on_s: time_s,
            turn_off_s: None,
            demagnetised_s: None,
            mode: ConductionMode::Unfinished,
        });
    }

    pub(super) fn turn_off(&mut self, time_s: f64) {
        if let Some(last) = self.truth.cycles.last_mut() {
            last.turn_off_s = Some(time_s);
        }
    }

    /// While the rectifier conducts, the leakage rings from here; where the clamp alone took the pulse, or flattened a crest
    /// of the relaxation ring, that ring is free from here.
    pub(super) fn clamp_releases(&mut self, time_s: f64, rectifier_on: bool, state: &State) {
        if rectifier_on {
            self.released_s = Some(time_s);
        } else {
            self.demagnetised(time_s, state);
        }
    }

    /// A ring that makes a diode conduct again is not free; it starts anew when the diode blocks.
    pub(super) fn interrupted(&mut self) {
        self.ring = None;
    }

    /// A ring that reached the body diode is free from here on.
    pub(super) fn body_blocks(&mut self, time_s: f64, state: &State) {
        if let Some(ring) = &mut self.ring {
            *ring = Span::new(time_s, state);
        }
    }

    fn demagnetised(&mut self, time_s: f64, state: &State) {
        if let Some(last) = self.truth.cycles.last_mut() {
            last.demagnetised_s.get_or_insert(time_s);
        }
        self.ring = Some(Span::new(time_s, state));
    }

    pub(super) fn rectifier_blocks(&mut self, time_s: f64, gate_off: bool, circuit: &Circuit, state: &State) {
        if !gate_off {
            return;
        }
        self.truth.leakage_rings.extend(self.leakage_ring(circuit, state, time_s));
        self.released_s = None;
        self.demagnetised(time_s, state);
    }

    pub(super) fn skips(&mut self) {
        self.skipped = true;
    }

    pub(super) fn protects(&mut self) {
        self.protected = true;
    }

    fn relaxation_ring(&self, circuit: &Circuit, end_s: f64) -> Option<RelaxationRingTruth> {
        let ring = self.ring.filter(|ring| ring.length_s > 0.0)?;
        let bulk_v = ring.bulk_v_s / ring.length_s;
        let (square, node_capacitance_f) = circuit.relaxation_mode(bulk_v, ring.clamp_v, ring.output_v);
        Some(RelaxationRingTruth {
            start_s: ring.start_s,
            end_s,
            bulk_v,
            node_capacitance_f,
            frequency_hz: square.sqrt() / std::f64::consts::TAU,
        })
    }

    fn leakage_ring(&self, circuit: &Circuit, state: &State, end_s: f64) -> Option<LeakageRingTruth> {
        let start_s = self.released_s?;
        let (square, node_capacitance_f) = circuit.leakage_mode(state.bulk_v, state.clamp_v, state.output_v);
        let frequency_hz = square.sqrt() / std::f64::consts::TAU;
        Some(LeakageRingTruth { start_s, end_s, frequency_hz, node_capacitance_f })
    }
}
