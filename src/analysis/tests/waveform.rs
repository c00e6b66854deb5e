//! Decoding of captures and recordings: what round-trips, what is refused, and where an error is said to be.

use crate::need::need_capture;
use ringstep_analysis::waveform::{TextOptions, TimeAxis, decode_text};

fn recording(name: &str, options: &TextOptions) -> Option<ringstep_analysis::waveform::DecodedText> {
    let bytes = std::fs::read(need_capture(name)?).unwrap();
    Some(decode_text(&bytes, options).unwrap())
}

#[test]
fn recordings_decode_by_their_own_headers() {
    for (name, column, start_s, interval_s, count, step_v) in [
        ("flyback-discontinuous.csv", 3, 3e-5, 2e-9, 30_000, Some(0.8)),
        ("rlc-impulse.csv", 3, 0.0, 2e-6, 800, None),
        ("rlc-step.csv", 5, -2.8e-5, 2e-7, 2500, Some(0.2)),
        ("rlc-aperiodic.csv", 5, -8e-6, 2e-8, 2500, Some(0.2)),
        ("open-channel.csv", 5, -2.8e-5, 2e-7, 2500, Some(0.002)),
        ("rlc-two-modes.txt", 4, 0.0, 2e-6, 500, None),
    ] {
        let Some(decoded) = recording(name, &TextOptions::default()) else { continue };
        println!(
            "{name}: {} {:?} {:?} n {} step {:?} {:?}",
            decoded.value_column,
            decoded.value_name,
            decoded.samples.time(),
            decoded.samples.volts().len(),
            decoded.samples.step_v(),
            decoded.time_column
        );
        assert_eq!(decoded.value_column, column, "{name}");
        let TimeAxis::Even { start_s: start, interval_s: interval } = *decoded.samples.time() else {
            panic!("{name} is even")
        };
        assert!((start - start_s).abs() < 1e-12, "{name} starts at {start}");
        assert!((interval / interval_s - 1.0).abs() < 1e-9, "{name} has interval {interval}");
        assert_eq!(decoded.samples.volts().len(), count, "{name}");
        match (decoded.samples.step_v(), step_v) {
            (Some(found), Some(step)) => assert!((found / step - 1.0).abs() < 0.02, "{name}: step {found}"),
            (found, expected) => assert_eq!(found.is_some(), expected.is_some(), "{name}: step {found:?}"),
        }
    }
}

#[test]
fn a_recording_with_uneven_times_keeps_them_in_the_stated_unit() {
    let options = TextOptions { time_unit_s: Some(1e-6), ..TextOptions::default() };
    let Some(decoded) = recording("rlc-uneven.txt", &options) else { return };
    assert!(matches!(decoded.samples.time(), TimeAxis::Uneven(_)));
    assert!((decoded.samples.end_s() - 15_992e-6).abs() < 1e-12);
    assert_eq!((decoded.samples.volts()[0], decoded.value_column), (455.0, 2));
}
