//! The budget as rows of text for a table.

use super::data::{Budget, Component, Distribution, Evaluation};
use crate::quantity::{Measured, Unit};

/// Headings of [`Budget::rows`].
pub const COLUMNS: [&str; 8] = [
    "component",
    "value",
    "standard uncertainty",
    "distribution",
    "degrees of freedom",
    "sensitivity",
    "contribution",
    "share",
];

impl Budget {
    /// One row a component in their order, under [`COLUMNS`]. Contributions have as many decimals as their own size asks
    /// for, in the prefixed unit of the result.
    pub fn rows(&self) -> Vec<[String; 8]> {
        self.components.iter().map(|component| self.row(component)).collect()
    }

    fn row(&self, component: &Component) -> [String; 8] {
        let input = &component.input;
        let [value, standard_uncertainty] = pair(input.value, input.standard_uncertainty, &input.unit);
        let [_, contribution] = pair(self.value, component.contribution, &self.unit);
        [
            input.name.clone(),
            value,
            standard_uncertainty,
            shape(component),
            freedom(input.degrees_of_freedom),
            self.sensitivity_text(component),
            contribution,
            format!("{:.1} %", 100.0 * component.share),
        ]
    }

    fn sensitivity_text(&self, component: &Component) -> String {
        let below = component.input.unit.as_str();
        let above = if below == self.unit { "" } else { self.unit.as_str() };
        let text = match Unit::of_symbol(above) {
            Some(unit) if unit != Unit::One => pair(significant(component.sensitivity), 0.0, above)[0].clone(),
            _ => format!("{} {above}", plain(component.sensitivity)).trim_end().to_owned(),
        };
        match below {
            "" | "%" => text,
            _ if below == self.unit => text,
            _ if above.is_empty() => format!("{text} 1/{below}"),
            _ => format!("{text}/{below}"),
        }
    }
}

/// Value and uncertainty as text with the same prefix and the decimals that the uncertainty asks for.
fn pair(value: f64, uncertainty: f64, unit: &str) -> [String; 2] {
    let known = Unit::of_symbol(unit);
    let text = Measured { value, standard_uncertainty: uncertainty }
        .text_with_standard_uncertainty(known.unwrap_or(Unit::One));
    let (value, uncertainty) = text.split_once(" +- ").unwrap_or((&text, "0"));
    let with_unit = |text: &str| if known.is_some() { text.to_owned() } else { format!("{text} {unit}") };
    [with_unit(value), with_unit(uncertainty)]
}

/// Three significant digits of a number that takes no prefix, with an exponent where zeros would hide it.
fn plain(value: f64) -> String {
    let written_out = value == 0.0 || (1e-3..1e6).contains(&value.abs());
    if written_out { significant(value).to_string() } else { format!("{value:.2e}") }
}

/// Rounded to three significant digits.
fn significant(value: f64) -> f64 {
    format!("{value:.2e}").parse().unwrap_or(value)
}

fn shape(component: &Component) -> String {
    let shape = match component.input.distribution {
        Distribution::Normal => "normal",
        Distribution::Rectangular => "rectangular",
        Distribution::StudentT => "t",
    };
    let evaluation = match component.input.evaluation {
        Evaluation::A => "A",
        Evaluation::B => "B",
    };
    format!("{shape}, type {evaluation}")
}

fn freedom(degrees_of_freedom: f64) -> String {
    if degrees_of_freedom.is_finite() { format!("{:.0}", degrees_of_freedom.floor()) } else { "infinite".to_owned() }
}
