//! Who may import whom: every path between modules of the source is held against one table.

use regex::Regex;
use std::{
    fs,
    path::{Path, PathBuf},
};

/// A module of this package and the paths it may name, besides itself. `crate::a` also allows `crate::a::b`.
const LAYERS: [(&str, &[&str]); 9] = [
    ("transport", &[]),
    ("scpi", &["transport"]),
    ("files", &["ringstep_analysis::quantity"]),
    ("instrument", &["transport", "scpi", "files"]),
    ("station", &["transport", "scpi", "instrument", "files", "ringstep_analysis"]),
    ("sequence", &["transport", "scpi", "instrument", "files", "station", "ringstep_analysis"]),
    ("record", &["sequence::event", "sequence::samples_of", "instrument", "ringstep_analysis"]),
    ("report", &["record", "sequence::event", "station::CAUTIONS", "ringstep_analysis"]),
    ("cli", &["ringstep", "ringstep_analysis"]),
];

/// Of `instrument`, a record may know what is plain data.
const PLAIN_DATA: [&str; 6] = ["Identity", "LoadReading", "RawWaveform", "SampleFormat", "SourceReading", "Timing"];

/// Modules of the analysis, each importing only those before it; `lib.rs` joins them.
const ANALYSIS: [&str; 9] =
    ["quantity", "budget", "pieces", "findings", "waveform", "cycles", "fit", "circuit", "entry"];

/// The one file that joins the simulated bench.
const JOINS_THE_BENCH: &str = "cli/simulate.rs";

fn source() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("src")
}

/// Every Rust file below a folder with its path from there, tests and benches of the other packages left out.
fn files_below(folder: &Path) -> Vec<(String, String)> {
    let mut found = Vec::new();
    let mut folders = vec![folder.to_owned()];
    while let Some(next) = folders.pop() {
        for entry in fs::read_dir(next).unwrap() {
            let path = entry.unwrap().path();
            if path.is_dir() && path.file_name().is_none_or(|name| name != "tests" && name != "benches") {
                folders.push(path);
            } else if path.extension().is_some_and(|extension| extension == "rs") {
                let name = path.strip_prefix(folder).unwrap().to_string_lossy().into_owned();
                found.push((name, without_comments(&fs::read_to_string(&path).unwrap())));
            }
        }
    }
    found.sort();
    found
}

fn without_comments(text: &str) -> String {
    let code = text.lines().map(|line| line.split("//").next().unwrap_or(""));
    code.collect::<Vec<_>>().join("\n")
}

/// The module a file is: `station/config.rs` is `[station, config]`, `station/mod.rs` is `[station]`.
fn module_of(file: &str) -> Vec<String> {
    let mut parts: Vec<String> = file.trim_end_matches(".rs").split('/').map(str::to_owned).collect();
    if parts.last().is_some_and(|last| last == "mod") {
        parts.pop();
    }
    parts
}

/// Every path named in a text that starts at one of our packages or climbs above the module, groups taken apart.
fn paths_in(text: &str, module: &[String]) -> Vec<Vec<String>> {
    let start = Regex::new(r"\b(crate|super|ringstep\w*)\s*::").unwrap();
    let mut paths = Vec::new();
    let mut until = 0;
    for begin in start.find_iter(text) {
        let before = text[..begin.start()].trim_end();
        if begin.start() < until || before.ends_with("::") || before.ends_with("pub(in") {
            continue;
        }
        until = begin.start() + unfold(&text[begin.start()..], &[], &mut paths);
    }
    paths.iter().map(|path| resolved(path, module)).collect()
}

/// Reads one path with its groups; gives the bytes it took.
fn unfold(text: &str, stem: &[String], paths: &mut Vec<Vec<String>>) -> usize {
    let mut path = stem.to_vec();
    let mut at = 0;
    loop {
        at += text[at..].len() - text[at..].trim_start().len();
        if text[at..].starts_with('{') {
            at += 1;
            loop {
                at += text[at..].len() - text[at..].trim_start_matches([' ', '\n', ',']).len();
                if text[at..].starts_with('}') {
                    return at + 1;
                }
                let taken = unfold(&text[at..], &path, paths);
                if taken == 0 {
                    return at;
                }
                at += taken;
            }
        }
        let word: String = text[at..].chars().take_while(|c| c.is_alphanumeric() || *c == '_' || *c == '*').collect();
        if word.is_empty() {
            break;
        }
        at += word.len();
        path.push(word);
        if !text[at..].starts_with("::") {
            break;
        }
        at += 2;
    }
    if path.len() > stem.len() {
        paths.push(path);
    }
    at
}

/// The path from the root of its package.
fn resolved(path: &[String], module: &[String]) -> Vec<String> {
    match path.first().map(String::as_str) {
        Some("crate") => path[1..].to_vec(),
        Some("super") => {
            let climbs = path.iter().take_while(|part| *part == "super").count();
            let kept = module.len().saturating_sub(climbs);
            module[..kept].iter().chain(&path[climbs..]).cloned().collect()
        }
        _ => path.to_vec(),
    }
}

fn allows(allowed: &str, path: &[String]) -> bool {
    let allowed: Vec<&str> = allowed.split("::").collect();
    path.len() >= allowed.len() && allowed.iter().zip(path).all(|(allowed, part)| allowed == part)
}

/// What a file of a layer names and may not.
fn breaches(layer: &str, module: &[String], text: &str) -> Vec<String> {
    let (_, allowed) = LAYERS.iter().find(|(name, _)| *name == layer).unwrap();
    let forbidden = paths_in(text, module).into_iter().filter(|path| {
        let first = path.first().map_or("", String::as_str);
        let ours = first.starts_with("ringstep") || LAYERS.iter().any(|(name, _)| *name == first);
        let permitted = allowed.iter().any(|allowed| allows(allowed, path));
        let plain = layer != "record"
            || first != "instrument"
            || path.get(1).is_some_and(|name| PLAIN_DATA.contains(&name.as_str()));
        ours && first != layer && !(permitted && plain)
    });
    forbidden.map(|path| path.join("::")).collect()
}

#[test]
fn imports_go_one_way() {
    let mut wrong = Vec::new();
    for (file, text) in files_below(&source()) {
        let layer = file.split('/').next().unwrap();
        if matches!(layer, "lib.rs" | "main.rs" | "analysis" | "simulated_bench") || file == JOINS_THE_BENCH {
            continue;
        }
        assert!(LAYERS.iter().any(|(name, _)| *name == layer), "src/{file} belongs to no layer of the table");
        let found = breaches(layer, &module_of(&file), &text);
        wrong.extend(found.iter().map(|path| format!("src/{file} names {path}")));
    }
    assert!(wrong.is_empty(), "{}", wrong.join("\n"));
}

#[test]
fn a_breach_is_seen_in_whatever_way_it_is_written() {
    let module = ["station".to_owned(), "config".to_owned()];
    for text in [
        "use crate::sequence::Plan;",
        "use crate::{files::Value, sequence::{event, Plan}};",
        "use super::super::sequence::Plan;",
        "fn f() { crate::record::open(); }",
        "use ringstep_simulated_bench::process;",
    ] {
        assert!(!breaches("station", &module, text).is_empty(), "{text}");
    }
    let fine = "use super::Board;\nuse crate::{files::{Document, Value}, instrument::Identity};\nuse ringstep_analysis::findings::BoardFacts;";
    assert_eq!(breaches("station", &module, fine), Vec::<String>::new());
    assert_eq!(breaches("record", &[], "use crate::instrument::Scope;"), ["instrument::Scope"]);
    assert_eq!(breaches("report", &[], "use crate::station::{CAUTIONS, Board};"), ["station::Board"]);
    assert_eq!(breaches("files", &[], "use ringstep_analysis::findings::Ring;"), ["ringstep_analysis::findings::Ring"]);
}

#[test]
fn only_one_command_joins_the_simulated_bench() {
    let joins = |(file, text): (String, String)| text.contains("ringstep_simulated_bench").then_some(file);
    let joining: Vec<String> = files_below(&source()).into_iter().filter_map(joins).collect();
    assert!(joining.iter().all(|file| file == JOINS_THE_BENCH), "{joining:?}");
}

#[test]
fn the_simulated_bench_knows_nothing_of_what_measures_it() {
    for (file, text) in files_below(&source().join("simulated_bench")) {
        assert!(!text.contains("ringstep::") && !text.contains("ringstep_analysis"), "src/simulated_bench/{file}");
    }
}

#[test]
fn the_analysis_knows_no_instrument_and_no_outside_world() {
    for (file, text) in files_below(&source().join("analysis")) {
        for word in
            ["ringstep::", "ringstep_simulated_bench", "tokio", "std::fs", "std::net", "std::time", "std::thread"]
        {
            assert!(!text.contains(word), "src/analysis/{file} names {word}");
        }
        let Some(rank) = ANALYSIS.iter().position(|layer| *layer == module_of(&file)[0]) else {
            assert_eq!(file, "lib.rs", "src/analysis/{file} belongs to no layer");
            continue;
        };
        for path in paths_in(&text, &module_of(&file)) {
            let other = ANALYSIS.iter().position(|layer| Some(*layer) == path.first().map(String::as_str));
            assert!(other.is_none_or(|other| other <= rank), "src/analysis/{file} names {}", path.join("::"));
        }
    }
}
