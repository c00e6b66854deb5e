//! A link whose other side is a closure, for tests: answers after stated delays on tokio's clock, silence, late answers,
//! broken links.

use super::{Chunk, Link, LinkError, LinkErrorKind, Opener, Wire};
use std::{
    collections::VecDeque,
    sync::{Arc, Mutex, PoisonError},
    time::Duration,
};
use tokio::time::{Instant, sleep_until, timeout_at};

/// What the other side does on a message.
#[derive(Debug, Clone)]
pub enum Act {
    /// Sends these bytes after the delay.
    Answer(Duration, Vec<u8>),
    /// Breaks the link after the delay.
    Break(Duration),
}

impl Act {
    /// Sends a line at once.
    pub fn line(text: impl AsRef<str>) -> Vec<Self> {
        Self::late(Duration::ZERO, text)
    }

    /// Sends a line after the delay.
    pub fn late(delay: Duration, text: impl AsRef<str>) -> Vec<Self> {
        vec![Self::Answer(delay, format!("{}\n", text.as_ref()).into_bytes())]
    }
}

type Peer = Box<dyn FnMut(&str) -> Vec<Act> + Send>;

struct Shared {
    peer: Peer,
    received: Vec<String>,
    opened: usize,
    refusals: usize,
}

/// Opens links to one closure; clones share it.
#[derive(Clone)]
pub struct Scripted(Arc<Mutex<Shared>>);

impl Scripted {
    /// The closure is called with each message, without its newline, and says what comes back.
    pub fn new(peer: impl FnMut(&str) -> Vec<Act> + Send + 'static) -> Self {
        Self(Arc::new(Mutex::new(Shared { peer: Box::new(peer), received: Vec::new(), opened: 0, refusals: 0 })))
    }

    /// Refuses the next `count` attempts to open a link.
    pub fn refuse(&self, count: usize) {
        self.with(|shared| shared.refusals = count);
    }

    /// Every message so far, over all links.
    pub fn received(&self) -> Vec<String> {
        self.with(|shared| shared.received.clone())
    }

    /// How many links have been opened.
    pub fn opened(&self) -> usize {
        self.with(|shared| shared.opened)
    }

    fn with<T>(&self, action: impl FnOnce(&mut Shared) -> T) -> T {
        action(&mut self.0.lock().unwrap_or_else(PoisonError::into_inner))
    }
}

impl Opener for Scripted {
    fn address(&self) -> &str {
        "TCPIP::scripted::1::SOCKET"
    }

    fn open(&self, _deadline: Instant) -> Wire<'_, Box<dyn Link>> {
        let refused = self.with(|shared| {
            let refused = shared.refusals > 0;
            shared.refusals = shared.refusals.saturating_sub(1);
            shared.opened += usize::from(!refused);
            refused
        });
        let link = ScriptedLink { peer: self.clone(), partial: Vec::new(), arriving: VecDeque::new() };
        Box::pin(async move {
            if refused {
                Err(LinkError::new(LinkErrorKind::Refused, "open"))
            } else {
                Ok(Box::new(link) as Box<dyn Link>)
            }
        })
    }
}

struct ScriptedLink {
    peer: Scripted,
    partial: Vec<u8>,
    /// What arrives when; `None` is the end of the link.
    arriving: VecDeque<(Instant, Option<Vec<u8>>)>,
}

impl ScriptedLink {
    fn schedule(&mut self, act: Act) {
        let now = Instant::now();
        self.arriving.push_back(match act {
            Act::Answer(delay, bytes) => (now + delay, Some(bytes)),
            Act::Break(delay) => (now + delay, None),
        });
        self.arriving.make_contiguous().sort_by_key(|(at, _)| *at);
    }

    fn broken(&self) -> bool {
        matches!(self.arriving.front(), Some((at, None)) if *at <= Instant::now())
    }

    fn closed<T>() -> Result<T, LinkError> {
        Err(LinkError::new(LinkErrorKind::Closed, "the other side closed the link"))
    }
}

impl Link for ScriptedLink {
    fn write<'a>(&'a mut self, bytes: &'a [u8], _deadline: Instant) -> Wire<'a, ()> {
        Box::pin(async move {
            if self.broken() {
                return Self::closed();
            }
            self.partial.extend_from_slice(bytes);
            while let Some(end) = self.partial.iter().position(|byte| *byte == b'\n') {
                let message: Vec<u8> = self.partial.drain(..=end).collect();
                let message = String::from_utf8_lossy(&message[..end]).into_owned();
                let acts = self.peer.with(|shared| {
                    shared.received.push(message.clone());
                    (shared.peer)(&message)
                });
                acts.into_iter().for_each(|act| self.schedule(act));
            }
            Ok(())
        })
    }

    fn read(&mut self, deadline: Instant) -> Wire<'_, Chunk> {
        Box::pin(async move {
            let Some((at, _)) = self.arriving.front() else {
                sleep_until(deadline).await;
                return Err(LinkError::new(LinkErrorKind::Timeout, "read"));
            };
            if timeout_at(deadline, sleep_until(*at)).await.is_err() {
                return Err(LinkError::new(LinkErrorKind::Timeout, "read"));
            }
            if self.broken() {
                return Self::closed();
            }
            let bytes = self.arriving.pop_front().and_then(|(_, bytes)| bytes).unwrap_or_default();
            Ok(Chunk { bytes, end: false })
        })
    }

    fn take_arrived(&mut self) -> Wire<'_, Vec<u8>> {
        Box::pin(async move {
            let mut arrived = Vec::new();
            while let Some((at, Some(bytes))) = self.arriving.front() {
                if *at > Instant::now() {
                    break;
                }
                arrived.extend_from_slice(bytes);
                self.arriving.pop_front();
            }
            if arrived.is_empty() && self.broken() { Self::closed() } else { Ok(arrived) }
        })
    }

    fn close(&mut self) -> Wire<'_, ()> {
        Box::pin(async { Ok(()) })
    }
}
