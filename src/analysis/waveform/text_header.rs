//! What the header of a delimited text says: names and units of columns, start and sample interval.

use super::text_layout::{Layout, Line};

/// What was found above the data.
#[derive(Debug, Clone, Default, PartialEq)]
pub(super) struct Header {
    /// Name of each column; empty where there is none.
    pub(super) names: Vec<String>,
    /// Unit of each column as written; empty where there is none.
    pub(super) units: Vec<String>,
    /// Sample interval.
    pub(super) interval_s: Option<f64>,
    /// Time of the first sample.
    pub(super) start_s: Option<f64>,
}

const INTERVAL_KEYS: [&str; 15] = [
    "sample interval",
    "sampling interval",
    "horizontal interval",
    "time interval",
    "interval",
    "increment",
    "x increment",
    "xincrement",
    "xincr",
    "delta t",
    "dt",
    "time step",
    "sampling period",
    "sample period",
    "resolution",
];
const RATE_KEYS: [&str; 5] = ["sample rate", "sampling rate", "sampling frequency", "samplerate", "fs"];
const START_KEYS: [&str; 9] =
    ["start", "start time", "t0", "x zero", "xzero", "x origin", "xorigin", "first sample", "time origin"];

impl Header {
    /// Reads the lines above the data (comments among them), where a data line has `columns` fields.
    pub(super) fn read(lines: &[Line<'_>], layout: Layout, columns: usize) -> Self {
        let mut header = Self::default();
        let rows: Vec<Vec<&str>> = lines.iter().map(|line| layout.fields(line.text)).collect();
        for (index, row) in rows.iter().enumerate() {
            for (column, field) in row.iter().enumerate() {
                let below = rows.get(index + 1).and_then(|next| next.get(column)).copied();
                header.entry(field, row.get(column + 1).copied(), below, layout);
            }
        }
        // Names stand in the last line that has a text over most columns; a line of nothing but units may follow it.
        let texts = |row: &Vec<&str>| row.iter().filter(|f| !f.is_empty() && layout.number(f).is_none()).count();
        let wide: Vec<&Vec<&str>> =
            rows.iter().filter(|row| row.len() + 1 >= columns && texts(row) * 2 >= columns).collect();
        let is_unit_line = |row: &Vec<&str>| {
            let units = row.iter().filter(|field| unit_of_line(field).is_some()).count();
            units > 0 && units + 1 >= texts(row)
        };
        let mut named = wide.iter().rev();
        let mut names = named.next();
        if let Some(row) = names.filter(|row| is_unit_line(row)) {
            header.units = row.iter().map(|field| unit_of_line(field).unwrap_or_default().to_owned()).collect();
            names = named.next();
        }
        if let Some(row) = names {
            header.names = row.iter().map(|field| (*field).to_owned()).collect();
            let in_names = row.iter().map(|field| unit_in_name(field).unwrap_or_default().to_owned());
            if header.units.is_empty() {
                header.units = in_names.collect();
            }
        }
        header
    }

    /// Takes up one `key value`, where the value stands to the right, below, or behind `=` or `:` in the same field.
    fn entry(&mut self, field: &str, right: Option<&str>, below: Option<&str>, layout: Layout) {
        let split = field.split_once(['=', ':']);
        let (key, values) = match split {
            Some((key, value)) if !value.trim().is_empty() => (key, [Some(value), None]),
            Some((key, _)) => (key, [right, below]),
            None => (field, [right, below]),
        };
        let (key, unit) = match unit_in_name(key) {
            Some(unit) => (key[..key.find(['(', '[', '/']).unwrap_or(key.len())].trim(), Some(unit)),
            None => (key.trim(), None),
        };
        let key = key.to_lowercase().replace('_', " ");
        let value = || values.iter().flatten().find_map(|text| quantity(text, unit, layout));
        if INTERVAL_KEYS.contains(&key.as_str()) {
            self.interval_s = self.interval_s.or_else(|| value().filter(|&v| v > 0.0));
        } else if RATE_KEYS.contains(&key.as_str()) {
            self.interval_s = self.interval_s.or_else(|| value().filter(|&v| v > 0.0).map(|rate| 1.0 / rate));
        } else if START_KEYS.contains(&key.as_str()) {
            self.start_s = self.start_s.or_else(value);
        }
    }

    /// Factor that turns the column's times into seconds, where its unit is stated.
    pub(super) fn time_factor(&self, column: usize) -> Option<f64> {
        self.units.get(column).and_then(|unit| parse_time_unit(unit))
    }

    /// Factor that turns the column's values into volts, where its unit is stated.
    pub(super) fn volt_factor(&self, column: usize) -> Option<f64> {
        let unit = self.units.get(column)?;
        let prefix = unit.strip_suffix("Volts").or(unit.strip_suffix("Volt")).or(unit.strip_suffix('V'))?;
        prefix_factor(prefix.trim())
    }

    /// Whether the column is named after the drain (`drain`, `V_DS`) or a capacitor (`V_C`): the nodes that ring.
    pub(super) fn named_after_ring_node(&self, column: usize) -> bool {
        let name = self.names.get(column).map(|name| name.to_lowercase()).unwrap_or_default();
        let words = || name.split(|c: char| !(c.is_alphanumeric() || c == '_'));
        name.contains("drain") || words().any(|word| matches!(word, "vds" | "v_ds" | "v_d" | "vc" | "v_c"))
    }
}

/// Factor that turns a time in this unit into seconds: `s`, `ms`, `us`, `µs`, `ns`, `ps`.
pub fn parse_time_unit(unit: &str) -> Option<f64> {
    match unit.trim().to_lowercase().as_str() {
        "sec" | "second" | "seconds" => Some(1.0),
        "microseconds" | "usec" => Some(1e-6),
        "milliseconds" | "msec" => Some(1e-3),
        "nanoseconds" | "nsec" => Some(1e-9),
        other => prefix_factor(other.strip_suffix('s')?),
    }
}

fn prefix_factor(prefix: &str) -> Option<f64> {
    match prefix {
        "" => Some(1.0),
        "m" => Some(1e-3),
        "u" | "µ" | "μ" => Some(1e-6),
        "n" => Some(1e-9),
        "p" => Some(1e-12),
        "k" => Some(1e3),
        _ => None,
    }
}

/// `us`, `(us)`, `[us]` as the whole field.
fn unit_of_line(field: &str) -> Option<&str> {
    let bare = field.trim_matches(|c: char| matches!(c, '(' | ')' | '[' | ']') || c.is_whitespace());
    let known = parse_time_unit(bare).is_some()
        || bare.strip_suffix(['V', 'A', 'W']).is_some_and(|prefix| prefix_factor(prefix).is_some())
        || matches!(bare, "Volt" | "Volts" | "Ampere" | "Amps");
    known.then_some(bare)
}

/// `us` in `Time (us)`, `Time [us]`, `t/us`, `time_us`.
fn unit_in_name(name: &str) -> Option<&str> {
    let (_, rest) = name.split_once(['(', '[', '/']).or_else(|| name.rsplit_once('_'))?;
    unit_of_line(rest.trim_end_matches([')', ']']))
}

/// A number with an optional unit (`2 ns`, `500 MHz`), in SI.
fn quantity(text: &str, unit: Option<&str>, layout: Layout) -> Option<f64> {
    let text = text.trim();
    if let Some(number) = layout.number(text).filter(|number| number.is_finite()) {
        return Some(number * unit.and_then(parse_time_unit).unwrap_or(1.0));
    }
    // The longest leading part that is a number; an exponent's `e` belongs to it.
    let ends = text.char_indices().map(|(at, _)| at).filter(|&at| at > 0).rev();
    let (number, at) = ends.filter_map(|at| Some((layout.number(text[..at].trim_end())?, at))).next()?;
    let unit = text[at..].trim();
    let factor = parse_time_unit(unit).or_else(|| rate_factor(unit))?;
    Some(number * factor)
}

fn rate_factor(unit: &str) -> Option<f64> {
    let bare = ["Sa/s", "S/s", "Hz"].iter().find_map(|suffix| unit.strip_suffix(suffix))?;
    match bare {
        "M" => Some(1e6),
        "G" => Some(1e9),
        other => prefix_factor(other),
    }
}
