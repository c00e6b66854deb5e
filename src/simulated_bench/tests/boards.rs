//! What every shipped board must show: ratings kept, rings in the usual ranges, continuous conduction when loaded heavily,
//! long rings when loaded lightly, and the two boards that no ring comes from.

use crate::trace::{Trace, capture, settled};
use ringstep_simulated_bench::{
    boards::{self, BoardModel, ControllerKind},
    converter::{ConductionMode, LoadDemand, Plant, RelaxationRingTruth},
};

/// Boards that a relaxation ring can be had from.
const RINGING: [&str; 4] = ["beacon", "foghorn", "tidegauge", "winch"];

fn board(name: &str) -> &'static BoardModel {
    boards::by_name(name).unwrap()
}

fn light_load_a(name: &str) -> f64 {
    0.02 * board(name).nominal.maximum_load_a
}

fn longest(rings: &[RelaxationRingTruth]) -> &RelaxationRingTruth {
    rings.iter().max_by(|a, b| (a.end_s - a.start_s).total_cmp(&(b.end_s - b.start_s))).unwrap()
}

#[test]
fn documents_and_parts_of_a_board_agree() {
    assert_eq!(boards::all().len(), 6);
    for BoardModel { name, nominal, parts, controller } in boards::all() {
        let self_inductance_h = parts.magnetising_h + parts.leakage_h;
        assert!((self_inductance_h / nominal.primary_inductance_h - 1.0).abs() < 1e-12, "{name}");
        assert_eq!(parts.leakage_h, nominal.leakage_inductance_h, "{name}");
        assert_eq!(parts.turns_ratio, nominal.turns_ratio, "{name}");
        assert_eq!(parts.bulk_f, nominal.bulk_capacitance_f, "{name}");
        assert_eq!(controller.clock_hz, nominal.switching_frequency_hz, "{name}");
        // Leakage is typically 1 to 3 % of the primary inductance (common practice, no source).
        let share = parts.leakage_h / self_inductance_h;
        assert!((0.01..0.03).contains(&share), "{name}: leakage {share}");
    }
}

#[test]
fn the_drain_stays_below_its_rating_at_full_load_and_highest_line() {
    for BoardModel { name, nominal, .. } in boards::all() {
        for seed in 0..3 {
            let plant = settled(name, seed, nominal.line_range_v[1], nominal.maximum_load_a);
            let (trace, _) = capture(&plant, 1, 100e-6);
            let peak_v = trace.highest_v(0.0, 1.0);
            assert!(peak_v < nominal.drain_rating_v, "{name}, seed {seed}: {peak_v} V");
        }
    }
}

#[test]
fn heavy_load_at_low_line_conducts_continuously_and_leaves_no_relaxation_ring() {
    for name in RINGING {
        let plant = settled(name, 2, 85.0, board(name).nominal.maximum_load_a);
        let (_, truth) = capture(&plant, 1, 500e-6);
        let finished = &truth.cycles[..truth.cycles.len() - 1];
        assert!(finished.len() > 20, "{name}");
        assert!(finished.iter().all(|cycle| cycle.mode == ConductionMode::Continuous), "{name}");
        assert!(truth.relaxation_rings.is_empty(), "{name}");
    }
}

#[test]
fn light_load_leaves_long_relaxation_rings() {
    for name in RINGING {
        for line_v in [85.0, 265.0] {
            let plant = settled(name, 2, line_v, light_load_a(name));
            let (_, truth) = capture(&plant, 1, 1.5e-3);
            let ring = longest(&truth.relaxation_rings);
            let periods = (ring.end_s - ring.start_s) * ring.frequency_hz;
            assert!(periods > 15.0, "{name} at {line_v} V: {periods} periods");
            let skipped = truth.cycles.iter().any(|cycle| cycle.mode == ConductionMode::Skipped);
            assert_eq!(skipped, board(name).nominal.controller == ControllerKind::CycleSkipping, "{name}");
        }
    }
}

/// Maxima of the ring above its centre, largest first.
fn crests(trace: &Trace, ring: &RelaxationRingTruth) -> Vec<f64> {
    let range = trace.between(ring.start_s, ring.end_s);
    let above = |index: usize| trace.drain_v[index] - ring.bulk_v;
    (range.start + 1..range.end - 1)
        .filter(|i| above(*i) > above(i - 1) && above(*i) >= above(i + 1) && above(*i) > 0.3)
        .map(above)
        .collect()
}

#[test]
fn quality_factors_of_relaxation_rings_lie_between_8_and_40() {
    for name in RINGING {
        let plant = settled(name, 3, 230.0, light_load_a(name));
        let (trace, truth) = capture(&plant, 2, 1e-3);
        let crests = crests(&trace, longest(&truth.relaxation_rings));
        let pairs = crests.len().min(8);
        assert!(pairs >= 4, "{name}: {} crests", crests.len());
        // Logarithmic decrement per period d: Q = sqrt(1 + (2 pi / d)^2) / 2.
        let decrement = (crests[0] / crests[pairs - 1]).ln() / (pairs - 1) as f64;
        let quality = 0.5 * (1.0 + (std::f64::consts::TAU / decrement).powi(2)).sqrt();
        println!("{name}: Q {quality:.1}");
        assert!((8.0..40.0).contains(&quality), "{name}: Q {quality}");
    }
}

#[test]
fn rings_lie_where_those_of_offline_flybacks_do() {
    for name in RINGING {
        for line_v in [85.0, 265.0] {
            let plant = settled(name, 4, line_v, light_load_a(name));
            let (_, truth) = capture(&plant, 2, 1e-3);
            let ring = longest(&truth.relaxation_rings);
            assert!((350e3..800e3).contains(&ring.frequency_hz), "{name}: {} Hz", ring.frequency_hz);
            assert!((50e-12..170e-12).contains(&ring.node_capacitance_f), "{name}: {} F", ring.node_capacitance_f);
            let leakage = truth.leakage_rings.last().unwrap();
            assert!((2e6..6.5e6).contains(&leakage.frequency_hz), "{name}: {} Hz", leakage.frequency_hz);
        }
    }
}

#[test]
fn the_winch_swings_a_steep_junction_by_a_hundred_volts() {
    let plant = settled("winch", 1, 265.0, light_load_a("winch"));
    let (trace, truth) = capture(&plant, 2, 1e-3);
    let ring = longest(&truth.relaxation_rings);
    let lowest_v = trace.drain_v[trace.between(ring.start_s, ring.end_s)].iter().copied().fold(f64::INFINITY, f64::min);
    assert!(ring.bulk_v - lowest_v >= 100.0, "swing {}", ring.bulk_v - lowest_v);
    let junction_f = plant.circuit().parts.transistor.capacitance_f(ring.bulk_v);
    assert!(junction_f > 0.5 * ring.node_capacitance_f, "junction {junction_f} of {}", ring.node_capacitance_f);
}

#[test]
fn the_pumphouse_never_leaves_continuous_conduction_in_its_load_range() {
    let least_a = board("pumphouse").nominal.minimum_load_a;
    for seed in 0..3 {
        for line_v in [85.0, 265.0] {
            let (_, truth) = capture(&settled("pumphouse", seed, line_v, least_a), 1, 500e-6);
            let finished = &truth.cycles[..truth.cycles.len() - 1];
            assert!(finished.len() > 50);
            assert!(finished.iter().all(|cycle| cycle.mode == ConductionMode::Continuous), "seed {seed}, {line_v} V");
        }
    }
}

#[test]
fn the_semaphore_collapses_and_restarts_at_every_load() {
    for load_a in [0.02, 0.5, 1.5] {
        let plant = settled("semaphore", 1, 230.0, load_a);
        let (_, truth) = capture(&plant, 3, 110e-3);
        let last_of_burst: Vec<_> = truth.cycles.iter().filter(|c| c.mode == ConductionMode::Hiccup).collect();
        assert!(!last_of_burst.is_empty(), "no pause at {load_a} A");
        for cycle in last_of_burst {
            let next = truth.cycles.iter().find(|later| later.turn_on_s > cycle.turn_on_s).unwrap();
            assert!(next.turn_on_s - cycle.turn_on_s > 40e-3, "{load_a} A");
        }
    }
}

#[test]
fn the_semaphore_never_holds_its_output() {
    let mut plant = Plant::new(board("semaphore"), 1);
    plant.set_load(LoadDemand::Current(0.5));
    plant.set_line(true, 230.0, 50.0, 4.0);
    let voltages: Vec<f64> = (0..500)
        .map(|_| {
            plant.advance(1e-3);
            plant.output_voltage()
        })
        .collect();
    let (low, high) = voltages[100..].iter().fold((f64::MAX, 0.0_f64), |(low, high), v| (low.min(*v), high.max(*v)));
    assert!(low < 2.0 && high > 11.0, "between {low} V and {high} V");
}
