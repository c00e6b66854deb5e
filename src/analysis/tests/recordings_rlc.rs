//! Ring-downs recorded on real hardware. Reference values: an independent variable-projection fit in SciPy, confirmed against the
//! reports of those who made the recordings where there is one (see the README beside the recordings).

use crate::need::need_capture;
use ringstep_analysis::{
    findings::{DoubtName, RingKind},
    fit::{Accepted, Refusal, RingRecord, Times, find_ring_down, fit_ring},
};

/// Numbers of the columns in every line that has them.
fn columns<const N: usize>(name: &str, separator: char, columns: [usize; N]) -> Option<Vec<[f64; N]>> {
    let text = std::fs::read_to_string(need_capture(name)?).unwrap();
    let row = |line: &str| {
        let fields: Vec<&str> = line.split(separator).map(str::trim).collect();
        let mut row = [0.0; N];
        for (value, &column) in row.iter_mut().zip(&columns) {
            *value = fields.get(column)?.parse().ok()?;
        }
        Some(row)
    };
    Some(text.lines().filter_map(row).collect())
}

fn fit(times_s: Times<'_>, volts: &[f64], step_v: Option<f64>) -> Result<Accepted, Refusal> {
    let record = RingRecord { times_s, volts, step_v, clip_v: None };
    let window = find_ring_down(&record).unwrap_or(0..volts.len());
    println!("window {window:?} of {}", volts.len());
    let outcome = fit_ring(&record.part(window), RingKind::Relaxation);
    match &outcome {
        Ok(accepted) => println!("{:?} {:?} residual {}", accepted.ring, accepted.doubts, accepted.fit.residual_v),
        Err(refusal) => println!("{:?}", refusal.doubt),
    }
    outcome
}

fn even(interval_s: f64) -> Times<'static> {
    Times::Even { start_s: 0.0, interval_s }
}

#[test]
fn impulse_response_of_a_series_circuit() {
    let Some(rows) = columns("rlc-impulse.csv", ',', [2]) else { return };
    let volts: Vec<f64> = rows.iter().skip(1).map(|[v]| *v).collect();
    let ring = fit(even(2e-6), &volts, None).unwrap().ring;
    // Undamped 57054.5 +- 0.7 rad/s, twice the decay 13518.6 +- 1.4 1/s, damped 9016.55 Hz.
    let undamped = ring.frequency_hz.value * std::f64::consts::TAU;
    assert!((undamped - 57054.5).abs() < 3.0 * 0.7_f64.max(6.3 * ring.frequency_hz.standard_uncertainty), "{ring:?}");
    let twice = 2.0 * ring.decay_per_s.value;
    assert!((twice - 13518.6).abs() < 3.0 * 1.4_f64.max(2.0 * ring.decay_per_s.standard_uncertainty), "{ring:?}");
}

#[test]
fn ring_down_after_a_step() {
    let Some(rows) = columns("rlc-step.csv", ',', [3, 4]) else { return };
    let volts: Vec<f64> = rows.iter().map(|[_, v]| *v).collect();
    let ring = fit(even(0.2e-6), &volts, Some(0.2)).unwrap().ring;
    // 33901 +- 5 Hz damped, time constant 172.2 us; its author has 171.9 +- 1.9 us.
    assert!((ring.damped_frequency_hz.value - 33901.0).abs() < 15.0, "{ring:?}");
    assert!((1e6 / ring.decay_per_s.value - 172.2).abs() < 1.9, "{ring:?}");
}

#[test]
fn ring_down_with_uneven_steps() {
    let Some(rows) = columns("rlc-uneven.txt", ' ', [0, 1]) else { return };
    let times: Vec<f64> = rows.iter().map(|[t, _]| t * 1e-6).collect();
    let volts: Vec<f64> = rows.iter().map(|[_, v]| *v).collect();
    let ring = fit(Times::Uneven(&times), &volts, Some(1.0)).unwrap().ring;
    // 517.65 +- 0.3 Hz, time constant 6.54 ms; its author has 517.60 and 6.54.
    assert!((ring.damped_frequency_hz.value - 517.65).abs() < 0.9, "{ring:?}");
    assert!((1e3 / ring.decay_per_s.value - 6.54).abs() < 0.07, "{ring:?}");
}

#[test]
fn two_modes_are_not_one_ring() {
    let Some(rows) = columns("rlc-two-modes.txt", '\t', [3]) else { return };
    let volts: Vec<f64> = rows.iter().map(|[v]| *v).collect();
    assert_eq!(fit(even(2e-6), &volts, None).unwrap_err().doubt.name, DoubtName::NotOneRing);
}

#[test]
fn the_aperiodic_limit_is_no_ring() {
    let Some(rows) = columns("rlc-aperiodic.csv", ',', [3, 4]) else { return };
    let volts: Vec<f64> = rows.iter().map(|[_, v]| *v).collect();
    let name = fit(even(20e-9), &volts, Some(0.2)).unwrap_err().doubt.name;
    assert!(matches!(name, DoubtName::NoRing | DoubtName::TooFewPeriods), "{name:?}");
}

#[test]
fn an_open_channel_is_no_ring() {
    let Some(rows) = columns("open-channel.csv", ',', [3, 4]) else { return };
    let volts: Vec<f64> = rows.iter().map(|[_, v]| *v).collect();
    assert_eq!(fit(even(0.2e-6), &volts, Some(0.002)).unwrap_err().doubt.name, DoubtName::NoRing);
}

/// Leakage ring of a small flyback without clamp: 8.885 MHz over the whole ring, 9.09 MHz from 0.7 us on: it chirps by 2.3 %, and
/// is a ring all the same.
#[test]
fn a_chirping_leakage_ring_is_one_ring() {
    let Some(rows) = columns("flyback-discontinuous.csv", ',', [2]) else { return };
    let volts: Vec<f64> = rows.iter().map(|[v]| *v).collect();
    for start in [5004, 14925] {
        let record =
            RingRecord { times_s: even(2e-9), volts: &volts[start..start + 850], step_v: Some(0.8), clip_v: None };
        let outcome = fit_ring(&record, RingKind::Leakage);
        let frequency = outcome.unwrap().ring.damped_frequency_hz.value;
        assert!((8.85e6..9.2e6).contains(&frequency), "{frequency}");
    }
}
