//! Holds whole runs on every simulated board, seed after seed, against what was true of it: the built program, over real
//! sockets and a serial line. The seeds of the quick check are few; `scripts/seeds.sh` runs many.

use ringstep::{
    record::Run,
    sequence::event::{Event, Outcome, Purpose},
    station::Board,
};
use ringstep_analysis::{
    cycles::segment,
    findings::{BoardFacts, Cycle, CycleMode},
    waveform::Samples,
};
use serde_json::Value;
use std::{collections::BTreeMap, env, fs, ops::RangeInclusive, process::Command};

/// How far node capacitance and ring frequencies may be off, relative.
const CAPACITANCE: f64 = 0.02;
const FREQUENCY: f64 = 0.005;
/// A turn-on is found this well: edges take their time.
const EDGE_S: f64 = 0.15e-6;
/// Time from the conduction boundary within which either class may stand: the recovery of these boards' rectifiers holds the
/// plateau for up to 50 ns, then a cosine of 500 kHz takes 100 ns to fall by a twentieth of it.
const BOUNDARY_S: f64 = 150e-9;

fn seeds() -> RangeInclusive<u64> {
    let count = env::var("RINGSTEP_SEEDS").ok().and_then(|count| count.parse().ok()).unwrap_or(1);
    1..=count
}

/// A run of the demonstration, and the truth about its captures by acquisition number.
struct Demo {
    label: String,
    run: Run,
    json: Value,
    truths: BTreeMap<u64, Value>,
    facts: BoardFacts,
    _scratch: tempfile::TempDir,
}

fn demo(board: &str, seed: u64, line: &str) -> Demo {
    let scratch = tempfile::tempdir().unwrap();
    let (folder, truth) = (scratch.path().join("run"), scratch.path().join("truth.jsonl"));
    let output = Command::new(env!("CARGO_BIN_EXE_ringstep"))
        .args(["demo", "--json", "--board", board, "--line", line])
        .args(["--seed", &seed.to_string()])
        .arg("--out")
        .arg(&folder)
        .arg("--truth")
        .arg(&truth)
        .output()
        .unwrap();
    let label = format!("{board} seed {seed}");
    let said = String::from_utf8_lossy(&output.stderr);
    let json = serde_json::from_slice(&output.stdout).unwrap_or_else(|_| panic!("{label}: {said}"));
    let lines = fs::read_to_string(&truth).unwrap();
    let truths = lines.lines().map(|line| serde_json::from_str::<Value>(line).unwrap());
    let truths = truths.filter_map(|truth| Some((truth["number"].as_u64()?, truth))).collect();
    let run = Run::open(&folder).unwrap();
    let facts = Board::read("board.toml", &run.inputs.board).unwrap().own_facts();
    Demo { label, run, json, truths, facts, _scratch: scratch }
}

/// What is off in a run, in sentences; prints the largest deviations.
#[derive(Default)]
struct Off {
    sentences: Vec<String>,
    worst: BTreeMap<String, f64>,
    cycles: usize,
}

impl Off {
    fn values(&mut self, demo: &Demo, points: usize) {
        let measured = demo.json["truth"].as_array().unwrap();
        if measured.len() != points {
            self.sentences.push(format!("{}: {} of {points} points measured", demo.label, measured.len()));
        }
        for point in measured {
            let values = point["values"].as_array().unwrap();
            for (quantity, tolerance) in
                [("node capacitance", CAPACITANCE), ("relaxation ring", FREQUENCY), ("leakage ring", FREQUENCY)]
            {
                let value = values.iter().find(|value| value["quantity"] == quantity);
                let off = value.map(|value| value["ratio"].as_f64().unwrap() - 1.0);
                let worst = self.worst.entry(quantity.to_owned()).or_default();
                *worst = worst.max(off.map_or(0.0, f64::abs));
                if off.is_none_or(|off| off.abs() > tolerance) {
                    let off = off.map_or("missing".to_owned(), |off| format!("off by {:+.2} %", 100.0 * off));
                    self.sentences.push(format!("{} at {} V: {quantity} {off}", demo.label, point["line_v"]));
                }
            }
        }
    }

    /// Every cycle that stands whole in a survey, against what the controller and the secondary really did.
    fn surveys(&mut self, demo: &Demo) {
        for capture in demo.run.captures().filter(|capture| capture.purpose == Purpose::Survey) {
            let samples = demo.run.read_samples(capture.number).unwrap();
            let found: Vec<Cycle> =
                segment(&samples, &demo.facts).map_or(Vec::new(), |s| s.segments.iter().map(|s| s.cycle).collect());
            let truth = &demo.truths[&capture.waveform.acquisition]["cycles"];
            let label = format!("{}, capture {}", demo.label, capture.number);
            self.cycles(&label, &samples, &found, truth.as_array().unwrap());
        }
    }

    fn cycles(&mut self, label: &str, samples: &Samples, found: &[Cycle], truth: &[Value]) {
        let near_s = BOUNDARY_S + 2.0 * samples.mean_interval_s();
        let inside = |time_s: f64| time_s > samples.start_s() + EDGE_S && time_s < samples.end_s() - EDGE_S;
        for pair in truth.windows(2) {
            let (start_s, end_s) = (pair[0]["start_s"].as_f64().unwrap(), pair[1]["start_s"].as_f64().unwrap());
            if !inside(start_s) || !inside(end_s) {
                continue;
            }
            self.cycles += 1;
            let Some(cycle) = found.iter().find(|cycle| (cycle.start_s - start_s).abs() < EDGE_S) else {
                self.sentences.push(format!("{label}: no cycle was found at {start_s:.3e} s"));
                continue;
            };
            let mode = match cycle.mode {
                CycleMode::Continuous => "continuous",
                CycleMode::Discontinuous => "discontinuous",
                CycleMode::Skipped => "skipped",
                CycleMode::Incomplete => "incomplete",
            };
            let ends = [pair[0]["end_of_demagnetisation_s"].as_f64(), cycle.end_of_demagnetisation_s];
            let boundary = ends.into_iter().flatten().any(|end| (end - end_s).abs() <= near_s);
            if pair[0]["mode"] != mode && !boundary {
                self.sentences.push(format!(
                    "{label}: the cycle at {start_s:.4e} s to {end_s:.4e} s is {}, demagnetised at {}, and was read as {cycle:?}",
                    pair[0]["mode"], pair[0]["end_of_demagnetisation_s"]
                ));
            }
        }
    }

    fn nothing(self, board: &str) {
        let worst: Vec<String> =
            self.worst.iter().map(|(quantity, off)| format!("{quantity} {:.3} %", 100.0 * off)).collect();
        println!("{board}: {} seeds, {} cycles of surveys; worst: {}", seeds().count(), self.cycles, worst.join(", "));
        assert!(self.sentences.is_empty(), "{} off:\n{}", self.sentences.len(), self.sentences.join("\n"));
    }
}

fn ringing_board(board: &str) {
    let mut off = Off::default();
    for seed in seeds() {
        let demo = demo(board, seed, "115,230");
        off.values(&demo, 2);
        off.surveys(&demo);
    }
    off.nothing(board);
}

#[test]
fn beacon_is_measured_as_it_is() {
    ringing_board("beacon");
}

#[test]
fn foghorn_is_measured_as_it_is() {
    ringing_board("foghorn");
}

#[test]
fn tidegauge_is_measured_as_it_is() {
    ringing_board("tidegauge");
}

#[test]
fn winch_is_measured_as_it_is() {
    ringing_board("winch");
}

fn refusal(demo: &Demo) -> String {
    let ended = demo.run.events().find_map(|event| match event {
        Event::RunEnded { outcome: Outcome::Refused, message } => message.clone(),
        _ => None,
    });
    let reasons = demo.run.events().filter_map(|event| match event {
        Event::PointRefused { reason, .. } => Some(reason.clone()),
        _ => None,
    });
    ended.into_iter().chain(reasons).collect::<Vec<_>>().join("\n")
}

#[test]
fn a_board_that_stays_in_continuous_conduction_is_reported_as_that_and_gets_no_capacitance() {
    let mut off = Off::default();
    for seed in seeds() {
        let demo = demo("pumphouse", seed, "115,230");
        let refusal = refusal(&demo);
        assert_eq!(refusal.matches("stays in continuous conduction").count(), 2, "{}: {refusal}", demo.label);
        assert!(demo.run.results().points.is_empty(), "{}", demo.label);
        off.surveys(&demo);
    }
    off.nothing("pumphouse");
}

#[test]
fn a_board_that_hiccups_is_reported_as_that_and_gets_no_capacitance() {
    for seed in seeds() {
        let demo = demo("semaphore", seed, "115");
        let refusal = refusal(&demo);
        assert!(refusal.contains("protection or restart"), "{}: {refusal}", demo.label);
        assert!(demo.run.results().points.is_empty(), "{}", demo.label);
    }
}
