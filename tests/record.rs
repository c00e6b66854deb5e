//! The run folder: what is written comes back, damage is told, and other programs can read the captures.

use crate::{invented, need};
use proptest::prelude::*;
use ringstep::{
    instrument::{RawWaveform, SampleFormat},
    record::{Inputs, RecordError, Run, RunWriter, journal},
    sequence::event::{Capture, Event, Purpose},
};
use ringstep_analysis::findings::RingFit;
use std::{fs, io::Write, path::Path, process::Command, sync::OnceLock};

/// One invented run, written once, and the text of its journal.
fn written() -> &'static (tempfile::TempDir, Vec<u8>) {
    static RUN: OnceLock<(tempfile::TempDir, Vec<u8>)> = OnceLock::new();
    RUN.get_or_init(|| {
        let folder = tempfile::tempdir().unwrap();
        invented::write_run(folder.path());
        let journal = fs::read(folder.path().join("journal.jsonl")).unwrap();
        (folder, journal)
    })
}

fn start(folder: &Path) -> RunWriter {
    RunWriter::create(folder, &invented::inputs(), uuid::Uuid::now_v7()).unwrap()
}

fn noted(note: &str) -> Event {
    Event::Noted { note: note.into() }
}

fn capture_of(waveform: RawWaveform) -> Capture {
    let purpose = Purpose::Survey;
    Capture { number: 0, point: 0, purpose, line_v: 115.0, load_a: 0.1, repeat: 0, waveform, sha256: String::new() }
}

/// Copies a run, so that a test can damage it.
fn copy(from: &Path) -> tempfile::TempDir {
    let to = tempfile::tempdir().unwrap();
    fs::create_dir(to.path().join("captures")).unwrap();
    for entry in fs::read_dir(from).unwrap().chain(fs::read_dir(from.join("captures")).unwrap()) {
        let path = entry.unwrap().path();
        if path.is_file() {
            fs::copy(&path, to.path().join(path.strip_prefix(from).unwrap())).unwrap();
        }
    }
    to
}

#[test]
fn what_is_written_comes_back() {
    let (folder, _) = written();
    let run = Run::open(folder.path()).unwrap();
    assert_eq!(run.inputs, invented::inputs());
    assert!(run.finished() && run.torn.is_none() && run.altered.is_empty());
    assert_eq!(run.captures().count(), 12);
    assert!(run.journal.windows(2).all(|pair| pair[0].elapsed_s <= pair[1].elapsed_s));
    for capture in run.captures() {
        let waveform = run.read_capture(capture.number).unwrap();
        assert!(!waveform.payload.is_empty());
        assert_eq!(RawWaveform { payload: Vec::new(), ..waveform }, capture.waveform);
    }
    let results: ringstep::record::Results =
        serde_json::from_slice(&fs::read(folder.path().join("results.json")).unwrap()).unwrap();
    assert_eq!(results, run.results());
    assert_eq!(results.points.len(), 2);
    assert!(results.simulated);
    assert_eq!(results.points[0].doubts[0].captures, [0, 1, 2, 3, 4, 5], "a doubt is told once a point");
    let csv = fs::read_to_string(folder.path().join("points.csv")).unwrap();
    assert_eq!(csv.lines().count(), 3);
    let width = csv.lines().next().unwrap().split(',').count();
    assert!(csv.lines().all(|line| line.split(',').count() == width), "{csv}");
}

#[test]
fn a_folder_that_holds_something_is_never_written_to() {
    let folder = tempfile::tempdir().unwrap();
    fs::write(folder.path().join("notes.txt"), "mine").unwrap();
    let refused = RunWriter::create(folder.path(), &invented::inputs(), uuid::Uuid::now_v7());
    assert!(matches!(refused, Err(RecordError::FolderInUse { .. })));
    assert_eq!(fs::read_dir(folder.path()).unwrap().count(), 1);
}

#[test]
fn a_full_disk_is_a_clear_error() {
    // Every write to this device fails with "no space left" (Linux, full(4)).
    let folder = tempfile::tempdir().unwrap();
    let mut writer = start(folder.path());
    let file = folder.path().join("captures").join("0000.parquet.part");
    if std::os::unix::fs::symlink("/dev/full", &file).is_err() || !Path::new("/dev/full").exists() {
        panic!("this test needs /dev/full");
    }
    let mut capture = capture_of(invented::waveform(10, 1e-9, 0.0, |_| 100.0));
    let error = writer.capture(&mut capture).unwrap_err().to_string();
    assert!(error.contains("0000.parquet") && error.contains("free some space"), "{error}");
    writer.event(&noted("the journal goes on")).unwrap();
}

#[test]
fn a_file_in_place_of_the_folder_is_a_clear_error() {
    let folder = tempfile::tempdir().unwrap();
    let file = folder.path().join("file");
    fs::write(&file, "").unwrap();
    let refused = RunWriter::create(&file.join("run"), &invented::inputs(), uuid::Uuid::now_v7());
    let error = refused.unwrap_err().to_string();
    assert!(error.starts_with("failed to create the folder") && error.contains("a file stands"), "{error}");
}

#[test]
fn a_newer_format_is_refused_and_left_as_it_is() {
    let copy = copy(written().0.path());
    let manifest = copy.path().join("manifest.json");
    let text = fs::read_to_string(&manifest).unwrap().replace("\"format_version\": 1", "\"format_version\": 2");
    fs::write(&manifest, &text).unwrap();
    let error = Run::open(copy.path()).unwrap_err();
    assert!(matches!(error, RecordError::Newer { found: 2, .. }), "{error}");
    assert!(matches!(
        RunWriter::create(copy.path(), &invented::inputs(), uuid::Uuid::now_v7()),
        Err(RecordError::FolderInUse { .. })
    ));
    assert_eq!(fs::read_to_string(&manifest).unwrap(), text);
}

#[test]
fn a_broken_line_before_the_last_is_an_error_with_its_number() {
    let mut bytes = written().1.clone();
    let third = bytes.iter().enumerate().filter(|(_, byte)| **byte == b'\n').nth(1).unwrap().0 + 20;
    bytes[third] ^= 1;
    assert_eq!(journal::read(&bytes).unwrap_err().0, 3);
}

#[test]
fn a_line_taken_out_is_noticed() {
    let bytes = &written().1;
    let lines: Vec<&[u8]> = bytes.split_inclusive(|byte| *byte == b'\n').collect();
    let without_fifth = [&lines[..4], &lines[5..]].concat().concat();
    assert_eq!(journal::read(&without_fifth).unwrap_err().0, 5);
}

#[test]
fn an_unfinished_run_opens_with_everything_before_the_torn_line() {
    let folder = tempfile::tempdir().unwrap();
    let mut writer = start(folder.path());
    let mut capture = capture_of(invented::waveform(100, 1e-9, 0.0, |_| 100.0));
    writer.capture(&mut capture).unwrap();
    writer.event(&Event::Captured(capture)).unwrap();
    drop(writer);
    let mut file = fs::OpenOptions::new().append(true).open(folder.path().join("journal.jsonl")).unwrap();
    file.write_all(b"{\"sequence\":1,\"time\":\"20").unwrap();
    let run = Run::open(folder.path()).unwrap();
    assert!(!run.finished());
    assert_eq!(run.captures().count(), 1);
    assert_eq!(run.torn.as_ref().unwrap().line, 2);
    assert!(run.read_capture(0).is_ok());
    assert!(matches!(run.read_capture(1), Err(RecordError::NoSuchCapture { number: 1, .. })));
}

#[test]
fn altered_results_are_told_and_can_be_written_again() {
    let copy = copy(written().0.path());
    let table = copy.path().join("points.csv");
    fs::write(&table, "edited by hand").unwrap();
    let mut run = Run::open(copy.path()).unwrap();
    assert_eq!(run.altered, ["points.csv"]);
    run.keep("points.csv", run.results().to_csv().as_bytes()).unwrap();
    assert!(Run::open(copy.path()).unwrap().altered.is_empty());
    assert!(run.keep("journal.jsonl", b"").is_err(), "the journal is only ever appended to");
}

#[test]
fn altered_inputs_are_an_error() {
    let copy = copy(written().0.path());
    fs::write(copy.path().join("board.toml"), "name = \"another\"").unwrap();
    assert!(matches!(Run::open(copy.path()), Err(RecordError::Altered { .. })));
}

#[test]
fn a_number_that_json_cannot_hold_is_refused_before_it_reaches_the_journal() {
    let folder = tempfile::tempdir().unwrap();
    let mut writer = start(folder.path());
    let error = writer.event(&Event::LineSet { line_v: f64::NAN, frequency_hz: 50.0 }).unwrap_err();
    assert!(matches!(error, RecordError::Unwritable { .. }), "{error}");
    writer.event(&noted("still whole")).unwrap();
    assert_eq!(Run::open(folder.path()).unwrap().journal.len(), 1);
}

#[test]
fn a_refused_fit_with_no_covariance_still_reaches_the_journal() {
    let fit = RingFit {
        kind: ringstep_analysis::findings::RingKind::Leakage,
        start_s: 0.0,
        end_s: 1e-6,
        parameters: [1.0, f64::NAN, 3.0, 4.0, 5.0, 6.0],
        covariance: vec![f64::INFINITY; 36],
        curve: Default::default(),
        residual_v: f64::NAN,
        stopped: "no progress".into(),
        accepted: false,
    };
    let back: RingFit = serde_json::from_str(&serde_json::to_string(&fit).unwrap()).unwrap();
    assert!(back.parameters[1].is_nan() && back.covariance[35].is_nan() && back.residual_v.is_nan());
    assert_eq!(back.parameters[5], 6.0);
}

#[test]
fn the_checksum_of_a_line_is_the_common_crc_32() {
    // Python's zlib.crc32 as the independent implementation; check value of CRC-32/ISO-HDLC for "123456789" is cbf43926.
    if !need::need_python("zlib") {
        return;
    }
    let script = "import sys, zlib\nfor line in open(sys.argv[1], 'rb'):\n  body, tail = line.rsplit(b',\"crc32\":\"', 1)\n  \
                  assert b'%08x' % zlib.crc32(body) == tail[:8], line\n\
                  assert zlib.crc32(b'123456789') == 0xcbf43926\nprint('ok')";
    python(script, &written().0.path().join("journal.jsonl"));
}

#[test]
fn the_manifest_holds_the_checksums_that_other_tools_compute() {
    // Python's hashlib as the independent implementation of SHA-256 (FIPS 180-4).
    if !need::need_python("hashlib") {
        return;
    }
    let script = "import sys, json, hashlib, os\nfolder = sys.argv[1]\n\
                  sums = json.load(open(os.path.join(folder, 'manifest.json')))['sha256']\n\
                  files = [os.path.relpath(os.path.join(d, f), folder) for d, _, fs in os.walk(folder) for f in fs]\n\
                  assert sorted(sums) == sorted(f for f in files if f != 'manifest.json'), (files, sums)\n\
                  for name, expected in sums.items():\n  \
                  assert hashlib.sha256(open(os.path.join(folder, name), 'rb').read()).hexdigest() == expected, name\n\
                  print('ok')";
    python(script, written().0.path());
}

#[test]
fn captures_are_read_by_an_independent_parquet_reader() {
    // pyarrow, built on the C++ implementation of Apache Parquet.
    if !need::need_python("pyarrow") {
        return;
    }
    let folder = tempfile::tempdir().unwrap();
    let mut writer = start(folder.path());
    let payload: Vec<u8> =
        (0..60_000_u32).flat_map(|n| (n.wrapping_mul(2_654_435_761) >> 16) as u16 as u8..=255).take(50_000).collect();
    for (number, format) in FORMATS.into_iter().enumerate() {
        let waveform = RawWaveform { payload: payload.clone(), format, ..invented::waveform(0, 1e-9, 0.0, |_| 0.0) };
        let mut capture = Capture { number, ..capture_of(waveform) };
        writer.capture(&mut capture).unwrap();
        writer.event(&Event::Captured(capture)).unwrap();
        let name = format!("captures/{number:04}.bin");
        fs::write(folder.path().join(name), &payload).unwrap();
    }
    let script = "import sys, os, pyarrow.parquet as pq\nfolder = os.path.join(sys.argv[1], 'captures')\n\
                  numpy_types = {'u8': 'u1', 'i8': 'i1', 'u16_be': '>u2', 'u16_le': '<u2', 'i16_be': '>i2', 'i16_le': '<i2'}\n\
                  for name in sorted(f for f in os.listdir(folder) if f.endswith('.parquet')):\n  \
                  table = pq.read_table(os.path.join(folder, name))\n  \
                  meta = {k.decode(): v.decode() for k, v in table.schema.metadata.items()}\n  \
                  assert table.column_names == ['code'], table.column_names\n  \
                  wire = numpy_types[meta['format']]\n  \
                  codes = table['code'].to_numpy()\n  \
                  assert codes.dtype == wire.replace('>', '<'), (codes.dtype, wire)\n  \
                  assert codes.astype(wire).tobytes() == open(os.path.join(folder, name[:-7] + 'bin'), 'rb').read()\n  \
                  assert float(meta['volts_per_code']) == 0.15 and meta['purpose'] == 'survey', meta\n  \
                  assert meta['preamble'] == '2,0,1,\"drain\"' and meta['simulated'] == 'false', meta\n\
                  print('ok')";
    python(script, folder.path());
}

fn python(script: &str, argument: &Path) {
    let output = Command::new("python3").arg("-c").arg(script).arg(argument).output().unwrap();
    assert_eq!(String::from_utf8_lossy(&output.stdout).trim(), "ok", "{}", String::from_utf8_lossy(&output.stderr));
}

const FORMATS: [SampleFormat; 6] = [
    SampleFormat::U8,
    SampleFormat::I8,
    SampleFormat::U16Be,
    SampleFormat::U16Le,
    SampleFormat::I16Be,
    SampleFormat::I16Le,
];

/// Every byte of a short journal, every bit: a flip is an error, or told as a torn last line, and never changes an entry.
#[test]
fn every_flipped_bit_of_a_journal_is_noticed() {
    let bytes = &written().1;
    let short: Vec<u8> = bytes.split_inclusive(|byte| *byte == b'\n').take(3).collect::<Vec<_>>().concat();
    let whole = journal::read(&short).unwrap().entries;
    assert_eq!(whole.len(), 3);
    for index in 0..short.len() {
        for bit in 0..8 {
            let mut damaged = short.clone();
            damaged[index] ^= 1 << bit;
            match journal::read(&damaged) {
                Err((line, _)) => assert!((1..=3).contains(&line)),
                Ok(read) => {
                    assert!(read.torn.is_some(), "byte {index} bit {bit}");
                    assert!(whole[..2].starts_with(&read.entries), "what is kept is as it was written");
                }
            }
        }
    }
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 64, ..ProptestConfig::default() })]

    #[test]
    fn a_flipped_byte_of_a_finished_record_is_noticed(file in 0_usize..15, at in 0.0..1.0_f64, flip in 1_u8..=255) {
        let (folder, _) = written();
        let copy = copy(folder.path());
        let names = ["journal.jsonl", "exchange.jsonl", "plan.toml"];
        let name = names.get(file).map_or_else(|| format!("captures/{:04}.parquet", file - 3), |name| (*name).to_owned());
        let mut bytes = fs::read(copy.path().join(&name)).unwrap();
        let index = (at * bytes.len() as f64) as usize;
        bytes[index] ^= flip;
        fs::write(copy.path().join(&name), bytes).unwrap();
        prop_assert!(Run::open(copy.path()).is_err(), "{name} byte {index}");
    }

    #[test]
    fn a_journal_cut_anywhere_keeps_every_whole_line(cut in 0.0..=1.0_f64) {
        let bytes = &written().1;
        let whole = journal::read(bytes).unwrap().entries;
        let kept = &bytes[..(cut * bytes.len() as f64) as usize];
        let lines = kept.iter().filter(|byte| **byte == b'\n').count();
        let read = journal::read(kept).unwrap();
        prop_assert!(read.entries.len() >= lines && read.entries.len() <= lines + 1);
        prop_assert_eq!(&read.entries[..], &whole[..read.entries.len()]);
        let at_a_line_end = kept.is_empty() || read.entries.len() > lines || kept.ends_with(b"\n");
        prop_assert_eq!(read.torn.is_none(), at_a_line_end);
    }

    #[test]
    fn a_payload_comes_back_byte_for_byte(
        payload in prop::collection::vec(any::<u8>(), 0..4000),
        format in prop::sample::select(FORMATS.to_vec()),
        scale in any::<[f64; 6]>().prop_filter("finite", |scale| scale.iter().all(|value| value.is_finite())),
        clip_codes in [-1e9..1e9_f64, -1e9..1e9_f64],
        acquisition in any::<u64>(),
        preamble in ".{0,60}",
    ) {
        let folder = tempfile::tempdir().unwrap();
        let mut writer = start(folder.path());
        let words = !matches!(format, SampleFormat::U8 | SampleFormat::I8);
        let odd = words && payload.len() % 2 == 1;
        let [volts_per_code, volts_origin, code_reference, interval_s, time_origin_s, index_reference] = scale;
        let waveform = RawWaveform {
            payload, format, volts_per_code, volts_origin, code_reference, interval_s, time_origin_s, index_reference,
            clip_codes, acquisition, preamble,
        };
        let mut capture = capture_of(waveform.clone());
        if odd {
            let refused = matches!(writer.capture(&mut capture), Err(RecordError::Unwritable { .. }));
            prop_assert!(refused, "half a word is no capture");
        } else {
            writer.capture(&mut capture).unwrap();
            writer.event(&Event::Captured(capture)).unwrap();
            prop_assert_eq!(Run::open(folder.path()).unwrap().read_capture(0).unwrap(), waveform);
        }
    }
}

#[test]
fn a_run_of_nothing_but_its_inputs_opens() {
    let folder = tempfile::tempdir().unwrap();
    let inputs = Inputs { plan: String::new(), station: "å".into(), board: "\r\n".into() };
    drop(RunWriter::create(&folder.path().join("deep").join("run"), &inputs, uuid::Uuid::now_v7()).unwrap());
    let run = Run::open(&folder.path().join("deep").join("run")).unwrap();
    assert_eq!(run.inputs, inputs);
    assert!(matches!(Run::open(folder.path()), Err(RecordError::NotARun { .. })));
}
