//! Roles filled by hand: a variac without an interface, a resistor as load. The operator is asked, answers with what a
//! meter shows, and the answer is held against what was asked for.

use crate::instrument::{
    Exchange, Identity, InstrumentError, InstrumentErrorKind as Kind, Load, LoadReading, Source, SourceReading,
};
use std::{future::Future, pin::Pin, sync::Arc};

/// The person at the bench.
pub trait Operator: Send + Sync {
    /// Shows the prompt and waits for a line; `None` calls the work off.
    fn ask<'a>(&'a self, prompt: &'a str) -> Pin<Box<dyn Future<Output = Option<String>> + Send + 'a>>;
}

/// Largest share by which a value set by hand may miss what was asked for.
const TOLERANCE: f64 = 0.05;
/// Times a value is asked for before it is given up.
const ATTEMPTS: usize = 3;

struct Hand {
    operator: Arc<dyn Operator>,
    identity: Identity,
    role: &'static str,
}

impl Hand {
    fn new(operator: Arc<dyn Operator>, role: &'static str, description: String) -> Self {
        let identity = Identity {
            maker: String::new(),
            model: description,
            serial_number: String::new(),
            firmware: String::new(),
            driver: "by_hand".to_owned(),
            address: String::new(),
            simulated: false,
        };
        Self { operator, identity, role }
    }

    fn error(&self, kind: Kind, detail: impl Into<String>) -> InstrumentError {
        let instrument = format!("{} (`{}`)", self.role, self.identity.model);
        InstrumentError { kind, instrument, address: String::new(), detail: detail.into(), source: None }
    }

    async fn answer(&self, prompt: &str) -> Result<String, InstrumentError> {
        let answer = self.operator.ask(prompt).await;
        answer.ok_or_else(|| self.error(Kind::CalledOff, format!("asked `{prompt}`")))
    }

    /// Asks until the work is confirmed as done.
    async fn done(&self, prompt: &str) -> Result<(), InstrumentError> {
        for _ in 0..ATTEMPTS {
            let answer = self.answer(&format!("{prompt} Type `done` when it is.")).await?;
            if answer.trim().eq_ignore_ascii_case("done") {
                return Ok(());
            }
        }
        Err(self.error(Kind::CalledOff, format!("`{prompt}` was not confirmed")))
    }

    /// Asks until a number near the one wanted is answered.
    async fn near(&self, prompt: &str, wanted: f64, unit: &str) -> Result<f64, InstrumentError> {
        let mut hint = String::new();
        for _ in 0..ATTEMPTS {
            let answer = self.answer(&format!("{hint}{prompt}")).await?;
            match number(&answer, unit) {
                Some(value) if (value - wanted).abs() <= TOLERANCE * wanted.abs() => return Ok(value),
                Some(value) => hint = format!("{value} {unit} is not within 5 % of {wanted} {unit}. "),
                None => hint = format!("`{}` is not a number of {unit}. ", answer.trim()),
            }
        }
        Err(self.error(Kind::NotAsSet, format!("{hint}asked {ATTEMPTS} times")))
    }
}

/// A number in the answer, with or without its unit.
fn number(answer: &str, unit: &str) -> Option<f64> {
    let text = answer.trim();
    let text = text.strip_suffix(unit).unwrap_or(text).trim();
    text.parse().ok().filter(|value: &f64| value.is_finite())
}

/// A line source set by hand.
pub struct ByHandSource {
    hand: Hand,
    wanted: [f64; 2],
    on: bool,
}

impl ByHandSource {
    /// The source as the station file describes it.
    pub fn new(operator: Arc<dyn Operator>, description: String) -> Self {
        Self { hand: Hand::new(operator, "source", description), wanted: [0.0, 0.0], on: false }
    }

    async fn prepared(&mut self, current_limit_a: f64) -> Result<(), InstrumentError> {
        let what = &self.hand.identity.model;
        self.hand
            .done(&format!(
                "Switch `{what}` off and turn it to zero; its fuse or limit must not exceed {current_limit_a} A."
            ))
            .await?;
        self.on = false;
        Ok(())
    }

    async fn line(&mut self, voltage_v: f64, frequency_hz: f64) -> Result<(), InstrumentError> {
        self.wanted = [voltage_v, frequency_hz];
        if self.on { self.turned().await } else { Ok(()) }
    }

    async fn turned(&mut self) -> Result<(), InstrumentError> {
        let ([voltage_v, frequency_hz], what) = (self.wanted, &self.hand.identity.model);
        let prompt = format!(
            "Set `{what}` to {voltage_v} V, {frequency_hz} Hz, switched on. What rms voltage does your meter show, in V?"
        );
        self.hand.near(&prompt, voltage_v, "V").await?;
        self.on = true;
        Ok(())
    }

    async fn switched_off(&mut self) -> Result<(), InstrumentError> {
        let what = &self.hand.identity.model;
        self.hand.done(&format!("Turn `{what}` to zero and switch it off.")).await?;
        self.on = false;
        Ok(())
    }
}

impl Source for ByHandSource {
    fn identity(&self) -> &Identity {
        &self.hand.identity
    }

    fn prepare(&mut self, current_limit_a: f64) -> Exchange<'_, ()> {
        Box::pin(self.prepared(current_limit_a))
    }

    fn set_line(&mut self, voltage_rms_v: f64, frequency_hz: f64) -> Exchange<'_, ()> {
        Box::pin(self.line(voltage_rms_v, frequency_hz))
    }

    fn on(&mut self) -> Exchange<'_, ()> {
        Box::pin(self.turned())
    }

    fn off(&mut self) -> Exchange<'_, ()> {
        Box::pin(self.switched_off())
    }

    fn read(&mut self) -> Exchange<'_, Option<SourceReading>> {
        // A number typed once is no reading of now.
        Box::pin(async { Ok(None) })
    }
}

/// A load set by hand.
pub struct ByHandLoad {
    hand: Hand,
    drawing_a: Option<f64>,
}

impl ByHandLoad {
    /// The load as the station file describes it.
    pub fn new(operator: Arc<dyn Operator>, description: String) -> Self {
        Self { hand: Hand::new(operator, "load", description), drawing_a: None }
    }

    async fn switched_off(&mut self) -> Result<(), InstrumentError> {
        let what = &self.hand.identity.model;
        self.hand.done(&format!("Disconnect `{what}` from the output.")).await?;
        self.drawing_a = None;
        Ok(())
    }

    async fn drawn(&mut self, current_a: f64) -> Result<(), InstrumentError> {
        if current_a <= 0.0 {
            return self.switched_off().await;
        }
        let what = &self.hand.identity.model;
        self.hand.done(&format!("Connect `{what}` for a current of {current_a} A.")).await?;
        self.drawing_a = Some(current_a);
        Ok(())
    }

    async fn reading(&mut self) -> Result<LoadReading, InstrumentError> {
        let volts = self.hand.answer("What voltage stands at the load, in V?").await?;
        let voltage_v = number(&volts, "V").filter(|value| *value >= 0.0);
        let voltage_v =
            voltage_v.ok_or_else(|| self.hand.error(Kind::Unexpected, format!("`{volts}` is not a number of V")))?;
        let current_a = match self.drawing_a {
            Some(wanted_a) => self.hand.near("What current does it draw, in A?", wanted_a, "A").await?,
            None => 0.0,
        };
        Ok(LoadReading { voltage_v, current_a })
    }
}

impl Load for ByHandLoad {
    fn identity(&self) -> &Identity {
        &self.hand.identity
    }

    fn prepare(&mut self) -> Exchange<'_, ()> {
        Box::pin(self.switched_off())
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
