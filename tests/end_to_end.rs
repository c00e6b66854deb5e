//! What is left behind when a run goes wrong in the middle: the built program against simulated instruments that fail, and an
//! operator who stops it. The state of the outputs is told by the bench itself, not by the program.

use ringstep::{
    record::{Results, Run},
    sequence::event::{Event, Outcome},
};
use serde_json::Value;
use std::{
    fs,
    io::{BufRead, BufReader},
    path::{Path, PathBuf},
    process::{Child, Command, Stdio},
    sync::{Mutex, MutexGuard, OnceLock},
    thread,
    time::{Duration, Instant, SystemTime},
};

/// From the moment a failure is noticed to the confirmation that the source is off.
const OFF_WITHIN_S: f64 = 1.0;

/// These runs hold deadlines: they don't compete with each other for the processor.
fn alone() -> MutexGuard<'static, ()> {
    static ALONE: Mutex<()> = Mutex::new(());
    ALONE.lock().unwrap_or_else(|poisoned| poisoned.into_inner())
}

/// A run of the demonstration that has ended.
struct Ended {
    code: Option<i32>,
    said: String,
    run: Run,
    results: Results,
    /// Whether source and load were on when the bench was closed.
    on: [bool; 2],
    _scratch: tempfile::TempDir,
}

fn demo(scratch: &Path, options: &[&str]) -> Command {
    let mut command = Command::new(env!("CARGO_BIN_EXE_ringstep"));
    command.args(["demo", "--line", "115,230"]).args(options);
    command.arg("--out").arg(scratch.join("run")).arg("--truth").arg(scratch.join("truth.jsonl"));
    command.stdout(Stdio::piped()).stderr(Stdio::piped());
    command
}

fn ended(scratch: tempfile::TempDir, child: Child) -> Ended {
    let output = child.wait_with_output().unwrap();
    let said = String::from_utf8_lossy(&output.stdout).into_owned() + &String::from_utf8_lossy(&output.stderr);
    let run = Run::open(&scratch.path().join("run")).unwrap_or_else(|error| panic!("{error}: {said}"));
    let truth = fs::read_to_string(scratch.path().join("truth.jsonl")).unwrap();
    let mut states =
        truth.lines().filter_map(|line| serde_json::from_str::<Value>(line).unwrap().get("state").cloned());
    let last = states.next_back().unwrap();
    let on = ["source_on", "load_on"].map(|key| last[key].as_bool().unwrap());
    Ended { code: output.status.code(), said, results: run.results(), run, on, _scratch: scratch }
}

fn with_fault(fault: &str) -> Ended {
    let scratch = tempfile::tempdir().unwrap();
    let child = demo(scratch.path(), &["--fault", fault]).spawn().unwrap();
    ended(scratch, child)
}

/// Messages of each instrument, with their times, and when the first point was finished.
struct Undisturbed {
    times_s: [Vec<f64>; 3],
    first_point_s: f64,
}

const INSTRUMENTS: [&str; 3] = ["scope", "load", "source"];

fn undisturbed() -> &'static Undisturbed {
    static RUN: OnceLock<Undisturbed> = OnceLock::new();
    RUN.get_or_init(|| {
        let scratch = tempfile::tempdir().unwrap();
        let folder = scratch.path().join("run");
        let child = demo(scratch.path(), &[]).spawn().unwrap();
        let ended = ended(scratch, child);
        assert_eq!(ended.code, Some(0), "{}", ended.said);
        let lines = |name: &str| -> Vec<Value> {
            let text = fs::read_to_string(folder.join(name)).unwrap();
            text.lines().map(|line| serde_json::from_str(line).unwrap()).collect()
        };
        let sent = lines("exchange.jsonl").into_iter().filter(|line| line["direction"] == "sent").collect::<Vec<_>>();
        let times_s = INSTRUMENTS.map(|instrument| {
            let of = sent.iter().filter(|line| line["instrument"] == instrument);
            of.map(|line| line["time_s"].as_f64().unwrap()).collect()
        });
        let journal = lines("journal.jsonl");
        let finished = journal.iter().find(|entry| entry["event"]["event"] == "point_finished").unwrap();
        Undisturbed { times_s, first_point_s: finished["elapsed_s"].as_f64().unwrap() }
    })
}

/// A message of an instrument halfway between the end of the first point and the end of the run.
fn message_in_the_second_point(instrument: &str) -> usize {
    let run = undisturbed();
    let times_s = &run.times_s[INSTRUMENTS.iter().position(|name| *name == instrument).unwrap()];
    let before = times_s.iter().filter(|time_s| **time_s < run.first_point_s).count();
    before + (times_s.len() - before) / 2
}

/// Holds what every failed run must leave behind: the first point on disk, a report, and a message that names who and where.
fn left_in_order(ended: &Ended, instrument: &str) {
    let said = &ended.said;
    assert_eq!(ended.code, Some(5), "{said}");
    assert_eq!(ended.results.outcome, Some(Outcome::Failed), "{said}");
    assert_eq!(ended.results.points.len(), 1, "{said}");
    assert!(ended.run.altered.is_empty(), "{:?}", ended.run.altered);
    assert!(ended.run.folder().join("report.html").exists());
    let message = ended.results.message.as_deref().unwrap();
    let (_, identity) = ended.results.instruments.iter().find(|(role, _)| role == instrument).unwrap();
    assert!(message.starts_with(&format!("{instrument} at {}", identity.address)), "{message}");
    assert!(message.contains("check "), "it says what to do: {message}");
    assert!(said.contains(message), "{said}");
}

/// From the last exchange before safe-off to the event that tells its outcome.
fn off_within_s(ended: &Ended) -> f64 {
    let safe_off = ended.run.journal.iter().find(|entry| matches!(entry.event, Event::SafeOff { .. })).unwrap();
    let exchange = fs::read_to_string(ended.run.folder().join("exchange.jsonl")).unwrap();
    let lines: Vec<Value> = exchange.lines().map(|line| serde_json::from_str(line).unwrap()).collect();
    let sends_off =
        |line: &&Value| line["direction"] == "sent" && line["text"].as_str().is_some_and(|t| t.contains(" OFF"));
    let first_off = lines.iter().rev().find(|line| sends_off(line) && line["instrument"] == "source");
    let began_s = first_off.map_or(safe_off.elapsed_s, |line| line["time_s"].as_f64().unwrap());
    safe_off.elapsed_s - began_s
}

fn fails_in_order(instrument: &str, kind: &str) {
    let ended = with_fault(&format!("{instrument}:{kind}@{}", message_in_the_second_point(instrument)));
    left_in_order(&ended, instrument);
    assert_eq!(ended.on, [false, false], "source and load are off: {}", ended.said);
    assert!(ended.said.contains("source confirmed off, load confirmed off"), "{}", ended.said);
    assert!(off_within_s(&ended) < OFF_WITHIN_S, "{} s", off_within_s(&ended));
}

#[test]
fn a_scope_whose_plug_is_pulled_leaves_everything_off() {
    let _alone = alone();
    fails_in_order("scope", "gone");
}

#[test]
fn a_load_whose_plug_is_pulled_leaves_the_source_off_and_is_not_called_off() {
    let _alone = alone();
    let ended = with_fault(&format!("load:gone@{}", message_in_the_second_point("load")));
    left_in_order(&ended, "load");
    assert!(!ended.on[0], "{}", ended.said);
    assert!(
        ended.said.contains("source confirmed off") && !ended.said.contains("load confirmed off"),
        "{}",
        ended.said
    );
    assert!(off_within_s(&ended) < OFF_WITHIN_S, "{} s", off_within_s(&ended));
}

#[test]
fn a_source_whose_plug_is_pulled_is_not_called_off_and_the_operator_is_told() {
    let _alone = alone();
    let ended = with_fault(&format!("source:gone@{}", message_in_the_second_point("source")));
    left_in_order(&ended, "source");
    assert!(!ended.on[1], "the load is off: {}", ended.said);
    assert!(!ended.said.contains("source confirmed off"), "{}", ended.said);
    assert!(ended.said.contains("source NOT CONFIRMED OFF: cut it with the emergency switch"), "{}", ended.said);
}

#[test]
fn a_source_whose_link_drops_is_reached_again_to_switch_it_off() {
    let _alone = alone();
    fails_in_order("source", "drop");
}

#[test]
fn a_scope_that_answers_garbage_ends_the_run_with_everything_off() {
    let _alone = alone();
    fails_in_order("scope", "garbage");
}

#[test]
fn a_load_that_answers_garbage_ends_the_run_with_everything_off() {
    let _alone = alone();
    fails_in_order("load", "garbage");
}

#[test]
fn a_source_that_answers_garbage_ends_the_run_with_everything_off() {
    let _alone = alone();
    fails_in_order("source", "garbage");
}

#[test]
fn a_scope_that_falls_silent_ends_the_run_with_everything_off() {
    let _alone = alone();
    fails_in_order("scope", "silent");
}

/// Starts a run and waits until its first point is finished.
fn with_one_point() -> (tempfile::TempDir, Child) {
    let scratch = tempfile::tempdir().unwrap();
    let child = demo(scratch.path(), &[]).spawn().unwrap();
    let journal = scratch.path().join("run/journal.jsonl");
    let started = Instant::now();
    while !fs::read_to_string(&journal).is_ok_and(|text| text.contains("point_finished")) {
        assert!(started.elapsed() < Duration::from_secs(120), "no point was finished");
        thread::sleep(Duration::from_millis(20));
    }
    (scratch, child)
}

fn signal(child: &Child, name: &str) {
    let sent = Command::new("kill").arg(format!("-{name}")).arg(child.id().to_string()).status().unwrap();
    assert!(sent.success());
}

fn stopped_by(name: &str) {
    let (scratch, child) = with_one_point();
    let raised = SystemTime::now();
    signal(&child, name);
    let ended = ended(scratch, child);
    assert_eq!(ended.code, Some(130), "{}", ended.said);
    assert_eq!(ended.results.outcome, Some(Outcome::Stopped), "{}", ended.said);
    assert_eq!(ended.results.points.len(), 1, "{}", ended.said);
    assert_eq!(ended.on, [false, false], "{}", ended.said);
    assert!(ended.said.contains("source confirmed off, load confirmed off"), "{}", ended.said);
    assert!(ended.said.contains("stopped by the operator"), "{}", ended.said);
    let safe_off = ended.run.journal.iter().find(|entry| matches!(entry.event, Event::SafeOff { .. })).unwrap();
    let raised = jiff::Timestamp::try_from(raised).unwrap();
    let took_s = safe_off.time.duration_since(raised).as_secs_f64();
    assert!(took_s < OFF_WITHIN_S, "off {took_s} s after the signal");
}

#[test]
fn an_interrupt_ends_the_run_with_everything_off() {
    let _alone = alone();
    stopped_by("INT");
}

#[test]
fn a_termination_ends_the_run_with_everything_off() {
    let _alone = alone();
    stopped_by("TERM");
}

#[test]
fn a_closed_terminal_ends_the_run_with_everything_off() {
    let _alone = alone();
    stopped_by("HUP");
}

#[test]
fn a_killed_run_leaves_its_finished_points_readable() {
    let _alone = alone();
    let (scratch, mut child) = with_one_point();
    child.kill().unwrap();
    child.wait().unwrap();
    let run = Run::open(&scratch.path().join("run")).unwrap();
    assert!(!run.finished());
    assert_eq!(run.results().points.len(), 1);
}

#[test]
fn a_reader_that_goes_away_does_not_keep_the_source_on() {
    let _alone = alone();
    let scratch = tempfile::tempdir().unwrap();
    let mut child = demo(scratch.path(), &[]).spawn().unwrap();
    let mut line = String::new();
    BufReader::new(child.stderr.take().unwrap()).read_line(&mut line).unwrap();
    drop(child.stdout.take());
    let ended = ended(scratch, child);
    assert_eq!(ended.on, [false, false]);
    assert!(ended.run.finished());
}

#[test]
fn a_folder_that_cannot_be_written_refuses_before_anything_is_energised() {
    let _alone = alone();
    let scratch = tempfile::tempdir().unwrap();
    let folder: PathBuf = scratch.path().join("run");
    fs::write(&folder, "in the way").unwrap();
    let output = demo(scratch.path(), &[]).output().unwrap();
    let said = String::from_utf8_lossy(&output.stderr);
    assert!(!output.status.success() && said.contains("run"), "{said}");
    let truth = fs::read_to_string(scratch.path().join("truth.jsonl")).unwrap();
    assert!(!truth.contains("\"source_on\":true"), "{truth}");
}
