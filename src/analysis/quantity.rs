//! A measured value with its standard uncertainty, and quantities as people write them: `"1.2 mH +- 5 %"`.

use serde::{Deserialize, Serialize};
use std::fmt;

/// Coverage factor of a 95 % interval of a normal distribution (JCGM 100:2008, table G.1).
pub const COVERAGE_95: f64 = 1.959_964;

/// A value in SI units with its standard uncertainty (JCGM 100), in the same unit.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Measured {
    /// Best estimate.
    pub value: f64,
    /// Standard uncertainty, one standard deviation, never negative.
    pub standard_uncertainty: f64,
}

impl Measured {
    /// A value without uncertainty.
    pub const fn exact(value: f64) -> Self {
        Self { value, standard_uncertainty: 0.0 }
    }

    /// A value known to lie within `half_width` of the best estimate and nothing more: a rectangular distribution, whose
    /// standard uncertainty is the half-width over the square root of three (JCGM 100:2008, 4.3.7).
    pub fn within(value: f64, half_width: f64) -> Self {
        Self { value, standard_uncertainty: half_width.abs() / 3f64.sqrt() }
    }

    /// Standard uncertainty over the magnitude of the value.
    pub fn relative_uncertainty(self) -> f64 {
        self.standard_uncertainty / self.value.abs()
    }

    /// `"82.4 pF +- 0.9 pF"` with the standard uncertainty behind the sign.
    pub fn text_with_standard_uncertainty(self, unit: Unit) -> String {
        self.text(unit, self.standard_uncertainty)
    }

    /// `"82.4 pF +- 1.8 pF"` with the half-width of the 95 % interval of a normal distribution behind the sign.
    pub fn text_with_95_percent_interval(self, unit: Unit) -> String {
        self.text(unit, COVERAGE_95 * self.standard_uncertainty)
    }

    fn text(self, unit: Unit, half_width: f64) -> String {
        if !(self.value.is_finite() && half_width.is_finite()) {
            return format!("{} {unit}", self.value).trim_end().to_owned();
        }
        let (prefix, scale) = unit.prefix_for(self.value.abs().max(half_width));
        let unit = if unit == Unit::One { String::new() } else { format!(" {prefix}{unit}") };
        let (value, half_width) = (self.value / scale, half_width / scale);
        if half_width == 0.0 {
            return format!("{}{unit}", trimmed(value));
        }
        let last = last_digit(half_width);
        let decimals = usize::try_from(-last).unwrap_or(0);
        let coarse = 10f64.powi(last.max(0));
        let round = |x: f64| if last > 0 { (x / coarse).round() * coarse } else { x };
        format!("{:.decimals$}{unit} +- {:.decimals$}{unit}", round(value), round(half_width))
    }
}

/// Decimal exponent of the last digit worth printing of an uncertainty: at most two significant digits (JCGM 100:2008, 7.2.6),
/// and the second only where the first is 1 or 2, which it would otherwise blur by more than a sixth.
fn last_digit(uncertainty: f64) -> i32 {
    let exponent = uncertainty.log10().floor() as i32;
    let leading = uncertainty / 10f64.powi(exponent);
    if leading < 2.95 { exponent - 1 } else { exponent }
}

/// Six significant digits without trailing zeros.
fn trimmed(value: f64) -> String {
    let whole_digits = if value == 0.0 { 1 } else { value.abs().log10().floor() as i32 + 1 };
    let decimals = usize::try_from(6 - whole_digits).unwrap_or(0);
    let text = format!("{value:.decimals$}");
    if text.contains('.') { text.trim_end_matches('0').trim_end_matches('.').to_owned() } else { text }
}

/// A unit that a quantity may be asked in.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum Unit {
    /// Inductance.
    Henry,
    /// Capacitance.
    Farad,
    /// Voltage.
    Volt,
    /// Current.
    Ampere,
    /// Power.
    Watt,
    /// Frequency.
    Hertz,
    /// Time.
    Second,
    /// Resistance.
    Ohm,
    /// Temperature difference.
    Kelvin,
    /// Temperature, kept in degrees Celsius.
    DegreeCelsius,
    /// A ratio, written in per cent: `"5 %"` is 0.05.
    Percent,
    /// A bare number, such as a quality factor.
    One,
}

const ALL: [Unit; 12] = [
    Unit::Henry,
    Unit::Farad,
    Unit::Volt,
    Unit::Ampere,
    Unit::Watt,
    Unit::Hertz,
    Unit::Second,
    Unit::Ohm,
    Unit::Kelvin,
    Unit::DegreeCelsius,
    Unit::Percent,
    Unit::One,
];

impl Unit {
    fn spellings(self) -> &'static [&'static str] {
        match self {
            Self::Henry => &["H"],
            Self::Farad => &["F"],
            Self::Volt => &["V"],
            Self::Ampere => &["A"],
            Self::Watt => &["W"],
            Self::Hertz => &["Hz"],
            Self::Second => &["s"],
            Self::Ohm => &["ohm", "Ohm", "\u{3a9}", "\u{2126}"],
            Self::Kelvin => &["K"],
            Self::DegreeCelsius => &["degC", "\u{b0}C"],
            Self::Percent => &["%"],
            Self::One => &[""],
        }
    }

    /// The unit of that symbol, as [`fmt::Display`] writes it.
    pub fn of_symbol(symbol: &str) -> Option<Self> {
        ALL.into_iter().find(|unit| unit.spellings()[0] == symbol)
    }

    fn takes_prefix(self) -> bool {
        !matches!(self, Self::Percent | Self::DegreeCelsius | Self::One)
    }

    /// What one written unit is worth.
    fn worth(self) -> f64 {
        if self == Self::Percent { 0.01 } else { 1.0 }
    }

    /// The prefix that leaves one to three digits before the point, and its worth.
    fn prefix_for(self, magnitude: f64) -> (&'static str, f64) {
        if !self.takes_prefix() || magnitude == 0.0 {
            return ("", self.worth());
        }
        let fits = |&&(_, worth): &&(&str, f64)| magnitude >= worth * 0.999_999_5;
        let (prefix, worth) = *PREFIXES.iter().rev().find(fits).unwrap_or(&PREFIXES[0]);
        (prefix, worth)
    }

    /// Worth of the unit with its prefix, as written.
    fn scale_of(self, word: &str) -> Option<f64> {
        self.spellings().iter().find_map(|spelling| {
            let prefix = word.strip_suffix(spelling)?;
            let prefix = if matches!(prefix, "\u{b5}" | "\u{3bc}") { "u" } else { prefix };
            let known = PREFIXES.iter().find(|(name, _)| *name == prefix)?;
            (prefix.is_empty() || self.takes_prefix()).then_some(known.1 * self.worth())
        })
    }
}

/// SI prefixes in use on a bench, ascending.
const PREFIXES: [(&str, f64); 10] = [
    ("f", 1e-15),
    ("p", 1e-12),
    ("n", 1e-9),
    ("u", 1e-6),
    ("m", 1e-3),
    ("", 1.0),
    ("k", 1e3),
    ("M", 1e6),
    ("G", 1e9),
    ("T", 1e12),
];

impl fmt::Display for Unit {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(self.spellings()[0])
    }
}

/// Why a text is no quantity.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
#[error("expected {expected}, found {found} at character {character}")]
pub struct QuantityError {
    /// Where in the text: byte offset, for a span.
    pub position: usize,
    /// Where in the text: characters, counted from one, for a reader.
    pub character: usize,
    /// What would have been right there.
    pub expected: String,
    /// What stands there.
    pub found: String,
}

/// Reads `"1.2 mH +- 5 %"`, `"1.2 mH ± 60 uH"` or `"100 V"` in that unit, to SI. A tolerance is a half-width: see
/// [`Measured::within`]. Without one the uncertainty is zero.
///
/// # Errors
/// Says what was expected where, at the first character that cannot be understood.
pub fn parse_quantity(text: &str, unit: Unit) -> Result<Measured, QuantityError> {
    let mut reader = Reader { text, position: 0 };
    let value = reader.number("a number")? * reader.unit(unit, false)?.0;
    if reader.rest().is_empty() {
        return Ok(Measured::exact(value));
    }
    if !["+-", "\u{b1}", "+/-"].iter().any(|sign| reader.take(sign)) {
        return Err(reader.error("+-, ± or the end"));
    }
    reader.skip_space();
    let start = reader.position;
    let width = reader.number("a tolerance")?;
    if width < 0.0 {
        reader.position = start;
        return Err(reader.error("a tolerance that is not negative"));
    }
    let (scale, relative) = reader.unit(unit, true)?;
    let half_width = if relative { width * 0.01 * value.abs() } else { width * scale };
    if !reader.rest().is_empty() {
        return Err(reader.error("the end"));
    }
    Ok(Measured::within(value, half_width))
}

struct Reader<'a> {
    text: &'a str,
    position: usize,
}

impl<'a> Reader<'a> {
    fn rest(&self) -> &'a str {
        &self.text[self.position..]
    }

    fn skip_space(&mut self) {
        self.position = self.text.len() - self.rest().trim_start().len();
    }

    fn take(&mut self, word: &str) -> bool {
        let there = self.rest().starts_with(word);
        if there {
            self.position += word.len();
        }
        there
    }

    fn error(&self, expected: &str) -> QuantityError {
        let word = self.rest().split_whitespace().next().filter(|_| !self.rest().starts_with(char::is_whitespace));
        QuantityError {
            position: self.position,
            character: self.text[..self.position].chars().count() + 1,
            expected: expected.to_owned(),
            found: word.map_or_else(|| "nothing".to_owned(), |word| format!("`{word}`")),
        }
    }

    fn number(&mut self, expected: &str) -> Result<f64, QuantityError> {
        self.skip_space();
        let length = number_length(self.rest());
        let value = self.rest()[..length].parse::<f64>().ok().filter(|value| value.is_finite());
        let value = value.ok_or_else(|| self.error(expected))?;
        self.position += length;
        Ok(value)
    }

    /// Worth of the unit written here, and whether it was the per cent of a tolerance.
    fn unit(&mut self, unit: Unit, tolerance: bool) -> Result<(f64, bool), QuantityError> {
        self.skip_space();
        let end = |c: char| c.is_whitespace() || matches!(c, '+' | '-' | '\u{b1}');
        let word = self.rest().split(end).next().unwrap_or("");
        // The tolerance of a ratio is in points: "20 % +- 5 %" is 15 % to 25 %.
        let relative = tolerance && word == "%" && unit != Unit::Percent;
        let scale = if relative { Some(1.0) } else { unit.scale_of(word) };
        let scale = scale.ok_or_else(|| {
            let prefixed = if unit.takes_prefix() { " (a prefix may stand before it: p n u m k M G)" } else { "" };
            self.error(&format!("the unit {unit}{}{prefixed}", if tolerance { " or %" } else { "" }))
        })?;
        self.position += word.len();
        self.skip_space();
        Ok((scale, relative))
    }
}

/// Bytes of the decimal number at the start, 0 where there is none.
fn number_length(text: &str) -> usize {
    let bytes = text.as_bytes();
    let digits = |from: usize| bytes[from.min(bytes.len())..].iter().take_while(|b| b.is_ascii_digit()).count();
    let sign = usize::from(matches!(bytes.first(), Some(b'+' | b'-')));
    let whole = digits(sign);
    let mut end = sign + whole;
    let mut fraction = 0;
    if bytes.get(end) == Some(&b'.') {
        fraction = digits(end + 1);
        end += 1 + fraction;
    }
    if whole + fraction == 0 {
        return 0;
    }
    if matches!(bytes.get(end), Some(b'e' | b'E')) {
        let sign = usize::from(matches!(bytes.get(end + 1), Some(b'+' | b'-')));
        let exponent = digits(end + 1 + sign);
        if exponent > 0 {
            end += 1 + sign + exponent;
        }
    }
    end
}
