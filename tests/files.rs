//! The three files a user writes: every mistake in them is found at once, and named where it stands.

use proptest::prelude::*;
use ringstep::{
    files::{FileErrors, Mistake},
    sequence::Plan,
    station::{Board, Clamp, Controller, Role, Station},
};

const STATION: &str = include_str!("../src/guide/examples/station.toml");
const BOARD: &str = include_str!("../src/guide/examples/board.toml");
const PLAN: &str = include_str!("../src/guide/examples/plan.toml");

fn station_errors(text: &str) -> FileErrors {
    Station::read("station.toml", text).unwrap_err()
}

fn board_errors(text: &str) -> FileErrors {
    Board::read("board.toml", text).unwrap_err()
}

/// The text with one piece exchanged, which must stand in it exactly once.
fn with(text: &str, piece: &str, other: &str) -> String {
    assert_eq!(text.matches(piece).count(), 1, "{piece}");
    text.replace(piece, other)
}

#[test]
fn the_examples_of_the_guide_read_as_they_say() {
    let station = Station::read("station.toml", STATION).unwrap();
    assert_eq!(station.probe.rating_v, 1400.0);
    assert_eq!(station.probe.calibrated.as_deref(), Some("2026-03-14"));
    assert!(station.source_isolated && station.scope.earthed && !station.load_earthed);
    let board = Board::read("board.toml", BOARD).unwrap();
    assert_eq!((board.controller, board.clamp), (Controller::CycleSkipping, Clamp::ResistorCapacitorDiode));
    assert_eq!(board.line_range_v, [85.0, 265.0]);
    let plan = Plan::read("plan.toml", PLAN).unwrap();
    assert_eq!(plan.line_v, [115.0, 180.0, 230.0]);
    assert_eq!(plan.load_floor_a, 0.01);
    assert_eq!(plan.stress.drain_derating, 0.9);
}

/// A stated tolerance is a rectangular distribution: half-width over the square root of three (JCGM 100:2008, 4.3.7).
#[test]
fn a_tolerance_reaches_the_analysis_as_a_standard_uncertainty() {
    let board = Board::read("board.toml", BOARD).unwrap();
    let facts = board.facts(&Station::read("station.toml", STATION).unwrap());
    let inductance = facts.primary_inductance_h.unwrap();
    assert!((inductance.value - 1.1e-3).abs() < 1e-15);
    assert!((inductance.standard_uncertainty - 0.077e-3 / 3f64.sqrt()).abs() < 1e-12);
    let probe = facts.probe_capacitance_f.unwrap();
    assert!((probe.standard_uncertainty - 0.3e-12 / 3f64.sqrt()).abs() < 1e-20);
    assert!((facts.switching_period_s.unwrap() - 1.0 / 105e3).abs() < 1e-12);
    assert_eq!(facts.skips_cycles, Some(true));
}

#[test]
fn all_mistakes_of_a_file_are_found_at_once_and_each_where_it_stands() {
    let mut text = with(STATION, "\"5 pF +- 0.3 pF\"\nbandwidth", "\"3.5 pV\"\nbandwidth");
    text = with(&text, "factor = 100", "factor = \"100x\"");
    text = with(&text, "derating_frequency = ", "derating_frequenzy = ");
    text = with(&text, "channel = 1 ", "channel = 19    ");
    text = with(&text, "line_current = \"1 A\"", "# line_current = \"1 A\"");
    let errors = station_errors(&text);
    let seen: Vec<(Mistake, &str)> = errors.errors.iter().map(|error| (error.mistake, error.key.as_str())).collect();
    assert_eq!(
        seen,
        [
            (Mistake::Refused, "scope.channel"),
            (Mistake::Missing, "probe.derating_frequency"),
            (Mistake::Unreadable, "probe.factor"),
            (Mistake::Unreadable, "probe.capacitance"),
            (Mistake::Unknown, "probe.derating_frequenzy"),
            (Mistake::Missing, "limits.line_current"),
        ]
    );
    for (index, piece) in
        [(0, "19    "), (2, "\"100x\""), (3, "\"3.5 pV\""), (4, "derating_frequenzy"), (5, "[limits]")]
    {
        let (line, row) =
            text.lines().enumerate().find(|(_, row)| row.contains(piece) && !row.starts_with('#')).unwrap();
        let error = &errors.errors[index];
        assert_eq!((error.line, error.column), (line + 1, row.find(piece).unwrap() + 1), "{error:?}");
    }
    assert_eq!(errors.errors[4].help.as_deref(), Some("did you mean `derating_frequency`?"));
    let printed = errors.to_string();
    assert_eq!(printed.lines().count(), 6);
    assert!(printed.lines().all(|line| line.starts_with("station.toml:")), "{printed}");
}

#[test]
fn a_mistake_is_drawn_beneath_its_line_with_what_was_expected() {
    let errors = board_errors(&with(BOARD, "\"650 V\"", "\"650 W\""));
    insta::assert_snapshot!(errors.render(false));
    assert!(errors.render(true).contains("\u{1b}["));
}

#[test]
fn a_quantity_without_quotes_is_told_so() {
    let errors = board_errors(&with(BOARD, "\"650 V\"", "650 V"));
    assert!(errors.errors.iter().all(|error| error.mistake == Mistake::Syntax), "{errors}");
    assert!(errors.errors.iter().any(|error| error.help.as_deref() == Some("quantities stand in quotes: \"650 V\"")));
}

#[test]
fn a_broken_line_hides_no_other_mistake() {
    let text = with(&with(BOARD, "\"650 V\"", "650 V"), "\"schottky\" ", "\"shotky\" ");
    let errors = board_errors(&text);
    assert!(errors.errors.iter().any(|error| error.mistake == Mistake::Syntax));
    let rectifier = errors.errors.iter().find(|error| error.key == "output[0].rectifier").unwrap();
    assert_eq!(rectifier.help.as_deref(), Some("did you mean \"schottky\"?"));
}

#[test]
fn topologies_that_cannot_be_measured_are_refused_by_name() {
    for topology in ["two-switch-flyback", "half-bridge-flyback", "active-clamp-flyback"] {
        let errors = board_errors(&with(BOARD, "topology = \"flyback\"", &format!("topology = \"{topology}\"")));
        let [error] = errors.errors.as_slice() else { panic!("{errors}") };
        assert_eq!((error.mistake, error.key.as_str()), (Mistake::Refused, "topology"));
        assert!(error.found.contains(&topology.replace("-flyback", " flyback")), "{error:?}");
    }
}

#[test]
fn another_kind_of_file_and_a_newer_version_are_the_only_mistake_reported() {
    let errors = station_errors(BOARD);
    assert_eq!(errors.errors.len(), 1, "{errors}");
    assert_eq!(errors.errors[0].help.as_deref(), Some("a station file is wanted here"));
    let errors = board_errors(&with(BOARD, "ringstep board 1", "ringstep board 2").replace("turns_ratio", "turns"));
    assert_eq!(errors.errors.len(), 1, "{errors}");
    assert_eq!(errors.errors[0].help.as_deref(), Some("the file was written for a newer version of this program"));
    let errors = board_errors(&with(BOARD, "format = \"ringstep board 1\"", ""));
    assert_eq!((errors.errors.len(), errors.errors[0].mistake), (1, Mistake::Missing), "{errors}");
    assert_eq!(errors.errors[0].help.as_deref(), Some("format = \"ringstep board 1\""));
}

#[test]
fn a_role_is_filled_by_an_instrument_or_by_hand_but_the_scope_never_by_hand() {
    let by_hand = "address = \"TCPIP::192.0.2.22::5025::SOCKET\"";
    let text = with(STATION, by_hand, "by_hand = \"transformer T2\"");
    let station = Station::read("station.toml", &text).unwrap();
    assert_eq!(station.source, Role::ByHand { description: "transformer T2".into() });
    let both = station_errors(&with(STATION, by_hand, &format!("by_hand = \"transformer T2\"\n{by_hand}")));
    assert_eq!(both.errors[0].key, "source.address");
    let scope = station_errors(&with(STATION, "address = \"TCPIP::192.0.2.21::5025::SOCKET\"", "by_hand = \"me\""));
    let keys: Vec<&str> = scope.errors.iter().map(|error| error.key.as_str()).collect();
    assert_eq!(keys, ["scope.address", "scope.by_hand"]);
}

#[test]
fn values_at_odds_with_each_other_are_refused() {
    let floor = Plan::read("plan.toml", &with(PLAN, "floor = \"10 mA\"", "floor = \"3 A\"")).unwrap_err();
    assert_eq!(floor.errors[0].key, "load.floor");
    for (piece, other, key) in [
        ("[\"11.4 V\", \"12.6 V\"]", "[\"4.8 V\", \"5.2 V\"]", "output[0].regulation"),
        ("[\"85 V\", \"265 V\"]", "[\"265 V\", \"85 V\"]", "line_range"),
        ("\"650 V\"", "\"650 V +- 5 %\"", "drain_rating"),
        ("kind = \"resistor-capacitor-diode\"", "kind = \"none\"", "clamp.voltage"),
        ("minimum_load = \"0 A\"", "minimum_load = \"2 A\"", "output[0].minimum_load"),
    ] {
        let errors = board_errors(&with(BOARD, piece, other));
        let keys: Vec<&str> = errors.errors.iter().map(|error| error.key.as_str()).collect();
        assert_eq!(keys, [key], "{errors}");
    }
}

/// One change to a text: pieces are removed, repeated, exchanged, or replaced by what breaks parsers.
fn changed(text: &str, changes: &[(u8, usize, usize, String)]) -> String {
    let mut chars: Vec<char> = text.chars().collect();
    for (kind, at, length, other) in changes {
        let at = at % (chars.len() + 1);
        let end = (at + length % 12).min(chars.len());
        let piece: Vec<char> = chars[at..end].to_vec();
        match kind % 4 {
            0 => drop(chars.splice(at..end, [])),
            1 => drop(chars.splice(at..at, piece)),
            2 => drop(chars.splice(at..end, other.chars())),
            _ => drop(chars.splice(at..end, piece.into_iter().rev())),
        }
    }
    chars.into_iter().collect()
}

fn change() -> impl Strategy<Value = (u8, usize, usize, String)> {
    let pieces = prop_oneof![
        Just("\"\"\"".to_owned()),
        Just("[[".to_owned()),
        Just("= 1979-05-27T07:32:00Z".to_owned()),
        Just("\u{1f50c}\u{301}".to_owned()),
        Just("\r\n\u{0}\\u".to_owned()),
        Just("1e999".to_owned()),
        Just("{a.b={}}".to_owned()),
        "\\PC{0,6}",
    ];
    (any::<u8>(), any::<usize>(), any::<usize>(), pieces)
}

fn held<T>(text: &str, read: Result<T, FileErrors>) -> Result<(), TestCaseError> {
    let Err(errors) = read else { return Ok(()) };
    prop_assert!(!errors.errors.is_empty());
    for error in &errors.errors {
        prop_assert!(error.line >= 1 && error.line <= text.matches('\n').count() + 1, "{error:?}");
        prop_assert!(error.column >= 1 && text.get(error.span.clone()).is_some(), "{error:?}");
        prop_assert!(!error.found.is_empty() && !error.expected.is_empty(), "{error:?}");
    }
    prop_assert!(!errors.render(false).is_empty() && !errors.to_string().is_empty());
    Ok(())
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(400))]

    #[test]
    fn whatever_becomes_of_a_file_it_reads_or_its_mistakes_have_a_place(
        changes in prop::collection::vec(change(), 1..5),
    ) {
        let text = changed(STATION, &changes);
        held(&text, Station::read("station.toml", &text))?;
        let text = changed(BOARD, &changes);
        held(&text, Board::read("board.toml", &text))?;
        let text = changed(PLAN, &changes);
        held(&text, Plan::read("plan.toml", &text))?;
    }

    #[test]
    fn any_text_at_all_reads_or_its_mistakes_have_a_place(text in "(\\PC|[\\r\\n\\t\"'=\\[\\]{}.#]){0,80}") {
        held(&text, Board::read("board.toml", &text))?;
    }
}
