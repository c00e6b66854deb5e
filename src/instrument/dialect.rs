//! Speaks one instrument's dialect: fills templates, reads every setting back, and asks for errors after each step.

use super::{Definition, Identity, InstrumentError, InstrumentErrorKind as Kind};
use crate::scpi::{ScpiError, ScpiErrorKind, Session, response};
use std::{sync::Arc, time::Duration};
use tokio::time::{Instant, sleep, timeout};

/// An instrument reached through its session by the templates of its driver.
#[derive(Clone)]
pub struct Dialect {
    session: Session,
    definition: Arc<Definition>,
    identity: Identity,
}

impl Dialect {
    /// The dialect of the instrument at the other end of the session.
    pub fn new(session: Session, definition: Arc<Definition>, identity: Identity) -> Self {
        let identity = Identity { driver: definition.name.clone(), ..identity };
        Self { session, definition, identity }
    }

    /// Who it is.
    pub fn identity(&self) -> &Identity {
        &self.identity
    }

    pub(super) fn definition(&self) -> &Definition {
        &self.definition
    }

    /// What switches the output or input off, whatever becomes of this session.
    pub fn off_switch(&self, key: &'static str) -> OffSwitch {
        OffSwitch { dialect: self.clone(), key }
    }

    pub(super) fn error(&self, kind: Kind, detail: impl Into<String>) -> InstrumentError {
        let (instrument, address) = (self.session.name().to_owned(), self.session.address().to_owned());
        InstrumentError { kind, instrument, address, detail: detail.into(), source: None }
    }

    /// Empties status and error queue: what earlier users left there is not ours.
    pub(super) async fn clear(&self) -> Result<(), InstrumentError> {
        self.session.write("*CLS").await?;
        match self.session.drain_errors().await? {
            drained if drained.emptied => Ok(()),
            _ => Err(self.error(Kind::Reported, "its error queue does not empty")),
        }
    }

    /// Does something that has no answer.
    pub(super) async fn act(&self, key: &str) -> Result<(), InstrumentError> {
        self.send(&self.filled(key, Part::Set, None, "")?).await
    }

    /// Sets a number; what the instrument made of it.
    pub(super) async fn set_number(&self, key: &str, channel: Option<u8>, value: f64) -> Result<f64, InstrumentError> {
        self.send(&self.filled(key, Part::Set, channel, &decimal(value))?).await?;
        self.number(key, channel).await
    }

    /// Sets a number that must be taken to within `tolerance`.
    pub(super) async fn set_number_within(
        &self,
        key: &str,
        channel: Option<u8>,
        value: f64,
        tolerance: f64,
    ) -> Result<f64, InstrumentError> {
        let taken = self.set_number(key, channel, value).await?;
        if (taken - value).abs() <= tolerance {
            return Ok(taken);
        }
        let command = self.filled(key, Part::Set, channel, &decimal(value))?;
        Err(self.error(Kind::NotAsSet, format!("sent `{command}`, read back {taken}")))
    }

    /// Sets one of our words.
    pub(super) async fn set_word(&self, key: &str, channel: Option<u8>, word: &str) -> Result<(), InstrumentError> {
        let theirs = self.command(key)?.words.get(word).and_then(|words| words.first()).cloned();
        let theirs = theirs
            .ok_or_else(|| self.error(Kind::Unexpected, format!("the driver has no word `{word}` for `{key}`")))?;
        let command = self.filled(key, Part::Set, channel, &theirs)?;
        self.send(&command).await?;
        let taken = self.text(key, channel).await?;
        if self.means(key, &taken) == Some(word) {
            return Ok(());
        }
        Err(self.error(Kind::NotAsSet, format!("sent `{command}`, read back `{taken}`")))
    }

    /// Chooses a channel.
    pub(super) async fn set_channel(&self, key: &str, channel: u8) -> Result<(), InstrumentError> {
        let command = self.filled(key, Part::Set, Some(channel), "")?;
        self.send(&command).await?;
        let taken = self.text(key, Some(channel)).await?;
        if response::is_word(&self.filled(key, Part::Answer, Some(channel), "")?, &taken) {
            return Ok(());
        }
        Err(self.error(Kind::NotAsSet, format!("sent `{command}`, read back `{taken}`")))
    }

    /// Asks for a number.
    pub(super) async fn number(&self, key: &str, channel: Option<u8>) -> Result<f64, InstrumentError> {
        let answer = self.text(key, channel).await?;
        response::number(&answer).map_err(|error| {
            let command = self.filled(key, Part::Get, channel, "").unwrap_or_default();
            self.error(Kind::Unexpected, format!("asked `{command}`, and {error}"))
        })
    }

    /// Asks for one of our words.
    pub(super) async fn word(&self, key: &str) -> Result<&'static str, InstrumentError> {
        let answer = self.text(key, None).await?;
        self.means(key, &answer).ok_or_else(|| {
            let command = self.filled(key, Part::Get, None, "").unwrap_or_default();
            self.error(Kind::Unexpected, format!("asked `{command}`, got `{answer}`, which the driver does not know"))
        })
    }

    /// Asks for a text.
    pub(super) async fn text(&self, key: &str, channel: Option<u8>) -> Result<String, InstrumentError> {
        let question = self.filled(key, Part::Get, channel, "")?;
        let answer = self.session.query(&question).await;
        self.explained(&question, answer).await
    }

    /// Asks for a block.
    pub(super) async fn block(&self, key: &str) -> Result<Vec<u8>, InstrumentError> {
        let question = self.filled(key, Part::Get, None, "")?;
        let answer = self.session.query_block(&question).await;
        self.explained(&question, answer).await
    }

    /// An instrument that refuses a question stays silent and says why in its error queue.
    async fn explained<T>(&self, question: &str, answer: Result<T, Box<ScpiError>>) -> Result<T, InstrumentError> {
        match answer {
            Ok(answer) => Ok(answer),
            Err(error) => {
                if error.kind == ScpiErrorKind::NoAnswer
                    && let Err(reported) = self.no_errors(question).await
                    && reported.kind == Kind::Reported
                {
                    return Err(InstrumentError { source: Some(error), ..reported });
                }
                Err(error.into())
            }
        }
    }

    /// Refuses to go on where the instrument has put anything into its error queue.
    pub(super) async fn no_errors(&self, after: &str) -> Result<(), InstrumentError> {
        let drained = self.session.drain_errors().await?;
        if drained.entries.is_empty() && drained.emptied {
            return Ok(());
        }
        let shown: Vec<String> = drained.entries.iter().take(4).map(ToString::to_string).collect();
        let more = drained.entries.len() - shown.len();
        let rest = if more > 0 { format!(", and {more} more") } else { String::new() };
        Err(self.error(Kind::Reported, format!("after `{after}` it said {}{rest}", shown.join(", "))))
    }

    async fn send(&self, command: &str) -> Result<(), InstrumentError> {
        self.session.write(command).await?;
        self.no_errors(command).await
    }

    fn means(&self, key: &str, answer: &str) -> Option<&'static str> {
        let words = &self.definition.commands.get(key)?.words;
        let known = words.iter().find(|(_, theirs)| theirs.iter().any(|word| response::is_word(word, answer)));
        known.map(|(ours, _)| *ours)
    }

    fn command(&self, key: &str) -> Result<&super::Command, InstrumentError> {
        let command = self.definition.commands.get(key);
        command.ok_or_else(|| self.error(Kind::Unexpected, format!("the driver has no command `{key}`")))
    }

    fn filled(&self, key: &str, part: Part, channel: Option<u8>, value: &str) -> Result<String, InstrumentError> {
        let command = self.command(key)?;
        let template = match part {
            Part::Set => &command.set,
            Part::Get => &command.get,
            Part::Answer => &command.answer,
        };
        let template = template.as_ref();
        let template =
            template.ok_or_else(|| self.error(Kind::Unexpected, format!("the driver lacks a part of `{key}`")))?;
        let channel = channel.map(|channel| channel.to_string()).unwrap_or_default();
        Ok(template.replace("{channel}", &channel).replace("{value}", value).replace("{word}", value))
    }
}

#[derive(Clone, Copy)]
enum Part {
    Set,
    Get,
    Answer,
}

/// A number as instruments read it: whole numbers plainly, others with an exponent.
fn decimal(value: f64) -> String {
    if value.fract() == 0.0 && value.abs() < 1e9 { format!("{value:.0}") } else { format!("{value:E}") }
}

/// Switches one instrument off: through the session that is there, and where that fails over a fresh link.
#[derive(Clone)]
pub struct OffSwitch {
    dialect: Dialect,
    key: &'static str,
}

impl OffSwitch {
    /// Longest time for the session that is there.
    pub const LIVE: Duration = Duration::from_millis(250);
    /// Longest time for a fresh link.
    pub const FRESH: Duration = Duration::from_millis(450);

    /// Switches off and confirms it by reading back; ends within [`OffSwitch::LIVE`] + [`OffSwitch::FRESH`].
    pub async fn off(&self) -> Result<(), InstrumentError> {
        if let Ok(Ok(())) = timeout(Self::LIVE, self.confirm(&self.dialect)).await {
            return Ok(());
        }
        // Whatever exchange is under way would only be in the way of the fresh link.
        self.dialect.session.abandon();
        match timeout(Self::FRESH, self.over_fresh_link()).await {
            Ok(result) => result,
            Err(_) => Err(self.dialect.error(Kind::Unexpected, "switching off was not confirmed in time")),
        }
    }

    async fn over_fresh_link(&self) -> Result<(), InstrumentError> {
        const PAUSE: Duration = Duration::from_millis(20);
        let give_up = Instant::now() + Self::FRESH - 2 * PAUSE;
        let session = loop {
            match self.dialect.session.fresh(Self::FRESH - 2 * PAUSE).await {
                Ok(session) => break session,
                Err(error) if Instant::now() >= give_up => return Err(error.into()),
                // The old link may need a moment to let go of the line.
                Err(_) => sleep(PAUSE).await,
            }
        };
        self.confirm(&Dialect { session, ..self.dialect.clone() }).await
    }

    /// The command goes out before any question: an instrument that no longer answers may still obey.
    async fn confirm(&self, dialect: &Dialect) -> Result<(), InstrumentError> {
        let words = &dialect.command(self.key)?.words;
        let off = words.get("off").and_then(|words| words.first()).cloned().unwrap_or_default();
        let command = dialect.filled(self.key, Part::Set, None, &off)?;
        if let Ok(command) = dialect.filled("remote", Part::Set, None, "") {
            dialect.session.write(&command).await?;
        }
        dialect.session.write(&command).await?;
        let answer = dialect.text(self.key, None).await?;
        match dialect.means(self.key, &answer) {
            Some("off") => Ok(()),
            _ => Err(dialect.error(Kind::NotAsSet, format!("sent `{command}`, read back `{answer}`"))),
        }
    }
}
