//! Holds the segmentation of the cycles against the gate patterns of the netlists.

use super::{
    Recording,
    truth::{BOARDS, Truth},
};
use ringstep_analysis::{
    cycles::segment,
    findings::BoardFacts,
    waveform::{Samples, TimeAxis},
};

#[test]
fn cycles_follow_the_gate() {
    for board in BOARDS {
        let (truth, recording) = (Truth::read(board), Recording::read(board));
        let time = TimeAxis::Even { start_s: recording.scale.start_s, interval_s: recording.scale.interval_s };
        let samples = Samples::new(time, recording.volts()).unwrap();
        let samples = samples.with_range(Some(recording.scale.scale_v), None).unwrap();
        let facts = BoardFacts { switching_period_s: Some(truth.switching_period_s), ..BoardFacts::default() };
        let found = segment(&samples, &facts).unwrap();
        println!("{board} on {:.2} noise {:.2} collapse {:?}", found.on_v, found.noise_v, found.collapse);
        for s in &found.segments {
            println!("  {:?} bulk {:.2} VR {:?}", s.cycle, s.bulk_v, s.reflected_v);
            println!("    relax {:?}", s.relaxation);
            println!("    leak {:?}", s.leakage);
        }
        for (c, d) in truth.cycles.iter().zip(&recording.scale.ends_of_demagnetisation_s) {
            println!("  true {:.3} {:.3} {:?} {:.3} {}", c.start_s*1e6, c.turn_off_s*1e6, d.map(|d|d*1e6), c.end_s*1e6, c.mode);
        }
        println!("  true VR {:.2}", truth.reflected_voltage_v);
    }
}
