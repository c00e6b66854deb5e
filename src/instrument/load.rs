//! A programmable load behind a driver: constant current, always in the smallest range that holds it, since a load's error
//! is a share of its range.

use super::{
    Dialect, Exchange, Facts, Identity, InstrumentError, InstrumentErrorKind as Kind, Load, LoadFacts, LoadReading,
    OffSwitch,
};

/// A load that speaks a driver's dialect.
pub struct DialectLoad {
    dialect: Dialect,
    facts: LoadFacts,
    range_a: f64,
    current_a: f64,
    on: bool,
}

impl DialectLoad {
    /// The load; refuses a driver for another role.
    pub fn new(dialect: Dialect) -> Result<Self, InstrumentError> {
        let Facts::Load(facts) = dialect.definition().facts.clone() else {
            return Err(
                dialect.error(Kind::NoDriver, format!("`{}` is not a driver for loads", dialect.definition().name))
            );
        };
        Ok(Self { dialect, facts, range_a: f64::NAN, current_a: 0.0, on: false })
    }

    /// What switches its input off.
    pub fn off_switch(&self) -> OffSwitch {
        self.dialect.off_switch("input")
    }

    async fn prepared(&mut self) -> Result<(), InstrumentError> {
        self.dialect.clear().await?;
        self.dialect.act("remote").await?;
        self.switched_off().await?;
        self.dialect.set_word("function", None, "constant_current").await?;
        self.set_current(0.0).await
    }

    async fn switched_off(&mut self) -> Result<(), InstrumentError> {
        self.dialect.set_word("input", None, "off").await?;
        self.on = false;
        Ok(())
    }

    async fn drawn(&mut self, current_a: f64) -> Result<(), InstrumentError> {
        if current_a < self.facts.smallest_current_a {
            return self.switched_off().await;
        }
        let largest_a = self.facts.current_ranges_a.last().copied().unwrap_or_default();
        let range_a = self.facts.current_ranges_a.iter().copied().find(|range_a| *range_a >= current_a);
        let range_a = range_a.ok_or_else(|| {
            self.dialect
                .error(Kind::OutOfRange, format!("{current_a} A were asked for, its largest range is {largest_a} A"))
        })?;
        // A range must hold the current that is set at every moment.
        if range_a >= self.current_a {
            self.set_range(range_a).await?;
            self.set_current(current_a).await?;
        } else {
            self.set_current(current_a).await?;
            self.set_range(range_a).await?;
        }
        if !self.on {
            self.dialect.set_word("input", None, "on").await?;
            self.on = true;
        }
        Ok(())
    }

    async fn set_range(&mut self, range_a: f64) -> Result<(), InstrumentError> {
        if range_a != self.range_a {
            self.dialect.set_number_within("current_range", None, range_a, 1e-3 * range_a).await?;
            self.range_a = range_a;
        }
        Ok(())
    }

    async fn set_current(&mut self, current_a: f64) -> Result<(), InstrumentError> {
        let tolerance_a = self.facts.smallest_current_a.max(1e-3 * current_a);
        self.current_a = self.dialect.set_number_within("current", None, current_a, tolerance_a).await?;
        Ok(())
    }

    async fn reading(&self) -> Result<LoadReading, InstrumentError> {
        let voltage_v = self.dialect.number("measure_voltage", None).await?;
        let current_a = self.dialect.number("measure_current", None).await?;
        Ok(LoadReading { voltage_v, current_a })
    }
}

impl Load for DialectLoad {
    fn identity(&self) -> &Identity {
        self.dialect.identity()
    }

    fn prepare(&mut self) -> Exchange<'_, ()> {
        Box::pin(self.prepared())
    }

    fn draw(&mut self, current_a: f64) -> Exchange<'_, ()> {
        Box::pin(self.drawn(current_a))
    }

    fn off(&mut self) -> Exchange<'_, ()> {
        Box::pin(self.switched_off())
    }

    fn read(&mut self) -> Exchange<'_, LoadReading> {
        Box::pin(self.reading())
    }
}
