//! What a plan says of capacitors to be added to the drain node, and what of it is checked before anything is energised.

use super::{Attendance, PreflightCheck};
use crate::files::{Table, Value};
use ringstep_analysis::quantity::{Measured, Unit};

/// Kept back from a capacitor's rating where the plan says nothing else (common practice).
const USUAL_MARGIN: f64 = 0.2;
/// Dielectrics whose capacitance depends neither on voltage nor on age to speak of; two names of one class.
const STABLE: [&str; 2] = ["C0G", "NP0"];

/// Capacitors to be added to the drain node, one after another, at one line voltage of the plan.
#[derive(Debug, Clone, PartialEq)]
pub struct AddedCapacitors {
    /// Line voltage (rms) at which they are measured; one of the plan's.
    pub line_v: f64,
    /// What the leads add to each, in farad; an uncertainty they share.
    pub lead_stray_f: Measured,
    /// Relative standard uncertainty by which one meter measured all of them wrong together.
    pub common_meter: f64,
    /// Share of the peak voltage by which a rating must exceed it.
    pub rating_margin: f64,
    /// The capacitors, in the order they are fitted.
    pub parts: Vec<AddedPart>,
}

/// One capacitor, of a C0G (NP0) dielectric.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct AddedPart {
    /// Capacitance in farad, as measured.
    pub capacitance_f: Measured,
    /// Rated voltage in volts.
    pub rating_v: f64,
}

impl AddedCapacitors {
    /// Reads the table `added_capacitors` of a plan with these line voltages.
    pub(super) fn from_table(table: &Table<'_, '_>, lines_v: Option<&[f64]>) -> Option<Self> {
        let line_v = table.optional("line", |value| value.quantity(Unit::Volt, 1.0..=1e3));
        let lead_stray = table.required("lead_stray", |value| value.measured(Unit::Farad, 0.0..=1e-10));
        let meter = table.optional("meter_tolerance", |value| value.quantity(Unit::Percent, 0.0..=0.5));
        let margin = table.optional("rating_margin", |value| value.quantity(Unit::Percent, 0.0..=2.0));
        let parts = table.required("capacitor", |value| {
            value.list(|value| value.table().and_then(|table| AddedPart::from_table(&table)))
        });
        table.finish();
        let line_v = match (line_v?, lines_v?) {
            (None, [only]) => *only,
            (None, _) => {
                table.missing("line", Some("one of the plan's line voltages, as \"230 V\"".to_owned()));
                return None;
            }
            (Some(wanted), lines) if lines.contains(&wanted) => wanted,
            (Some(wanted), _) => {
                table.refuse("line", format!("{wanted} V"), "expected one of the plan's line voltages");
                return None;
            }
        };
        Some(Self {
            line_v,
            lead_stray_f: lead_stray?,
            common_meter: Measured::within(1.0, meter?.unwrap_or(0.0)).standard_uncertainty,
            rating_margin: margin?.unwrap_or(USUAL_MARGIN),
            parts: parts?,
        })
    }

    /// Rated voltage that a capacitor needs where the drain reaches this peak.
    pub fn needed_rating_v(&self, peak_v: f64) -> f64 {
        peak_v * (1.0 + self.rating_margin)
    }

    /// Whether somebody can fit them, and whether they stand the drain voltage that is expected.
    pub(super) fn checks(&self, expected_peak_v: Option<f64>, attendance: Attendance) -> Vec<PreflightCheck> {
        let present = attendance == Attendance::Attended;
        let detail = if present {
            format!("{} to be fitted by qualified hands, power off, when asked for", counted(self.parts.len()))
        } else {
            "they must be fitted by hand when the program asks, and nobody can answer: the run is unattended, or its standard \
             input is no terminal. Take added_capacitors out of the plan, or attend the run at a terminal"
                .to_owned()
        };
        let mut checks = vec![PreflightCheck::hold("added capacitors", present, detail)];
        let Some(peak_v) = expected_peak_v else { return checks };
        let needed_v = self.needed_rating_v(peak_v);
        checks.extend(self.parts.iter().map(|part| {
            let detail = format!(
                "{} rated {:.0} V; {peak_v:.0} V expected at the drain and {:.0} % above it take {needed_v:.0} V",
                Measured::exact(part.capacitance_f.value).text_with_standard_uncertainty(Unit::Farad),
                part.rating_v,
                100.0 * self.rating_margin,
            );
            PreflightCheck::hold("rating of an added capacitor", part.rating_v >= needed_v, detail)
        }));
        checks
    }
}

impl AddedPart {
    fn from_table(table: &Table<'_, '_>) -> Option<Self> {
        let capacitance = table.required("capacitance", |value| value.measured(Unit::Farad, 1e-12..=1e-7));
        let rating = table.required("rating", |value| value.quantity(Unit::Volt, 1.0..=1e5));
        let dielectric = table.required("dielectric", Value::text);
        if let Some(dielectric) = dielectric.as_deref()
            && !STABLE.contains(&dielectric)
        {
            let expected = "expected \"C0G\" or \"NP0\": others lose capacitance with voltage and age";
            table.refuse("dielectric", format!("{dielectric:?}"), expected);
        }
        table.finish();
        dielectric?;
        Some(Self { capacitance_f: capacitance?, rating_v: rating? })
    }
}

fn counted(count: usize) -> String {
    if count == 1 { "one capacitor".to_owned() } else { format!("{count} capacitors") }
}
