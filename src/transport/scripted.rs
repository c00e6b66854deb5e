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
    line: Line,
}

/// How the links of one peer depend on each other.
enum Line {
    /// Not at all, as sockets.
    Apart,
    /// One at a time, and nobody holds it; what is under way meets the next.
    Free(Arrivals),
    /// One at a time, and somebody holds it.
    Held,
}

/// What arrives when; `None` is the end of the link.
type Arrivals = VecDeque<(Instant, Option<Vec<u8>>)>;

/// Opens links to one closure; clones share it.
#[derive(Clone)]
pub struct Scripted(Arc<Mutex<Shared>>);

impl Scripted {
    /// The closure is called with each message, without its newline, and says what comes back.
    pub fn new(peer: impl FnMut(&str) -> Vec<Act> + Send + 'static) -> Self {
        Self(Arc::new(Mutex::new(Shared {
            peer: Box::new(peer),
            received: Vec::new(),
            opened: 0,
            refusals: 0,
            line: Line::Apart,
        })))
    }

    /// Like a serial line: one link at a time, and what is under way when it is closed arrives at the next.
    pub fn as_one_line(self) -> Self {
        self.with(|shared| shared.line = Line::Free(Arrivals::new()));
        self
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
        let arriving = self.with(|shared| {
            if shared.refusals > 0 {
                shared.refusals -= 1;
                return None;
            }
            let arriving = match &mut shared.line {
                Line::Apart => Arrivals::new(),
                Line::Held => return None,
                Line::Free(arriving) => {
                    let arriving = std::mem::take(arriving);
                    shared.line = Line::Held;
                    arriving
                }
            };
            shared.opened += 1;
            Some(arriving)
        });
        let link = arriving.map(|arriving| ScriptedLink { peer: self.clone(), partial: Vec::new(), arriving });
        Box::pin(async move {
            let link = link.ok_or_else(|| LinkError::new(LinkErrorKind::Refused, "open"))?;
            Ok(Box::new(link) as Box<dyn Link>)
        })
    }
}

struct ScriptedLink {
    peer: Scripted,
    partial: Vec<u8>,
    arriving: Arrivals,
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

impl Drop for ScriptedLink {
    fn drop(&mut self) {
        let arriving = std::mem::take(&mut self.arriving);
        self.peer.with(|shared| {
            if let Line::Held = shared.line {
                shared.line = Line::Free(arriving);
            }
        });
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
