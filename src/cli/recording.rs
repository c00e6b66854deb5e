//! A recording from a file: which decoder it needs, and what the command line says where the file does not.

use super::error::CliError;
use clap::Args;
use ringstep_analysis::{
    quantity::{Measured, Unit, parse_quantity},
    waveform::{
        Column, NpyOptions, Samples, SamplesError, TextOptions, TimeAxis, decode_npy, decode_text, parse_time_unit,
    },
};
use std::path::Path;

/// What the file does not say itself.
#[derive(Debug, Clone, Args)]
pub(crate) struct RecordingOptions {
    /// Column of the voltage, by name or by number from one; otherwise the one that swings most.
    #[arg(long, value_name = "NAME|N", value_parser = column)]
    column: Option<Column>,
    /// Column of the time, by name or by number from one.
    #[arg(long, value_name = "NAME|N", value_parser = column, conflicts_with = "interval")]
    time_column: Option<Column>,
    /// Unit of the time column, as us.
    #[arg(long, value_name = "UNIT", value_parser = time_unit)]
    time_unit: Option<f64>,
    /// Sample interval, in seconds or with its unit, as 4e-9 or "4 ns".
    #[arg(long, value_name = "S", value_parser = interval)]
    interval: Option<f64>,
    /// Time of the first sample, in seconds or with its unit.
    #[arg(long, value_name = "S", value_parser = seconds, allow_hyphen_values = true)]
    start: Option<f64>,
    /// Volts a unit of the file: volts = scale * sample + offset.
    #[arg(long, value_name = "X", default_value_t = 1.0, value_parser = finite, allow_hyphen_values = true)]
    scale: f64,
    /// Volts at sample value zero.
    #[arg(long, value_name = "X", default_value_t = 0.0, value_parser = finite, allow_hyphen_values = true)]
    offset: f64,
    /// Attenuation of a probe that the file does not account for.
    #[arg(long, value_name = "X", default_value_t = 1.0, value_parser = finite)]
    probe_factor: f64,
}

/// Samples and where in the file they came from.
#[derive(Debug)]
pub(crate) struct Recording {
    /// The samples.
    pub(crate) samples: Samples,
    origin: String,
}

impl Recording {
    /// Decodes the bytes of a file by what they are.
    pub(crate) fn decode(path: &Path, bytes: &[u8], options: &RecordingOptions) -> Result<Self, CliError> {
        let failed = |error: &dyn std::error::Error| CliError::Recording {
            path: path.display().to_string(),
            message: error.to_string(),
        };
        let (samples, origin) = if bytes.starts_with(b"\x93NUMPY") {
            (decode_npy(bytes, &options.for_array()?).map_err(|error| failed(&error))?, "array".to_owned())
        } else {
            let decoded = decode_text(bytes, &options.for_text()).map_err(|error| failed(&error))?;
            let samples = lifted(decoded.samples, options.offset * options.probe_factor);
            let name = decoded.value_name.map(|name| format!(" \"{name}\"")).unwrap_or_default();
            (samples.map_err(|error| failed(&error))?, format!("column {}{name}", decoded.value_column))
        };
        Ok(Self { samples, origin: format!("{}, {origin}", path.display()) })
    }

    /// One line on what was read.
    pub(crate) fn describe(&self) -> String {
        let text = |value| Measured::exact(value).text_with_standard_uncertainty(Unit::Second);
        let samples = &self.samples;
        let (count, interval) = (samples.volts().len(), text(samples.mean_interval_s()));
        let apart = match samples.time() {
            TimeAxis::Even { .. } => "apart",
            TimeAxis::Uneven(_) => "apart on average",
        };
        format!("{}: {count} samples, {interval} {apart}, from {} on", self.origin, text(samples.start_s()))
    }
}

impl RecordingOptions {
    fn for_text(&self) -> TextOptions {
        TextOptions {
            time_column: self.time_column.clone(),
            value_column: self.column.clone(),
            factor: self.scale * self.probe_factor,
            interval_s: self.interval,
            start_s: self.start,
            time_unit_s: self.time_unit,
        }
    }

    fn for_array(&self) -> Result<NpyOptions, CliError> {
        let wanted = |what: &str| CliError::Usage(format!("an array file holds no times or names: {what}"));
        let interval_s = self.interval.ok_or_else(|| wanted("state --interval"))?;
        if self.time_column.is_some() || self.time_unit.is_some() {
            return Err(wanted("--time-column and --time-unit mean nothing here"));
        }
        let column = match &self.column {
            Some(Column::Name(_)) => return Err(wanted("give --column by its number")),
            Some(Column::Number(number)) => Some(*number),
            None => None,
        };
        Ok(NpyOptions {
            interval_s,
            start_s: self.start.unwrap_or(0.0),
            scale: self.scale * self.probe_factor,
            offset: self.offset * self.probe_factor,
            column,
        })
    }
}

/// The samples with a voltage added.
fn lifted(samples: Samples, offset_v: f64) -> Result<Samples, SamplesError> {
    if offset_v == 0.0 {
        return Ok(samples);
    }
    let volts = samples.volts().iter().map(|volts| volts + offset_v).collect();
    Samples::new(samples.time().clone(), volts)?.with_range(samples.step_v(), None)
}

fn column(text: &str) -> Result<Column, String> {
    match text.parse::<usize>() {
        Ok(0) => Err("columns are counted from one".to_owned()),
        Ok(number) => Ok(Column::Number(number)),
        Err(_) => Ok(Column::Name(text.to_owned())),
    }
}

fn time_unit(text: &str) -> Result<f64, String> {
    parse_time_unit(text).ok_or_else(|| "expected a unit of time, as s, ms, us or ns".to_owned())
}

fn seconds(text: &str) -> Result<f64, String> {
    match text.trim().parse::<f64>() {
        Ok(seconds) if seconds.is_finite() => Ok(seconds),
        _ => parse_quantity(text, Unit::Second).map(|time| time.value).map_err(|error| error.to_string()),
    }
}

fn interval(text: &str) -> Result<f64, String> {
    seconds(text)
        .and_then(|seconds| if seconds > 0.0 { Ok(seconds) } else { Err("an interval is positive".to_owned()) })
}

fn finite(text: &str) -> Result<f64, String> {
    let value = text.trim().parse::<f64>().ok().filter(|value| value.is_finite());
    value.ok_or_else(|| "expected a number".to_owned())
}
