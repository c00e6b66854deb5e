//! Short forms in which the boards' tables write diodes and capacitance laws.

use super::Diode;
use crate::converter::junction::CapacitanceLaw;

pub(super) const fn junction(zero_bias_f: f64, potential_v: f64, grading: f64) -> CapacitanceLaw {
    CapacitanceLaw::Junction { zero_bias_f, potential_v, grading }
}

pub(super) const fn knee(low_f: f64, high_f: f64, knee_v: f64, width_v: f64) -> CapacitanceLaw {
    CapacitanceLaw::Knee { low_f, high_f, knee_v, width_v }
}

pub(super) const fn diode(drop_v: f64, series_ohm: f64, storage_s: f64, junction: CapacitanceLaw) -> Diode {
    Diode { drop_v, series_ohm, storage_s, junction }
}
