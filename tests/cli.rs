//! The command line as a stranger meets it: answers, exit codes, errors for people and for machines.

use assert_cmd::Command;
use serde_json::Value;
use std::{
    fs,
    io::{BufRead, BufReader, Write},
    net::TcpStream,
    path::PathBuf,
    process::{Child, Stdio},
};
use tempfile::TempDir;

/// The program in a folder that holds the example files of the guide, with one piece of each changed.
struct Bench {
    folder: TempDir,
}

impl Bench {
    fn new() -> Self {
        let folder = TempDir::new().unwrap();
        let examples = PathBuf::from(env!("CARGO_MANIFEST_DIR")).join("src/guide/examples");
        for file in ["plan.toml", "station.toml", "board.toml"] {
            fs::copy(examples.join(file), folder.path().join(file)).unwrap();
        }
        Self { folder }
    }

    fn change(&self, file: &str, piece: &str, other: &str) {
        let path = self.folder.path().join(file);
        let text = fs::read_to_string(&path).unwrap();
        assert!(text.contains(piece), "{piece}");
        fs::write(path, text.replace(piece, other)).unwrap();
    }

    fn run(&self, arguments: &[&str]) -> Answer {
        let mut command = Command::cargo_bin("ringstep").unwrap();
        let output =
            command.current_dir(self.folder.path()).env_remove("RINGSTEP_LOG").args(arguments).output().unwrap();
        Answer {
            code: output.status.code(),
            out: String::from_utf8(output.stdout).unwrap(),
            err: String::from_utf8(output.stderr).unwrap(),
        }
    }

    fn check(&self, more: &[&str]) -> Answer {
        let mut arguments = vec!["check", "--plan", "plan.toml", "--station", "station.toml", "--board", "board.toml"];
        arguments.extend(more);
        self.run(&arguments)
    }
}

struct Answer {
    code: Option<i32>,
    out: String,
    err: String,
}

impl Answer {
    fn json(&self) -> Value {
        serde_json::from_str(&self.out).unwrap()
    }
}

#[test]
fn check_accepts_the_examples_and_shows_the_cautions() {
    let answer = Bench::new().check(&[]);
    assert_eq!((answer.code, answer.err.as_str()), (Some(0), ""));
    assert!(answer.out.contains("Nothing was energised") && answer.out.contains("Local codes"));
    assert!(!answer.out.contains('\u{1b}'), "colour where no terminal is");
}

#[test]
fn check_refuses_by_exit_code_and_names_the_check() {
    let bench = Bench::new();
    bench.change("station.toml", "isolated = true", "isolated = false");
    bench.change("station.toml", "differential = true", "differential = false");
    let answer = bench.check(&["--json"]);
    assert_eq!(answer.code, Some(4));
    let json = answer.json();
    assert_eq!(json["passed"], false);
    let refused: Vec<&str> = json["checks"]
        .as_array()
        .unwrap()
        .iter()
        .filter(|check| check["passed"] == false)
        .map(|check| check["check"].as_str().unwrap())
        .collect();
    assert_eq!(refused, ["probe and source isolation"]);
    let answer = bench.check(&[]);
    assert_eq!(answer.code, Some(4));
    assert!(answer.out.contains("REFUSED"));
}

#[test]
fn the_mistakes_of_all_three_files_are_told_at_once() {
    let bench = Bench::new();
    bench.change("plan.toml", "\"20 s\"", "\"20 V\"");
    bench.change("station.toml", "serial_number", "serial_nummer");
    bench.change("board.toml", "\"zener\", \"none\"\n", "\n");
    bench.change("board.toml", "kind = \"resistor-capacitor-diode\"", "kind = \"rcd\"");
    let answer = bench.check(&["--json"]);
    assert_eq!(answer.code, Some(2));
    let mistakes = answer.json()["error"]["mistakes"].as_array().unwrap().clone();
    let keys: Vec<&str> = mistakes.iter().map(|mistake| mistake["key"].as_str().unwrap()).collect();
    assert_eq!(keys, ["settle_timeout", "probe.serial_number", "probe.serial_nummer", "clamp.kind"]);
    for file in ["plan.toml:", "station.toml:", "board.toml:"] {
        assert!(answer.err.contains(file), "{}", answer.err);
    }
}

#[test]
fn a_role_by_hand_is_refused_where_nobody_is_at_the_bench() {
    let bench = Bench::new();
    bench.change("station.toml", "address = \"TCPIP::192.0.2.22::5025::SOCKET\"", "by_hand = \"transformer T2\"");
    assert_eq!(bench.check(&[]).code, Some(0));
    assert_eq!(bench.check(&["--unattended"]).code, Some(4));
}

#[test]
fn wrong_usage_and_absent_files_have_their_own_exit_codes() {
    let bench = Bench::new();
    assert_eq!(bench.run(&["check", "--plan", "plan.toml"]).code, Some(2));
    assert_eq!(bench.run(&["measur"]).code, Some(2));
    fs::remove_file(bench.folder.path().join("plan.toml")).unwrap();
    let answer = bench.check(&[]);
    assert_eq!(answer.code, Some(1));
    assert!(answer.err.contains("failed to read plan.toml") && answer.err.contains("hint:"), "{}", answer.err);
    fs::write(bench.folder.path().join("plan.toml"), [0x66, 0xff, 0xfe]).unwrap();
    assert!(bench.check(&[]).err.contains("must be text in UTF-8"));
}

#[test]
fn the_help_tells_the_exit_codes_and_check_the_cautions() {
    let bench = Bench::new();
    let help = bench.run(&["--help"]);
    assert_eq!(help.code, Some(0));
    assert!(help.out.contains("refused before anything was energised"));
    let help = bench.run(&["check", "--help"]).out;
    let unwrapped = help.split_whitespace().collect::<Vec<_>>().join(" ");
    assert!(ringstep::station::CAUTIONS.iter().all(|caution| unwrapped.contains(caution)), "{help}");
}

/// A started `simulate` and its first line, which names the instruments.
fn started(arguments: &[&str]) -> (Child, Value) {
    let mut child = std::process::Command::new(assert_cmd::cargo::cargo_bin("ringstep"))
        .arg("simulate")
        .args(arguments)
        .stdin(Stdio::piped())
        .stdout(Stdio::piped())
        .spawn()
        .unwrap();
    let mut line = String::new();
    BufReader::new(child.stdout.as_mut().unwrap()).read_line(&mut line).unwrap();
    (child, serde_json::from_str(&line).unwrap())
}

#[test]
fn the_simulated_bench_answers_as_simulated_and_ends_with_its_standard_input() {
    let (mut child, bench) = started(&["--board", "foghorn", "--seed", "7"]);
    assert_eq!((&bench["simulated"], &bench["board"]), (&Value::Bool(true), &Value::from("foghorn")));
    let address = bench["scope"].as_str().unwrap();
    let (host, port) = match address.split("::").collect::<Vec<_>>().as_slice() {
        ["TCPIP", host, port, "SOCKET"] => ((*host).to_owned(), port.parse::<u16>().unwrap()),
        _ => panic!("{address}"),
    };
    let mut scope = TcpStream::connect((host, port)).unwrap();
    scope.write_all(b"*IDN?\n").unwrap();
    let mut identity = String::new();
    BufReader::new(scope).read_line(&mut identity).unwrap();
    assert!(identity.to_uppercase().contains("SIMULATED"), "{identity}");
    drop(child.stdin.take());
    assert!(child.wait().unwrap().success());
}

#[test]
fn simulate_lists_its_boards_and_names_them_where_one_is_unknown() {
    let bench = Bench::new();
    let list = bench.run(&["simulate", "--list"]);
    assert_eq!(list.code, Some(0));
    let unknown = bench.run(&["simulate", "--board", "lighthouse"]);
    assert_eq!(unknown.code, Some(2));
    for board in ["beacon", "foghorn", "tidegauge", "winch", "pumphouse", "semaphore"] {
        assert!(list.out.contains(board) && unknown.err.contains(board), "{board}");
    }
    assert_eq!(bench.run(&["simulate", "--fault", "scope:smoke@1"]).code, Some(2));
}

#[test]
fn drivers_are_listed_and_a_wrong_one_is_told_every_mistake() {
    let bench = Bench::new();
    let list = bench.run(&["drivers", "list"]);
    assert_eq!(list.code, Some(0));
    assert!(["scope", "load", "source"].iter().all(|role| list.out.contains(role)), "{}", list.out);
    let driver = PathBuf::from(env!("CARGO_MANIFEST_DIR")).join("drivers/source-ac-scpi.toml");
    let copy = bench.folder.path().join("source.toml");
    fs::copy(driver, &copy).unwrap();
    assert_eq!(bench.run(&["drivers", "check", "source.toml"]).code, Some(0));
    let text = fs::read_to_string(&copy).unwrap();
    fs::write(&copy, text.replace("name = ", "nahme = ")).unwrap();
    let wrong = bench.run(&["drivers", "check", "source.toml"]);
    assert_eq!(wrong.code, Some(2));
    assert!(wrong.err.contains("did you mean `name`?"), "{}", wrong.err);
}
