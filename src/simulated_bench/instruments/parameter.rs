//! Parameters of a command: numbers with suffixes (SCPI-99, volume 1, 7.2 and 7.1), switches, keywords; and numbers as
//! instruments answer them.

use super::{error::ScpiError, pattern::is_keyword};
use std::ops::RangeInclusive;

/// What a command was called with.
#[derive(Debug, Clone, Copy)]
pub struct Call<'a> {
    /// Numeric suffix of the header.
    pub suffix: u32,
    /// Whether it is the query form.
    pub query: bool,
    /// Parameters as text.
    pub parameters: &'a [String],
}

/// Unit a number may carry.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Unit {
    /// Seconds.
    S,
    /// Volts.
    V,
    /// Amperes.
    A,
    /// Hertz.
    Hz,
    /// Ohms.
    Ohm,
    /// No unit.
    None,
}

impl Unit {
    fn text(self) -> &'static str {
        match self {
            Self::S => "S",
            Self::V => "V",
            Self::A => "A",
            Self::Hz => "HZ",
            Self::Ohm => "OHM",
            Self::None => "",
        }
    }
}

impl Call<'_> {
    /// Refuses parameters.
    pub fn nothing(&self) -> Result<(), ScpiError> {
        match self.parameters.first() {
            Some(parameter) => Err(ScpiError::parameter_not_allowed(parameter.as_str())),
            None => Ok(()),
        }
    }

    /// The one parameter.
    pub fn one(&self) -> Result<&str, ScpiError> {
        match self.parameters {
            [] => Err(ScpiError::missing_parameter("")),
            [one] => Ok(one),
            [_, second, ..] => Err(ScpiError::parameter_not_allowed(second.as_str())),
        }
    }

    /// The one parameter as a number within a range, `MINimum` or `MAXimum`.
    pub fn number(&self, unit: Unit, range: RangeInclusive<f64>) -> Result<f64, ScpiError> {
        let text = self.one()?;
        if is_keyword("MINimum", text) {
            return Ok(*range.start());
        }
        if is_keyword("MAXimum", text) {
            return Ok(*range.end());
        }
        let value = number(text, unit)?;
        if range.contains(&value) { Ok(value) } else { Err(ScpiError::out_of_range(text)) }
    }

    /// The one parameter as `ON`, `OFF`, or a number that is rounded to zero or not.
    pub fn switch(&self) -> Result<bool, ScpiError> {
        match self.one()? {
            text if text.eq_ignore_ascii_case("ON") => Ok(true),
            text if text.eq_ignore_ascii_case("OFF") => Ok(false),
            text => match number(text, Unit::None) {
                Ok(value) => Ok(value.round() != 0.0),
                Err(_) => Err(ScpiError::illegal_value(text)),
            },
        }
    }

    /// The one parameter as one of some keywords.
    pub fn choice<T: Copy>(&self, choices: &[(&str, T)]) -> Result<T, ScpiError> {
        let text = self.one()?;
        let found = choices.iter().find(|(keyword, _)| is_keyword(keyword, text));
        found.map(|(_, value)| *value).ok_or_else(|| ScpiError::illegal_value(text))
    }
}

/// A decimal number (NR1, NR2 or NR3) with an optional suffix.
pub fn number(text: &str, unit: Unit) -> Result<f64, ScpiError> {
    if !text.starts_with(|c: char| c.is_ascii_digit() || "+-.".contains(c)) {
        return Err(ScpiError::data_type(text));
    }
    let end = mantissa_and_exponent(text);
    let value: f64 = text[..end].parse().map_err(|_| ScpiError::invalid_number(text))?;
    let suffix = text[end..].trim();
    if suffix.is_empty() {
        return Ok(value);
    }
    multiplier(&suffix.to_ascii_uppercase(), unit).map(|m| value * m).ok_or_else(|| ScpiError::invalid_suffix(text))
}

/// Where the number ends: an `E` belongs to it only before an exponent.
fn mantissa_and_exponent(text: &str) -> usize {
    let bytes = text.as_bytes();
    let digits = |mut at: usize| {
        while bytes.get(at).is_some_and(u8::is_ascii_digit) {
            at += 1;
        }
        at
    };
    let sign = |at: usize| at + usize::from(matches!(bytes.get(at), Some(b'+' | b'-')));
    let mut end = digits(sign(0));
    if bytes.get(end) == Some(&b'.') {
        end = digits(end + 1);
    }
    if matches!(bytes.get(end), Some(b'e' | b'E')) {
        let exponent = sign(end + 1);
        let after = digits(exponent);
        if after > exponent {
            end = after;
        }
    }
    end
}

/// The multiplier of a suffix: `M` is milli, but mega before hertz and ohm.
fn multiplier(suffix: &str, unit: Unit) -> Option<f64> {
    let prefix = suffix.strip_suffix(unit.text())?;
    Some(match prefix {
        "" if unit == Unit::None => return None,
        "" => 1.0,
        "G" => 1e9,
        "MA" => 1e6,
        "M" if matches!(unit, Unit::Hz | Unit::Ohm) => 1e6,
        "K" => 1e3,
        "M" => 1e-3,
        "U" => 1e-6,
        "N" => 1e-9,
        "P" => 1e-12,
        _ => return None,
    })
}

/// A number as NR3.
pub fn nr3(value: f64) -> String {
    let text = format!("{value:.6E}");
    match text.split_once('E') {
        Some((mantissa, exponent)) => {
            let exponent: i32 = exponent.parse().unwrap_or(0);
            format!("{mantissa}E{exponent:+03}")
        }
        None => text,
    }
}

/// A switch as NR1.
pub fn nr1(on: bool) -> String {
    String::from(if on { "1" } else { "0" })
}
