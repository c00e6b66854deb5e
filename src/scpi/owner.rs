//! The task that owns one instrument's link: carries exchanges to their end, and opens the link again after a loss. How it
//! stays in step with its instrument is in `in_step`.

use super::{
    ScpiErrorKind, SessionOptions,
    block::{Parsed, parse_header},
    error::Failure,
    response::{integer, parse_line},
};
use crate::transport::{BlockNote, Direction, ExchangeLog, Link, LinkErrorKind, Opener};
use std::{sync::Arc, time::Duration};
use tokio::{
    sync::{Notify, mpsc, oneshot},
    time::{Instant, sleep},
};

/// What a request expects back.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Ask {
    Nothing,
    Line,
    Block,
    Reconnection,
    Closing,
}

pub(super) enum Reply {
    Done,
    Line(String),
    Block(Vec<u8>),
}

pub(super) struct Request {
    pub(super) command: String,
    pub(super) ask: Ask,
    /// Longest wait for an answer.
    pub(super) patience: Duration,
    /// Longest pause inside a block.
    pub(super) stall: Duration,
    pub(super) reply: oneshot::Sender<Result<Reply, Failure>>,
}

const FIRST_PAUSE: Duration = Duration::from_millis(20);
const LONGEST_PAUSE: Duration = Duration::from_secs(1);
pub(super) const IDENTITY: &str = "*IDN?";
pub(super) struct Owner {
    link: Option<Box<dyn Link>>,
    opener: Arc<dyn Opener>,
    options: Arc<SessionOptions>,
    log: ExchangeLog,
    pub(super) buffer: Vec<u8>,
    /// Questions whose answers may still come.
    pub(super) outstanding: Vec<String>,
    pub(super) out_of_step: bool,
    pub(super) identity: Option<String>,
    /// The last marker that was written.
    pub(super) marks: u8,
}

impl Owner {
    pub(super) fn new(
        link: Box<dyn Link>,
        opener: Arc<dyn Opener>,
        options: Arc<SessionOptions>,
        log: ExchangeLog,
    ) -> Self {
        let (buffer, outstanding) = (Vec::new(), Vec::new());
        Self {
            link: Some(link),
            opener,
            options,
            log,
            buffer,
            outstanding,
            out_of_step: false,
            identity: None,
            marks: 0,
        }
    }

    pub(super) async fn run(mut self, mut requests: mpsc::Receiver<Request>, abandon: Arc<Notify>) {
        loop {
            let request = tokio::select! {
                biased;
                () = abandon.notified() => {
                    self.lose("given up").await;
                    continue;
                }
                request = requests.recv() => request,
            };
            let Some(request) = request else { break };
            // Whoever asked stopped waiting before the exchange began: a command that was called off is not sent.
            if request.reply.is_closed() {
                continue;
            }
            let result = tokio::select! {
                biased;
                () = abandon.notified() => {
                    self.lose("given up").await;
                    Err(Failure::new(ScpiErrorKind::Lost))
                }
                result = self.serve(&request) => result,
            };
            let _ = request.reply.send(result);
        }
        self.lose("closed").await;
    }

    async fn serve(&mut self, request: &Request) -> Result<Reply, Failure> {
        match request.ask {
            Ask::Reconnection => {
                return self.reconnect(Instant::now() + request.patience).await.map(|()| Reply::Done);
            }
            Ask::Closing => {
                self.lose("closed").await;
                return Ok(Reply::Done);
            }
            Ask::Nothing | Ask::Line | Ask::Block => {}
        }
        if request.command.contains(['\n', '\r']) {
            return Err(Failure::new(ScpiErrorKind::Unsendable));
        }
        self.come_into_step(request.patience).await?;
        let result = self.exchange(request).await;
        if let Err(failure) = &result {
            self.remember(failure, &request.command);
        }
        result
    }

    /// After a failure: an answer may be under way, or the link is gone.
    fn remember(&mut self, failure: &Failure, command: &str) {
        match failure.kind {
            ScpiErrorKind::Lost => self.forget_link(),
            _ => {
                self.out_of_step = true;
                self.outstanding.push(command.to_owned());
            }
        }
    }

    async fn exchange(&mut self, request: &Request) -> Result<Reply, Failure> {
        let deadline = Instant::now() + request.patience;
        self.send(&request.command, deadline).await?;
        match request.ask {
            Ask::Line => self.read_line(deadline).await.map(Reply::Line),
            Ask::Block => self.read_block(deadline, request.stall).await.map(Reply::Block),
            Ask::Nothing | Ask::Reconnection | Ask::Closing => Ok(Reply::Done),
        }
        .inspect(|reply| self.learn_identity(&request.command, reply))
    }

    fn learn_identity(&mut self, command: &str, reply: &Reply) {
        if let (IDENTITY, Reply::Line(line), None) = (command, reply, &self.identity) {
            self.identity = Some(line.clone());
        }
    }

    pub(super) async fn send(&mut self, command: &str, deadline: Instant) -> Result<(), Failure> {
        self.log.message(&self.options.name, Direction::Sent, command.as_bytes());
        let message = format!("{command}{}", self.options.terminator);
        self.link()?.write(message.as_bytes(), deadline).await.map_err(Failure::from)
    }

    /// The next line that is not empty: an empty one is the newline that followed a block.
    pub(super) async fn read_line(&mut self, deadline: Instant) -> Result<String, Failure> {
        loop {
            match parse_line(&self.buffer) {
                Parsed::Complete { value: [], used } => drop(self.buffer.drain(..used)),
                Parsed::Complete { value, used } => {
                    let line = std::str::from_utf8(value).map(str::to_owned);
                    let garbled = Failure::with_reply(ScpiErrorKind::Garbled, value);
                    self.log.message(&self.options.name, Direction::Received, value);
                    self.buffer.drain(..used);
                    return line.map_err(|_| garbled);
                }
                Parsed::Malformed(_) => return Err(Failure::with_reply(ScpiErrorKind::Garbled, &self.buffer)),
                Parsed::Incomplete => {
                    if self.receive(deadline).await? && !self.buffer.is_empty() {
                        // The wire itself said that the message ends here.
                        self.buffer.push(b'\n');
                    }
                }
            }
        }
    }

    /// A block, for as long as it keeps moving.
    async fn read_block(&mut self, mut deadline: Instant, stall: Duration) -> Result<Vec<u8>, Failure> {
        let (header, length) = loop {
            let blank = self.buffer.iter().take_while(|byte| matches!(byte, b'\r' | b'\n')).count();
            self.buffer.drain(..blank);
            match parse_header(&self.buffer) {
                Parsed::Complete { value, used } => break (used, value.length),
                Parsed::Incomplete => self.receive(deadline).await?,
                Parsed::Malformed(_) => return Err(Failure::with_reply(ScpiErrorKind::Garbled, &self.buffer)),
            };
        };
        while self.buffer.len() < header + length {
            let before = self.buffer.len();
            deadline = deadline.max(Instant::now() + stall);
            if self.receive(deadline).await? && self.buffer.len() < header + length {
                return Err(Failure::with_reply(ScpiErrorKind::Garbled, &self.buffer[..header]));
            }
            if self.buffer.len() > before {
                deadline = Instant::now() + stall;
            }
        }
        let rest = self.buffer.split_off(header + length);
        let mut payload = std::mem::replace(&mut self.buffer, rest);
        self.log.block(&self.options.name, BlockNote::new(&payload[..header], &payload[header..]));
        payload.drain(..header);
        Ok(payload)
    }

    /// Waits for some bytes; whether the wire signalled the end of the message.
    pub(super) async fn receive(&mut self, deadline: Instant) -> Result<bool, Failure> {
        let link = self.link.as_mut().ok_or_else(|| Failure::new(ScpiErrorKind::Lost))?;
        match link.read(deadline).await {
            Ok(chunk) => {
                self.buffer.extend_from_slice(&chunk.bytes);
                Ok(chunk.end)
            }
            Err(error) if error.kind == LinkErrorKind::Timeout && !self.buffer.is_empty() => {
                let partial = Failure::with_reply(ScpiErrorKind::NoAnswer, &self.buffer);
                Err(Failure { source: Some(error), ..partial })
            }
            Err(error) => Err(error.into()),
        }
    }

    async fn reconnect(&mut self, deadline: Instant) -> Result<(), Failure> {
        self.lose("connecting again").await;
        let mut pause = FIRST_PAUSE;
        loop {
            let failure = match self.reopen(deadline).await {
                Ok(()) => return Ok(()),
                Err(failure) => failure,
            };
            self.forget_link();
            if failure.kind == ScpiErrorKind::OtherInstrument || Instant::now() + pause >= deadline {
                return Err(failure);
            }
            sleep(pause).await;
            pause = (2 * pause).min(LONGEST_PAUSE);
        }
    }

    async fn reopen(&mut self, deadline: Instant) -> Result<(), Failure> {
        let attempt = deadline.min(Instant::now() + self.options.reply_timeout);
        let opened = self.opener.open(attempt).await;
        self.link = Some(opened.map_err(|error| Failure {
            kind: ScpiErrorKind::Unreachable,
            reply: None,
            source: Some(error),
        })?);
        // On a serial line the rest of an old answer may still be coming.
        self.drop_until_quiet(attempt).await?;
        self.send(IDENTITY, attempt).await?;
        let line = self.read_line(attempt).await?;
        match &self.identity {
            Some(known) if !same_instrument(known, &line) => {
                Err(Failure::with_reply(ScpiErrorKind::OtherInstrument, line.as_bytes()))
            }
            _ => {
                self.identity.get_or_insert(line);
                self.note("connected again");
                Ok(())
            }
        }
    }

    pub(super) fn link(&mut self) -> Result<&mut Box<dyn Link>, Failure> {
        self.link.as_mut().ok_or_else(|| Failure::new(ScpiErrorKind::Lost))
    }

    async fn lose(&mut self, why: &str) {
        if let Some(mut link) = self.link.take() {
            let _ = tokio::time::timeout(FIRST_PAUSE, link.close()).await;
            self.note(why);
        }
        self.forget_link();
    }

    pub(super) fn forget_link(&mut self) {
        self.link = None;
        self.buffer.clear();
        self.outstanding.clear();
        self.out_of_step = false;
    }

    pub(super) fn note(&self, text: &str) {
        self.log.message(&self.options.name, Direction::Noted, text.as_bytes());
    }
}

/// Maker, model and serial number are the same; the firmware may have been updated.
fn same_instrument(known: &str, line: &str) -> bool {
    known.split(',').take(3).map(str::trim).eq(line.split(',').take(3).map(str::trim))
}
