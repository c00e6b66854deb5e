//! Samples from delimited text: one or more columns, with a time column or with start and interval from the header.

use super::text_header::Header;
use super::text_layout::{Layout, Line, characters, lines, time_of_day_s};
use super::{Samples, SamplesError, TimeAxis, detect_step, is_reading};
use thiserror::Error;

/// A column by its number (from one) or by its name in the header.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Column {
    /// Counted from one.
    Number(usize),
    /// As it stands in the header; letter case does not matter.
    Name(String),
}

/// What the file does not say itself; `None` where the file decides.
#[derive(Debug, Clone, PartialEq)]
pub struct TextOptions {
    /// Column of times.
    pub time_column: Option<Column>,
    /// Column of voltages.
    pub value_column: Option<Column>,
    /// Factor on the voltages, such as a probe factor that the file does not hold.
    pub factor: f64,
    /// Sample interval in seconds; a time column is then not used.
    pub interval_s: Option<f64>,
    /// Time of the first sample in seconds, with an interval.
    pub start_s: Option<f64>,
    /// Seconds per unit of the time column.
    pub time_unit_s: Option<f64>,
}

impl Default for TextOptions {
    fn default() -> Self {
        let (time_column, value_column) = (None, None);
        Self { time_column, value_column, factor: 1.0, interval_s: None, start_s: None, time_unit_s: None }
    }
}

/// Samples, and which columns they were taken from: a default choice is for the user to see.
#[derive(Debug, Clone, PartialEq)]
pub struct DecodedText {
    /// The samples.
    pub samples: Samples,
    /// Column of the voltages, from one.
    pub value_column: usize,
    /// Its name in the header, where it has one.
    pub value_name: Option<String>,
    /// Column of the times, from one; `None` where the interval was stated.
    pub time_column: Option<usize>,
}

/// Why a text gives no samples.
#[derive(Debug, Clone, PartialEq, Error)]
pub enum TextError {
    /// No two lines of numbers.
    #[error("no columns of numbers were found: the file must hold delimited text with one sample a line")]
    NoData,
    /// A field that should be a number.
    #[error("line {line}, column {column}: {found:?} is not a number")]
    NotANumber {
        /// Line, from one.
        line: usize,
        /// Column, from one.
        column: usize,
        /// What stands there.
        found: String,
    },
    /// A sentinel.
    #[error("line {line}, column {column}: {value:e} stands for \"no reading\"")]
    NotAReading {
        /// Line, from one.
        line: usize,
        /// Column, from one.
        column: usize,
        /// What stands there.
        value: f64,
    },
    /// A time that does not follow.
    #[error("line {line}, column {column}: this time does not follow the one before it")]
    Order {
        /// Line, from one.
        line: usize,
        /// Column, from one.
        column: usize,
    },
    /// A column that is not there.
    #[error("there is no column {wanted}: the columns are {present}")]
    NoSuchColumn {
        /// As it was asked for.
        wanted: String,
        /// The columns of the file.
        present: String,
    },
    /// Neither times nor an interval.
    #[error("neither a time column nor a sample interval was found: state the interval")]
    NoTime,
    /// The values are no samples.
    #[error(transparent)]
    Samples(#[from] SamplesError),
}

/// Reads one voltage column of a delimited text.
///
/// Where several columns could be the voltage, one named after the drain or a capacitor is taken, and else the one that
/// swings most (between its 5th and 95th percentile): beside gate and current-sense signals that is the drain.
///
/// # Errors
/// [`TextError`] with line and column.
pub fn decode_text(bytes: &[u8], options: &TextOptions) -> Result<DecodedText, TextError> {
    let text = characters(bytes);
    let all = lines(&text);
    let layout = Layout::detect(&all);
    let table = Table::find(&all, layout)?;
    let value = table.value_column(options)?;
    let value_name = table.header.names.get(value).filter(|name| !name.is_empty()).cloned();
    let factor = options.factor * table.header.volt_factor(value).unwrap_or(1.0);
    let mut volts = table.column(value, |layout, field| layout.number(field))?;
    volts.iter_mut().for_each(|v| *v *= factor);
    let (time, time_column) = table.time_axis(options, value)?;
    let step_v = detect_step(&volts);
    let samples = Samples::new(time, volts)?.with_range(step_v, None)?;
    Ok(DecodedText { samples, value_column: value + 1, value_name, time_column: time_column.map(|column| column + 1) })
}

/// The block of data lines and the header above it.
struct Table<'a> {
    layout: Layout,
    data: Vec<Line<'a>>,
    header: Header,
    /// Per column, over lines taken all through the block: what it holds.
    kinds: Vec<Kind>,
}

#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Kind {
    Numbers,
    Dates,
    Other,
}

impl<'a> Table<'a> {
    fn find(all: &[Line<'a>], layout: Layout) -> Result<Self, TextError> {
        let rows: Vec<&Line<'a>> = all.iter().filter(|line| !line.comment).collect();
        let middle = rows.len() / 2;
        let from = middle.saturating_sub(100);
        let kinds = kinds(&rows[from..rows.len().min(middle + 100)], layout);
        if !kinds.contains(&Kind::Numbers) {
            return Err(TextError::NoData);
        }
        // Settings beside the data may be texts; what counts is that every data column can be read.
        let is_data = |line: &Line<'_>| {
            let fields = layout.fields(line.text);
            kinds.iter().enumerate().all(|(column, kind)| match (kind, fields.get(column)) {
                (Kind::Other, _) => true,
                (_, None) => false,
                (Kind::Numbers, Some(field)) => layout.number(field).is_some(),
                (Kind::Dates, Some(field)) => time_of_day_s(field).is_some(),
            })
        };
        // Three in a row: a header line may hold numbers too, and a bad line further down is an error, not a header.
        let begins = |at: &usize| rows[*at..rows.len().min(at + 3)].iter().all(|line| is_data(line));
        let first = (0..rows.len()).find(begins).ok_or(TextError::NoData)?;
        let data: Vec<Line<'a>> = rows[first..].iter().map(|line| **line).collect();
        let first_number = data.first().ok_or(TextError::NoData)?.number;
        let above: Vec<Line<'a>> =
            all.iter().filter(|line| line.number < first_number || line.comment).copied().collect();
        // Where settings stand beside the data they are the header.
        let beside = if kinds.first() == Some(&Kind::Other) { data.iter().take(64).copied().collect() } else { above };
        let header = Header::read(&beside, layout, kinds.len());
        Ok(Self { layout, data, header, kinds })
    }

    fn value_column(&self, options: &TextOptions) -> Result<usize, TextError> {
        if let Some(column) = &options.value_column {
            return self.locate(column);
        }
        let time = options.time_column.as_ref().map(|column| self.locate(column)).transpose()?;
        let mut best: Option<(usize, (bool, f64))> = None;
        for column in (0..self.kinds.len()).filter(|&c| self.kinds[c] == Kind::Numbers && Some(c) != time) {
            let mut sample = self.sampled(column);
            let alone = self.kinds.iter().filter(|&&kind| kind == Kind::Numbers).count() == 1;
            if !alone && rising(&sample) {
                continue;
            }
            sample.sort_unstable_by(f64::total_cmp);
            let swing = sample[sample.len() * 95 / 100] - sample[sample.len() * 5 / 100];
            let rank = (self.header.named_after_ring_node(column), swing);
            if best.is_none_or(|(_, most)| rank > most) {
                best = Some((column, rank));
            }
        }
        best.map(|(column, _)| column).ok_or(TextError::NoData)
    }

    /// Some thousand values of a column, in order; what can't be read is left out.
    fn sampled(&self, column: usize) -> Vec<f64> {
        let stride = self.data.len() / 4000 + 1;
        let value = |line: &Line<'_>| self.layout.number(self.layout.fields(line.text).get(column)?);
        self.data.iter().step_by(stride).filter_map(value).collect()
    }

    fn time_axis(&self, options: &TextOptions, value: usize) -> Result<(TimeAxis, Option<usize>), TextError> {
        let start_s = options.start_s.or(self.header.start_s).unwrap_or(0.0);
        if let Some(interval_s) = options.interval_s {
            return Ok((TimeAxis::Even { start_s, interval_s }, None));
        }
        let stated = options.time_column.as_ref().map(|column| self.locate(column)).transpose()?;
        let rises = |c: &usize| self.kinds[*c] == Kind::Numbers && *c != value && rising(&self.sampled(*c));
        let column = stated.or_else(|| (0..value).rev().find(rises)).or_else(|| (value..self.kinds.len()).find(rises));
        let from_header = self.header.interval_s.map(|interval_s| TimeAxis::Even { start_s, interval_s });
        let column = match column {
            Some(column) => column,
            None => match (from_header.clone(), self.kinds.iter().position(|&kind| kind == Kind::Dates)) {
                (Some(axis), _) => return Ok((axis, None)),
                (None, Some(dates)) => dates,
                (None, None) => return Err(TextError::NoTime),
            },
        };
        let times = if self.kinds[column] == Kind::Dates {
            let times = self.column(column, |_, field| time_of_day_s(field))?;
            times.iter().map(|t| t - times[0]).collect()
        } else {
            self.column(column, |layout, field| layout.number(field))?
        };
        let unit = options.time_unit_s.or_else(|| self.header.time_factor(column));
        let counts = times.iter().enumerate().all(|(index, t)| t - times[0] == index as f64);
        if counts && unit.is_none() {
            // Numbers of samples, not times.
            return from_header.map(|axis| (axis, None)).ok_or(TextError::NoTime);
        }
        self.axis(times, unit.unwrap_or(1.0), column).map(|axis| (axis, Some(column)))
    }

    /// Even where the times lie on a straight line within what was printed, uneven else.
    fn axis(&self, mut times: Vec<f64>, unit_s: f64, column: usize) -> Result<TimeAxis, TextError> {
        let (first, last) = (times[0], times[times.len() - 1]);
        let interval = (last - first) / (times.len() - 1).max(1) as f64;
        let printed = self.printed_resolution(column).min(interval);
        let off = |(index, t): (usize, &f64)| (t - (first + interval * index as f64)).abs();
        let worst = times.iter().enumerate().map(off).fold(0.0, f64::max);
        if interval > 0.0 && worst <= (1.01 * printed).max(1e-3 * interval) {
            let stated = self.header.interval_s.filter(|stated| (stated / (interval * unit_s) - 1.0).abs() < 1e-3);
            return Ok(TimeAxis::Even { start_s: first * unit_s, interval_s: stated.unwrap_or(interval * unit_s) });
        }
        if let Some(before) = times.windows(2).position(|pair| pair[1] <= pair[0]) {
            return Err(TextError::Order { line: self.data[before + 1].number, column: column + 1 });
        }
        times.iter_mut().for_each(|t| *t *= unit_s);
        Ok(TimeAxis::Uneven(times))
    }

    /// Value of the last printed digit of a column, as most of its fields show it.
    fn printed_resolution(&self, column: usize) -> f64 {
        let stride = self.data.len() / 1000 + 1;
        let printed = self.data.iter().step_by(stride).filter_map(|line| {
            let fields = self.layout.fields(line.text);
            let field = fields.get(column)?;
            let date = field.rfind(':').map_or(*field, |at| &field[at + 1..]);
            let (mantissa, exponent) = date.split_once(['e', 'E']).unwrap_or((date, "0"));
            let decimals = mantissa.find(['.', ',']).map_or(0, |at| mantissa.len() - at - 1);
            let zero = !mantissa.contains(|c: char| c.is_ascii_digit() && c != '0');
            let power = exponent.parse::<i32>().ok()? - decimals as i32;
            (!zero).then(|| 10_f64.powi(power))
        });
        let mut printed: Vec<f64> = printed.collect();
        printed.sort_unstable_by(f64::total_cmp);
        printed.get(printed.len() / 2).copied().unwrap_or(0.0)
    }

    /// Every value of a column.
    fn column(&self, column: usize, read: impl Fn(Layout, &str) -> Option<f64>) -> Result<Vec<f64>, TextError> {
        let value = |line: &Line<'_>| {
            let mut found = None;
            self.layout.for_each_field(line.text, |index, field| {
                if index == column {
                    found = Some(field);
                }
            });
            let (line, column) = (line.number, column + 1);
            let field = found.unwrap_or_default();
            let not_a_number = || TextError::NotANumber { line, column, found: field.chars().take(40).collect() };
            let value = read(self.layout, field).ok_or_else(not_a_number)?;
            if is_reading(value) { Ok(value) } else { Err(TextError::NotAReading { line, column, value }) }
        };
        self.data.iter().map(value).collect()
    }

    /// Index of a stated column.
    fn locate(&self, column: &Column) -> Result<usize, TextError> {
        let found = match column {
            Column::Number(number) => number.checked_sub(1).filter(|&index| index < self.kinds.len()),
            Column::Name(name) => self.header.names.iter().position(|have| have.eq_ignore_ascii_case(name.trim())),
        };
        found.ok_or_else(|| TextError::NoSuchColumn {
            wanted: match column {
                Column::Number(number) => number.to_string(),
                Column::Name(name) => format!("{name:?}"),
            },
            present: self.present(),
        })
    }

    fn present(&self) -> String {
        let name = |index: usize| self.header.names.get(index).filter(|name| !name.is_empty());
        let one = |index: usize| name(index).map_or((index + 1).to_string(), |name| format!("{} ({name})", index + 1));
        (0..self.kinds.len()).map(one).collect::<Vec<_>>().join(", ")
    }
}

/// What each column holds, by nine lines of ten.
fn kinds(rows: &[&Line<'_>], layout: Layout) -> Vec<Kind> {
    let mut counts: Vec<[usize; 2]> = Vec::new();
    for line in rows {
        layout.for_each_field(line.text, |index, field| {
            if counts.len() <= index {
                counts.resize(index + 1, [0, 0]);
            }
            counts[index][0] += usize::from(layout.number(field).is_some());
            counts[index][1] += usize::from(time_of_day_s(field).is_some());
        });
    }
    let most = |count: usize| count > 0 && count * 10 >= rows.len() * 9;
    let kind = |[numbers, dates]: [usize; 2]| match () {
        () if most(numbers) => Kind::Numbers,
        () if most(dates) => Kind::Dates,
        () => Kind::Other,
    };
    let mut kinds: Vec<Kind> = counts.into_iter().map(kind).collect();
    while kinds.last() == Some(&Kind::Other) {
        kinds.pop();
    }
    kinds
}

/// Whether values never fall and rise over all.
fn rising(values: &[f64]) -> bool {
    values.windows(2).all(|pair| pair[1] >= pair[0]) && values.first() < values.last()
}
