//! A station as its file states it: instruments, probe, earthing, safety limits. SI units.

use crate::files::{Document, FileErrors, Table, Value};
use ringstep_analysis::{
    findings::Accuracy,
    quantity::{Measured, Unit},
};

/// A station. Its file looks like this:
#[doc = concat!("```toml\n", include_str!("../guide/examples/station.toml"), "```")]
#[derive(Debug, Clone, PartialEq)]
pub struct Station {
    /// Name of the bench or place on the line.
    pub name: String,
    /// The oscilloscope.
    pub scope: ScopeRole,
    /// The load on the main output.
    pub load: Role,
    /// Whether an input terminal of the load is referenced to protective earth.
    pub load_earthed: bool,
    /// The line source.
    pub source: Role,
    /// Whether the source's output (or the board's supply) is isolated from earth by a transformer.
    pub source_isolated: bool,
    /// The probe on the drain node.
    pub probe: Probe,
    /// Safety limits.
    pub limits: SafetyLimits,
    /// How far scope and probe can be trusted.
    pub accuracy: Accuracy,
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

impl Station {
    /// Version of the file format.
    pub const FORMAT: u32 = 1;

    /// Reads a station file; `path` only names it in messages.
    ///
    /// # Errors
    /// Every mistake in the file, each with its place.
    pub fn read(path: &str, text: &str) -> Result<Self, FileErrors> {
        let document = Document::parse(path, text);
        let station = Self::from_table(&document);
        document.finish(station)
    }

    fn from_table(document: &Document<'_>) -> Option<Self> {
        let root = document.root();
        document.format(&root, "station", Self::FORMAT);
        let name = root.required("name", Value::text);
        let mut accuracy = Accuracy::default();
        let scope = root
            .required("scope", |value| value.table().and_then(|table| ScopeRole::from_table(&table, &mut accuracy)));
        let load = root.required("load", |value| value.table().and_then(|table| with_flag(&table, "earthed")));
        let source = root.required("source", |value| value.table().and_then(|table| with_flag(&table, "isolated")));
        let probe =
            root.required("probe", |value| value.table().and_then(|table| Probe::from_table(&table, &mut accuracy)));
        let limits = root.required("limits", |value| value.table().and_then(|table| SafetyLimits::from_table(&table)));
        root.finish();
        let ((load, load_earthed), (source, source_isolated)) = (load?, source?);
        Some(Self {
            name: name?,
            scope: scope?,
            load,
            load_earthed,
            source,
            source_isolated,
            probe: probe?,
            limits: limits?,
            accuracy,
        })
    }
}

/// A relative half-width that a file may state: taken over where it does.
fn state(table: &Table<'_, '_>, key: &'static str, into: &mut f64) -> Option<()> {
    if let Some(stated) = table.optional(key, |value| value.quantity(Unit::Percent, 0.0..=0.5))? {
        *into = stated;
    }
    Some(())
}

/// The role of a load or a source with the one thing to know about its earthing.
fn with_flag(table: &Table<'_, '_>, flag: &'static str) -> Option<(Role, bool)> {
    let role = Role::from_table(table, true);
    let flag = table.required(flag, Value::boolean);
    table.finish();
    Some((role?, flag?))
}

impl Role {
    fn from_table(table: &Table<'_, '_>, may_be_by_hand: bool) -> Option<Self> {
        if may_be_by_hand && table.has("by_hand") {
            let description = table.required("by_hand", Value::text);
            for key in ["address", "driver"] {
                if table.has(key) {
                    table.refuse(
                        key,
                        "stands beside `by_hand`",
                        "a role is filled by an instrument or by hand, not both",
                    );
                }
            }
            return description.map(|description| Self::ByHand { description });
        }
        let driver = table.optional("driver", Value::text);
        if !table.has("address") {
            let by_hand = "or `by_hand = \"what it is\"` where an operator sets it";
            table.missing("address", may_be_by_hand.then(|| by_hand.to_owned()));
            return None;
        }
        let address = table.required("address", Value::text);
        Some(Self::Instrument { address: address?, driver: driver? })
    }
}

impl ScopeRole {
    fn from_table(table: &Table<'_, '_>, accuracy: &mut Accuracy) -> Option<Self> {
        let role = Role::from_table(table, false);
        let time_base = state(table, "time_base_accuracy", &mut accuracy.time_base);
        let vertical = state(table, "vertical_accuracy", &mut accuracy.vertical_gain);
        let channel = table.required("channel", |value| value.count(1..=8));
        let earthed = table.required("earthed", Value::boolean);
        let input_rating_v = table.required("input_rating", |value| value.quantity(Unit::Volt, 1.0..=1e3));
        table.finish();
        let channel = u8::try_from(channel?).ok()?;
        time_base?;
        vertical?;
        Some(Self { role: role?, channel, earthed: earthed?, input_rating_v: input_rating_v? })
    }
}

impl Probe {
    fn from_table(table: &Table<'_, '_>, accuracy: &mut Accuracy) -> Option<Self> {
        let factor_accuracy = state(table, "factor_accuracy", &mut accuracy.probe_factor);
        let factor = table.required("factor", |value| value.number(1.0..=10_000.0));
        let capacitance_f = table.required("capacitance", |value| value.measured(Unit::Farad, 0.0..=1e-9));
        let bandwidth_hz = table.required("bandwidth", |value| value.quantity(Unit::Hertz, 1e5..=1e11));
        let rating_v = table.required("rating", |value| value.quantity(Unit::Volt, 1.0..=1e5));
        let derating_frequency_hz =
            table.required("derating_frequency", |value| value.quantity(Unit::Hertz, 1e2..=1e11));
        let differential = table.required("differential", Value::boolean);
        let serial_number = table.required("serial_number", Value::text);
        let calibrated = table.optional("calibrated", Value::date);
        let compensated = table.optional("compensated", Value::date);
        table.finish();
        factor_accuracy?;
        Some(Self {
            factor: factor?,
            capacitance_f: capacitance_f?,
            bandwidth_hz: bandwidth_hz?,
            rating_v: rating_v?,
            derating_frequency_hz: derating_frequency_hz?,
            differential: differential?,
            serial_number: serial_number?,
            calibrated: calibrated?,
            compensated: compensated?,
        })
    }
}

impl SafetyLimits {
    fn from_table(table: &Table<'_, '_>) -> Option<Self> {
        let drain_v = table.required("drain", |value| value.quantity(Unit::Volt, 1.0..=5e3));
        let line_v = table.required("line", |value| value.quantity(Unit::Volt, 1.0..=1e3));
        let line_current_a = table.required("line_current", |value| value.quantity(Unit::Ampere, 1e-3..=100.0));
        let load_power_w = table.required("load_power", |value| value.quantity(Unit::Watt, 1e-3..=1e4));
        table.finish();
        Some(Self { drain_v: drain_v?, line_v: line_v?, line_current_a: line_current_a?, load_power_w: load_power_w? })
    }
}
