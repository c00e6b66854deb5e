//! Waveforms of netlists run by a general-purpose circuit simulator (ngspice), against truths computed without it: an
//! oracle for the analysis that shares no line with the simulated bench. Where ngspice is absent a small stored set stands in.

mod held;
mod intervals;
mod simulation;
mod stored;
mod truth;

use crate::need::need;
use simulation::{resonance_hz, simulate};
use stored::Recording;
use truth::{BOARDS, Truth};

/// Sample interval of the recordings.
const INTERVAL_S: f64 = 4e-9;

#[test]
fn resonances_of_the_linearised_circuit_are_those_of_a_small_signal_analysis() {
    if !need("ngspice") {
        return;
    }
    for board in BOARDS {
        let truth = Truth::read(board);
        for (plateau, expected) in [(false, truth.relaxation), (true, truth.leakage)] {
            let found = resonance_hz(board, plateau, expected.resonance_hz);
            let error = found / expected.resonance_hz - 1.0;
            println!(
                "{board} plateau {plateau}: {:.1} Hz, simulator {found:.1} Hz, {error:+.1e}",
                expected.resonance_hz
            );
            assert!(error.abs() < 5e-5, "{board} plateau {plateau}: {found} against {}", expected.resonance_hz);
            assert!((expected.frequency_hz / expected.resonance_hz - 1.0).abs() < 1e-3, "{board} plateau {plateau}");
        }
    }
}

#[test]
fn stored_recordings_are_what_the_netlists_give() {
    if !need("ngspice") {
        return;
    }
    for board in BOARDS {
        let truth = Truth::read(board);
        let stored = Recording::read(board);
        let fresh = Recording::digitise(board, &simulate(board), &truth, INTERVAL_S);
        assert_eq!(fresh.codes.len(), stored.codes.len(), "{board}");
        // One last bit of the simulator may move a code by one, and an edge by a sample.
        let pairs = fresh.codes.iter().zip(&stored.codes);
        let moved = pairs.filter(|(a, b)| a.abs_diff(**b) > 1).count();
        assert!(moved * 1000 < stored.codes.len(), "{board}: {moved} codes of {} differ", stored.codes.len());
    }
}

/// Refreshes the stored set: `cargo test -p ringstep --test tests netlists -- --ignored`.
#[test]
#[ignore = "writes the stored set"]
fn write_the_stored_set() {
    for board in BOARDS {
        Recording::digitise(board, &simulate(board), &Truth::read(board), INTERVAL_S).write(board);
    }
}
