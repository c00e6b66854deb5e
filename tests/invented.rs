//! An invented run: the beacon board of the fictional Norrsund Harbour Works, with waveforms drawn from formulas.
#![allow(clippy::unwrap_used, missing_docs)]

use ringstep::{
    instrument::{Identity, LoadReading, RawWaveform, SampleFormat, SourceReading},
    record::{Inputs, RunWriter},
    sequence::event::{Capture, Event, LoadStep, Outcome, Point, PointValues, Purpose},
};
use ringstep_analysis::{
    findings::{Cycle, CycleMode, Doubt, DoubtName, Findings, Ring, RingFit, RingKind},
    quantity::Measured,
};
use std::{f64::consts::TAU, path::Path};

pub(crate) const BULK_V: f64 = 162.0;
pub(crate) const REFLECTED_V: f64 = 88.0;
const CLAMP_V: f64 = 150.0;
const RELAXATION_HZ: f64 = 512e3;
const RELAXATION_DECAY: f64 = 9.0e4;
const LEAKAGE_HZ: f64 = 3.4e6;
const LEAKAGE_DECAY: f64 = 1.3e6;
const TURN_OFF_S: f64 = 2.0e-6;
const RELEASE_S: f64 = 2.25e-6;
const KNEE_S: f64 = 7.0e-6;

pub(crate) fn inputs() -> Inputs {
    Inputs {
        plan: include_str!("../src/guide/examples/plan.toml").into(),
        station: include_str!("../src/guide/examples/station.toml").into(),
        board: include_str!("../src/guide/examples/board.toml").into(),
    }
}

pub(crate) fn measured(value: f64, relative: f64) -> Measured {
    Measured { value, standard_uncertainty: value.abs() * relative }
}

/// Drain voltage of one cycle, turn-on at zero, with every part of its anatomy.
pub(crate) fn drain_v(t_s: f64, bulk_v: f64) -> f64 {
    if t_s < TURN_OFF_S {
        1.2 + 0.4 * t_s / TURN_OFF_S
    } else if t_s < RELEASE_S {
        bulk_v + CLAMP_V * (1.0 - (-(t_s - TURN_OFF_S) / 1.5e-8).exp())
    } else if t_s < KNEE_S {
        let t = t_s - RELEASE_S;
        let ring = (CLAMP_V - REFLECTED_V) * (-LEAKAGE_DECAY * t).exp() * (TAU * LEAKAGE_HZ * t).cos();
        bulk_v + REFLECTED_V + ring - 0.6e6 * t
    } else {
        let t = t_s - KNEE_S;
        bulk_v + REFLECTED_V * (-RELAXATION_DECAY * t).exp() * (TAU * RELAXATION_HZ * t).cos()
    }
}

/// Codes of a waveform over `points` samples, with a little deterministic noise.
pub(crate) fn waveform(points: usize, interval_s: f64, start_s: f64, v: impl Fn(f64) -> f64) -> RawWaveform {
    let (volts_per_code, volts_origin) = (0.15, 250.0);
    let mut noise: u32 = 7;
    let payload = (0..points).flat_map(|index| {
        noise = noise.wrapping_mul(1_664_525).wrapping_add(1_013_904_223);
        let jitter = f64::from(noise >> 16) / 65536.0 * 4.0 - 2.0;
        let volts = v(start_s + index as f64 * interval_s);
        let code = ((volts - volts_origin) / volts_per_code + jitter).round().clamp(-2048.0, 2047.0);
        (code as i16).to_le_bytes()
    });
    RawWaveform {
        payload: payload.collect(),
        format: SampleFormat::I16Le,
        volts_per_code,
        volts_origin,
        code_reference: 0.0,
        interval_s,
        time_origin_s: start_s,
        index_reference: 0.0,
        clip_codes: [-2048.0, 2047.0],
        acquisition: 1,
        preamble: "2,0,1,\"drain\"".into(),
    }
}

/// Survey: two regular cycles, then one whose followers are skipped.
fn survey_v(t_s: f64, bulk_v: f64) -> f64 {
    match t_s {
        t if t < 0.0 => bulk_v + 3.0 * (TAU * RELAXATION_HZ * t).cos(),
        t if t < 15e-6 => drain_v(t, bulk_v),
        t if t < 30e-6 => drain_v(t - 15e-6, bulk_v),
        t if t < 90e-6 => drain_v(t - 30e-6, bulk_v),
        t => drain_v(t - 90e-6, bulk_v),
    }
}

fn capture(number: usize, point: usize, line_v: f64, purpose: Purpose, load_a: f64) -> Capture {
    let bulk_v = BULK_V * line_v / 115.0;
    let waveform = match purpose {
        Purpose::Survey => waveform(20_000, 5e-9, -4e-6, |t| survey_v(t, bulk_v)),
        Purpose::RelaxationRing => waveform(12_000, 4e-9, -1e-6, |t| drain_v(t, bulk_v)),
        Purpose::LeakageRing => waveform(6_000, 1e-9, 1.5e-6, |t| drain_v(t, bulk_v)),
    };
    Capture { number, point, purpose, line_v, load_a, repeat: 0, waveform, sha256: String::new() }
}

fn ring(frequency_hz: f64, decay: f64) -> Ring {
    Ring {
        frequency_hz: measured(frequency_hz, 2e-4),
        damped_frequency_hz: measured(frequency_hz * 0.9999, 2e-4),
        decay_per_s: measured(decay, 0.01),
        quality_factor: measured(TAU * frequency_hz / (2.0 * decay), 0.01),
        amplitude_v: 100.0,
        alternative_hz: None,
    }
}

fn fit(kind: RingKind, start_s: f64, end_s: f64, parameters: [f64; 6]) -> RingFit {
    let stopped = "relative step below 1e-9".into();
    RingFit {
        kind,
        start_s,
        end_s,
        parameters,
        covariance: vec![0.0; 36],
        curve: Default::default(),
        residual_v: 0.18,
        stopped,
        accepted: true,
    }
}

fn findings(purpose: Purpose, bulk_v: f64) -> Findings {
    let relaxation = [REFLECTED_V, RELAXATION_DECAY, RELAXATION_HZ, 0.0, bulk_v, 0.0];
    let leakage = [CLAMP_V - REFLECTED_V, LEAKAGE_DECAY, LEAKAGE_HZ, 0.0, bulk_v + REFLECTED_V, -0.6e6];
    let cycle = |start_s: f64, end_s: f64, mode| Cycle {
        start_s,
        turn_off_s: start_s + TURN_OFF_S,
        end_of_demagnetisation_s: Some(start_s + KNEE_S),
        end_s,
        mode,
    };
    let (cycles, ring_fits) = match purpose {
        Purpose::Survey => (
            vec![
                cycle(0.0, 15e-6, CycleMode::Discontinuous),
                cycle(15e-6, 30e-6, CycleMode::Discontinuous),
                cycle(30e-6, 90e-6, CycleMode::Skipped),
                cycle(90e-6, 95.99e-6, CycleMode::Incomplete),
            ],
            vec![],
        ),
        Purpose::RelaxationRing => {
            (vec![cycle(0.0, 47e-6, CycleMode::Skipped)], vec![fit(RingKind::Relaxation, KNEE_S, 46e-6, relaxation)])
        }
        Purpose::LeakageRing => (vec![], vec![fit(RingKind::Leakage, RELEASE_S, 5e-6, leakage)]),
    };
    let sentence = "the peaks drift <2 V> & the frequency moves with amplitude; see the knee law".to_owned();
    let doubts = vec![Doubt { name: DoubtName::AmplitudeDependent, sentence }];
    Findings {
        relaxation_ring: Some(ring(RELAXATION_HZ, RELAXATION_DECAY)),
        leakage_ring: Some(ring(LEAKAGE_HZ, LEAKAGE_DECAY)),
        node_capacitance_f: Some(measured(92e-12, 0.008)),
        leakage_inductance_h: Some(measured(23.5e-6, 0.03)),
        reflected_voltage_v: Some(measured(REFLECTED_V, 0.01)),
        bulk_voltage_v: Some(measured(bulk_v, 0.002)),
        peak_drain_voltage_v: Some(measured(bulk_v + CLAMP_V, 0.01)),
        turn_on_rate_hz: Some(measured(21e3, 0.01)),
        cycles,
        budgets: Vec::new(),
        ring_fits,
        doubts,
    }
}

fn values(line_v: f64) -> PointValues {
    let bulk_v = BULK_V * line_v / 115.0;
    PointValues {
        leakage_captures: Vec::new(),
        relaxation_frequency_hz: Some(measured(RELAXATION_HZ, 2e-4)),
        relaxation_quality_factor: Some(measured(17.87, 0.012)),
        leakage_frequency_hz: Some(measured(LEAKAGE_HZ, 1e-3)),
        leakage_quality_factor: Some(measured(8.21, 0.02)),
        node_capacitance_f: Some(measured(92.4e-12 - 0.03e-12 * line_v, 0.008)),
        node_capacitance_without_probe_f: Some(measured(87.6e-12 - 0.03e-12 * line_v, 0.01)),
        leakage_inductance_h: (line_v < 200.0).then(|| measured(23.5e-6, 0.03)),
        reflected_voltage_v: Some(measured(REFLECTED_V, 0.01)),
        bulk_voltage_v: Some(measured(bulk_v, 0.002)),
        peak_drain_voltage_v: Some(measured(bulk_v + CLAMP_V, 0.01)),
        turn_on_rate_hz: Some(measured(21.3e3, 0.01)),
        relaxation_amplitude_v: Some(96.0),
        leakage_amplitude_v: Some(41.0),
        budgets: Vec::new(),
        capacitance_parts: Vec::new(),
    }
}

fn identity(model: &str, port: u16) -> Identity {
    Identity {
        maker: "Norrsund Harbour Works".into(),
        model: model.into(),
        serial_number: "N-0042".into(),
        firmware: "1.0".into(),
        driver: model.to_lowercase(),
        address: format!("TCPIP::127.0.0.1::{port}::SOCKET"),
        simulated: true,
    }
}

/// Events of one point with their captures; the captures are written as they come.
fn write_point(writer: &mut RunWriter, index: usize, line_v: f64) {
    let load = |current_a: f64| LoadReading { voltage_v: 11.98, current_a };
    let source = Some(SourceReading { voltage_v: line_v, current_a: 0.11, power_w: Some(7.4), limiting: false });
    let mut number = 6 * index;
    writer.event(&Event::LineSet { line_v, frequency_hz: 50.0 }).unwrap();
    writer.event(&Event::Settled { line_v, waited_s: 0.8, load: load(0.5), source }).unwrap();
    let mut taken = Vec::new();
    let mut take = |writer: &mut RunWriter, purpose, load_a| {
        let mut capture = capture(number, index, line_v, purpose, load_a);
        writer.capture(&mut capture).unwrap();
        writer.event(&Event::Captured(capture)).unwrap();
        taken.push((number, findings(purpose, BULK_V * line_v / 115.0)));
        number += 1;
        number - 1
    };
    for (step, load_a) in [0.5, 0.25, 0.12, 0.06].into_iter().enumerate() {
        let survey = take(writer, Purpose::Survey, load_a);
        let cycles = [[9, 0, 0], [2, 7, 0], [0, 8, 1], [0, 3, 5]][step];
        let visible_ring_periods = [None, Some(1.2), Some(4.1), Some(27.5)][step];
        let step = LoadStep { point: index, set_a: load_a, load: load(load_a), cycles, visible_ring_periods, survey };
        writer.event(&Event::LoadStepped(step)).unwrap();
    }
    take(writer, Purpose::RelaxationRing, 0.06);
    take(writer, Purpose::LeakageRing, 0.06);
    let boundary_load_a = Some([0.12, 0.25]);
    let (load_a, load_w, values) = (0.06, 0.719, values(line_v));
    let point = Point { index, line_v, load_a, load_w, boundary_load_a, values, findings: taken };
    writer.event(&Event::PointFinished(point)).unwrap();
}

/// A whole run of two points and a refused one, written event by event.
pub(crate) fn write_run(folder: &Path) {
    let mut writer = begin(folder);
    write_point(&mut writer, 0, 115.0);
    write_point(&mut writer, 1, 230.0);
    let reason = "the output never settled at 265 V; check the board".to_owned();
    writer.event(&Event::PointRefused { index: 2, line_v: 265.0, reason }).unwrap();
    writer.event(&Event::Noted { note: "the load input was warm".into() }).unwrap();
    end(writer, Outcome::Partial);
}

/// A run of many points.
pub(crate) fn write_sweep(folder: &Path, points: usize) {
    let mut writer = begin(folder);
    for index in 0..points {
        write_point(&mut writer, index, 90.0 + 12.0 * index as f64);
    }
    end(writer, Outcome::Complete);
}

/// A run that took one survey and then refused to measure.
pub(crate) fn write_refused_run(folder: &Path, waveform: RawWaveform) {
    let mut writer = begin(folder);
    let mut survey = Capture { waveform, ..capture(0, 0, 115.0, Purpose::Survey, 0.5) };
    writer.capture(&mut survey).unwrap();
    writer.event(&Event::Captured(survey)).unwrap();
    end(writer, Outcome::Refused);
}

fn begin(folder: &Path) -> RunWriter {
    let run_id = uuid::Uuid::now_v7();
    let mut writer = RunWriter::create(folder, &inputs(), run_id).unwrap();
    let (run, software_version) = (run_id.to_string(), "0.1.0".to_owned());
    writer.event(&Event::RunStarted { run, software_version, simulated: true }).unwrap();
    for (role, port) in [("scope", 5025), ("load", 5026), ("source", 5027)] {
        let identity = identity(&format!("Lantern-{role}"), port);
        writer.event(&Event::InstrumentIdentified { role: role.into(), identity }).unwrap();
        writer.exchange_log().append(&serde_json::json!({"to": role, "sent": "*IDN?"})).unwrap();
    }
    for check in ["peak drain voltage against the probe", "earthing of probe and source"] {
        let detail = "475 V expected, 1000 V rated".to_owned();
        writer.event(&Event::PreflightChecked { check: check.into(), passed: true, detail }).unwrap();
    }
    writer
}

fn end(mut writer: RunWriter, outcome: Outcome) {
    writer.event(&Event::SafeOff { reason: "finished".into(), source_off: true, load_off: true }).unwrap();
    writer.event(&Event::RunEnded { outcome, message: None }).unwrap();
    writer.finish().unwrap();
}
