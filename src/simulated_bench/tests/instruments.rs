//! Program messages, status, errors; the commands of load and source. Straight on the instruments, without a wire.

use proptest::prelude::*;
use ringstep_simulated_bench::{
    boards,
    instruments::{
        Device, Instrument, SharedBench,
        device::{Dialect, Form},
        load::Load,
        parameter::{Unit, nr3, number},
        scope::{
            Scope,
            settings::{Model, Probe},
        },
        source::Source,
        status::QUEUE_DEPTH,
        syntax::units,
    },
    truth::TruthFile,
};
use std::{thread, time::Duration};

fn bench() -> SharedBench {
    SharedBench::new(boards::by_name("beacon").unwrap(), 3, 20.0, 5e-12, TruthFile::default())
}

fn load(bench: &SharedBench) -> Device<Load> {
    Device::new(Load::new(bench.clone(), 3))
}

fn source(bench: &SharedBench) -> Device<Source> {
    Device::new(Source::new(bench.clone(), 3))
}

fn scope(bench: &SharedBench) -> Device<Scope> {
    let probe = Probe { factor: 100.0, capacitance_f: 5e-12, offset_v: 0.0, miscompensation: 0.0 };
    Device::new(Scope::new(bench.clone(), 3, Model::of_bits(8).unwrap(), probe))
}

fn ask(instrument: &mut impl Instrument, message: &str) -> String {
    let response = String::from_utf8(instrument.message(message.as_bytes())).unwrap();
    response.strip_suffix('\n').map_or(response.clone(), str::to_owned)
}

fn number_of(instrument: &mut impl Instrument, query: &str) -> f64 {
    ask(instrument, query).parse().unwrap()
}

fn error(instrument: &mut impl Instrument) -> i32 {
    ask(instrument, "SYST:ERR?").split(',').next().unwrap().parse().unwrap()
}

/// The error a message leaves; exactly one, or none.
fn refused(instrument: &mut impl Instrument, message: &str) -> i32 {
    instrument.message(message.as_bytes());
    let first = error(instrument);
    assert_eq!(error(instrument), 0, "{message} left more than one error");
    first
}

/// Spellings of a header pattern: every option taken or left out, long or short, in capitals or not.
fn spellings(pattern: &str) -> [String; 4] {
    let numbered = pattern.replace('#', "2");
    let long = numbered.replace(['[', ']'], "");
    let short: String = long.chars().filter(|c| !c.is_ascii_lowercase()).collect();
    let without_option = numbered.split('[').next().unwrap().to_uppercase();
    [long.to_lowercase(), format!(":{short}"), without_option, long]
}

fn every_header_is_known<D: Dialect>(instrument: &mut Device<D>) {
    for (pattern, form, _) in D::COMMANDS {
        for header in spellings(pattern) {
            for (ending, allowed) in [("?", *form != Form::Set), ("", *form != Form::Query)] {
                let code = refused(instrument, &format!("{header}{ending}"));
                assert_eq!(code != -113, allowed, "{header}{ending} left {code}");
            }
        }
    }
}

#[test]
fn every_command_is_known_in_its_long_and_short_forms_in_any_case() {
    let bench = bench();
    every_header_is_known(&mut scope(&bench));
    every_header_is_known(&mut load(&bench));
    every_header_is_known(&mut source(&bench));
}

#[test]
fn identities_say_that_they_are_simulated() {
    let bench = bench();
    assert_eq!(ask(&mut scope(&bench), "*IDN?"), "SIMULATED BENCH,SCOPE-8,S000003,1.0");
    assert_eq!(ask(&mut load(&bench), "*idn?"), "SIMULATED BENCH,LOAD-150,L000003,1.0");
    assert_eq!(ask(&mut source(&bench), " *IDN? \r"), "SIMULATED BENCH,SOURCE-500,P000003,1.0");
}

/// The header path of chained commands, SCPI-99 volume 1, 6.2.4 [M]: a header without a leading colon starts where the
/// one before left off, a colon starts at the root, a common command leaves the path alone.
#[test]
fn chained_headers_walk_the_tree() {
    let headers = |message: &str| -> Vec<String> {
        units(message.as_bytes()).into_iter().map(|unit| unit.unwrap().header.join(":")).collect()
    };
    assert_eq!(headers("trig:edge:lev 1;slop pos"), ["TRIG:EDGE:LEV", "TRIG:EDGE:SLOP"]);
    assert_eq!(headers("TRIG:EDGE:LEV 1;*ESE 4;SLOP POS"), ["TRIG:EDGE:LEV", "*ESE", "TRIG:EDGE:SLOP"]);
    assert_eq!(headers("TRIG:EDGE:LEV 1;:TIM:SCAL 1"), ["TRIG:EDGE:LEV", "TIM:SCAL"]);
    assert_eq!(headers("TRIG:SWE AUTO;EDGE:LEV 1;SLOP POS"), ["TRIG:SWE", "TRIG:EDGE:LEV", "TRIG:EDGE:SLOP"]);
    assert!(headers("").is_empty());
}

/// Number formats NR1, NR2, NR3 (IEEE 488.2, 7.7.2) and suffix multipliers, with MHZ and MOHM as exceptions from
/// milli (SCPI-99 volume 1, 7.2) [M].
#[test]
fn numbers_take_every_format_and_their_suffixes() {
    let near = |text: &str, unit, wanted: f64| {
        let got = number(text, unit).unwrap();
        assert!((got - wanted).abs() <= 1e-12 * wanted.abs(), "{text} is {got}");
    };
    near("230", Unit::V, 230.0);
    near("-0.5", Unit::V, -0.5);
    near("+.5e-3", Unit::S, 5e-4);
    near("2E+2", Unit::V, 200.0);
    near("20US", Unit::S, 20e-6);
    near("20 ms", Unit::S, 20e-3);
    near("1.5 KV", Unit::V, 1500.0);
    near("3MHZ", Unit::Hz, 3e6);
    near("1 MOHM", Unit::Ohm, 1e6);
    near("250 MA", Unit::A, 0.25);
    assert_eq!(number("5 V", Unit::S).unwrap_err().code(), -131);
    assert_eq!(number("ON", Unit::S).unwrap_err().code(), -104);
    assert_eq!(number("-", Unit::S).unwrap_err().code(), -121);
}

proptest! {
    #[test]
    fn numbers_come_back_from_their_answer(value in prop::num::f64::NORMAL.prop_filter("range", |v| v.abs() < 1e30 && v.abs() > 1e-30)) {
        let back = number(&nr3(value), Unit::None).unwrap();
        prop_assert!((back - value).abs() <= 1e-6 * value.abs());
    }

    /// Whatever comes in, the instrument survives, answers in whole lines, and still tells who it is.
    #[test]
    fn no_message_upsets_an_instrument(message in prop::collection::vec(any::<u8>(), 0..80)) {
        let mut source = source(&bench());
        let response = source.message(&message);
        prop_assert!(response.is_empty() || response.ends_with(b"\n"));
        prop_assert!(ask(&mut source, "*IDN?").starts_with("SIMULATED BENCH,"));
    }

    #[test]
    fn settings_are_read_back(voltage_v in 0.0..150.0_f64, frequency_hz in 45.0..500.0_f64) {
        let mut source = source(&bench());
        prop_assert_eq!(refused(&mut source, &format!("VOLT {voltage_v:.3};:FREQ {frequency_hz:.3} HZ")), 0);
        prop_assert!((number_of(&mut source, "VOLT?") - voltage_v).abs() < 1e-3);
        prop_assert!((number_of(&mut source, "FREQ?") - frequency_hz).abs() < 1e-3);
    }
}

/// Error numbers of SCPI-99 volume 2, chapter 21 [M].
#[test]
fn each_mistake_has_its_own_error() {
    let bench = bench();
    let mut scope = scope(&bench);
    for (message, code) in [
        ("TIM:SCALL 1", -113),
        ("FOO", -113),
        ("TIM:SCAL", -109),
        ("TIM:SCAL 1E-6,2", -108),
        ("RUN 1", -108),
        ("TIM:SCAL? 1", -108),
        ("TIM:SCAL 5", -222),
        ("TIM:SCAL FAST", -104),
        ("TIM:SCAL 1 V", -131),
        ("TRIG:EDGE:SLOP UP", -224),
        ("TRIG:MODE VIDEO", -224),
        ("CHAN3:SCAL 1", -114),
        ("CHAN0:SCAL?", -114),
        ("TIM::SCAL 1", -102),
        ("TIM:SCAL 1,,2", -102),
        ("TIM:SCAL \"1", -151),
        ("TIM:SCAL 1\u{7f}", -101),
        ("WAV:DATA?", -230),
        ("WAV:PRE?", -230),
        ("*ESE 256", -222),
        ("*FOO", -113),
        ("CHAN1:DISP MAYBE", -224),
    ] {
        assert_eq!(refused(&mut scope, message), code, "{message}");
    }
    assert_eq!(ask(&mut scope, "BAD:HEADER 1;:SYST:ERR?"), "");
    assert_eq!(ask(&mut scope, "SYST:ERR?"), "-113,\"Undefined header;BAD:HEADER\"");
    assert_eq!(ask(&mut scope, ":system:error:next?"), "0,\"No error\"");
}

#[test]
fn an_execution_error_lets_the_rest_of_the_message_run_and_a_command_error_does_not() {
    let mut source = source(&bench());
    source.message(b"VOLT 999;:FREQ 60");
    assert_eq!((error(&mut source), number_of(&mut source, "FREQ?")), (-222, 60.0));
    source.message(b"VOLTS 9;:FREQ 400");
    assert_eq!((error(&mut source), number_of(&mut source, "FREQ?")), (-113, 60.0));
}

/// IEEE 488.2: power-on bit (11.5.1), error bits by class, enable registers, status byte (11.2), summary in bit 6.
#[test]
fn status_registers_follow_ieee_488_2() {
    let mut source = source(&bench());
    assert_eq!(ask(&mut source, "*ESR?"), "128");
    assert_eq!(ask(&mut source, "*ESR?"), "0");
    for (message, bit) in [("FOO", "32"), ("VOLT 999", "16"), ("*IDN?;*OPC?", "4"), ("*OPC", "1")] {
        source.message(message.as_bytes());
        assert_eq!(ask(&mut source, "*ESR?"), bit, "{message}");
        source.message(b"*CLS");
    }
    source.message(b"*ESE 32;*SRE 36;FOO");
    assert_eq!(ask(&mut source, "*ESE?;*SRE?"), "32;36");
    assert_eq!(ask(&mut source, "*STB?"), (0x04 + 0x20 + 0x40).to_string());
    assert_eq!(ask(&mut source, "*ESE?;*STB?"), format!("32;{}", 0x04 + 0x10 + 0x20 + 0x40));
    assert_eq!(ask(&mut source, "*CLS;*STB?"), "0");
    assert_eq!(ask(&mut source, "*OPC?;*TST?;*WAI"), "1;0");
    assert_eq!(ask(&mut source, "*SRE 255;*SRE?"), "191");
}

#[test]
fn a_full_error_queue_ends_in_queue_overflow() {
    let mut source = source(&bench());
    for _ in 0..QUEUE_DEPTH + 5 {
        source.message(b"VOLT 999");
    }
    let codes: Vec<i32> = (0..QUEUE_DEPTH + 1).map(|_| error(&mut source)).collect();
    assert!(codes[..QUEUE_DEPTH - 1].iter().all(|code| *code == -222), "{codes:?}");
    assert_eq!(codes[QUEUE_DEPTH - 1..], [-350, 0]);
}

#[test]
fn nothing_may_follow_an_identity_in_one_response() {
    let mut source = source(&bench());
    assert!(ask(&mut source, "*IDN?;VOLT?").ends_with(",1.0"));
    assert_eq!(error(&mut source), -440);
    assert_eq!(ask(&mut source, "VOLT?;FREQ?"), "0.000000E+00;5.000000E+01");
}

#[test]
fn the_load_takes_settings_under_remote_control_only() {
    let mut load = load(&bench());
    assert_eq!(refused(&mut load, "INP ON"), -203);
    assert_eq!(refused(&mut load, "SYST:REM"), 0);
    assert_eq!(refused(&mut load, "INP ON"), 0);
    assert_eq!(ask(&mut load, "INP?;:INPUT:STATE?"), "1;1");
    assert_eq!(refused(&mut load, "SYST:LOC"), 0);
    assert_eq!(refused(&mut load, "INP OFF"), -203);
}

#[test]
fn the_load_has_limits_and_ranges() {
    let mut load = load(&bench());
    load.message(b"SYST:REM");
    assert_eq!(refused(&mut load, "CURR 31"), -222);
    assert_eq!(refused(&mut load, "CURR -1"), -222);
    assert_eq!(refused(&mut load, "CURR 5"), 0);
    assert_eq!(refused(&mut load, "CURR:RANG 3"), -221);
    assert_eq!(refused(&mut load, "CURR 0.5;:CURR:RANG 1"), 0);
    assert_eq!(ask(&mut load, "CURR?;CURR:RANG?"), "5.000000E-01;3.000000E+00");
    assert_eq!(refused(&mut load, "CURR:LEV 5"), -222);
    assert_eq!(refused(&mut load, "RES 0.01"), -222);
    assert_eq!(refused(&mut load, "FUNC RES;:RES 100 OHM"), 0);
    assert_eq!(ask(&mut load, "FUNC?;RES?"), "RES;1.000000E+02");
    assert_eq!(refused(&mut load, "FUNC POW"), -224);
    load.message(b"*RST");
    assert_eq!(ask(&mut load, "INP?;FUNC?;CURR?"), "0;CURR;0.000000E+00");
}

fn settle() {
    thread::sleep(Duration::from_millis(1000));
}

#[test]
fn the_load_draws_what_it_is_set_to_within_its_errors_and_leaks_when_off() {
    let bench = bench();
    let (mut load, mut source) = (load(&bench), source(&bench));
    load.message(b"SYST:REM;:CURR:RANG 3;:CURR 1;:INP ON");
    assert!(number_of(&mut load, "MEAS:CURR?") < 1e-3, "a load cannot draw from a board that is off");
    source.message(b"VOLT 115;:OUTP ON");
    settle();
    let drawn_a = bench.now().plant().output_current();
    // 0.1 % of setting and 0.05 % of range, as the load states.
    assert!((drawn_a - 1.0).abs() < 1e-3 + 1.5e-3 && drawn_a != 1.0, "{drawn_a}");
    assert!((number_of(&mut load, "MEAS:CURR?") - drawn_a).abs() < 1e-3);
    let (volts, watts) = (number_of(&mut load, "MEAS:VOLT?"), number_of(&mut load, "MEAS:POW?"));
    assert!((volts - 12.0).abs() < 0.6 && (watts - volts * drawn_a).abs() < 0.05, "{volts} V, {watts} W");
    load.message(b"INP OFF");
    settle();
    let leakage_a = bench.now().plant().output_current();
    assert!((5e-6..2e-3).contains(&leakage_a), "{leakage_a}");
}

#[test]
fn the_source_changes_its_range_only_with_the_output_off() {
    let mut source = source(&bench());
    assert_eq!(refused(&mut source, "VOLT 230"), -222);
    assert_eq!(refused(&mut source, "VOLT:RANG 300;:VOLT 230;:OUTP ON"), 0);
    assert_eq!(refused(&mut source, "VOLT:RANG 150"), -221);
    assert_eq!(refused(&mut source, "VOLT:RANG 300"), 0);
    assert_eq!(refused(&mut source, "OUTP OFF;:VOLT:RANG 150"), -221);
    assert_eq!(refused(&mut source, "VOLT 100;:VOLT:RANG 150"), 0);
    assert_eq!(ask(&mut source, "OUTP?;VOLT:RANG?"), "0;1.500000E+02");
    assert_eq!(refused(&mut source, "CURR:LIM 9"), -222);
    assert_eq!(refused(&mut source, "FREQ 30"), -222);
    source.message(b"OUTP ON;*RST");
    assert_eq!(ask(&mut source, "OUTP?;VOLT?"), "0;0.000000E+00");
}

#[test]
fn the_source_says_when_it_limits_its_current() {
    let bench = bench();
    let (mut load, mut source) = (load(&bench), source(&bench));
    source.message(b"VOLT 115;:CURR:LIM 3;:OUTP ON");
    settle();
    assert_eq!(ask(&mut source, "STAT:QUES:COND?"), "0");
    let volts = number_of(&mut source, "MEAS:VOLT?");
    assert!((volts - 115.0).abs() < 0.4 + 0.15 + 0.1, "{volts}");
    load.message(b"SYST:REM;:CURR 2;:INP ON");
    settle();
    let (amperes, watts) = (number_of(&mut source, "MEAS:CURR?"), number_of(&mut source, "MEAS:POW?"));
    assert!(watts > 24.0 && watts < 45.0, "{watts} W in for 24 W out");
    assert!(amperes * volts > watts, "real power {watts} W is above the apparent one");
    source.message(b"CURR:LIM 0.05");
    settle();
    assert_eq!(ask(&mut source, "STAT:QUES:COND?;*STB?"), "2;24");
    source.message(b"CURR:LIM 3");
    settle();
    assert_eq!(ask(&mut source, "STAT:QUES:COND?;*STB?"), "0;16");
}
