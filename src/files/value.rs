//! One value of a file, read as what it should be: text, number, quantity with its unit, one of a few words, date, list.

use super::{Document, Mistake, Table, closest};
use ringstep_analysis::quantity::{Measured, Unit, parse_quantity};
use std::ops::RangeInclusive;
use toml::{Spanned, de::DeValue};

/// One value of a file. Each reader takes the value, and gives `None` after reporting a mistake.
pub struct Value<'d, 't> {
    document: &'d Document<'t>,
    key: String,
    item: &'d Spanned<DeValue<'t>>,
}

impl<'d, 't> Value<'d, 't> {
    pub(super) fn new(document: &'d Document<'t>, key: String, item: &'d Spanned<DeValue<'t>>) -> Self {
        Self { document, key, item }
    }

    /// A text that is not blank.
    pub fn text(self) -> Option<String> {
        match self.item.get_ref() {
            DeValue::String(text) if !text.trim().is_empty() => Some(text.trim().to_owned()),
            _ => self.unreadable("expected a text in quotes that is not empty"),
        }
    }

    /// `true` or `false`.
    pub fn boolean(self) -> Option<bool> {
        match self.item.get_ref() {
            DeValue::Boolean(value) => Some(*value),
            _ => self.unreadable("expected true or false, without quotes"),
        }
    }

    /// A number without a unit.
    pub fn number(self, range: RangeInclusive<f64>) -> Option<f64> {
        let value = match self.item.get_ref() {
            DeValue::Integer(integer) => integer.as_str().parse().ok().filter(|_| integer.radix() == 10),
            DeValue::Float(float) => float.as_str().parse().ok(),
            _ => None,
        };
        let expected = format!("expected a number without a unit, from {} to {}", range.start(), range.end());
        match value {
            Some(value) if range.contains(&value) => Some(value),
            Some(_) => self.refused(expected),
            None => self.unreadable(expected),
        }
    }

    /// A whole number.
    pub fn count(self, range: RangeInclusive<u32>) -> Option<u32> {
        let value = match self.item.get_ref() {
            DeValue::Integer(integer) => i128::from_str_radix(integer.as_str(), integer.radix()).ok(),
            _ => None,
        };
        let expected = format!("expected a whole number from {} to {}", range.start(), range.end());
        match value {
            Some(value) => match u32::try_from(value) {
                Ok(value) if range.contains(&value) => Some(value),
                _ => self.refused(expected),
            },
            None => self.unreadable(expected),
        }
    }

    /// A quantity with its unit and, if it has one, its tolerance, as `"1.2 mH +- 5 %"`; `range` in the SI unit.
    pub fn measured(self, unit: Unit, range: RangeInclusive<f64>) -> Option<Measured> {
        let expected = format!(
            "expected a quantity in quotes from {} to {}, as {:?}",
            unit_text(*range.start(), unit),
            unit_text(*range.end(), unit),
            example(unit)
        );
        let DeValue::String(text) = self.item.get_ref() else { return self.unreadable(expected) };
        match parse_quantity(text, unit) {
            Ok(measured) if range.contains(&measured.value) => Some(measured),
            Ok(_) => self.refused(expected),
            Err(error) => {
                let help = error.to_string();
                self.report(Mistake::Unreadable, expected, Some(help));
                None
            }
        }
    }

    /// A quantity that has no tolerance, as a rating or a limit.
    pub fn quantity(self, unit: Unit, range: RangeInclusive<f64>) -> Option<f64> {
        let again = Self { document: self.document, key: self.key.clone(), item: self.item };
        let measured = self.measured(unit, range)?;
        if measured.standard_uncertainty > 0.0 {
            return again.refused("expected a value without a tolerance");
        }
        Some(measured.value)
    }

    /// One of a few words.
    pub fn choice<T: Clone>(self, words: &[(&str, T)]) -> Option<T> {
        let known = || words.iter().map(|(word, _)| *word);
        let expected =
            format!("expected one of {}", known().map(|word| format!("{word:?}")).collect::<Vec<_>>().join(", "));
        let DeValue::String(text) = self.item.get_ref() else { return self.unreadable(expected) };
        if let Some((_, chosen)) = words.iter().find(|(word, _)| *word == text.trim()) {
            return Some(chosen.clone());
        }
        let help = closest(text, known()).map(|word| format!("did you mean {word:?}?"));
        self.report(Mistake::Unreadable, expected, help);
        None
    }

    /// A day, with or without quotes: `2026-03-14`.
    pub fn date(self) -> Option<String> {
        let text = match self.item.get_ref() {
            DeValue::String(text) => text.trim().to_owned(),
            DeValue::Datetime(date) => date.to_string(),
            _ => String::new(),
        };
        match text.parse::<toml::value::Datetime>() {
            Ok(date) if date.date.is_some() && date.time.is_none() && date.offset.is_none() => Some(text),
            _ => self.unreadable("expected a day, as 2026-03-14"),
        }
    }

    /// A list of at least one value; every value in it is read, whatever became of those before.
    pub fn list<T>(self, read: impl Fn(Value<'d, 't>) -> Option<T>) -> Option<Vec<T>> {
        match self.item.get_ref() {
            DeValue::Array(items) if !items.is_empty() => {
                let items = items
                    .iter()
                    .enumerate()
                    .map(|(index, item)| read(Value::new(self.document, format!("{}[{index}]", self.key), item)));
                items.collect::<Vec<_>>().into_iter().collect()
            }
            _ => self.unreadable("expected a list in square brackets with at least one value"),
        }
    }

    /// Two ascending values of one kind, as `["85 V", "265 V"]`.
    pub fn span(self, read: impl Fn(Value<'d, 't>) -> Option<f64>) -> Option<[f64; 2]> {
        let again = Self { document: self.document, key: self.key.clone(), item: self.item };
        match self.list(read)?.as_slice() {
            [low, high] if low < high => Some([*low, *high]),
            _ => again.refused("expected two values, the lower first, as [\"85 V\", \"265 V\"]"),
        }
    }

    /// A table.
    pub fn table(self) -> Option<Table<'d, 't>> {
        match self.item.get_ref() {
            DeValue::Table(entries) => Some(Table::new(self.document, self.key, self.item.span(), entries)),
            _ => self.unreadable("expected a table"),
        }
    }

    /// What stands there, in the words of the file.
    fn found(&self) -> String {
        match self.item.get_ref() {
            DeValue::String(text) => format!("found {:?}", shortened(text)),
            DeValue::Integer(value) => format!("found the number {value}"),
            DeValue::Float(value) => format!("found the number {value}"),
            DeValue::Boolean(value) => format!("found {value}"),
            DeValue::Datetime(value) => format!("found the date {value}"),
            DeValue::Array(items) => format!("found a list of {}", items.len()),
            DeValue::Table(_) => "found a table".to_owned(),
        }
    }

    fn unreadable<T>(self, expected: impl Into<String>) -> Option<T> {
        self.report(Mistake::Unreadable, expected.into(), None);
        None
    }

    fn refused<T>(self, expected: impl Into<String>) -> Option<T> {
        self.report(Mistake::Refused, expected.into(), None);
        None
    }

    fn report(self, mistake: Mistake, expected: String, help: Option<String>) {
        let found = self.found();
        self.document.report(mistake, self.item.span(), self.key, found, expected, help);
    }
}

fn unit_text(value: f64, unit: Unit) -> String {
    Measured::exact(value).text_with_standard_uncertainty(unit)
}

/// How a quantity of that unit is written on a bench.
fn example(unit: Unit) -> &'static str {
    match unit {
        Unit::Henry => "1.2 mH +- 5 %",
        Unit::Farad => "82 pF +- 10 %",
        Unit::Volt => "12.5 V",
        Unit::Ampere => "250 mA",
        Unit::Watt => "24 W",
        Unit::Hertz => "65 kHz",
        Unit::Second => "20 ms",
        Unit::Ohm => "10 kohm",
        Unit::Kelvin => "5 K",
        Unit::DegreeCelsius => "25 degC",
        Unit::Percent => "90 %",
        Unit::One => "12.5",
    }
}

fn shortened(text: &str) -> String {
    let mut short: String = text.chars().take(60).collect();
    if short.len() < text.len() {
        short.push('…');
    }
    short
}
