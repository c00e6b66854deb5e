//! The other element of a resonance from one element and the ring, with a resistor-capacitor snubber on the node solved for exactly
//! where there is one.

use crate::pieces::NodeSnubber;
use nalgebra::Complex;
use std::f64::consts::TAU;

/// What is known beside the ring.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Known {
    /// An inductance in henry: the capacitance is asked for.
    Inductance(f64),
    /// A capacitance in farad: the inductance is asked for.
    Capacitance(f64),
}

/// The other element of a parallel resonance that rings with the undamped frequency and the decay. Without a snubber `1/(w0^2 X)`,
/// whatever the losses. With one the node has three poles, and no single-resonance formula holds: the admittance of the node is
/// zero at the ring's pole `s = -decay + j wd`, which tells two real unknowns, the element and its loss.
///
/// `None` where no positive element rings so: the snubber stated cannot be the one that is fitted.
pub fn other_element(frequency_hz: f64, decay_per_s: f64, known: Known, snubber: Option<&NodeSnubber>) -> Option<f64> {
    let undamped = TAU * frequency_hz;
    let element = match snubber {
        None => match known {
            Known::Inductance(henry) => 1.0 / (undamped * undamped * henry),
            Known::Capacitance(farad) => 1.0 / (undamped * undamped * farad),
        },
        Some(snubber) => {
            let damped = (undamped * undamped - decay_per_s * decay_per_s).sqrt();
            let s = Complex::new(-decay_per_s, damped);
            let (r, c) = (snubber.resistance_ohm.value, snubber.capacitance_f.value);
            let beside = s * c / (Complex::new(1.0, 0.0) + s * (r * c));
            match known {
                // G + s C = -(1/(s L) + beside): the imaginary part tells C, the real one the loss in parallel.
                Known::Inductance(henry) => -((s * henry).inv() + beside).im / s.im,
                // r + s L = -1/(s C + beside): the imaginary part tells L, the real one the loss in series.
                Known::Capacitance(farad) => -(s * farad + beside).inv().im / s.im,
            }
        }
    };
    (element > 0.0 && element.is_finite()).then_some(element)
}
