//! What is accepted as a ring and what is refused, over many made records.

use crate::generate::{Made, Maker};
use ringstep_analysis::{
    findings::{DoubtName, RingKind},
    fit::{Accepted, Refusal, fit_ring},
};
use std::collections::BTreeMap;

/// Records of the normal run, and of `scripts/acceptance.sh`.
const RECORDS: u64 = 2_500;
const ALL_RECORDS: u64 = 10_000;

fn fit(made: &Made) -> Result<Accepted, Refusal> {
    fit_ring(&made.record(), RingKind::Relaxation)
}

/// Outcomes of all seeds, made and fitted on every processor.
fn over_seeds<T: Send>(count: u64, one: impl Fn(u64) -> T + Sync) -> Vec<T> {
    let threads = std::thread::available_parallelism().map_or(1, usize::from) as u64;
    std::thread::scope(|scope| {
        let one = &one;
        let share = |k| scope.spawn(move || (k..count).step_by(threads as usize).map(one).collect::<Vec<T>>());
        let running: Vec<_> = (0..threads).map(share).collect();
        running.into_iter().flat_map(|thread| thread.join().unwrap()).collect()
    })
}

#[test]
fn rings_are_accepted_with_the_right_frequency() {
    hold_valid(RECORDS);
}

#[test]
fn records_without_a_valid_single_ring_are_refused() {
    hold_invalid(RECORDS);
}

#[test]
#[ignore = "long: scripts/acceptance.sh"]
fn ten_thousand_records_of_each_kind_are_told_apart() {
    hold_valid(ALL_RECORDS);
    hold_invalid(ALL_RECORDS);
}

fn hold_valid(records: u64) {
    let failures: Vec<String> = over_seeds(records, |seed| {
        let made = Maker::new(seed).ring();
        match fit(&made) {
            Err(refusal) => {
                Some(format!("seed {seed}: {:?} {} ({})", refusal.doubt.name, refusal.doubt.sentence, made.what))
            }
            Ok(accepted) => {
                let got = accepted.ring.damped_frequency_hz;
                let error = (got.value - made.frequency_hz).abs();
                let wrong = error > 5.0 * got.standard_uncertainty && error > 0.005 * made.frequency_hz;
                wrong.then(|| format!("seed {seed}: {got:?} for {} ({})", made.frequency_hz, made.what))
            }
        }
    })
    .into_iter()
    .flatten()
    .collect();
    println!("{} of {records} rings refused or wrong", failures.len());
    failures.iter().take(20).for_each(|failure| println!("{failure}"));
    assert!(failures.len() as u64 * 100 <= records);
}

fn hold_invalid(records: u64) {
    let outcomes = over_seeds(records, |seed| {
        let mut maker = Maker::new(1_000_000 + seed);
        let (kind, made) = match seed % 10 {
            0 | 1 => ("noise", maker.only_noise()),
            2 => ("drift", maker.drift()),
            3 | 4 => ("aperiodic", maker.aperiodic()),
            5..=7 => ("two modes", maker.two_modes()),
            _ => ("clipped", maker.clipped()),
        };
        let outcome = fit(&made).map_err(|refusal| refusal.doubt.name);
        (kind, outcome.as_ref().err().copied(), outcome.is_ok().then(|| format!("seed {seed}: {}", made.what)))
    });
    let mut table: BTreeMap<(&str, String), usize> = BTreeMap::new();
    for (kind, name, _) in &outcomes {
        *table.entry((kind, name.map_or("accepted".to_owned(), |name: DoubtName| format!("{name:?}")))).or_default() +=
            1;
    }
    table.iter().for_each(|((kind, name), count)| println!("{kind:>10} {name:<18} {count}"));
    let accepted: Vec<_> = outcomes.iter().filter_map(|(.., accepted)| accepted.as_ref()).collect();
    println!("{} of {records} accepted", accepted.len());
    accepted.iter().take(40).for_each(|what| println!("{what}"));
    assert!(accepted.len() as u64 * 1000 <= records);
}
