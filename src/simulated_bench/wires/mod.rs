//! The instruments' ends of the wires: sockets and a pseudo-terminal. Both carry program messages that end in a newline and
//! response messages; the conversation is the same on either.

mod serial;
mod tcp;

pub use serial::SerialWire;
pub use tcp::TcpWire;

use crate::{
    faults::{FaultKind, FaultPlan},
    instruments::{Instrument, ScpiError},
};
use std::{
    io,
    sync::{Arc, Mutex, PoisonError},
};
use tokio::{
    io::{AsyncRead, AsyncReadExt, AsyncWrite, AsyncWriteExt},
    sync::watch,
    task,
};

/// Longest program message.
const INPUT_BUFFER: usize = 4096;

/// An instrument behind its wire, with what goes wrong there.
#[derive(Clone)]
pub struct Port {
    instrument: Arc<Mutex<dyn Instrument>>,
    faults: Arc<Mutex<FaultPlan>>,
    gone: watch::Sender<bool>,
}

/// Why a conversation ended.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Ended {
    /// The client left, or the link was dropped on purpose.
    Closed,
    /// The instrument is gone for good.
    Gone,
}

impl Port {
    /// A port for an instrument.
    pub fn new(instrument: Arc<Mutex<dyn Instrument>>, faults: FaultPlan) -> Self {
        Self { instrument, faults: Arc::new(Mutex::new(faults)), gone: watch::Sender::new(false) }
    }

    /// Becomes true when the instrument is gone for good.
    fn gone(&self) -> watch::Receiver<bool> {
        self.gone.subscribe()
    }

    /// Lets the instrument work, on a thread that may be busy for a while.
    async fn work<T: Send + 'static>(&self, work: impl FnOnce(&mut dyn Instrument) -> T + Send + 'static) -> Option<T> {
        let instrument = Arc::clone(&self.instrument);
        let work = move || work(&mut *instrument.lock().unwrap_or_else(PoisonError::into_inner));
        task::spawn_blocking(work).await.ok()
    }

    /// Lets the instrument do what its time has come for.
    pub async fn service(&self) {
        self.work(|instrument| instrument.service()).await;
    }

    fn next_fault(&self) -> Option<FaultKind> {
        self.faults.lock().unwrap_or_else(PoisonError::into_inner).next_message()
    }
}

/// Talks with one client until it leaves or the instrument does.
async fn converse(stream: &mut (impl AsyncRead + AsyncWrite + Unpin), port: &Port) -> Ended {
    let mut gone = port.gone();
    let talked = tokio::select! {
        talked = exchange(stream, port) => talked,
        _ = gone.wait_for(|gone| *gone) => Ok(Ended::Gone),
    };
    talked.unwrap_or(Ended::Closed)
}

async fn exchange(stream: &mut (impl AsyncRead + AsyncWrite + Unpin), port: &Port) -> io::Result<Ended> {
    let mut input = Input::default();
    loop {
        let Some(message) = input.next_message() else {
            if !input.read(stream, port).await? {
                return Ok(Ended::Closed);
            }
            continue;
        };
        let fault = port.next_fault();
        match fault {
            Some(FaultKind::Drop) => return Ok(Ended::Closed),
            Some(FaultKind::Gone) => {
                port.gone.send_replace(true);
                return Ok(Ended::Gone);
            }
            Some(FaultKind::Silent) => continue,
            Some(FaultKind::Garbage | FaultKind::Truncate) | None => {}
        }
        let Some(mut response) = port.work(move |instrument| instrument.message(&message)).await else {
            return Ok(Ended::Gone);
        };
        if !response.is_empty() && input.has_message() {
            // The next message came before this response was read: IEEE 488.2, 6.3.2.3.
            port.work(|instrument| instrument.report(ScpiError::interrupted(""))).await;
            continue;
        }
        match fault {
            Some(FaultKind::Garbage) => response = garbage(response.len()),
            Some(FaultKind::Truncate) => response.truncate(response.len() / 2),
            _ => {}
        }
        stream.write_all(&response).await?;
        stream.flush().await?;
    }
}

/// Nonsense of some length that no one could take for an answer.
fn garbage(length: usize) -> Vec<u8> {
    let nonsense = (0..length.max(8) - 1).map(|at| 0x80 | (at as u8).wrapping_mul(37) | 1);
    nonsense.chain([b'\n']).collect()
}

/// What has come in and is not yet executed.
#[derive(Debug, Default)]
struct Input {
    bytes: Vec<u8>,
    /// The rest of a message that was too long is passed over.
    skipping: bool,
}

impl Input {
    fn has_message(&self) -> bool {
        self.bytes.contains(&b'\n')
    }

    /// Takes a complete message, without its newline.
    fn next_message(&mut self) -> Option<Vec<u8>> {
        let end = self.bytes.iter().position(|byte| *byte == b'\n')?;
        let mut message: Vec<u8> = self.bytes.drain(..=end).collect();
        message.pop();
        if std::mem::take(&mut self.skipping) { self.next_message() } else { Some(message) }
    }

    /// Reads on; false at the end of the input.
    async fn read(&mut self, stream: &mut (impl AsyncRead + Unpin), port: &Port) -> io::Result<bool> {
        let mut chunk = [0; INPUT_BUFFER];
        let read = stream.read(&mut chunk).await?;
        if read == 0 {
            if !self.bytes.is_empty() {
                port.work(|instrument| instrument.report(ScpiError::unterminated("the link closed within a message")))
                    .await;
            }
            return Ok(false);
        }
        self.bytes.extend(&chunk[..read]);
        if self.bytes.len() > INPUT_BUFFER && !self.has_message() {
            self.bytes.clear();
            if !std::mem::replace(&mut self.skipping, true) {
                port.work(|instrument| instrument.report(ScpiError::input_overrun(""))).await;
            }
        }
        Ok(true)
    }
}
