//! The handle on one instrument: clones speak to the same owner task, which carries every exchange to its end or deadline
//! whoever stops waiting.

use super::{
    ScpiError, ScpiErrorKind,
    error::Failure,
    owner::{Ask, Owner, Reply, Request},
    response::{ErrorEntry, error_entry},
};
use crate::transport::{ExchangeLog, Opener};
use std::{sync::Arc, time::Duration};
use tokio::{
    sync::{Notify, mpsc, oneshot},
    time::Instant,
};

/// How to speak to one instrument.
#[derive(Debug, Clone)]
pub struct SessionOptions {
    /// Name used in messages and in the exchange log.
    pub name: String,
    /// What ends a message to the instrument; answers end with a newline, a carriage return before it is dropped.
    pub terminator: String,
    /// Longest wait for an answer.
    pub reply_timeout: Duration,
    /// Longest pause inside a block: a large transfer may take as long as it keeps moving.
    pub stall_timeout: Duration,
}

impl SessionOptions {
    /// A newline, two seconds for an answer, two seconds for a pause in a block.
    pub fn new(name: impl Into<String>) -> Self {
        let two_seconds = Duration::from_secs(2);
        Self { name: name.into(), terminator: "\n".to_owned(), reply_timeout: two_seconds, stall_timeout: two_seconds }
    }
}

/// What was in an error queue.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct DrainedErrors {
    /// The entries, oldest first.
    pub entries: Vec<ErrorEntry>,
    /// Whether the queue was empty at the end; `false` where the bound stopped the drain.
    pub emptied: bool,
}

/// Handle on one instrument.
#[derive(Clone)]
pub struct Session {
    requests: mpsc::Sender<Request>,
    abandon: Arc<Notify>,
    opener: Arc<dyn Opener>,
    log: ExchangeLog,
    options: Arc<SessionOptions>,
}

impl Session {
    /// Most entries of an error queue that one drain reads.
    pub const ERROR_BOUND: usize = 32;

    /// Opens the link and starts its owner task; the link closes when the last handle is dropped.
    pub async fn open(
        opener: Arc<dyn Opener>,
        options: SessionOptions,
        log: ExchangeLog,
    ) -> Result<Self, Box<ScpiError>> {
        let begun = Instant::now();
        let link = opener.open(begun + options.reply_timeout).await.map_err(|source| {
            let failure = Failure { kind: ScpiErrorKind::Unreachable, reply: None, source: Some(source) };
            located(&options, opener.address(), "", begun, failure)
        })?;
        let (requests, receiver) = mpsc::channel(16);
        let abandon = Arc::new(Notify::new());
        let options = Arc::new(options);
        let owner = Owner::new(link, opener.clone(), options.clone(), log.clone());
        tokio::spawn(owner.run(receiver, abandon.clone()));
        Ok(Self { requests, abandon, opener, log, options })
    }

    /// A second session to the same instrument over a fresh link, with its own patience.
    pub async fn fresh(&self, patience: Duration) -> Result<Self, Box<ScpiError>> {
        let options = SessionOptions { reply_timeout: patience, ..(*self.options).clone() };
        Self::open(self.opener.clone(), options, self.log.clone()).await
    }

    /// A handle on the same session with its own patience.
    pub fn with_timeouts(&self, reply_timeout: Duration, stall_timeout: Duration) -> Self {
        let options = SessionOptions { reply_timeout, stall_timeout, ..(*self.options).clone() };
        Self { options: Arc::new(options), ..self.clone() }
    }

    /// Closes the link and waits until it is closed; every other handle finds it lost.
    pub async fn close(self) {
        self.abandon();
        let _ = self.ask("", Ask::Closing, Duration::ZERO).await;
    }

    /// Name used in messages.
    pub fn name(&self) -> &str {
        &self.options.name
    }

    /// Address as the user wrote it.
    pub fn address(&self) -> &str {
        self.opener.address()
    }

    /// Sends a command that has no answer.
    pub async fn write(&self, command: &str) -> Result<(), Box<ScpiError>> {
        self.ask(command, Ask::Nothing, self.options.reply_timeout).await.map(|_| ())
    }

    /// Asks a question; the answer without its terminator.
    pub async fn query(&self, command: &str) -> Result<String, Box<ScpiError>> {
        self.query_within(command, self.options.reply_timeout).await
    }

    /// Asks a question that may take longer than usual, or must not.
    pub async fn query_within(&self, command: &str, patience: Duration) -> Result<String, Box<ScpiError>> {
        match self.ask(command, Ask::Line, patience).await? {
            Reply::Line(line) => Ok(line),
            _ => Err(self.error(command, Instant::now(), Failure::new(ScpiErrorKind::Garbled))),
        }
    }

    /// Asks for a definite-length block; the payload.
    pub async fn query_block(&self, command: &str) -> Result<Vec<u8>, Box<ScpiError>> {
        match self.ask(command, Ask::Block, self.options.reply_timeout).await? {
            Reply::Block(payload) => Ok(payload),
            _ => Err(self.error(command, Instant::now(), Failure::new(ScpiErrorKind::Garbled))),
        }
    }

    /// Waits until everything sent so far has been carried out (`*OPC?`).
    pub async fn opc(&self, patience: Duration) -> Result<(), Box<ScpiError>> {
        let begun = Instant::now();
        let answer = self.query_within("*OPC?", patience).await?;
        if super::response::integer(&answer) == Ok(1) {
            return Ok(());
        }
        Err(self.error("*OPC?", begun, Failure::with_reply(ScpiErrorKind::Garbled, answer.as_bytes())))
    }

    /// Reads the error queue until it is empty, or [`Session::ERROR_BOUND`] entries.
    pub async fn drain_errors(&self) -> Result<DrainedErrors, Box<ScpiError>> {
        const QUESTION: &str = "SYSTem:ERRor?";
        let mut entries = Vec::new();
        for _ in 0..Self::ERROR_BOUND {
            let begun = Instant::now();
            let answer = self.query(QUESTION).await?;
            match error_entry(&answer) {
                Some(entry) if entry.is_none() => return Ok(DrainedErrors { entries, emptied: true }),
                Some(entry) => entries.push(entry),
                None => {
                    let failure = Failure::with_reply(ScpiErrorKind::Garbled, answer.as_bytes());
                    return Err(self.error(QUESTION, begun, failure));
                }
            }
        }
        Ok(DrainedErrors { entries, emptied: false })
    }

    /// Opens the link again, with growing pauses, until the same instrument answers or the time is over. The caller says
    /// by calling that nothing dangerous depends on what was lost.
    pub async fn reconnect(&self, within: Duration) -> Result<(), Box<ScpiError>> {
        self.ask("", Ask::Reconnection, within).await.map(|_| ())
    }

    /// Gives the link up at once, whatever exchange is under way; it fails as lost.
    pub fn abandon(&self) {
        self.abandon.notify_one();
    }

    async fn ask(&self, command: &str, ask: Ask, patience: Duration) -> Result<Reply, Box<ScpiError>> {
        let begun = Instant::now();
        let (reply, answer) = oneshot::channel();
        let stall = self.options.stall_timeout;
        let request = Request { command: command.to_owned(), ask, patience, stall, reply };
        let answered = match self.requests.send(request).await {
            Ok(()) => answer.await.ok(),
            Err(_) => None,
        };
        // The owner lives as long as a handle does: it is gone only when its runtime is.
        let failed = answered.unwrap_or_else(|| Err(Failure::new(ScpiErrorKind::Lost)));
        failed.map_err(|failure| self.error(command, begun, failure))
    }

    fn error(&self, command: &str, begun: Instant, failure: Failure) -> Box<ScpiError> {
        located(&self.options, self.address(), command, begun, failure)
    }
}

fn located(options: &SessionOptions, address: &str, command: &str, begun: Instant, failure: Failure) -> Box<ScpiError> {
    Box::new(ScpiError {
        kind: failure.kind,
        instrument: options.name.clone(),
        address: address.to_owned(),
        command: command.to_owned(),
        reply: failure.reply,
        elapsed: begun.elapsed(),
        source: failure.source,
    })
}
