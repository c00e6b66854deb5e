//! A station as its file states it: instruments, probe, earthing, safety limits. SI units.

use ringstep_analysis::quantity::Measured;

/// A station.
#[derive(Debug, Clone, PartialEq)]
pub struct Station {
    /// Name of the bench or place on the line.
    pub name: String,
    /// The oscilloscope.
    pub scope: ScopeRole,
    /// The load on the main output.
    pub load: Role,
    /// The line source.
    pub source: Role,
    /// Whether the source's output (or the board's supply) is isolated from earth by a transformer.
    pub source_isolated: bool,
    /// The probe on the drain node.
    pub probe: Probe,
    /// Safety limits.
    pub limits: SafetyLimits,
}

/// The scope's role.
#[derive(Debug, Clone, PartialEq)]
pub struct ScopeRole {
    /// Where it is.
    pub role: Role,
    /// Channel of the drain probe.
    pub channel: u8,
    /// Whether the scope's inputs are referenced to protective earth.
    pub earthed: bool,
    /// Highest voltage at the channel's connector.
    pub input_rating_v: f64,
}

/// How a role is filled.
#[derive(Debug, Clone, PartialEq)]
pub enum Role {
    /// An instrument at an address in the open VISA resource syntax; `driver` overrides recognition by `*IDN?`.
    Instrument {
        /// Address.
        address: String,
        /// Driver stated by the user.
        driver: Option<String>,
    },
    /// Set by hand by an operator who answers at the terminal.
    ByHand {
        /// What it is, in the user's words.
        description: String,
    },
}

/// The probe on the drain node.
#[derive(Debug, Clone, PartialEq)]
pub struct Probe {
    /// Attenuation, for instance 100.
    pub factor: f64,
    /// Input capacitance in farad.
    pub capacitance_f: Measured,
    /// Bandwidth in hertz.
    pub bandwidth_hz: f64,
    /// Highest peak voltage at the tip.
    pub rating_v: f64,
    /// Frequency above which the rating falls with 1/f.
    pub derating_frequency_hz: f64,
    /// Differential, or referenced to the scope's earth.
    pub differential: bool,
    /// Serial number.
    pub serial_number: String,
    /// Date of calibration, `YYYY-MM-DD`.
    pub calibrated: Option<String>,
    /// Date of the last compensation.
    pub compensated: Option<String>,
}

/// Safety limits of the station: never exceeded, whatever plan and board say.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct SafetyLimits {
    /// Highest drain voltage.
    pub drain_v: f64,
    /// Highest line voltage (rms).
    pub line_v: f64,
    /// Current limit programmed into the source.
    pub line_current_a: f64,
    /// Highest load power.
    pub load_power_w: f64,
}
