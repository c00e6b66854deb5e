//! The board on the bench and the time that passes for it: between captures the averaged board follows the real clock, so
//! that it settles while a client waits; what line and load ask of it is kept here.

use crate::{
    boards::BoardModel,
    converter::{LoadDemand, Plant},
    truth::TruthFile,
};
use rand_chacha::{ChaCha8Rng, rand_core::SeedableRng};
use serde_json::{Value, json};
use std::{
    sync::{Arc, Mutex, MutexGuard, PoisonError},
    time::Instant,
};

/// What the line source does.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Line {
    /// Output on.
    pub on: bool,
    /// Root-mean-square voltage it really delivers.
    pub rms_v: f64,
    /// Frequency.
    pub frequency_hz: f64,
    /// Root-mean-square current limit.
    pub limit_a: f64,
}

/// What the load does.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Draw {
    /// Input on.
    pub on: bool,
    /// What it really draws while it can.
    pub demand: LoadDemand,
    /// What leaks through it while it is off, as a resistance.
    pub leakage_ohm: f64,
}

/// The board with its clock.
pub struct Bench {
    plant: Plant,
    seed: u64,
    speed: f64,
    last: Instant,
    line: Line,
    draw: Draw,
    truth: TruthFile,
}

/// The bench as the instruments share it.
#[derive(Clone)]
pub struct SharedBench(Arc<Mutex<Bench>>);

impl SharedBench {
    /// A bench with line and load off; `speed` simulated seconds pass in a real one.
    pub fn new(board: &'static BoardModel, seed: u64, speed: f64, probe_f: f64, truth: TruthFile) -> Self {
        let mut plant = Plant::new(board, seed);
        plant.set_probe_capacitance(probe_f);
        let line = Line { on: false, rms_v: 0.0, frequency_hz: 50.0, limit_a: 1.0 };
        let draw = Draw { on: false, demand: LoadDemand::Off, leakage_ohm: f64::INFINITY };
        Self(Arc::new(Mutex::new(Bench { plant, seed, speed, last: Instant::now(), line, draw, truth })))
    }

    /// The bench, brought up to the present. A panic elsewhere does not take the bench away from the others.
    pub fn now(&self) -> MutexGuard<'_, Bench> {
        let mut bench = self.0.lock().unwrap_or_else(PoisonError::into_inner);
        bench.catch_up();
        bench
    }
}

impl Bench {
    fn catch_up(&mut self) {
        let now = Instant::now();
        self.plant.advance(now.duration_since(self.last).as_secs_f64() * self.speed);
        self.last = now;
    }

    /// The board as it stands.
    pub fn plant(&self) -> &Plant {
        &self.plant
    }

    /// What the line really is.
    pub fn line(&self) -> Value {
        let Line { on, rms_v, frequency_hz, limit_a } = self.line;
        json!({"on": on, "rms_v": rms_v, "frequency_hz": frequency_hz, "limit_a": limit_a})
    }

    /// What the load really draws while the output holds.
    pub fn draw(&self) -> Value {
        let (current_a, resistance_ohm) = match self.draw.demand {
            LoadDemand::Off => (None, None),
            LoadDemand::Current(current_a) => (Some(current_a), None),
            LoadDemand::Resistance(ohm) => (None, Some(ohm)),
        };
        json!({"on": self.draw.on, "current_a": current_a, "resistance_ohm": resistance_ohm})
    }

    /// Where truths are written.
    pub fn truth(&mut self) -> &mut TruthFile {
        &mut self.truth
    }

    /// Changes the line.
    pub fn set_line(&mut self, line: Line) {
        self.line = line;
        self.plant.set_line(line.on, line.rms_v, line.frequency_hz, line.limit_a);
        self.note_state();
    }

    /// Changes the load.
    pub fn set_draw(&mut self, draw: Draw) {
        self.draw = draw;
        self.plant.set_load(match draw {
            Draw { on: true, demand, .. } => demand,
            Draw { leakage_ohm, .. } => LoadDemand::Resistance(leakage_ohm),
        });
        self.note_state();
    }

    /// Solders a capacitor from drain to source, or takes it away with zero; refused while the line is on.
    pub fn solder(&mut self, farad: f64) -> bool {
        let possible = !self.line.on && (0.0..=1e-6).contains(&farad);
        if possible {
            self.plant.set_added_capacitance(farad);
        }
        possible
    }

    /// Notes which outputs are on, where that has changed.
    pub fn note_state(&mut self) {
        self.truth.state(self.line.on, self.draw.on);
    }

    /// Identifies what line and load were set to: the part of a capture's key that the scope does not know.
    pub fn setting_key(&self) -> u64 {
        let Line { on, rms_v, frequency_hz, limit_a } = self.line;
        let (kind, level) = match self.draw.demand {
            LoadDemand::Off => (0, 0.0),
            LoadDemand::Current(current_a) => (1, current_a),
            LoadDemand::Resistance(ohm) => (2, ohm),
        };
        let kind = if self.draw.on { kind } else { 3 };
        let plain = key(&[
            self.seed,
            on.into(),
            rms_v.to_bits(),
            frequency_hz.to_bits(),
            limit_a.to_bits(),
            kind,
            level.to_bits(),
        ]);
        let added_f = self.plant.circuit().added_f;
        if added_f > 0.0 { key(&[plain, added_f.to_bits()]) } else { plain }
    }
}

/// A key of several words: FNV-1a over their bytes, the same on every machine and in every version.
pub fn key(words: &[u64]) -> u64 {
    let bytes = words.iter().flat_map(|word| word.to_le_bytes());
    bytes.fold(0xcbf2_9ce4_8422_2325, |hash, byte| (hash ^ u64::from(byte)).wrapping_mul(0x0100_0000_01b3))
}

/// A random stream that depends on nothing but its key.
pub fn random(words: &[u64]) -> ChaCha8Rng {
    ChaCha8Rng::seed_from_u64(key(words))
}

/// A fixed property of one instrument, uniform between minus and plus one: the same for a seed and a place.
pub fn quirk(seed: u64, place: &str, index: u64) -> f64 {
    let place = place.bytes().fold(0, |sum: u64, byte| sum.wrapping_mul(257).wrapping_add(byte.into()));
    (key(&[seed, place, index, 0x5eed]) >> 11) as f64 / (1_u64 << 52) as f64 - 1.0
}
