//! Voltage-dependent capacitance: the graded-junction law, and a steep law with a knee. Capacitance and charge.

/// A capacitance that depends on the (reverse) voltage across it.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum CapacitanceLaw {
    /// Graded junction, `C0 / (1 + V/Vj)^m`; constant below `-Vj/2`, as circuit simulators continue it into forward bias.
    Junction {
        /// Capacitance at zero volts.
        zero_bias_f: f64,
        /// Built-in potential.
        potential_v: f64,
        /// Grading exponent.
        grading: f64,
    },
    /// Falls from a high to a low value around a knee: `low + (high - low) / (1 + exp((V - knee) / width))`.
    Knee {
        /// Capacitance well above the knee.
        low_f: f64,
        /// Capacitance well below the knee.
        high_f: f64,
        /// Voltage of the knee.
        knee_v: f64,
        /// Width of the transition.
        width_v: f64,
    },
}

impl CapacitanceLaw {
    /// Small-signal capacitance at `voltage_v`, in farad.
    #[inline(always)]
    pub fn capacitance_f(&self, voltage_v: f64) -> f64 {
        match *self {
            Self::Junction { zero_bias_f, potential_v, grading } => {
                let u = (1.0 + voltage_v / potential_v).max(0.5);
                if grading == 0.5 { zero_bias_f / u.sqrt() } else { zero_bias_f * u.powf(-grading) }
            }
            Self::Knee { low_f, high_f, knee_v, width_v } => {
                low_f + (high_f - low_f) / (1.0 + ((voltage_v - knee_v) / width_v).exp())
            }
        }
    }

    /// Charge from zero to `voltage_v`, in coulomb.
    pub fn charge_c(&self, voltage_v: f64) -> f64 {
        match *self {
            Self::Junction { zero_bias_f, potential_v, grading } => {
                let u = 1.0 + voltage_v / potential_v;
                let bounded = u.max(0.5);
                let scale = zero_bias_f * potential_v;
                scale * (bounded.powf(1.0 - grading) - 1.0) / (1.0 - grading)
                    + scale * bounded.powf(-grading) * (u - bounded)
            }
            Self::Knee { low_f, high_f, knee_v, width_v } => {
                let softplus = |x: f64| if x > 30.0 { x } else { x.exp().ln_1p() };
                let knee = softplus(knee_v / width_v) - softplus((knee_v - voltage_v) / width_v);
                low_f * voltage_v + (high_f - low_f) * width_v * knee
            }
        }
    }

    /// The same law with every capacitance multiplied by `factor`.
    pub fn scaled(&self, factor: f64) -> Self {
        match *self {
            Self::Junction { zero_bias_f, potential_v, grading } => {
                Self::Junction { zero_bias_f: zero_bias_f * factor, potential_v, grading }
            }
            Self::Knee { low_f, high_f, knee_v, width_v } => {
                Self::Knee { low_f: low_f * factor, high_f: high_f * factor, knee_v, width_v }
            }
        }
    }
}
