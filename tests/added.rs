//! Added capacitors as they are used: recordings of one node with and without them in, inductance and capacitance without any
//! nominal value out.

use assert_cmd::Command;
use rand_chacha::{
    ChaCha8Rng,
    rand_core::{Rng, SeedableRng},
};
use serde_json::Value;
use std::{f64::consts::TAU, fs, path::Path};
use tempfile::TempDir;

const INTERVAL_S: f64 = 4e-9;

/// What the recordings are made of: a board of 1.05 mH and 88 pF whose leakage of 24 uH rings with 97 pF on the plateau.
const PRIMARY_H: f64 = 1.05e-3;
const NODE_F: f64 = 88e-12;
const LEAKAGE_H: f64 = 24e-6;
const PLATEAU_F: f64 = 97e-12;

struct Answer {
    code: Option<i32>,
    out: String,
    err: String,
}

fn fit(folder: &Path, arguments: &[&str]) -> Answer {
    let output =
        Command::cargo_bin("ringstep").unwrap().current_dir(folder).arg("fit").args(arguments).output().unwrap();
    let (out, err) = (String::from_utf8(output.stdout).unwrap(), String::from_utf8(output.stderr).unwrap());
    Answer { code: output.status.code(), out, err }
}

fn json(folder: &Path, arguments: &[&str]) -> Value {
    let answer = fit(folder, &[arguments, &["--json"]].concat());
    assert_eq!(answer.code, Some(0), "{}{}", answer.out, answer.err);
    serde_json::from_str(&answer.out).unwrap()
}

/// Standard normal numbers (Box and Muller).
fn noise(seed: u64) -> impl FnMut() -> f64 {
    let mut random = ChaCha8Rng::seed_from_u64(seed);
    move || {
        let [a, b] = [(); 2].map(|()| (random.next_u32() as f64 + 0.5) / 4_294_967_296.0);
        (-2.0 * a.ln()).sqrt() * (TAU * b).cos()
    }
}

fn angular(inductance_h: f64, capacitance_f: f64) -> f64 {
    (inductance_h * capacitance_f).sqrt().recip()
}

/// A ring that starts from rest at 1 with this undamped angular frequency and a quality factor of 20.
fn ring(t: f64, undamped: f64) -> f64 {
    let decay = undamped / 40.0;
    let damped = (undamped * undamped - decay * decay).sqrt();
    (-decay * t).exp() * ((damped * t).cos() + decay / damped * (damped * t).sin())
}

/// The drain: 2 us on, 5.7 us of plateau with the leakage ring, then the relaxation ring; every third period of 12 us begins a
/// cycle, so that two are left out.
fn drain_v(t: f64, bulk_v: f64, added_f: f64) -> f64 {
    const REFLECTED_V: f64 = 105.0;
    let t = t % 36e-6;
    let knee_s = 2e-6 + 5.7e-6;
    match t {
        _ if t < 30e-9 => bulk_v * (1.0 - t / 30e-9),
        _ if t < 2e-6 => 0.4,
        _ if t < knee_s => {
            let plateau_v = bulk_v + REFLECTED_V;
            let since = t - 2e-6;
            let undamped = angular(LEAKAGE_H, PLATEAU_F + added_f);
            let rise_s = 0.25 * TAU / undamped;
            if since < rise_s {
                return (plateau_v + 70.0) * (0.25 * TAU * since / rise_s).sin();
            }
            plateau_v + 70.0 * ring(since - rise_s, undamped)
        }
        _ => bulk_v + REFLECTED_V * ring(t - knee_s, angular(PRIMARY_H, NODE_F + added_f)),
    }
}

fn write(folder: &Path, name: &str, count: usize, mut volts: impl FnMut(f64) -> f64) {
    let lines = (0..count).map(|index| {
        let t = index as f64 * INTERVAL_S;
        format!("{t:.9e},{:.4}", volts(t))
    });
    fs::write(folder.join(name), format!("time (s),drain (V)\n{}\n", lines.collect::<Vec<_>>().join("\n"))).unwrap();
}

fn drain(folder: &Path, name: &str, bulk_v: f64, added_f: f64) {
    let mut noise = noise(name.bytes().map(u64::from).sum());
    // The recording begins inside a ring.
    write(folder, name, 36_000, |t| drain_v(t + 20e-6, bulk_v, added_f) + 0.3 * noise());
}

/// The interval holds the truth and is no wider than a share of it.
fn holds(json: &Value, truth: f64, share: f64) {
    let [low, high] = [0, 1].map(|end| json[end].as_f64().unwrap_or_else(|| panic!("{json:#}")));
    assert!(low < truth && truth < high && high - low < 2.0 * share * truth, "[{low}, {high}] and {truth}");
}

/// Closed form: the recordings were made from these inductances and capacitances.
#[test]
fn a_drain_with_added_capacitors_gives_both_inductances_without_a_nominal_value() {
    let folder = TempDir::new().unwrap();
    let folder = folder.path();
    drain(folder, "bare.csv", 320.0, 0.0);
    drain(folder, "with:47pF.csv", 321.0, 47e-12);
    drain(folder, "with 150 pF.csv", 319.5, 150e-12);
    let added = ["bare.csv", "--added", "47 pF +- 1 %:with:47pF.csv", "--added", "150pF +- 1%:with 150 pF.csv"];
    let json = json(folder, &added);
    assert!(json["node_capacitance_f"].is_null(), "no nominal inductance was given: {json:#}");
    let found = &json["added_capacitors"];
    let [relaxation, leakage] = ["relaxation_ring", "leakage_ring"].map(|ring| &found[ring]);
    holds(&relaxation["inductance_95_h"], PRIMARY_H, 0.03);
    holds(&relaxation["node_capacitance_95_f"], NODE_F, 0.03);
    holds(&leakage["inductance_95_h"], LEAKAGE_H, 0.03);
    holds(&leakage["node_capacitance_95_f"], PLATEAU_F, 0.03);
    assert_eq!(relaxation["degrees_of_freedom"], 1, "{found:#}");
    assert_eq!(found["records"].as_array().unwrap().len(), 3);
    let printed = fit(folder, &[&added[..], &["--primary-inductance", "1.1 mH +- 7 %"]].concat());
    for part in [
        "from added capacitors",
        "from nominal values",
        "primary inductance",
        "leakage inductance",
        "1.10 mH +- 0.09 mH",
        "with:47pF.csv",
    ] {
        assert!(printed.out.contains(part), "{part}: {}", printed.out);
    }
}

#[test]
fn a_bare_ring_down_with_one_capacitor_is_enough() {
    let folder = TempDir::new().unwrap();
    let folder = folder.path();
    for (name, added_f) in [("bare.csv", 0.0), ("more.csv", 220e-12)] {
        let mut noise = noise(7);
        let undamped = angular(8e-6, 120e-12 + added_f);
        write(folder, name, 2000, |t| 3.0 + ring(t, undamped) + 0.005 * noise());
    }
    let json = json(folder, &["--ring-down", "bare.csv", "--added", "220 pF +- 0.5 %:more.csv"]);
    let ring = &json["added_capacitors"]["relaxation_ring"];
    holds(&ring["inductance_95_h"], 8e-6, 0.01);
    holds(&ring["node_capacitance_95_f"], 120e-12, 0.01);
    assert!(json["added_capacitors"]["leakage_ring"].is_null());
    // What all capacitors share is not lost.
    let wider = ["--lead-stray", "0 pF +- 4 pF", "--meter-tolerance", "2 %"];
    let json =
        self::json(folder, &[&["--ring-down", "bare.csv", "--added", "220 pF +- 0.5 %:more.csv"][..], &wider].concat());
    let ring = &json["added_capacitors"]["relaxation_ring"];
    let relative = ring["inductance_h"]["standard_uncertainty"].as_f64().unwrap() / 8e-6;
    let expected = (0.005_f64.hypot(0.02).hypot(4.0 / 220.0)) / 3f64.sqrt();
    assert!((relative / expected - 1.0).abs() < 0.1, "{relative} where {expected} is expected");
}

#[test]
fn what_does_not_belong_together_is_refused_with_what_to_change() {
    let folder = TempDir::new().unwrap();
    let folder = folder.path();
    drain(folder, "bare.csv", 320.0, 0.0);
    drain(folder, "low.csv", 290.0, 100e-12);
    let answer = fit(folder, &["bare.csv", "--added", "100 pF +- 1 %:low.csv"]);
    let out = answer.out.split_whitespace().collect::<Vec<_>>().join(" ");
    assert!(out.contains("the bulk voltage is 290.0 V in one record and 320.0 V"), "{out}");
    assert!(out.contains("same line voltage and load"), "{out}");
    let json = json(folder, &["bare.csv", "--added", "100 pF +- 1 %:low.csv"]);
    let refused = json["added_capacitors"]["relaxation_ring"]["refused"].as_str().unwrap();
    assert!(refused.contains("bulk voltage"), "{refused}");
    let answer = fit(folder, &["low.csv", "--added", "100 pF +- 1 %:bare.csv", "--ring-down"]);
    assert!(answer.out.contains("does not slow down") || answer.out.contains("shows no"), "{}", answer.out);
    let answer = fit(folder, &["bare.csv", "--added", "100 pF:missing.csv"]);
    assert!(answer.code != Some(0) && answer.err.contains("missing.csv"), "{}", answer.err);
    let answer = fit(folder, &["bare.csv", "--added", "low.csv"]);
    assert_eq!(answer.code, Some(2));
    assert!(answer.err.contains("47 pF +- 1 %:"), "{}", answer.err);
    let answer = fit(folder, &["bare.csv", "--lead-stray", "1 pF"]);
    assert!(answer.code == Some(2) && answer.err.contains("--added"), "{}", answer.err);
}
