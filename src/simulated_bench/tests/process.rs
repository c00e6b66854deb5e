//! The bench as a process: announcement, end with the standard input, two processes alike.

use crate::client::{connect, open};
use ringstep_simulated_bench::process::{Options, serve};
use serde_json::Value;
use std::{
    env,
    io::{BufRead, BufReader, Lines, Write},
    process::{Child, ChildStdout, Command, Stdio},
    thread,
    time::{Duration, Instant},
};

const SERVE: &str = "RINGSTEP_TEST_SERVE";

/// Not a test of its own: the process that the tests below start, which is this test program again.
#[test]
fn bench_process() {
    let Ok(seed) = env::var(SERVE) else { return };
    let options = Options { seed: seed.parse().unwrap(), speed: 20.0, ..Options::default() };
    let runtime = tokio::runtime::Builder::new_multi_thread().enable_all().build().unwrap();
    runtime.block_on(serve(&options)).unwrap();
}

struct Process {
    child: Child,
    output: Lines<BufReader<ChildStdout>>,
    announced: Value,
}

impl Process {
    fn start(seed: u64) -> Self {
        let mut child = Command::new(env::current_exe().unwrap())
            .args(["--exact", "process::bench_process", "--nocapture"])
            .env(SERVE, seed.to_string())
            .stdin(Stdio::piped())
            .stdout(Stdio::piped())
            .spawn()
            .unwrap();
        // The test program prints lines of its own around that of the bench.
        let mut output = BufReader::new(child.stdout.take().unwrap()).lines();
        let line = output.by_ref().map(Result::unwrap).find(|line| line.contains("\"simulated\"")).unwrap();
        let announced = serde_json::from_str(&line[line.find('{').unwrap()..]).unwrap();
        Self { child, output, announced }
    }

    fn capture(&self) -> (String, Vec<u8>) {
        let address = |name: &str| self.announced[name].as_str().unwrap().to_owned();
        let mut source = connect(&address("source"));
        let mut load = open(&address("load"));
        let mut scope = connect(&address("scope"));
        source.accepted("VOLT:RANG 300;:VOLT 230;:FREQ 50;:CURR:LIM 1.5;:OUTP ON");
        load.accepted("SYST:REM;:CURR:RANG 3;:CURR 0.05;:INP ON");
        thread::sleep(Duration::from_millis(1500));
        scope.accepted("*RST;CHAN1:PROB 100;SCAL 100;OFFS 300;:TIM:SCAL 20US;:ACQ:POIN 100000;:TRIG:EDGE:LEV 200");
        scope.accepted("TRIG:EDGE:SLOP NEG;:TRIG:SWE NORM");
        scope.single();
        scope.single();
        (scope.ask("WAV:PRE?"), scope.block("WAV:DATA?"))
    }

    fn end(mut self) {
        drop(self.child.stdin.take());
        let start = Instant::now();
        while self.child.try_wait().unwrap().is_none() {
            assert!(start.elapsed() < Duration::from_secs(10), "the bench outlived its standard input");
            thread::sleep(Duration::from_millis(10));
        }
        assert!(self.output.all(|line| !line.unwrap().contains("simulated\"")), "announced twice");
        assert!(self.child.wait().unwrap().success());
    }
}

impl Drop for Process {
    fn drop(&mut self) {
        let _ = self.child.kill();
    }
}

#[test]
fn two_processes_of_one_seed_capture_the_same_bytes() {
    let (first, second) = (Process::start(7), Process::start(7));
    assert_eq!(first.announced["simulated"], true);
    let other = Process::start(8);
    let (preamble, bytes) = first.capture();
    let (same_preamble, same_bytes) = second.capture();
    assert_eq!(preamble, same_preamble);
    assert!(bytes == same_bytes, "captures of the same settings differ");
    assert!(bytes != other.capture().1, "another seed captures the same");
    first.end();
    second.end();
    other.end();
}

#[test]
fn hands_solder_only_while_the_line_is_off() {
    let mut process = Process::start(9);
    let mut hands = process.child.stdin.take().unwrap();
    let mut done = |output: &mut Lines<BufReader<ChildStdout>>, line: &str| {
        writeln!(hands, "{line}").unwrap();
        let answer: Value = serde_json::from_str(&output.next().unwrap().unwrap()).unwrap();
        assert_eq!(answer["asked"], line);
        answer["done"].as_bool().unwrap()
    };
    let source = process.announced["source"].as_str().unwrap().to_owned();
    let mut source = connect(&source);
    assert!(done(&mut process.output, "solder 47e-12"));
    for nonsense in ["solder -1e-12", "solder 1", "solder nan", "solder", "weld 1e-12", ""] {
        assert!(!done(&mut process.output, nonsense), "{nonsense}");
    }
    source.accepted("VOLT:RANG 300;:VOLT 230;:FREQ 50;:CURR:LIM 1.5;:OUTP ON");
    assert!(!done(&mut process.output, "solder 0"));
    source.accepted("OUTP OFF");
    assert!(done(&mut process.output, "solder 0"));
}
