//! A drain waveform recorded on real hardware: a low-voltage flyback without clamp.

use crate::need::need_capture;
use ringstep_analysis::cycles::segment;
use ringstep_analysis::findings::{BoardFacts, CycleMode};
use ringstep_analysis::waveform::{Samples, TextOptions, decode_text};

fn recording() -> Option<Samples> {
    let bytes = std::fs::read(need_capture("flyback-discontinuous.csv")?).unwrap();
    Some(decode_text(&bytes, &TextOptions::default()).unwrap().samples)
}

#[test]
fn anatomy_of_the_recorded_flyback() {
    let Some(samples) = recording() else { return };
    let found = segment(&samples, &BoardFacts::default()).unwrap();
    for segment in &found.segments {
        println!("{segment:?}");
    }
    println!("{} {}", found.on_v, found.noise_v);
    assert_eq!(found.turn_ons_s.len(), 3);
    for pair in found.turn_ons_s.windows(2) {
        assert!(((pair[1] - pair[0]) / 19.84e-6 - 1.0).abs() < 0.005);
    }
    let modes: Vec<CycleMode> = found.segments.iter().map(|segment| segment.cycle.mode).collect();
    use CycleMode::{Discontinuous, Incomplete};
    assert_eq!(modes, [Incomplete, Discontinuous, Discontinuous, Incomplete]);
}
