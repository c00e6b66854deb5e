//! A plan with added capacitors carried out on the simulated bench, in a process of its own, with hands that solder when they
//! are asked to: what is asked, in which order, and what comes out of it.

use crate::need::need_python;
use ringstep::{
    instrument::Drivers,
    record::{Inputs, Results, Run, RunWriter},
    sequence::{
        Attendance, Job, KeepError, Keeper, Plan, Stop, Stopper,
        event::{Capture, Event, Outcome},
        expected_stress, preflight, run,
    },
    station::{Board, Operator, Station, connect},
    transport::{CollectedExchanges, ExchangeLog},
};
use ringstep_analysis::{
    circuit::added::{AddedDoubtName, AddedResult},
    quantity::{COVERAGE_95, Measured},
};
use serde_json::Value;
use std::{
    fs,
    future::Future,
    io::{BufRead, BufReader, Lines, Write},
    path::PathBuf,
    pin::Pin,
    process::{Child, ChildStdin, ChildStdout, Command, Stdio},
    sync::{Arc, Mutex},
    time::{Duration, Instant},
};

/// What stands in the plan, and what really lies in the drawer: within the stated tolerance.
const CAPACITORS: [(&str, f64); 2] = [("100 pF +- 1 %", 100.4e-12), ("220 pF +- 1 %", 218.9e-12)];

/// A simulated bench whose hands solder.
struct Bench {
    child: Child,
    hands: Mutex<(ChildStdin, Lines<BufReader<ChildStdout>>)>,
    announced: Value,
    scratch: tempfile::TempDir,
}

impl Bench {
    fn start(seed: u64) -> Arc<Self> {
        let scratch = tempfile::tempdir().unwrap();
        let mut child = Command::new(env!("CARGO_BIN_EXE_ringstep"))
            .args(["simulate", "--board", "beacon", "--speed", "20", "--seed", &seed.to_string(), "--truth"])
            .arg(scratch.path().join("truth.jsonl"))
            .stdin(Stdio::piped())
            .stdout(Stdio::piped())
            .spawn()
            .unwrap();
        let mut lines = BufReader::new(child.stdout.take().unwrap()).lines();
        let announced = serde_json::from_str(&lines.next().unwrap().unwrap()).unwrap();
        let hands = Mutex::new((child.stdin.take().unwrap(), lines));
        Arc::new(Self { child, hands, announced, scratch })
    }

    /// Solders a capacitor in, or everything off with zero; says whether it could be done, which it can't while the line is on.
    fn solder(&self, farad: f64) -> bool {
        let (stdin, stdout) = &mut *self.hands.lock().unwrap();
        writeln!(stdin, "solder {farad}").unwrap();
        let answer: Value = serde_json::from_str(&stdout.next().unwrap().unwrap()).unwrap();
        answer["done"].as_bool().unwrap()
    }

    fn truths(&self) -> Vec<Value> {
        let text = fs::read_to_string(self.scratch.path().join("truth.jsonl")).unwrap();
        text.lines().map(|line| serde_json::from_str(line).unwrap()).collect()
    }

    fn inputs(&self, added: &str) -> Inputs {
        let announced = |pointer: &str| match self.announced.pointer(pointer).unwrap() {
            Value::String(text) => text.clone(),
            value => value.to_string(),
        };
        let station = format!(
            "format = \"ringstep station 1\"\nname = \"Norrsund Harbour Works, bench 2\"\n\
             [scope]\naddress = \"{}\"\nchannel = 1\nearthed = true\ninput_rating = \"300 V\"\n\
             [load]\naddress = \"{}\"\nearthed = false\n[source]\naddress = \"{}\"\nisolated = true\n\
             [probe]\nfactor = 100\ncapacitance = \"5 pF +- 3 %\"\nbandwidth = \"200 MHz\"\nrating = \"2.5 kV\"\n\
             derating_frequency = \"2 MHz\"\ndifferential = true\nserial_number = \"NHW-0231\"\n\
             [limits]\ndrain = \"{} V\"\nline = \"270 V\"\nline_current = \"1 A\"\nload_power = \"100 W\"\n",
            announced("/scope"),
            announced("/load"),
            announced("/source"),
            announced("/documents/drain_rating_v"),
        );
        let output_v = self.announced["documents"]["output_v"].as_f64().unwrap();
        let board = format!(
            "format = \"ringstep board 1\"\nname = \"beacon\"\ncontroller = \"cycle-skipping\"\n\
             switching_frequency = \"{} Hz\"\nbulk_capacitance = \"68 uF +- 20 %\"\ndrain_rating = \"{} V\"\n\
             line_range = [\"85 V\", \"265 V\"]\n[clamp]\nkind = \"{}\"\nvoltage = \"{} V\"\n\
             [[output]]\nname = \"main\"\nvoltage = \"{output_v} V\"\nregulation = [\"{} V\", \"{} V\"]\n\
             maximum_load = \"{} A\"\nminimum_load = \"0 A\"\nturns_ratio = {}\nrectifier = \"schottky\"\n",
            announced("/documents/switching_frequency_hz"),
            announced("/documents/drain_rating_v"),
            announced("/documents/clamp"),
            announced("/documents/clamp_v"),
            0.95 * output_v,
            1.05 * output_v,
            announced("/documents/maximum_load_a"),
            announced("/documents/turns_ratio"),
        );
        let start_a = 0.6 * self.announced["documents"]["maximum_load_a"].as_f64().unwrap();
        let plan = format!(
            "format = \"ringstep plan 1\"\nname = \"beacon, no nominal value\"\nline = [\"230 V\"]\n\
             line_frequency = \"50 Hz\"\nsettle_timeout = \"10 s\"\n[load]\nstart = \"{start_a} A\"\nfloor = \"8 mA\"\n\
             [captures]\nrelaxation_ring = 4\nleakage_ring = 4\nring_periods = 10\n{added}"
        );
        Inputs { plan, station, board }
    }
}

impl Drop for Bench {
    fn drop(&mut self) {
        let _ = self.child.kill();
        let _ = self.child.wait();
    }
}

fn plan_of_capacitors(rating: &str) -> String {
    let part = |(value, _): &(&str, f64)| {
        format!(
            "[[added_capacitors.capacitor]]\ncapacitance = \"{value}\"\nrating = \"{rating}\"\ndielectric = \"C0G\"\n"
        )
    };
    format!(
        "[added_capacitors]\nlead_stray = \"0.2 pF +- 0.2 pF\"\n{}",
        CAPACITORS.iter().map(part).collect::<String>()
    )
}

/// How the person at the bench behaves.
#[derive(Clone, Copy, PartialEq)]
enum Manner {
    /// Does what is asked.
    Willing,
    /// Calls it off at the second capacitor.
    CallsOff,
    /// Fits the first capacitor and goes away.
    GoesAway,
    /// Leaves the first capacitor in when asked to take it off.
    Forgetful,
}

/// Hands that solder when asked to.
struct Hands {
    bench: Arc<Bench>,
    manner: Manner,
    prompts: Mutex<Vec<String>>,
    fitted: Mutex<usize>,
}

impl Operator for Hands {
    fn ask<'a>(&'a self, prompt: &'a str) -> Pin<Box<dyn Future<Output = Option<String>> + Send + 'a>> {
        self.prompts.lock().unwrap().push(prompt.to_owned());
        if self.manner == Manner::GoesAway && *self.fitted.lock().unwrap() == 1 {
            return Box::pin(std::future::pending());
        }
        let answer = self.answer(prompt);
        Box::pin(std::future::ready(answer))
    }
}

impl Hands {
    fn answer(&self, prompt: &str) -> Option<String> {
        if prompt.contains("What does it show") {
            // The capacitor is still charged when it is measured first.
            return Some(if prompt.contains("Cautions:") { "322 V" } else { "11.5 V" }.to_owned());
        }
        let mut fitted = self.fitted.lock().unwrap();
        if prompt.contains("`removed`") {
            let stays = if self.manner == Manner::Forgetful { CAPACITORS[0].1 } else { 0.0 };
            assert!(self.bench.solder(stays), "the line is off");
            return Some("removed".to_owned());
        }
        assert!(prompt.contains("`fitted`"), "{prompt}");
        if self.manner == Manner::CallsOff && *fitted == 1 {
            return None;
        }
        // Leads add what they add.
        assert!(self.bench.solder(CAPACITORS[*fitted].1 + 0.25e-12), "the line is off");
        *fitted += 1;
        Some("fitted".to_owned())
    }
}

struct Folder(RunWriter, Option<Stopper>);

impl Keeper for Folder {
    fn event(&mut self, event: &Event) -> Result<(), KeepError> {
        let second =
            |event: &Event| matches!(event, Event::HandworkAsked(work) if work.fit.is_some_and(|c| c.value > 200e-12));
        if let (true, Some(stopper)) = (second(event), &self.1) {
            let stopper = stopper.clone();
            tokio::spawn(async move {
                tokio::time::sleep(Duration::from_millis(100)).await;
                stopper.raise();
            });
        }
        self.0.event(event).map_err(|error| KeepError(Box::new(error)))
    }

    fn capture(&mut self, mut capture: Capture) -> Result<Capture, KeepError> {
        self.0.capture(&mut capture).map_err(|error| KeepError(Box::new(error)))?;
        Ok(capture)
    }
}

struct Ended {
    outcome: Outcome,
    message: Option<String>,
    results: Results,
    run: Run,
    prompts: Vec<String>,
    took: Duration,
}

/// Carries the plan out; with `stop` it is stopped while the person is asked.
async fn carry_out(bench: &Arc<Bench>, rating: &str, manner: Option<Manner>, stop_when_asked: bool) -> Ended {
    let inputs = bench.inputs(&plan_of_capacitors(rating));
    let plan = Plan::read("plan.toml", &inputs.plan).unwrap_or_else(|error| panic!("{}", error.render(false)));
    let station = Station::read("station.toml", &inputs.station).unwrap();
    let board = Board::read("board.toml", &inputs.board).unwrap();
    let expected_peak_v = expected_stress(&board, &plan).unwrap().peak_v();
    let folder: PathBuf = bench.scratch.path().join("run");
    let (stopper, stop) = Stop::new();
    let kept = stop_when_asked.then(|| stopper.clone());
    let mut keeper = Folder(RunWriter::create(&folder, &inputs, uuid::Uuid::now_v7()).unwrap(), kept);
    let hands = manner.map(|manner| {
        Arc::new(Hands { bench: bench.clone(), manner, prompts: Mutex::default(), fitted: Mutex::default() })
    });
    let log = ExchangeLog::new(tokio::time::Instant::now(), Arc::new(CollectedExchanges::default()));
    let operator = hands.clone().map(|hands| hands as Arc<dyn Operator>);
    let mut connected = connect(&station, &Drivers::embedded().unwrap(), &log, operator).await.unwrap();
    let job = Job { plan, station, board, expected_peak_v };
    let began = Instant::now();
    let (outcome, message) = run(&job, &mut connected, &mut keeper, &stop).await.unwrap();
    let took = began.elapsed();
    let results = keeper.0.finish().unwrap();
    let prompts = hands.map_or_else(Vec::new, |hands| hands.prompts.lock().unwrap().clone());
    Ended { outcome, message, results, run: Run::open(&folder).unwrap(), prompts, took }
}

fn holds(what: &str, measured: Measured, truth: f64, share: f64) {
    let half_width = COVERAGE_95 * measured.standard_uncertainty;
    println!(
        "{what}: {:.3} % off, interval of +- {:.2} %",
        100.0 * (measured.value / truth - 1.0),
        100.0 * half_width / truth
    );
    assert!((measured.value - truth).abs() < half_width, "{what}: {measured:?} where {truth} is true");
    assert!(half_width < share * truth, "{what}: {measured:?}");
}

fn events(ended: &Ended) -> Vec<&Event> {
    ended.run.journal.iter().map(|entry| &entry.event).collect()
}

/// The truth is the bench's own: its inductances, and what its network's linearised modes make of the node.
#[tokio::test(flavor = "multi_thread")]
async fn inductances_and_capacitance_come_out_without_any_nominal_value() {
    let bench = Bench::start(5);
    let ended = carry_out(&bench, "1 kV", Some(Manner::Willing), false).await;
    assert_eq!(ended.outcome, Outcome::Complete, "{:?}", ended.message);
    let outcome = ended.results.added_capacitors.as_ref().unwrap();
    let truths = bench.truths();
    let bare =
        truths.iter().filter(|truth| truth["relaxation_rings"].as_array().is_some_and(|rings| !rings.is_empty()));
    let bare: Vec<&Value> = bare.collect();
    let [primary_h, leakage_h] =
        ["primary_inductance_h", "leakage_inductance_h"].map(|key| bare[0][key].as_f64().unwrap());
    let node_f = bare[0]["relaxation_rings"][0]["capacitance_f"].as_f64().unwrap();
    let [relaxation, leakage]: [&AddedResult; 2] =
        [&outcome.relaxation, &outcome.leakage].map(|result| result.as_ref().unwrap_or_else(|| panic!("{outcome:#?}")));
    println!("{outcome:#?}");
    holds("primary inductance", relaxation.inductance_h, primary_h, 0.03);
    holds("node capacitance", relaxation.node_capacitance_f, node_f, 0.03);
    holds("leakage inductance", leakage.inductance_h, leakage_h, 0.05);
    assert!(outcome.doubts.is_empty(), "{:?}", outcome.doubts);
    // The board file states no inductance: nothing else could have told it.
    assert!(ended.results.points[0].values.node_capacitance_f.is_none());
    let told = events(&ended).into_iter().filter_map(|event| match event {
        Event::AddedPointFinished(point) => Some(point.capacitance_f.value),
        _ => None,
    });
    assert_eq!(told.collect::<Vec<_>>(), [100e-12, 220e-12, 0.0]);
}

#[tokio::test(flavor = "multi_thread")]
async fn the_person_is_told_what_is_known_what_is_not_and_what_it_costs() {
    let bench = Bench::start(6);
    let ended = carry_out(&bench, "1 kV", Some(Manner::CallsOff), false).await;
    // The second capacitor was called off: the first one still counts.
    assert_eq!(ended.outcome, Outcome::Partial, "{:?}", ended.message);
    let outcome = ended.results.added_capacitors.as_ref().unwrap();
    assert!(outcome.relaxation.is_some(), "{outcome:?}");
    assert!(
        ended.run.journal.iter().all(|entry| !matches!(&entry.event, Event::Noted { note } if note.contains("fitted")))
    );
    let first = ended.prompts[0].split_whitespace().collect::<Vec<_>>().join(" ");
    for part in [
        "Cautions:",
        "Source read back as off",
        "Load input read back as off",
        "Bulk voltage: NOT KNOWN",
        "100.0 pF +- 0.6 pF (C0G/NP0) from drain to source",
        "by qualified hands",
        "it is rated 1000 V",
        "uJ more into heat",
        "Measure the voltage across the bulk capacitor",
    ] {
        assert!(first.contains(part), "{part}: {first}");
    }
    assert!(ended.prompts[1].contains("322 V is not below 60 V"), "{}", ended.prompts[1]);
    let events = events(&ended);
    let work = events.iter().find_map(|event| match event {
        Event::HandworkAsked(work) => work.predicted,
        _ => None,
    });
    let stress = work.unwrap();
    // Handbook: a capacitor that is discharged through a switch turns C V^2 / 2 into heat.
    let energy_j = 0.5 * 100e-12 * stress.turn_on_v * stress.turn_on_v;
    assert!((stress.turn_on_energy_j / energy_j - 1.0).abs() < 1e-9);
    assert!((stress.power_w / (energy_j * stress.turn_on_rate_hz) - 1.0).abs() < 1e-9);
    assert!(
        (stress.needed_rating_v / stress.peak_v - 1.2).abs() < 1e-9 && stress.peak_v > stress.turn_on_v,
        "{stress:?}"
    );
    assert!(
        events.iter().any(|event| matches!(event, Event::Discharge(d) if d.bulk_v.is_none() && d.source_read_back))
    );
    assert!(events.iter().any(|event| matches!(event, Event::HandworkDone { bulk_v, .. } if *bulk_v == 11.5)));
}

#[tokio::test(flavor = "multi_thread")]
async fn a_bare_node_that_is_not_what_it_was_is_doubted() {
    let bench = Bench::start(7);
    let ended = carry_out(&bench, "1 kV", Some(Manner::Forgetful), false).await;
    let outcome = ended.results.added_capacitors.as_ref().unwrap();
    let moved = outcome.doubts.iter().find(|doubt| doubt.name == AddedDoubtName::BareNodeMoved).unwrap();
    assert!(moved.sentence.contains("what the soldering left behind"), "{moved:?}");
}

#[tokio::test(flavor = "multi_thread")]
async fn a_stop_while_the_person_is_asked_ends_the_run_with_everything_off() {
    let bench = Bench::start(8);
    let ended = carry_out(&bench, "1 kV", Some(Manner::GoesAway), true).await;
    assert_eq!(ended.outcome, Outcome::Stopped, "{:?}", ended.message);
    let entries = &ended.run.journal;
    let asked = entries.iter().rfind(|entry| matches!(entry.event, Event::HandworkAsked(_))).unwrap();
    let off =
        entries.iter().find(|entry| matches!(entry.event, Event::SafeOff { source_off: true, load_off: true, .. }));
    let after_s = off.unwrap().elapsed_s - asked.elapsed_s;
    assert!(after_s < 1.1, "off {after_s} s after it was asked, of which 0.1 s passed before the stop");
    assert_eq!(ended.results.points.len(), 1, "the bare point is kept");
    let reminded =
        |event: &&Event| matches!(event, Event::Noted { note } if note.contains("100.0 pF +- 0.6 pF is still fitted"));
    assert!(events(&ended).iter().any(reminded), "a capacitor stays on the board");
}

#[tokio::test(flavor = "multi_thread")]
async fn a_weak_capacitor_is_refused_and_nobody_to_ask_is_refused_before_anything_is_energised() {
    let bench = Bench::start(9);
    let inputs = bench.inputs(&plan_of_capacitors("500 V"));
    let plan = Plan::read("plan.toml", &inputs.plan).unwrap();
    let (station, board) = (Station::read("s", &inputs.station).unwrap(), Board::read("b", &inputs.board).unwrap());
    let refused = |attendance| {
        let checks = preflight(&station, &board, &plan, attendance).into_iter().filter(|check| !check.passed);
        checks.map(|check| format!("{}: {}", check.check, check.detail)).collect::<Vec<_>>().join("\n")
    };
    let weak = refused(Attendance::Attended);
    assert!(weak.contains("rating of an added capacitor: 100 pF rated 500 V"), "{weak}");
    let alone = refused(Attendance::Unattended);
    assert!(alone.contains("added capacitors: they must be fitted by hand"), "{alone}");
    // Whoever passes the preflight over is stopped all the same.
    let ended = carry_out(&bench, "1 kV", None, false).await;
    assert_eq!(ended.outcome, Outcome::Failed);
    assert!(
        ended.message.as_deref().unwrap().contains("nobody attends the run: nothing was energised"),
        "{:?}",
        ended.message
    );
    assert!(ended.took < Duration::from_secs(5));
    assert!(!fs::read_to_string(bench.scratch.path().join("truth.jsonl")).unwrap().contains("\"source_on\":true"));
}

/// The measured peak decides, whatever was expected: a capacitor that is too weak for it is never asked for.
#[tokio::test(flavor = "multi_thread")]
async fn a_capacitor_too_weak_for_the_measured_peak_is_not_fitted() {
    let bench = Bench::start(10);
    let ended = carry_out(&bench, "500 V", Some(Manner::Willing), false).await;
    assert_eq!(ended.outcome, Outcome::Partial, "{:?}", ended.message);
    assert!(ended.prompts.is_empty(), "{:?}", ended.prompts);
    let refused = events(&ended).into_iter().filter_map(|event| match event {
        Event::AddedCapacitorRefused { reason, .. } => Some(reason.as_str()),
        _ => None,
    });
    let refused: Vec<&str> = refused.collect();
    assert!(refused.len() == 2 && refused[0].contains("rated 500 V"), "{refused:?}");
}

#[test]
fn mistakes_in_the_plan_are_told_with_their_place() {
    let plan = |added: &str| {
        let text = format!(
            "format = \"ringstep plan 1\"\nname = \"x\"\nline = [\"115 V\", \"230 V\"]\nline_frequency = \"50 Hz\"\n\
             settle_timeout = \"10 s\"\n[load]\nstart = \"1 A\"\nfloor = \"8 mA\"\n[captures]\nrelaxation_ring = 4\n\
             leakage_ring = 4\nring_periods = 10\n{added}"
        );
        Plan::read("plan.toml", &text).map_err(|error| error.render(false))
    };
    let good = plan(&plan_of_capacitors("1 kV").replacen("lead", "line = \"230 V\"\nlead", 1)).unwrap();
    let added = good.added_capacitors.unwrap();
    assert_eq!((added.line_v, added.parts.len(), added.parts[0].rating_v), (230.0, 2, 1000.0));
    for (text, said) in [
        (plan_of_capacitors("1 kV"), "one of the plan's line voltages"),
        (plan_of_capacitors("1 kV").replacen("lead", "line = \"200 V\"\nlead", 1), "one of the plan's line voltages"),
        (plan_of_capacitors("1 kV").replace("C0G", "X7R"), "lose capacitance with voltage"),
        (plan_of_capacitors("1 kV").replace("dielectric = \"C0G\"\n", ""), "dielectric"),
        (plan_of_capacitors("1 kV").replace("lead_stray = \"0.2 pF +- 0.2 pF\"\n", ""), "lead_stray"),
    ] {
        let error = plan(&text).unwrap_err();
        assert!(error.contains(said), "{said}: {error}");
    }
}

/// Runs `measure` at a terminal and interrupts it there when the bulk voltage is asked for; prints exit code and all that was said.
const AT_A_TERMINAL: &str = "
import os, pty, sys
pid, terminal = pty.fork()
if pid == 0:
    os.execv(sys.argv[1], sys.argv[1:])
said, interrupted = b'', False
while True:
    try:
        piece = os.read(terminal, 4096)
    except OSError:
        break
    if not piece:
        break
    said += piece
    if b'What does it show' in said and not interrupted:
        os.write(terminal, b'\\x03')
        interrupted = True
print(os.waitstatus_to_exitcode(os.waitpid(pid, 0)[1]))
print(said.decode())
";

fn write_inputs(bench: &Bench) {
    let inputs = bench.inputs(&plan_of_capacitors("1 kV"));
    let files = [("plan.toml", &inputs.plan), ("station.toml", &inputs.station), ("board.toml", &inputs.board)];
    for (name, text) in files {
        fs::write(bench.scratch.path().join(name), text).unwrap();
    }
}

const MEASURE: [&str; 7] = ["measure", "--plan", "plan.toml", "--station", "station.toml", "--board", "board.toml"];

#[test]
fn an_interrupt_at_the_terminal_ends_the_waiting_with_everything_off() {
    if !need_python("pty") {
        return;
    }
    let bench = Bench::start(12);
    write_inputs(&bench);
    let output = Command::new("python3")
        .current_dir(bench.scratch.path())
        .args(["-c", AT_A_TERMINAL, env!("CARGO_BIN_EXE_ringstep")])
        .args(MEASURE)
        .output()
        .unwrap();
    let said = String::from_utf8_lossy(&output.stdout);
    assert!(said.starts_with("130\n"), "{said}");
    assert!(said.contains("NOT KNOWN") && said.contains("source confirmed off, load confirmed off"), "{said}");
    let mut states = bench.truths().into_iter().filter_map(|truth| truth.get("state").cloned());
    assert_eq!(states.next_back().unwrap()["source_on"], false);
}

/// Nobody solders at the other end of a pipe.
#[test]
fn the_built_program_refuses_without_a_terminal_before_anything_is_energised() {
    let bench = Bench::start(11);
    write_inputs(&bench);
    let output = Command::new(env!("CARGO_BIN_EXE_ringstep"))
        .current_dir(bench.scratch.path())
        .args(MEASURE)
        .stdin(Stdio::null())
        .output()
        .unwrap();
    let said = String::from_utf8_lossy(&output.stderr).split_whitespace().collect::<Vec<_>>().join(" ");
    assert_eq!(output.status.code(), Some(4), "{said}");
    assert!(said.contains("must be fitted by hand when the program asks, and nobody can answer"), "{said}");
}
