//! A scope behind a driver: settings read back, an armed state that is proved, and a record that is proved to be new,
//! complete, and the one promised.

use super::{
    Converter, Dialect, Exchange, Facts, Horizontal, Identity, InstrumentError, InstrumentErrorKind as Kind,
    PreambleField, RawWaveform, SampleFormat, Scope, ScopeFacts, Slope, Timing, Trigger, Vertical,
};
use crate::scpi::response;
use std::time::Duration;
use tokio::time::{Instant, sleep};

/// Longest wait for the armed state.
const ARMING: Duration = Duration::from_secs(2);
const POLL: Duration = Duration::from_millis(2);

/// A scope that speaks a driver's dialect.
pub struct DialectScope {
    dialect: Dialect,
    facts: ScopeFacts,
    converter: Converter,
    channel: u8,
    /// Volts a division, once set.
    scale_v: f64,
    promised: Option<Timing>,
    /// Acquisitions completed before arming.
    armed_at: Option<u64>,
}

impl DialectScope {
    /// The scope; refuses a driver for another role, or one that does not know the model's converter.
    pub fn new(dialect: Dialect) -> Result<Self, InstrumentError> {
        let Facts::Scope(facts) = dialect.definition().facts.clone() else {
            return Err(
                dialect.error(Kind::NoDriver, format!("`{}` is not a driver for scopes", dialect.definition().name))
            );
        };
        let model = &dialect.identity().model;
        let converter = facts.converters.iter().find(|converter| converter.model.is_match(model)).cloned();
        let converter = converter.ok_or_else(|| {
            let name = &dialect.definition().name;
            dialect.error(Kind::NoDriver, format!("`{name}` states no converter for the model `{model}`"))
        })?;
        Ok(Self { dialect, facts, converter, channel: 1, scale_v: 0.0, promised: None, armed_at: None })
    }

    async fn prepared(&mut self, channel: u8, probe_factor: f64) -> Result<(), InstrumentError> {
        if channel == 0 || channel > self.facts.channels {
            let detail = format!("channel {channel} was asked for, it has {}", self.facts.channels);
            return Err(self.dialect.error(Kind::OutOfRange, detail));
        }
        self.channel = channel;
        let dialect = &self.dialect;
        dialect.clear().await?;
        dialect.act("stop").await?;
        dialect.set_word("acquire_type", None, "normal").await?;
        dialect.set_word("display", Some(channel), "on").await?;
        for other in (1..=self.facts.channels).filter(|other| *other != channel) {
            dialect.set_word("display", Some(other), "off").await?;
        }
        dialect.set_number_within("probe", Some(channel), probe_factor, probe_factor * 1e-6).await?;
        dialect.set_word("coupling", Some(channel), "dc").await?;
        dialect.set_word("bandwidth_limit", Some(channel), "off").await?;
        dialect.set_word("trigger_mode", None, "edge").await?;
        dialect.set_channel("trigger_source", channel).await?;
        dialect.set_word("trigger_sweep", None, "normal").await?;
        dialect.set_channel("waveform_source", channel).await?;
        let format = if self.converter.words { "word" } else { "byte" };
        dialect.set_word("waveform_format", None, format).await?;
        dialect.set_word("waveform_byte_order", None, "most_significant_first").await?;
        dialect.set_word("waveform_unsigned", None, "on").await
    }

    async fn vertical(&mut self, wanted: Vertical) -> Result<Vertical, InstrumentError> {
        let channel = Some(self.channel);
        let divisions = self.facts.vertical_divisions;
        let centre_v = (wanted.bottom_v + wanted.top_v) / 2.0;
        let mut scale_v = (wanted.top_v - wanted.bottom_v) / divisions;
        // A scope may round to its own steps, and then not up: ask for more until the range holds what is wanted.
        for _ in 0..8 {
            let taken_v = self.dialect.set_number("scale", channel, scale_v).await?;
            let offset_v = self.dialect.set_number_within("offset", channel, centre_v, taken_v).await?;
            let half_v = taken_v * divisions / 2.0;
            let set = Vertical { bottom_v: offset_v - half_v, top_v: offset_v + half_v };
            let slack_v = 1e-6 * half_v;
            if set.bottom_v <= wanted.bottom_v + slack_v && set.top_v >= wanted.top_v - slack_v {
                self.scale_v = taken_v;
                return Ok(set);
            }
            scale_v *= 1.3;
        }
        let detail = format!("no vertical range from {} V to {} V", wanted.bottom_v, wanted.top_v);
        Err(self.dialect.error(Kind::NotAsSet, detail))
    }

    async fn horizontal(&mut self, wanted: Horizontal) -> Result<Timing, InstrumentError> {
        let all = f64::from(self.facts.memory_points);
        let mut points = wanted.interval_s.map_or(all, |interval_s| (wanted.window_s / interval_s).ceil().min(all));
        loop {
            let timing = self.timing(wanted, points).await?;
            // The window may have been widened and the memory rounded: ask for more until the interval is short enough.
            if points >= all || wanted.interval_s.is_none_or(|longest_s| timing.interval_s <= 1.001 * longest_s) {
                self.promised = Some(timing);
                return Ok(timing);
            }
            points = (3.0 * points).min(all);
        }
    }

    async fn timing(&mut self, wanted: Horizontal, points: f64) -> Result<Timing, InstrumentError> {
        let dialect = &self.dialect;
        dialect.set_number("points", None, points).await?;
        let divisions = self.facts.horizontal_divisions;
        let mut scale_s = wanted.window_s / divisions;
        let mut window_s = 0.0;
        for _ in 0..8 {
            window_s = dialect.set_number("time_scale", None, scale_s).await? * divisions;
            if window_s >= wanted.window_s * (1.0 - 1e-6) {
                break;
            }
            scale_s *= 1.3;
        }
        if window_s < wanted.window_s * (1.0 - 1e-6) {
            return Err(dialect.error(Kind::NotAsSet, format!("no window of {} s", wanted.window_s)));
        }
        let centre_s = wanted.start_s + window_s / 2.0;
        dialect.set_number_within("time_position", None, centre_s, 0.02 * window_s).await?;
        // Asked again: the depth in use follows from the window.
        let points = dialect.number("points", None).await?;
        let rate_hz = dialect.number("sample_rate", None).await?;
        if !(points >= 2.0 && points.fract() == 0.0 && rate_hz > 0.0) {
            let detail = format!("it promises {points} points at {rate_hz} samples a second");
            return Err(dialect.error(Kind::Unexpected, detail));
        }
        if points / rate_hz < 0.98 * window_s {
            let detail = format!("{points} points at {rate_hz} samples a second don't fill the window of {window_s} s");
            return Err(dialect.error(Kind::WrongRecord, detail));
        }
        Ok(Timing { interval_s: 1.0 / rate_hz, points: points as usize })
    }

    async fn trigger(&mut self, wanted: Trigger) -> Result<(), InstrumentError> {
        let dialect = &self.dialect;
        let slope = match wanted.slope {
            Slope::Rising => "rising",
            Slope::Falling => "falling",
        };
        dialect.set_word("trigger_slope", None, slope).await?;
        let level_tolerance_v = 0.1 * self.scale_v + 1e-3 * wanted.level_v.abs();
        dialect.set_number_within("trigger_level", None, wanted.level_v, level_tolerance_v).await?;
        let holdoff_tolerance_s = 0.01 * wanted.holdoff_s + 100e-9;
        dialect.set_number_within("trigger_holdoff", None, wanted.holdoff_s, holdoff_tolerance_s).await?;
        Ok(())
    }

    async fn acquisitions(&self) -> Result<u64, InstrumentError> {
        let count = self.dialect.number("acquisitions", None).await?;
        if count >= 0.0 && count.fract() == 0.0 {
            return Ok(count as u64);
        }
        Err(self.dialect.error(Kind::Unexpected, format!("{count} acquisitions is no count")))
    }

    async fn armed(&mut self) -> Result<(), InstrumentError> {
        self.dialect.act("stop").await?;
        let before = self.acquisitions().await?;
        self.armed_at = None;
        self.dialect.act("single").await?;
        let begun = Instant::now();
        loop {
            let status = self.dialect.word("trigger_status").await?;
            // A fast trigger may have come and gone already; then the count tells.
            if status == "armed" || status == "stopped" && self.acquisitions().await? > before {
                self.armed_at = Some(before);
                return Ok(());
            }
            if status == "free_running" || begun.elapsed() > ARMING {
                return Err(self.dialect.error(Kind::NotArmed, format!("its trigger is `{status}` after arming")));
            }
            sleep(POLL).await;
        }
    }

    async fn complete(&self) -> Result<bool, InstrumentError> {
        let Some(before) = self.armed_at else { return Ok(false) };
        Ok(self.acquisitions().await? > before && self.dialect.number("complete", None).await? >= 100.0)
    }

    async fn record(&mut self) -> Result<RawWaveform, InstrumentError> {
        let dialect = &self.dialect;
        let (Some(before), Some(promised)) = (self.armed_at, self.promised) else {
            return Err(dialect.error(Kind::NotNew, "it was not armed since its window was set"));
        };
        let acquisition = self.acquisitions().await?;
        if acquisition <= before {
            return Err(dialect.error(Kind::NotNew, format!("{acquisition} acquisitions, as before it was armed")));
        }
        let complete = dialect.number("complete", None).await?;
        if complete < 100.0 {
            return Err(dialect.error(Kind::Incomplete, format!("{complete} % of it are there")));
        }
        let preamble = dialect.text("waveform_preamble", None).await?;
        let scale = self.scale(&preamble, promised)?;
        let payload = dialect.block("waveform_data").await?;
        dialect.no_errors("waveform_data").await?;
        let expected = promised.points * if self.converter.words { 2 } else { 1 };
        if payload.len() != expected {
            let detail = format!("{} bytes came, {} points need {expected}", payload.len(), promised.points);
            return Err(dialect.error(Kind::WrongRecord, detail));
        }
        if self.acquisitions().await? != acquisition {
            return Err(dialect.error(Kind::NotNew, "it acquired again while the record was read"));
        }
        Ok(RawWaveform { payload, acquisition, ..scale })
    }

    /// Scale and promise of a preamble; the payload is still to come.
    fn scale(&self, preamble: &str, promised: Timing) -> Result<RawWaveform, InstrumentError> {
        let wrong = |detail: String| self.dialect.error(Kind::WrongRecord, format!("{detail}, preamble `{preamble}`"));
        let fields: Vec<&str> = preamble.split(',').collect();
        if fields.len() != self.facts.preamble.len() {
            return Err(wrong(format!("{} fields instead of {}", fields.len(), self.facts.preamble.len())));
        }
        let field = |wanted: PreambleField| {
            let place = self.facts.preamble.iter().position(|field| *field == wanted);
            let text = place.and_then(|place| fields.get(place)).copied().unwrap_or_default();
            response::number(text).map_err(|error| wrong(error.to_string()))
        };
        if field(PreambleField::Type)? != self.facts.plain_type {
            return Err(wrong("averaged or peak-detect data, not plain samples".to_owned()));
        }
        if field(PreambleField::Format)? != self.converter.preamble_format {
            return Err(wrong("another sample format than was set".to_owned()));
        }
        let points = field(PreambleField::Points)?;
        if points != promised.points as f64 {
            return Err(wrong(format!("{points} points instead of {}", promised.points)));
        }
        let interval_s = field(PreambleField::XIncrement)?;
        if (interval_s - promised.interval_s).abs() > 1e-4 * promised.interval_s {
            return Err(wrong(format!("sample interval {interval_s} s instead of {} s", promised.interval_s)));
        }
        let volts_per_code = field(PreambleField::YIncrement)?;
        if volts_per_code <= 0.0 {
            return Err(wrong(format!("{volts_per_code} V a code")));
        }
        Ok(RawWaveform {
            payload: Vec::new(),
            format: if self.converter.words { SampleFormat::U16Be } else { SampleFormat::U8 },
            volts_per_code,
            volts_origin: field(PreambleField::YOrigin)?,
            code_reference: field(PreambleField::YReference)?,
            interval_s,
            time_origin_s: field(PreambleField::XOrigin)?,
            index_reference: field(PreambleField::XReference)?,
            clip_codes: self.converter.clip_codes,
            acquisition: 0,
            preamble: preamble.to_owned(),
        })
    }
}

impl Scope for DialectScope {
    fn identity(&self) -> &Identity {
        self.dialect.identity()
    }

    fn prepare(&mut self, channel: u8, probe_factor: f64) -> Exchange<'_, ()> {
        Box::pin(self.prepared(channel, probe_factor))
    }

    fn set_vertical(&mut self, wanted: Vertical) -> Exchange<'_, Vertical> {
        Box::pin(self.vertical(wanted))
    }

    fn set_horizontal(&mut self, wanted: Horizontal) -> Exchange<'_, Timing> {
        Box::pin(self.horizontal(wanted))
    }

    fn set_trigger(&mut self, wanted: Trigger) -> Exchange<'_, ()> {
        Box::pin(self.trigger(wanted))
    }

    fn arm(&mut self) -> Exchange<'_, ()> {
        Box::pin(self.armed())
    }

    fn is_complete(&mut self) -> Exchange<'_, bool> {
        Box::pin(self.complete())
    }

    fn read(&mut self) -> Exchange<'_, RawWaveform> {
        Box::pin(self.record())
    }

    fn stop(&mut self) -> Exchange<'_, ()> {
        Box::pin(self.dialect.act("stop"))
    }
}
