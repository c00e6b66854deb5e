//! A recording of a netlist's drain as an 8-bit scope would give it: even grid, noise, codes; and its stored form, `.npy`
//! with the scale in a JSON sidecar.

use super::{
    simulation::Simulated,
    truth::{TrueCycle, Truth},
};
use rand_chacha::{
    ChaCha8Rng,
    rand_core::{Rng, SeedableRng},
};
use ringstep_analysis::waveform::{Samples, TimeAxis};
use serde::{Deserialize, Serialize};
use std::{fs, path::PathBuf};

/// Standard deviation of the noise before rounding, in codes.
const NOISE_CODES: f64 = 0.5;

/// Codes with their scale, volts = scale x code + offset, and what only the simulator saw.
pub(super) struct Recording {
    pub(super) codes: Vec<u8>,
    pub(super) scale: Scale,
}

/// Scale of a recording, and the end of demagnetisation of each cycle of the truth.
#[derive(Clone, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct Scale {
    pub(super) interval_s: f64,
    pub(super) start_s: f64,
    pub(super) scale_v: f64,
    pub(super) offset_v: f64,
    pub(super) ends_of_demagnetisation_s: Vec<Option<f64>>,
}

impl Recording {
    /// Samples the simulated drain evenly over a range that holds it all.
    pub(super) fn digitise(board: &str, simulated: &Simulated, truth: &Truth, interval_s: f64) -> Self {
        let seed = board.bytes().map(u64::from).sum();
        Self::with_noise(seed, simulated, truth, interval_s)
    }

    /// The same with another draw of noise.
    pub(super) fn with_noise(seed: u64, simulated: &Simulated, truth: &Truth, interval_s: f64) -> Self {
        let even = evenly(simulated, truth, interval_s);
        let peak = even.iter().copied().fold(0.0, f64::max);
        let top = (1.05 * peak / 50.0).ceil() * 50.0;
        let (scale_v, offset_v) = ((top + 50.0) / 256.0, -50.0);
        let mut generator = ChaCha8Rng::seed_from_u64(seed);
        let code = |v: &f64| {
            let wanted = (v - offset_v) / scale_v + NOISE_CODES * normal(&mut generator);
            wanted.round().clamp(0.0, 255.0) as u8
        };
        let codes = even.iter().map(code).collect();
        let dies = |cycle: &TrueCycle| match cycle.mode.as_str() {
            "continuous" => None,
            _ => simulated.end_of_demagnetisation_s(cycle.turn_off_s, cycle.end_s),
        };
        let ends_of_demagnetisation_s = truth.cycles.iter().map(dies).collect();
        let start_s = truth.record_start_s;
        Self { codes, scale: Scale { interval_s, start_s, scale_v, offset_v, ends_of_demagnetisation_s } }
    }

    /// Voltages.
    pub(super) fn volts(&self) -> Vec<f64> {
        self.codes.iter().map(|&code| self.scale.scale_v * f64::from(code) + self.scale.offset_v).collect()
    }

    /// As the analysis takes it.
    pub(super) fn samples(&self) -> Samples {
        let scale = &self.scale;
        let time = TimeAxis::Even { start_s: scale.start_s, interval_s: scale.interval_s };
        let range = (scale.offset_v, scale.offset_v + 255.0 * scale.scale_v);
        let samples = Samples::new(time, self.volts()).unwrap();
        samples.with_range(Some(scale.scale_v), Some(range)).unwrap()
    }

    /// The stored recording of a board.
    pub(super) fn read(board: &str) -> Self {
        let bytes = fs::read(path(board, "npy")).unwrap();
        // NumPy's format, version 1.0: magic, two version bytes, header length, header, data.
        assert_eq!(&bytes[..8], b"\x93NUMPY\x01\x00");
        let header = usize::from(u16::from_le_bytes([bytes[8], bytes[9]]));
        let scale = serde_json::from_str(&fs::read_to_string(path(board, "json")).unwrap()).unwrap();
        Self { codes: bytes[10 + header..].to_vec(), scale }
    }

    /// Stores it.
    pub(super) fn write(&self, board: &str) {
        let mut header = format!("{{'descr': '|u1', 'fortran_order': False, 'shape': ({},), }}", self.codes.len());
        while (10 + header.len() + 1) % 64 != 0 {
            header.push(' ');
        }
        header.push('\n');
        let length = u16::try_from(header.len()).unwrap().to_le_bytes();
        let bytes = [b"\x93NUMPY\x01\x00", &length[..], header.as_bytes(), &self.codes].concat();
        fs::create_dir_all(path(board, "npy").parent().unwrap()).unwrap();
        fs::write(path(board, "npy"), bytes).unwrap();
        fs::write(path(board, "json"), serde_json::to_string(&self.scale).unwrap() + "\n").unwrap();
    }
}

/// The drain on an even grid over the recorded stretch, between steps along the straight line: at most 1 ns apart.
pub(super) fn evenly(simulated: &Simulated, truth: &Truth, interval_s: f64) -> Vec<f64> {
    let points = ((truth.record_end_s - truth.record_start_s) / interval_s) as usize;
    let (times, volts) = (&simulated.time_s, &simulated.drain_v);
    let mut step = 0;
    let at = |k: usize| {
        let t = truth.record_start_s + k as f64 * interval_s;
        while step + 2 < times.len() && times[step + 1] < t {
            step += 1;
        }
        let share = (t - times[step]) / (times[step + 1] - times[step]);
        volts[step] + share * (volts[step + 1] - volts[step])
    };
    (0..points).map(at).collect()
}

fn path(board: &str, extension: &str) -> PathBuf {
    let folder = PathBuf::from(env!("CARGO_MANIFEST_DIR")).join("tests/fixtures/netlists");
    folder.join(board).with_extension(extension)
}

/// A standard normal deviate (Box and Muller 1958).
fn normal(generator: &mut ChaCha8Rng) -> f64 {
    let mut uniform = || (f64::from(generator.next_u32()) + 0.5) / 2f64.powi(32);
    let (radius, turn) = ((-2.0 * uniform().ln()).sqrt(), uniform());
    radius * (std::f64::consts::TAU * turn).cos()
}
