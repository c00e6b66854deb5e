//! `fit` as it is used: recordings in, values with uncertainties out, and no value where there is no ring.

use crate::need::need_capture;
use assert_cmd::Command;
use rand_chacha::{
    ChaCha8Rng,
    rand_core::{Rng, SeedableRng},
};
use serde_json::Value;
use std::{f64::consts::TAU, fs, path::Path};
use tempfile::TempDir;

struct Answer {
    code: Option<i32>,
    out: String,
    err: String,
}

fn fit(file: &Path, options: &[&str]) -> Answer {
    let output = Command::cargo_bin("ringstep").unwrap().arg("fit").arg(file).args(options).output().unwrap();
    let (out, err) = (String::from_utf8(output.stdout).unwrap(), String::from_utf8(output.stderr).unwrap());
    Answer { code: output.status.code(), out, err }
}

fn json(file: &Path, options: &[&str]) -> (Option<i32>, Value) {
    let answer = fit(file, &[options, &["--json"]].concat());
    (answer.code, serde_json::from_str(&answer.out).unwrap_or_else(|error| panic!("{error}: {}", answer.err)))
}

fn value(json: &Value, pointer: &str) -> f64 {
    json.pointer(pointer)
        .and_then(|quantity| quantity["value"].as_f64())
        .unwrap_or_else(|| panic!("{pointer}: {json:#}"))
}

fn near(json: &Value, pointer: &str, expected: f64, relative: f64) {
    let value = value(json, pointer);
    assert!((value / expected - 1.0).abs() <= relative, "{pointer}: {value} where {expected} is expected");
}

/// A ring of 500 kHz with a quality factor of 15 around 325 V, sampled at 50 MHz, 20 periods, with a little noise: volts.
fn ring(seed: u64) -> Vec<f64> {
    let mut noise = noise(seed);
    let decay = TAU * 500e3 / (2.0 * 15.0);
    let damped = ((TAU * 500e3).powi(2) - decay * decay).sqrt();
    let ring = |t: f64| 325.0 + 80.0 * (-decay * t).exp() * (damped * t + 0.4).cos();
    (0..2000).map(|index| ring(f64::from(index) * 20e-9) + 0.5 * noise()).collect()
}

/// Standard normal numbers (Box and Muller).
fn noise(seed: u64) -> impl FnMut() -> f64 {
    let mut random = ChaCha8Rng::seed_from_u64(seed);
    move || {
        let [a, b] = [(); 2].map(|()| (random.next_u32() as f64 + 0.5) / 4_294_967_296.0);
        (-2.0 * a.ln()).sqrt() * (TAU * b).cos()
    }
}

fn text_of(volts: &[f64]) -> String {
    let lines = volts.iter().enumerate().map(|(index, volts)| format!("{:.9e},{volts:.6}", index as f64 * 20e-9));
    format!("time (s),drain (V)\n{}\n", lines.collect::<Vec<_>>().join("\n"))
}

/// A NumPy array file of 16-bit codes (format version 1.0, as the NumPy documentation gives it).
fn array_of(codes: &[i16]) -> Vec<u8> {
    let mut header = format!("{{'descr': '<i2', 'fortran_order': False, 'shape': ({},), }}", codes.len());
    header.push_str(&" ".repeat(63 - (10 + header.len()) % 64));
    header.push('\n');
    let length = u16::try_from(header.len()).unwrap();
    let mut bytes = [b"\x93NUMPY\x01\x00".as_slice(), &length.to_le_bytes(), header.as_bytes()].concat();
    bytes.extend(codes.iter().flat_map(|code| code.to_le_bytes()));
    bytes
}

/// Closed form: undamped frequency and quality factor are what the ring was made of, and `C = 1 / ((2 pi f)^2 L)`.
#[test]
fn a_ring_down_of_text_gives_back_what_it_was_made_of() {
    let folder = TempDir::new().unwrap();
    let file = folder.path().join("ring.csv");
    fs::write(&file, text_of(&ring(1))).unwrap();
    let (code, json) = json(&file, &["--ring-down"]);
    assert_eq!(code, Some(0), "{json:#}");
    near(&json, "/relaxation_ring/frequency_hz", 500e3, 1e-3);
    near(&json, "/relaxation_ring/quality_factor", 15.0, 0.02);
    let uncertainty = json["relaxation_ring"]["frequency_hz"]["standard_uncertainty"].as_f64().unwrap();
    assert!((value(&json, "/relaxation_ring/frequency_hz") - 500e3).abs() < 5.0 * uncertainty, "{json:#}");
    let printed = fit(&file, &["--ring-down"]);
    assert!(printed.out.contains("undamped frequency") && printed.out.contains("kHz +-"), "{}", printed.out);
}

#[test]
fn an_array_of_codes_gives_what_the_same_ring_gives_as_text() {
    let folder = TempDir::new().unwrap();
    let (text, array) = (folder.path().join("ring.csv"), folder.path().join("ring.npy"));
    let codes: Vec<i16> = ring(2).iter().map(|volts| ((volts - 300.0) / 0.01).round() as i16).collect();
    let volts: Vec<f64> = codes.iter().map(|code| f64::from(*code) * 0.01 + 300.0).collect();
    fs::write(&text, text_of(&volts)).unwrap();
    fs::write(&array, array_of(&codes)).unwrap();
    let (_, from_text) = json(&text, &["--ring-down"]);
    let options = ["--ring-down", "--interval", "2e-8", "--scale", "0.01", "--offset", "300"];
    let (code, from_array) = json(&array, &options);
    assert_eq!(code, Some(0));
    for quantity in ["frequency_hz", "quality_factor"] {
        let pointer = format!("/relaxation_ring/{quantity}");
        near(&from_array, &pointer, value(&from_text, &pointer), 1e-6);
    }
    let missing = fit(&array, &["--ring-down"]);
    assert_eq!(missing.code, Some(2));
    assert!(missing.err.contains("--interval"), "{}", missing.err);
}

#[test]
fn noise_gives_no_number_a_doubt_and_an_exit_code_of_its_own() {
    let folder = TempDir::new().unwrap();
    let file = folder.path().join("noise.csv");
    let mut noise = noise(3);
    let volts: Vec<f64> = (0..2000).map(|_| noise()).collect();
    fs::write(&file, text_of(&volts)).unwrap();
    for options in [&["--ring-down"][..], &[]] {
        let (code, json) = json(&file, options);
        assert_eq!(code, Some(3), "{json:#}");
        assert!(json.pointer("/relaxation_ring/frequency_hz").is_none_or(Value::is_null), "{json:#}");
        assert!(!json["doubts"].as_array().unwrap().is_empty(), "{json:#}");
    }
}

#[test]
fn what_is_no_recording_is_told_with_its_place() {
    let folder = TempDir::new().unwrap();
    let file = folder.path().join("broken.csv");
    let text = text_of(&ring(4));
    let mut lines: Vec<&str> = text.lines().collect();
    lines[1500] = "2.998e-5,none";
    fs::write(&file, lines.join("\n")).unwrap();
    let answer = fit(&file, &["--ring-down"]);
    assert_eq!(answer.code, Some(2), "{}", answer.out);
    assert!(answer.err.contains("line 1501, column 2: \"none\""), "{}", answer.err);
    let answer = fit(&file, &["--column", "7"]);
    assert!(answer.code == Some(2) && answer.err.contains("column 7"), "{}", answer.err);
}

/// References: an independent variable-projection fit (SciPy) of the same recordings.
#[test]
fn recordings_of_real_hardware_reach_their_references_from_the_command_line() {
    if let Some(file) = need_capture("flyback-discontinuous.csv") {
        let (code, json) = json(&file, &["--column", "CH2", "--primary-inductance", "13.1 uH"]);
        assert_eq!(code, Some(0));
        near(&json, "/relaxation_ring/damped_frequency_hz", 1.207e6, 5e-3);
        near(&json, "/relaxation_ring/decay_per_s", 1.0 / 7.7e-6, 0.1);
        near(&json, "/bulk_voltage_v", 18.0, 0.02);
        near(&json, "/turn_on_rate_hz", 1.0 / 19.84e-6, 5e-3);
        assert!((8.8e6..9.2e6).contains(&value(&json, "/leakage_ring/damped_frequency_hz")), "{json:#}");
    }
    for (name, options, damped_hz, decay_per_s) in [
        ("rlc-impulse.csv", &["--ring-down"][..], 9016.55, 13518.6 / 2.0),
        ("rlc-step.csv", &["--ring-down"], 33901.0, 1.0 / 172.2e-6),
        ("rlc-uneven.txt", &["--ring-down", "--time-unit", "us"], 517.65, 1.0 / 6.54e-3),
    ] {
        let Some(file) = need_capture(name) else { continue };
        let (code, json) = json(&file, options);
        assert_eq!(code, Some(0), "{name}: {json:#}");
        near(&json, "/relaxation_ring/damped_frequency_hz", damped_hz, 1e-3);
        near(&json, "/relaxation_ring/decay_per_s", decay_per_s, 0.01);
    }
    for name in ["rlc-two-modes.txt", "rlc-aperiodic.csv", "open-channel.csv"] {
        let Some(file) = need_capture(name) else { continue };
        let (code, json) = json(&file, &["--ring-down"]);
        assert_eq!(code, Some(3), "{name}: {json:#}");
        assert!(!json["doubts"].as_array().unwrap().is_empty(), "{name}");
    }
}
