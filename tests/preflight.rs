//! Nothing is energised that a rating, a limit or the earthing forbids.

use proptest::prelude::*;
use ringstep::{
    sequence::{Attendance, Plan, PreflightCheck, expected_stress, preflight},
    station::{Board, CAUTIONS, Role, Station},
};

fn bench() -> (Station, Board, Plan) {
    (
        Station::read("station.toml", include_str!("../src/guide/examples/station.toml")).unwrap(),
        Board::read("board.toml", include_str!("../src/guide/examples/board.toml")).unwrap(),
        Plan::read("plan.toml", include_str!("../src/guide/examples/plan.toml")).unwrap(),
    )
}

fn refused(station: &Station, board: &Board, plan: &Plan) -> Vec<PreflightCheck> {
    let checks = preflight(station, board, plan, Attendance::Attended);
    checks.into_iter().filter(|check| !check.passed).collect()
}

/// The one check that a bench is refused for.
fn refusal(station: &Station, board: &Board, plan: &Plan) -> PreflightCheck {
    let mut refused = refused(station, board, plan);
    assert_eq!(refused.len(), 1, "{refused:?}");
    refused.remove(0)
}

#[test]
fn the_examples_of_the_guide_may_be_energised() {
    let (station, board, plan) = bench();
    assert_eq!(refused(&station, &board, &plan), []);
}

/// Rectified, 265 V line is 375 V of bulk (handbook value). The textbook sum of bulk, reflected voltage and leakage spike:
/// 375 + 100.8 + 62.9 with the drop of 0.6 V and 8:1 turns of the example.
#[test]
fn the_expected_peak_is_bulk_and_reflected_voltage_and_spike() {
    let (_, mut board, mut plan) = bench();
    plan.line_v = vec![115.0, 265.0];
    board.clamp_v = None;
    plan.stress.leakage_spike_v = Some(62.9);
    let stress = expected_stress(&board, &plan).unwrap();
    assert!((stress.bulk_v - 375.0).abs() < 0.5, "{stress:?}");
    assert!((stress.reflected_v - 100.8).abs() < 1e-9, "{stress:?}");
    assert!((stress.peak_v() - 538.5).abs() < 0.5, "{stress:?}");
    board.clamp_v = Some(200.0);
    assert!((expected_stress(&board, &plan).unwrap().peak_v() - 574.8).abs() < 0.5);
}

#[test]
fn an_unknown_peak_is_not_energised() {
    let (station, mut board, mut plan) = bench();
    board.clamp_v = None;
    plan.stress.leakage_spike_v = None;
    assert_eq!(refusal(&station, &board, &plan).check, "peak drain voltage");
    board.clamp_v = Some(80.0);
    assert!(refusal(&station, &board, &plan).detail.contains("not above the reflected voltage"));
}

#[test]
fn an_earth_referenced_probe_needs_an_isolated_source() {
    let (mut station, board, plan) = bench();
    station.probe.differential = false;
    assert_eq!(refused(&station, &board, &plan), []);
    station.source_isolated = false;
    let refusal = refusal(&station, &board, &plan);
    assert_eq!(refusal.check, "probe and source isolation");
    assert!(refusal.detail.contains("referenced to the rectified mains"), "{}", refusal.detail);
    station.probe.differential = true;
    assert_eq!(refused(&station, &board, &plan), []);
}

#[test]
fn a_floated_scope_is_refused_whatever_the_probe() {
    for differential in [false, true] {
        let (mut station, board, plan) = bench();
        station.probe.differential = differential;
        station.scope.earthed = false;
        assert_eq!(refusal(&station, &board, &plan).check, "scope earthing");
    }
}

#[test]
fn what_is_set_by_hand_needs_somebody_at_the_bench() {
    let (mut station, board, plan) = bench();
    station.source = Role::ByHand { description: "transformer T2".into() };
    assert_eq!(refused(&station, &board, &plan), []);
    let checks = preflight(&station, &board, &plan, Attendance::Unattended);
    let refused: Vec<&PreflightCheck> = checks.iter().filter(|check| !check.passed).collect();
    assert_eq!(refused.len(), 1);
    assert!(refused[0].detail.contains("transformer T2"));
}

#[test]
fn each_rating_and_limit_refuses_by_itself() {
    type Change = fn(&mut Station, &mut Board, &mut Plan);
    let changes: [(&str, Change); 9] = [
        ("drain rating", |_, board, _| board.drain_rating_v = 500.0),
        ("drain limit of the station", |station, _, _| station.limits.drain_v = 450.0),
        ("probe rating", |station, _, _| station.probe.rating_v = 450.0),
        ("scope input rating", |station, _, _| station.scope.input_rating_v = 4.0),
        ("line range of the board", |_, board, _| board.line_range_v = [90.0, 132.0]),
        ("line limit of the station", |station, _, _| station.limits.line_v = 200.0),
        ("load power limit of the station", |station, _, _| station.limits.load_power_w = 5.0),
        ("highest load of the output", |_, board, _| board.outputs[0].maximum_load_a = 0.5),
        ("lowest load of the output", |_, board, _| board.outputs[0].minimum_load_a = 0.1),
    ];
    for (check, change) in changes {
        let (mut station, mut board, mut plan) = bench();
        change(&mut station, &mut board, &mut plan);
        assert_eq!(refusal(&station, &board, &plan).check, check);
    }
}

/// A probe rated 1000 V whose rating falls above 1 MHz is rated 100 V at 10 MHz: at 230 V line a plateau of 426 V and a ring
/// of 109 V use 43 % and 109 % of it.
#[test]
fn a_probe_good_for_the_steady_voltage_is_refused_where_the_ring_is_too_fast_for_it() {
    let (mut station, board, mut plan) = bench();
    station.probe.rating_v = 1000.0;
    plan.stress.leakage_ring_hz = 1e6;
    assert_eq!(refused(&station, &board, &plan), []);
    plan.stress.relaxation_ring_hz = 7e6;
    assert!(refusal(&station, &board, &plan).detail.contains("the relaxation ring's 101 V against 143 V"));
    plan.stress.relaxation_ring_hz = 1e6;
    plan.stress.leakage_ring_hz = 10e6;
    let refusal = refusal(&station, &board, &plan);
    assert_eq!(refusal.check, "probe rating");
    assert!(refusal.detail.contains("152 %"), "{}", refusal.detail);
}

#[test]
fn a_slow_or_unchecked_probe_is_noted_and_not_refused() {
    let (mut station, board, plan) = bench();
    station.probe.bandwidth_hz = 20e6;
    station.probe.calibrated = None;
    station.probe.compensated = None;
    let checks = preflight(&station, &board, &plan, Attendance::Attended);
    assert!(checks.iter().all(|check| check.passed));
    let noted: Vec<&str> = checks.iter().filter(|check| check.noted).map(|check| check.check).collect();
    assert_eq!(noted, ["probe bandwidth", "probe calibration", "probe compensation", "stored energy"]);
}

/// IEC 61010-1, 6.3.1 c): 45 uC is the limit of a charge that is not hazardous; 68 uF at 325 V hold 22.1 mC and 3.6 J.
#[test]
fn the_charge_left_in_the_bulk_capacitor_is_told() {
    let (station, board, plan) = bench();
    let checks = preflight(&station, &board, &plan, Attendance::Attended);
    let stored = checks.iter().find(|check| check.check == "stored energy").unwrap();
    assert!(stored.noted && stored.detail.contains("3.60 J and 22.12 mC at 325 V"), "{}", stored.detail);
}

#[test]
fn the_cautions_name_every_usual_hazard() {
    let text = CAUTIONS.join(" ").to_lowercase();
    for word in [
        "mains",
        "375 v",
        "600 v",
        "bulk capacitor stays charged",
        "isolate the unit",
        "never isolate or float",
        "differential",
        "lan, usb and gpib",
        "one hand",
        "local codes",
        "licensed",
    ] {
        assert!(text.contains(word), "{word}");
    }
}

proptest! {
    /// Whatever is planned, an accepted run keeps the expected peak below every rating there is.
    #[test]
    fn no_accepted_plan_exceeds_a_rating(
        line_v in 85.0..265.0f64, clamp_v in 20.0..600.0f64, rating_v in 200.0..1000.0f64, limit_v in 200.0..900.0f64,
        factor in prop_oneof![Just(1.0), Just(10.0), Just(100.0)], probe_v in 200.0..2000.0f64,
    ) {
        let (mut station, mut board, mut plan) = bench();
        plan.line_v = vec![line_v];
        board.clamp_v = Some(clamp_v);
        board.drain_rating_v = rating_v;
        station.limits.drain_v = limit_v;
        station.probe.factor = factor;
        station.probe.rating_v = probe_v;
        if refused(&station, &board, &plan).is_empty() {
            let peak_v = line_v * 2f64.sqrt() + clamp_v;
            prop_assert!(peak_v <= 0.9 * rating_v + 1e-9 && peak_v <= limit_v && peak_v <= probe_v);
            prop_assert!(peak_v / factor <= station.scope.input_rating_v);
            prop_assert!(clamp_v > 100.8);
        }
    }
}
