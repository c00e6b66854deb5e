//! Driver files: one validator for all, every mistake at once, every invalid sample refused for the reason in its name.

use ringstep::instrument::{Drivers, DriversError, EMBEDDED, Facts, RoleKind, check_driver, identity};
use std::{fs, path::Path};

const LOAD: &str = include_str!("../drivers/load-serial-scpi.toml");

#[test]
fn every_file_of_the_folder_is_embedded_and_valid() {
    let mut files: Vec<String> = fs::read_dir("drivers")
        .unwrap()
        .map(|entry| format!("drivers/{}", entry.unwrap().file_name().into_string().unwrap()))
        .collect();
    files.sort();
    let mut embedded: Vec<&str> = EMBEDDED.iter().map(|(path, _)| *path).collect();
    embedded.sort_unstable();
    assert_eq!(files, embedded);
    for (path, text) in EMBEDDED {
        let definition = check_driver(path, text).unwrap_or_else(|errors| panic!("{errors}"));
        assert_eq!(format!("drivers/{}.toml", definition.name), path);
        assert_eq!(fs::read_to_string(path).unwrap(), text);
    }
    for role in [RoleKind::Scope, RoleKind::Load, RoleKind::Source] {
        assert!(Drivers::embedded().unwrap().iter().any(|definition| definition.facts.role() == role), "{role}");
    }
}

/// The first line of each sample states the mistake that must be found, and no other may be.
#[test]
fn every_invalid_sample_is_refused_for_its_reason() {
    let folder = Path::new("tests/fixtures/drivers/invalid");
    let mut seen = 0;
    for entry in fs::read_dir(folder).unwrap() {
        let path = entry.unwrap().path();
        let text = fs::read_to_string(&path).unwrap();
        let expected = text.lines().next().unwrap().strip_prefix("# expected: ").unwrap();
        let errors = check_driver(&path.display().to_string(), &text).unwrap_err();
        let message = errors.to_string();
        assert!(message.contains(expected), "{}: expected `{expected}`, got:\n{message}", path.display());
        assert!(message.starts_with(&format!("{}:", path.display())), "{message}");
        seen += 1;
    }
    assert!(seen >= 30, "only {seen} samples");
}

#[test]
fn every_mistake_of_a_file_is_told_at_once_with_its_line() {
    let text =
        LOAD.replace("baud = 9600", "baud = 1").replace("MEASure:VOLTage?", "MEASure:VOLTage").replace("[3, 30]", "[]");
    let errors = check_driver("mine.toml", &text).unwrap_err();
    let found: Vec<(&str, &str)> = errors
        .errors
        .iter()
        .map(|error| (text.lines().nth(error.line - 1).unwrap().split(' ').next().unwrap(), error.key.as_str()))
        .collect();
    assert_eq!(
        found,
        [
            ("baud", "serial.baud"),
            ("current_ranges_a", "load.current_ranges_a"),
            ("measure_voltage", "commands.measure_voltage.get"),
        ]
    );
}

#[test]
fn a_users_driver_takes_the_place_of_an_embedded_one_of_its_name() {
    let folder = tempfile::tempdir().unwrap();
    let mine = LOAD.replace("smallest_current_a = 1e-4", "smallest_current_a = 0.01");
    fs::write(folder.path().join("mine.toml"), mine).unwrap();
    fs::write(folder.path().join("notes.txt"), "not a driver").unwrap();
    let drivers = Drivers::with_folder(folder.path()).unwrap();
    assert_eq!(drivers.iter().count(), EMBEDDED.len());
    let Facts::Load(facts) = &drivers.named("load-serial-scpi").unwrap().facts else { panic!("not a load") };
    assert_eq!(facts.smallest_current_a, 0.01);
}

#[test]
fn every_mistaken_file_of_a_folder_is_named() {
    let folder = tempfile::tempdir().unwrap();
    for name in ["one.toml", "two.toml"] {
        fs::write(folder.path().join(name), LOAD.replace("role = \"load\"", "role = \"lode\"")).unwrap();
    }
    let error = Drivers::with_folder(folder.path()).unwrap_err();
    assert!(matches!(&error, DriversError::Mistaken(files) if files.len() == 2));
    let text = error.to_string();
    assert!(text.contains("one.toml:") && text.contains("two.toml:"), "{text}");
    let absent = Drivers::with_folder(&folder.path().join("absent")).unwrap_err().to_string();
    assert!(absent.contains("absent") && absent.contains("check the folder"), "{absent}");
}

#[test]
fn an_instrument_is_recognised_by_maker_and_model_for_its_role_alone() {
    let drivers = Drivers::embedded().unwrap();
    let recognised = |role, answer: &str| {
        let identity = identity(answer, "TCPIP::192.0.2.7::5025::SOCKET").unwrap();
        drivers.recognise(role, &identity).map(|definition| definition.name.clone())
    };
    let scope = "SIMULATED BENCH,SCOPE-12,S1,1.0";
    assert_eq!(recognised(RoleKind::Scope, scope).as_deref(), Some("scope-preamble-block"));
    assert_eq!(recognised(RoleKind::Load, scope), None);
    assert_eq!(recognised(RoleKind::Scope, "SIMULATED BENCH,SCOPE-120,S1,1.0"), None);
    assert_eq!(recognised(RoleKind::Scope, "ANOTHER,SCOPE-12,S1,1.0"), None);
}

/// IEEE 488.2 10.14: maker, model, serial number, firmware; the last may hold anything.
#[test]
fn an_identity_has_four_fields() {
    let who = identity("NORRSUND, GAUGE ,7,1.0,beta", "ASRL/dev/ttyUSB0::INSTR").unwrap();
    assert_eq!((who.model.as_str(), who.serial_number.as_str(), who.firmware.as_str()), ("GAUGE", "7", "1.0,beta"));
    assert!(!who.simulated);
    for answer in ["", "one,two,three", ",,,", "garbage \u{fffd}"] {
        assert_eq!(identity(answer, ""), None, "{answer}");
    }
}
