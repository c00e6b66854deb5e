//! Sockets and the serial line: several clients, links that drop, messages that interrupt, faults on purpose.

use crate::client::{Client, TestBench, connect, port};
use ringstep_simulated_bench::{
    faults::Fault,
    process::{self, Options},
};
use std::{
    io::{Read, Write},
    net::{Shutdown, TcpStream},
    thread,
    time::Duration,
};

fn bench(faults: &[&str]) -> TestBench {
    let faults = faults.iter().map(|fault| fault.parse().unwrap()).collect();
    TestBench::new(&Options { faults, ..Options::default() })
}

/// Everything that still comes within a while.
fn rest(client: &mut Client<TcpStream>) -> Vec<u8> {
    client.link.set_read_timeout(Some(Duration::from_millis(300))).unwrap();
    let mut bytes = vec![];
    let mut chunk = [0; 4096];
    while let Ok(read) = client.link.read(&mut chunk) {
        if read == 0 {
            break;
        }
        bytes.extend(&chunk[..read]);
    }
    bytes
}

/// Whether the link has been closed from the far end.
fn is_closed(client: &mut Client<TcpStream>) -> bool {
    matches!(client.link.read(&mut [0]), Ok(0) | Err(_))
}

#[test]
fn clients_come_one_after_another_and_at_once() {
    let bench = bench(&[]);
    let (mut first, mut second) = (bench.source(), bench.source());
    first.accepted("VOLT 100");
    assert_eq!(second.number("VOLT?"), 100.0);
    drop(first);
    assert_eq!(bench.source().number("VOLT?"), 100.0);
    second.accepted("VOLT 90");
    let mut load = bench.load();
    load.accepted("SYST:REM;:CURR 1");
    drop(load);
    assert_eq!(bench.load().number("CURR?"), 1.0);
}

#[test]
fn a_message_may_come_in_pieces_and_end_in_carriage_return_newline() {
    let bench = bench(&[]);
    let mut source = bench.source();
    for piece in ["VOL", "T 12", "0\r", "\nVOLT", "?\n"] {
        source.link.write_all(piece.as_bytes()).unwrap();
        thread::sleep(Duration::from_millis(20));
    }
    assert_eq!(source.line(), "1.200000E+02");
}

/// IEEE 488.2, 6.3.2.3 and 6.3.2.2: a message before the response is read interrupts, one that does not end is unterminated.
#[test]
fn interrupted_and_unterminated_messages_are_errors() {
    let bench = bench(&[]);
    let mut source = bench.source();
    source.link.write_all(b"VOLT?\nFREQ?\n").unwrap();
    assert_eq!(source.line(), "5.000000E+01");
    assert_eq!(source.error(), -410);
    source.link.write_all(b"VOLT 1").unwrap();
    source.link.shutdown(Shutdown::Both).unwrap();
    thread::sleep(Duration::from_millis(200));
    assert_eq!(bench.source().error(), -420);
}

#[test]
fn a_message_longer_than_the_input_buffer_is_passed_over() {
    let bench = bench(&[]);
    let mut source = bench.source();
    source.send(&"VOLT 100;:".repeat(2000));
    source.send("FREQ 60");
    assert_eq!(source.error(), -363);
    assert_eq!((source.number("VOLT?"), source.number("FREQ?"), source.error()), (0.0, 60.0, 0));
}

#[test]
fn a_dropped_link_leaves_the_instrument_as_it_was() {
    let bench = bench(&["source:drop@3", "scope:drop@1"]);
    let mut source = bench.source();
    source.send("VOLT 100");
    source.send("OUTP ON");
    source.send("OUTP OFF");
    assert!(is_closed(&mut source));
    let mut again = bench.source();
    assert_eq!((again.number("VOLT?"), again.number("OUTP?")), (100.0, 1.0));
    let mut scope = bench.scope();
    scope.send("*IDN?");
    assert!(is_closed(&mut scope));
    assert!(bench.scope().ask("*IDN?").contains("SCOPE-8"));
}

#[test]
fn garbage_is_no_answer_and_passes() {
    let bench = bench(&["scope:garbage@2", "load:garbage@1"]);
    let mut scope = bench.scope();
    scope.send("TIM:SCAL 1E-3");
    scope.send("TIM:SCAL?");
    let mut nonsense = rest(&mut scope);
    assert_eq!(nonsense.pop(), Some(b'\n'));
    assert!(nonsense.len() >= 7 && nonsense.iter().all(|byte| *byte >= 0x80));
    let mut again = bench.scope();
    assert_eq!(again.number("TIM:SCAL?"), 1e-3);
    let mut load = bench.load();
    load.send("*IDN?");
    let mut chunk = [0; 64];
    assert!(load.link.read(&mut chunk).unwrap() > 0);
    assert!(chunk[0] >= 0x80);
}

#[test]
fn a_silent_message_is_neither_executed_nor_answered() {
    let bench = bench(&["source:silent@2", "source:silent@3", "load:silent@1"]);
    let mut source = bench.source();
    source.send("VOLT 100");
    source.send("VOLT 50");
    source.send("VOLT?");
    assert!(rest(&mut source).is_empty());
    assert_eq!(bench.source().number("VOLT?"), 100.0);
    let mut load = bench.load();
    load.send("*IDN?");
    assert!(load.ask("SYST:ERR?").starts_with("0,"));
}

#[test]
fn a_truncated_block_ends_in_the_middle() {
    let bench = bench(&["scope:truncate@6"]);
    let mut scope = bench.scope();
    scope.send("SING");
    // Four messages while it acquires; the block is the sixth.
    thread::sleep(Duration::from_secs(3));
    for _ in 0..4 {
        scope.send("*WAI");
    }
    scope.send("WAV:DATA?");
    let half = rest(&mut scope);
    assert!(half.starts_with(b"#510000") && half.len() == 10_008 / 2, "{}", half.len());
    assert_eq!(bench.scope().block("WAV:DATA?").len(), 10_000);
}

#[test]
fn an_instrument_that_is_gone_stays_gone_and_the_others_live() {
    let bench = bench(&["source:gone@2", "load:gone@1"]);
    let mut bystander = bench.source();
    let mut source = bench.source();
    source.send("OUTP ON");
    source.send("*IDN?");
    assert!(is_closed(&mut source) && is_closed(&mut bystander));
    thread::sleep(Duration::from_millis(100));
    assert!(TcpStream::connect(("127.0.0.1", port(&bench.announcement().source))).is_err());
    let mut load = bench.load();
    load.send("*IDN?");
    assert!(matches!(load.link.read(&mut [0]), Ok(0) | Err(_)));
    assert!(connect(&bench.announcement().scope).ask("*IDN?").contains("SCOPE-8"));
}

#[test]
fn faults_are_understood_or_refused_with_the_form_they_have() {
    for good in
        ["source:drop@12", "scope:garbage@1", "load:silent@3", "scope:truncate@2", "source:gone@9", "load:gone@1"]
    {
        assert!(good.parse::<Fault>().is_ok(), "{good}");
    }
    for bad in
        ["", "source", "source:drop", "source:drop@0", "source:drop@x", "meter:drop@1", "scope:burn@1", "load:drop@1"]
    {
        let error = bad.parse::<Fault>().unwrap_err().to_string();
        assert!(error.contains("source:drop@12") && error.contains(bad), "{error}");
    }
}

#[test]
fn options_that_make_no_sense_are_refused_by_name() {
    let refused = |options: Options| {
        let runtime = tokio::runtime::Builder::new_current_thread().enable_all().build().unwrap();
        runtime.block_on(process::start(&options)).err().unwrap().to_string()
    };
    let default = Options::default;
    assert!(refused(Options { board: "lighthouse".into(), ..default() }).contains("beacon"));
    assert!(refused(Options { scope_bits: 10, ..default() }).contains("8 and 12"));
    assert!(refused(Options { speed: 0.0, ..default() }).contains("the speed"));
    assert!(refused(Options { probe_factor: f64::NAN, ..default() }).contains("the probe factor"));
    assert!(refused(Options { truth: Some("/nowhere/truth".into()), ..default() }).contains("open the truth file"));
}

#[test]
fn every_board_is_listed_with_a_sentence_and_can_be_started() {
    for (name, sentence) in process::boards() {
        assert!(sentence.ends_with('.') && sentence.contains(" A from "), "{sentence}");
        let bench = TestBench::new(&Options { board: name.into(), ..Options::default() });
        assert_eq!(bench.announcement().board, name);
    }
}

#[test]
fn the_final_state_of_the_outputs_is_in_the_truth_file() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("truth.jsonl");
    let bench = TestBench::new(&Options { truth: Some(path.clone()), ..Options::default() });
    bench.source().accepted("OUTP ON");
    bench.load().accepted("SYST:REM;:INP ON");
    bench.source().accepted("OUTP OFF");
    drop(bench);
    let states: Vec<String> = std::fs::read_to_string(&path).unwrap().lines().map(str::to_owned).collect();
    let state = |source, load| format!("{{\"state\":{{\"load_on\":{load},\"source_on\":{source}}}}}");
    let wanted = [state(false, false), state(true, false), state(true, true), state(false, true), state(false, true)];
    assert_eq!(states, wanted);
}
