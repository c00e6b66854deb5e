//! A line source behind a driver: its largest range from the start, so that no line voltage of a sweep needs the output
//! switched off in between.

use super::{
    Dialect, Exchange, Facts, Identity, InstrumentError, InstrumentErrorKind as Kind, OffSwitch, Source, SourceFacts,
    SourceReading,
};

/// A source that speaks a driver's dialect.
pub struct DialectSource {
    dialect: Dialect,
    facts: SourceFacts,
}

impl DialectSource {
    /// The source; refuses a driver for another role.
    pub fn new(dialect: Dialect) -> Result<Self, InstrumentError> {
        let Facts::Source(facts) = dialect.definition().facts.clone() else {
            return Err(
                dialect.error(Kind::NoDriver, format!("`{}` is not a driver for sources", dialect.definition().name))
            );
        };
        Ok(Self { dialect, facts })
    }

    /// What switches its output off.
    pub fn off_switch(&self) -> OffSwitch {
        self.dialect.off_switch("output")
    }

    fn largest_range_v(&self) -> f64 {
        self.facts.voltage_ranges_v.last().copied().unwrap_or_default()
    }

    async fn prepared(&self, current_limit_a: f64) -> Result<(), InstrumentError> {
        self.dialect.clear().await?;
        if self.dialect.word("output").await? != "off" {
            return Err(self.dialect.error(Kind::AlreadyOn, "its output is on before anything was asked of it"));
        }
        let range_v = self.largest_range_v();
        self.dialect.set_number_within("voltage", None, 0.0, 1e-3).await?;
        self.dialect.set_number_within("voltage_range", None, range_v, 1e-3 * range_v).await?;
        self.dialect.set_number_within("current_limit", None, current_limit_a, 0.01 * current_limit_a).await?;
        Ok(())
    }

    async fn line(&self, voltage_v: f64, frequency_hz: f64) -> Result<(), InstrumentError> {
        if !(0.0..=self.largest_range_v()).contains(&voltage_v) {
            let detail = format!("{voltage_v} V were asked for, its largest range is {} V", self.largest_range_v());
            return Err(self.dialect.error(Kind::OutOfRange, detail));
        }
        self.dialect.set_number_within("frequency", None, frequency_hz, 1e-3 * frequency_hz).await?;
        self.dialect.set_number_within("voltage", None, voltage_v, 1e-3 * self.largest_range_v()).await?;
        Ok(())
    }

    async fn reading(&self) -> Result<Option<SourceReading>, InstrumentError> {
        let voltage_v = self.dialect.number("measure_voltage", None).await?;
        let current_a = self.dialect.number("measure_current", None).await?;
        let power_w = Some(self.dialect.number("measure_power", None).await?);
        let condition = self.dialect.number("questionable_condition", None).await?;
        if !(0.0..=65535.0).contains(&condition) || condition.fract() != 0.0 {
            return Err(self.dialect.error(Kind::Unexpected, format!("{condition} is no condition register")));
        }
        let limiting = condition as u32 & self.facts.limiting_mask != 0;
        Ok(Some(SourceReading { voltage_v, current_a, power_w, limiting }))
    }
}

impl Source for DialectSource {
    fn identity(&self) -> &Identity {
        self.dialect.identity()
    }

    fn prepare(&mut self, current_limit_a: f64) -> Exchange<'_, ()> {
        Box::pin(self.prepared(current_limit_a))
    }

    fn set_line(&mut self, voltage_rms_v: f64, frequency_hz: f64) -> Exchange<'_, ()> {
        Box::pin(self.line(voltage_rms_v, frequency_hz))
    }

    fn on(&mut self) -> Exchange<'_, ()> {
        Box::pin(self.dialect.set_word("output", None, "on"))
    }

    fn off(&mut self) -> Exchange<'_, ()> {
        Box::pin(self.dialect.set_word("output", None, "off"))
    }

    fn read(&mut self) -> Exchange<'_, Option<SourceReading>> {
        Box::pin(self.reading())
    }
}
