//! The oscilloscope: settings, sample rate, trigger, holdoff, clipping, formats, errors, repeats, truths.

use proptest::prelude::*;
use ringstep_simulated_bench::{
    boards,
    converter::LoadDemand,
    instruments::{
        Device, Instrument, SharedBench,
        bench::{Draw, Line},
        scope::{
            Scope,
            settings::{Model, Probe},
            waveform::definite_block,
        },
    },
    truth::TruthFile,
};
use serde_json::Value;
use std::{
    path::Path,
    thread,
    time::{Duration, Instant},
};

const TRUE_PROBE: Probe = Probe { factor: 100.0, capacitance_f: 5e-12, offset_v: 0.0, miscompensation: 0.0 };

/// A scope on a board, and the bench it stands on.
struct Fixture {
    bench: SharedBench,
    scope: Device<Scope>,
}

impl Fixture {
    fn new(bits: u8, truth: Option<&Path>) -> Self {
        let truth = TruthFile::open(truth).unwrap();
        let bench = SharedBench::new(boards::by_name("beacon").unwrap(), 5, 20.0, 5e-12, truth);
        let scope = Scope::new(bench.clone(), 5, Model::of_bits(bits).unwrap(), TRUE_PROBE);
        Self { bench, scope: Device::new(scope) }
    }

    /// The board on its line with a light load, settled; the scope on its drain.
    fn switching(bits: u8) -> Self {
        Self::switching_with(bits, None)
    }

    fn switching_with(bits: u8, truth: Option<&Path>) -> Self {
        let mut fixture = Self::new(bits, truth);
        fixture.bench.now().set_line(Line { on: true, rms_v: 230.0, frequency_hz: 50.0, limit_a: 3.0 });
        let draw = Draw { on: true, demand: LoadDemand::Current(0.05), leakage_ohm: 1e6 };
        fixture.bench.now().set_draw(draw);
        thread::sleep(Duration::from_millis(1000));
        fixture.tell("CHAN1:PROB 100;SCAL 100;OFFS 300;:TIM:SCAL 10US;:ACQ:POIN 100000");
        fixture.tell("TRIG:EDGE:LEV 200;SLOP NEG;:TRIG:SWE NORM");
        fixture
    }

    fn tell(&mut self, message: &str) {
        assert_eq!(self.ask(&format!("{message};:SYST:ERR?")), "0,\"No error\"", "{message}");
    }

    fn ask(&mut self, query: &str) -> String {
        String::from_utf8(self.scope.message(query.as_bytes())).unwrap().trim_end().to_owned()
    }

    fn number(&mut self, query: &str) -> f64 {
        self.ask(query).parse().unwrap()
    }

    fn single(&mut self) {
        self.tell("SING");
        let start = Instant::now();
        while self.ask("ACQ:COMP?") != "100" {
            assert!(start.elapsed() < Duration::from_secs(60), "no trigger: {}", self.ask("TRIG:STAT?"));
            thread::sleep(Duration::from_millis(5));
        }
        assert_eq!(self.ask("TRIG:STAT?"), "STOP");
    }

    fn payload(&mut self) -> Vec<u8> {
        let response = self.scope.message(b"WAV:DATA?");
        let digits = usize::from(response[1] - b'0');
        response[2 + digits..response.len() - 1].to_vec()
    }

    /// Volts as the preamble scales unsigned bytes, and the fields of the preamble.
    fn volts(&mut self) -> (Vec<f64>, Vec<f64>) {
        let preamble = self.preamble();
        let volts = |code: u8| (f64::from(code) - preamble[9]) * preamble[7] + preamble[8];
        (self.payload().into_iter().map(volts).collect(), preamble)
    }

    fn preamble(&mut self) -> Vec<f64> {
        self.ask("WAV:PRE?").split(',').map(|field| field.parse().unwrap()).collect()
    }
}

proptest! {
    /// IEEE 488.2, 8.7.9: `#`, one digit that counts digits, the length, then bytes of any value.
    #[test]
    fn a_block_frames_any_payload(payload in prop::collection::vec(any::<u8>(), 0..3000)) {
        let block = definite_block(&payload);
        prop_assert_eq!(block[0], b'#');
        let digits = usize::from(block[1] - b'0');
        let length: usize = std::str::from_utf8(&block[2..2 + digits]).unwrap().parse().unwrap();
        prop_assert_eq!(length, payload.len());
        prop_assert_eq!(&block[2 + digits..], &payload[..]);
    }

    #[test]
    fn the_window_always_fits_the_memory(scale_s in 2e-9..5e-3_f64, memory in 1.0..1e6_f64) {
        let mut fixture = Fixture::new(8, None);
        fixture.tell(&format!("TIM:SCAL {scale_s:E};:ACQ:POIN {memory}"));
        let (rate_hz, points) = (fixture.number("ACQ:SRAT?"), fixture.number("ACQ:POIN?"));
        let shown_s = fixture.number("TIM:SCAL?");
        prop_assert!(shown_s >= scale_s * (1.0 - 1e-6) && shown_s <= 2.5 * scale_s);
        prop_assert!(rate_hz <= 1e9 && points <= 1e6);
        prop_assert!((points - 10.0 * shown_s * rate_hz).abs() < 1.0);
    }
}

/// IEEE 488.2 gives the examples `#15HELLO` and the empty block `#10`.
#[test]
fn blocks_look_like_those_of_the_standard() {
    assert_eq!(definite_block(b"HELLO"), b"#15HELLO");
    assert_eq!(definite_block(b""), b"#10");
    assert_eq!(definite_block(b"a\r\n"), b"#13a\r\n");
}

#[test]
fn the_sample_rate_falls_as_the_window_grows() {
    let mut fixture = Fixture::new(8, None);
    let mut rates = vec![];
    for scale in ["1US", "100US", "200US", "1MS", "5MS"] {
        fixture.tell(&format!("ACQ:POIN 1E6;:TIM:SCAL {scale}"));
        rates.push(fixture.number("ACQ:SRAT?"));
    }
    assert_eq!(rates, [1e9, 1e9, 500e6, 100e6, 20e6]);
    fixture.tell("ACQ:POIN 10000");
    assert_eq!(fixture.number("ACQ:SRAT?"), 200e3);
}

#[test]
fn settings_stay_at_the_probe_tip_when_the_factor_changes() {
    let mut fixture = Fixture::new(8, None);
    fixture.tell("CHAN1:SCAL 2;OFFS 3;PROB 100");
    assert_eq!(fixture.ask("CHAN1:SCAL?;OFFS?;PROB?"), "2.000000E+02;3.000000E+02;1.000000E+02");
    assert_eq!(fixture.ask("CHAN2:PROB?;COUP?;BWL?;DISP?"), "1.000000E+00;DC;0;0");
    fixture.tell("*RST");
    assert_eq!(fixture.ask("CHAN1:SCAL?;:TRIG:SWE?;:WAV:FORM?;UNS?;BYT?"), "1.000000E+00;AUTO;BYTE;1;MSBF");
}

#[test]
fn nothing_can_be_read_before_it_is_acquired() {
    let mut fixture = Fixture::new(8, None);
    assert_eq!(fixture.ask("WAV:DATA?"), "");
    assert!(fixture.ask("SYST:ERR?").starts_with("-230,"));
    fixture.single();
    let preamble = fixture.preamble();
    assert_eq!(preamble[..5], [0.0, 0.0, 10_000.0, 1.0, 1e-9]);
    assert!((preamble[5] + 5e-6).abs() < 1e-15 && preamble[6] == 0.0);
    assert_eq!(preamble[7..], [0.04, 0.0, 128.0]);
    assert_eq!(fixture.ask("WAV:SOUR CHAN2;:WAV:DATA?"), "");
    assert!(fixture.ask("SYST:ERR?").starts_with("-230,"), "channel 2 was not shown");
    fixture.tell("SING");
    assert_eq!(fixture.ask("ACQ:COMP?"), "0");
    assert_eq!(fixture.ask("WAV:SOUR CHAN1;:WAV:DATA?"), "", "arming forgets what was acquired");
}

/// The newline byte stands in the payload, and the block still has its length.
#[test]
fn codes_of_ten_are_data() {
    let mut fixture = Fixture::new(8, None);
    fixture.tell("CHAN2:DISP ON;SCAL 1;OFFS 4.72;:WAV:SOUR CHAN2");
    fixture.single();
    let mut newlines = 0;
    for step in -3..=3 {
        fixture.tell(&format!("CHAN2:OFFS {}", 4.72 + 0.04 * f64::from(step)));
        fixture.single();
        let payload = fixture.payload();
        assert_eq!(payload.len(), 10_000);
        newlines += payload.iter().filter(|byte| **byte == b'\n').count();
    }
    assert!(newlines > 1000, "{newlines}");
}

#[test]
fn a_normal_sweep_waits_and_an_automatic_one_does_not() {
    let mut fixture = Fixture::new(8, None);
    assert_eq!(fixture.ask("TRIG:STAT?"), "STOP");
    fixture.tell("TRIG:EDGE:LEV 3;:TRIG:SWE NORM;:SING");
    assert_eq!(fixture.ask("TRIG:STAT?"), "ARMED");
    let until = Instant::now() + Duration::from_millis(400);
    while Instant::now() < until {
        thread::sleep(Duration::from_millis(20));
        fixture.scope.service();
    }
    assert_eq!(fixture.ask("TRIG:STAT?;:ACQ:COMP?;NUMB?"), "WAIT;0;0");
    fixture.tell("STOP");
    assert_eq!(fixture.ask("TRIG:STAT?"), "STOP");
    fixture.tell("TRIG:SWE AUTO");
    fixture.single();
    assert_eq!(fixture.ask("ACQ:NUMB?"), "1");
    fixture.tell("RUN");
    let start = Instant::now();
    while fixture.number("ACQ:NUMB?") < 4.0 {
        assert!(start.elapsed() < Duration::from_secs(20));
        thread::sleep(Duration::from_millis(10));
    }
    assert_eq!(fixture.ask("TRIG:STAT?;:ACQ:COMP?"), "AUTO;100");
}

fn mean(volts: &[f64]) -> f64 {
    volts.iter().sum::<f64>() / volts.len() as f64
}

#[test]
fn the_trigger_is_the_zero_of_the_time_base_on_either_slope() {
    let mut fixture = Fixture::switching(8);
    for (slope, sign) in [("NEG", -1.0), ("POS", 1.0)] {
        fixture.tell(&format!("TRIG:EDGE:SLOP {slope}"));
        fixture.single();
        let (volts, preamble) = fixture.volts();
        let zero = (-preamble[5] / preamble[4]).round() as usize;
        let around = |range: std::ops::Range<usize>| mean(&volts[range]);
        // Some nanoseconds either side: the level lies between, on the way of the slope.
        let (before, after) = (around(zero - 30..zero - 20), around(zero + 20..zero + 30));
        assert!(sign * (200.0 - before) > 0.0 && sign * (after - 200.0) > 0.0, "{slope}: {before} to {after}");
        assert!((volts[zero] - 200.0).abs() < 25.0, "{slope}: {} V at zero", volts[zero]);
    }
}

#[test]
fn holdoff_asks_for_a_quiet_stretch_before_the_edge() {
    let mut fixture = Fixture::switching(8);
    fixture.tell("TIM:SCAL 20US;POS -50US;:TRIG:HOLD 60US");
    fixture.single();
    let (volts, preamble) = fixture.volts();
    let zero = (-preamble[5] / preamble[4]).round() as usize;
    let quiet = (58e-6 / preamble[4]) as usize;
    assert!(volts[zero - quiet..zero - 50].iter().all(|volts| *volts > 120.0), "an edge within the holdoff");
    assert!(volts[zero + 20..zero + 200].iter().any(|volts| *volts < 20.0), "no edge at the trigger");
}

#[test]
fn a_signal_beyond_the_range_clips_at_the_end_codes() {
    let mut fixture = Fixture::switching(8);
    fixture.tell("CHAN1:SCAL 20;OFFS 250;:TRIG:EDGE:LEV 250");
    fixture.single();
    let payload = fixture.payload();
    assert!(payload.contains(&0) && payload.contains(&255));
    let (volts, _) = fixture.volts();
    // 25 codes a division of 20 V: 128 codes below the centre, 127 above.
    assert!(volts.iter().all(|volts| (250.0 - 102.4..=250.0 + 101.6).contains(volts)));
}

#[test]
fn bytes_and_words_in_either_order_and_sign_are_the_same_codes() {
    for bits in [8, 12] {
        let mut fixture = Fixture::switching(bits);
        fixture.single();
        let bytes = fixture.payload();
        fixture.tell("WAV:FORM WORD");
        let words: Vec<u16> = fixture.payload().chunks(2).map(|pair| u16::from_be_bytes([pair[0], pair[1]])).collect();
        let unsigned = fixture.preamble();
        assert!(words.iter().all(|word| word.trailing_zeros() >= u32::from(16 - bits) || *word == 0));
        assert!(words.iter().zip(&bytes).all(|(word, byte)| word >> 8 == u16::from(*byte)));
        fixture.tell("WAV:BYT LSBF;UNS OFF");
        let signed: Vec<i16> = fixture.payload().chunks(2).map(|pair| i16::from_le_bytes([pair[0], pair[1]])).collect();
        let preamble = fixture.preamble();
        let volts = |code: f64, preamble: &[f64]| (code - preamble[9]) * preamble[7] + preamble[8];
        for (word, code) in words.iter().zip(&signed) {
            assert_eq!(volts((*word).into(), &unsigned), volts((*code).into(), &preamble));
        }
        assert_eq!(fixture.ask("SYST:ERR?"), "0,\"No error\"");
    }
}

#[test]
fn volts_are_within_the_stated_errors_of_the_drain() {
    for (bits, scale_v) in [(8, 100.0), (12, 50.0)] {
        let mut fixture = Fixture::switching(bits);
        fixture.tell(&format!("CHAN1:SCAL {scale_v};OFFS 300;:TIM:POS -70US;:TRIG:HOLD 100US"));
        fixture.single();
        // Before the trigger the board has been idle for long: the drain rests at the bulk voltage.
        let (volts, _) = fixture.volts();
        let bulk_v = fixture.bench.now().plant().bulk_voltage();
        let shown_v = mean(&volts[..1000]);
        let allowed_v = 0.01 * bulk_v + 0.1 * scale_v + 4.0;
        assert!((shown_v - bulk_v).abs() < allowed_v, "{shown_v} V shown of {bulk_v} V");
    }
}

fn deviation(volts: &[f64]) -> f64 {
    let mean = mean(volts);
    (volts.iter().map(|v| (v - mean).powi(2)).sum::<f64>() / volts.len() as f64).sqrt()
}

#[test]
fn averaging_lowers_the_noise_and_peak_detection_shows_it() {
    let mut fixture = Fixture::new(12, None);
    let mut noise = vec![];
    for kind in ["NORM", "AVER", "PEAK"] {
        fixture.tell(&format!("ACQ:TYPE {kind}"));
        fixture.single();
        let (_, preamble) = fixture.volts();
        fixture.tell("WAV:FORM WORD");
        let volts: Vec<f64> =
            fixture.payload().chunks(2).map(|p| f64::from(u16::from_be_bytes([p[0], p[1]])) / 6400.0).collect();
        fixture.tell("WAV:FORM BYTE");
        noise.push((preamble[1], deviation(&volts)));
    }
    assert_eq!(noise.iter().map(|(kind, _)| *kind).collect::<Vec<_>>(), [0.0, 2.0, 1.0]);
    // Eight acquisitions: noise falls by the root of eight.
    let ratio = noise[0].1 / noise[1].1;
    assert!((ratio / 8_f64.sqrt() - 1.0).abs() < 0.15, "{ratio}");
}

#[test]
fn repeated_captures_differ_in_noise_alone() {
    let mut fixture = Fixture::new(8, None);
    fixture.single();
    let first = fixture.payload();
    fixture.single();
    let second = fixture.payload();
    assert!(first != second);
    assert!(first.iter().zip(&second).all(|(a, b)| a.abs_diff(*b) <= 6));
    assert_eq!(fixture.ask("ACQ:NUMB?"), "2");
}

/// What a board shows at some load once it has settled, however long that took on the clock.
fn settled_capture(board: &str, load_a: f64, settling: Duration) -> (Vec<u8>, String) {
    let board = boards::by_name(board).unwrap();
    let bench = SharedBench::new(board, 11, 30.0, 5e-12, TruthFile::default());
    let scope = Device::new(Scope::new(bench.clone(), 11, Model::of_bits(12).unwrap(), TRUE_PROBE));
    let mut fixture = Fixture { bench, scope };
    fixture.bench.now().set_line(Line { on: true, rms_v: 230.0, frequency_hz: 50.0, limit_a: 3.0 });
    fixture.bench.now().set_draw(Draw { on: true, demand: LoadDemand::Current(load_a), leakage_ohm: 1e6 });
    thread::sleep(settling);
    fixture.tell("CHAN1:PROB 100;SCAL 100;OFFS 300;:TIM:SCAL 20US;:ACQ:POIN 100000");
    fixture.single();
    fixture.single();
    (fixture.payload(), fixture.ask("WAV:PRE?"))
}

#[test]
fn captures_of_every_settled_board_do_not_depend_on_the_clock() {
    let light = boards::all().iter().map(|board| (board.name, 0.1 * board.nominal.maximum_load_a));
    // The last two are overloaded and restart for ever.
    for (board, load_a) in light.chain([("semaphore", 2.0), ("beacon", 4.0)]) {
        let first = settled_capture(board, load_a, Duration::from_millis(700));
        let second = settled_capture(board, load_a, Duration::from_millis(1130));
        assert!(first == second, "{board} at {load_a} A captures something else when it is older");
    }
}

#[test]
fn truths_stand_in_the_time_base_of_the_scope() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("truth.jsonl");
    let mut fixture = Fixture::switching_with(8, Some(&path));
    fixture.single();
    let text = std::fs::read_to_string(&path).unwrap();
    let lines: Vec<Value> = text.lines().map(|line| serde_json::from_str(line).unwrap()).collect();
    assert_eq!(lines[0]["state"]["source_on"], true);
    let truth = lines.last().unwrap();
    assert_eq!((&truth["number"], &truth["simulated"]), (&Value::from(1), &Value::from(true)));
    let number = |value: &Value| value.as_f64().unwrap();
    let cycles = truth["cycles"].as_array().unwrap();
    let nearest_s = cycles.iter().map(|cycle| number(&cycle["start_s"]).abs()).fold(f64::INFINITY, f64::min);
    assert!(nearest_s < 0.3e-6, "the falling edge that triggered is a turn-on: {nearest_s}");
    let (volts, preamble) = fixture.volts();
    let at = |time_s: f64| volts[((time_s - preamble[5]) / preamble[4]).round() as usize];
    let off_s =
        cycles.iter().filter_map(|cycle| cycle["turn_off_s"].as_f64()).find(|t| (0.0..40e-6).contains(t)).unwrap();
    assert!(at(off_s - 0.1e-6) < 30.0 && at(off_s + 1.5e-6) > 300.0, "{off_s}");
    let ring = &truth["relaxation_rings"][0];
    let c = number(&ring["capacitance_f"]);
    let l = number(&truth["primary_inductance_h"]);
    let wanted_hz = 1.0 / (std::f64::consts::TAU * (l * c).sqrt());
    assert!((number(&ring["frequency_hz"]) / wanted_hz - 1.0).abs() < 1e-3);
}
