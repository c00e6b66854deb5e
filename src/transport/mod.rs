//! Bytes on a wire: one narrow link trait, a deadline on every call, small error kinds. Knows nothing of messages.

mod address;
mod exchange_log;
pub mod scripted;
mod serial;
mod tcp;
#[cfg(feature = "visa")]
mod visa;

pub use address::{Address, AddressError};
pub(crate) use exchange_log::printable;
pub use exchange_log::{BlockNote, CollectedExchanges, Direction, ExchangeEntry, ExchangeLog, ExchangeSink};
pub use serial::{Parity, SerialOptions, StopBits};

use std::{fmt, future::Future, io, pin::Pin};
use tokio::time::Instant;

/// The future of one call on a link.
pub type Wire<'a, T> = Pin<Box<dyn Future<Output = Result<T, LinkError>> + Send + 'a>>;

/// Some bytes of an answer.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Chunk {
    /// The bytes, at least one unless `end` is set.
    pub bytes: Vec<u8>,
    /// Whether the wire itself signalled the end of the message; streams (sockets, serial lines) never do.
    pub end: bool,
}

/// One open wire to one instrument. Every call fails with [`LinkErrorKind::Timeout`] at its deadline.
pub trait Link: Send {
    /// Writes all the bytes.
    fn write<'a>(&'a mut self, bytes: &'a [u8], deadline: Instant) -> Wire<'a, ()>;
    /// Waits for some bytes.
    fn read(&mut self, deadline: Instant) -> Wire<'_, Chunk>;
    /// Takes away what has already arrived, without waiting for more.
    fn take_arrived(&mut self) -> Wire<'_, Vec<u8>>;
    /// Closes the wire; the link is of no use afterwards.
    fn close(&mut self) -> Wire<'_, ()>;
}

/// Something that opens links to one instrument, again and again.
pub trait Opener: Send + Sync {
    /// The address as the user wrote it.
    fn address(&self) -> &str;
    /// Opens a fresh link.
    fn open(&self, deadline: Instant) -> Wire<'_, Box<dyn Link>>;
}

/// An instrument's address with the options of its wire.
#[derive(Debug, Clone)]
pub struct Port {
    text: String,
    address: Address,
    serial: SerialOptions,
}

impl Port {
    /// The port at that address; the serial options matter for serial lines alone.
    pub fn new(address: &str, serial: SerialOptions) -> Result<Self, AddressError> {
        Ok(Self { text: address.to_owned(), address: address.parse()?, serial })
    }

    /// The parsed address.
    pub fn parsed(&self) -> &Address {
        &self.address
    }
}

impl Opener for Port {
    fn address(&self) -> &str {
        &self.text
    }

    fn open(&self, deadline: Instant) -> Wire<'_, Box<dyn Link>> {
        Box::pin(async move {
            match &self.address {
                Address::Socket { host, port } => tcp::open(host, *port, deadline).await,
                Address::Serial { device } => serial::open(device, &self.serial),
                #[cfg(feature = "visa")]
                Address::Other { .. } => visa::open(&self.text, deadline).await,
                #[cfg(not(feature = "visa"))]
                Address::Other { kind } => Err(LinkError::new(
                    LinkErrorKind::NotSupported,
                    format!(
                        "open: this build reaches raw sockets and serial lines, not {kind}; build it with the feature `visa`"
                    ),
                )),
            }
        })
    }
}

/// What went wrong on a wire.
#[derive(Debug, thiserror::Error)]
#[error("{kind}: {doing}")]
pub struct LinkError {
    /// Which kind.
    pub kind: LinkErrorKind,
    /// What was being done.
    pub doing: String,
    /// What the system said.
    #[source]
    pub source: Option<io::Error>,
}

/// Kinds of failure on a wire.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum LinkErrorKind {
    /// Nobody listens there.
    Refused,
    /// No such host or device.
    NotFound,
    /// The system does not allow it, or another program holds the device.
    Denied,
    /// The deadline passed.
    Timeout,
    /// The other side closed the link, or it broke.
    Closed,
    /// This build or machine can't reach that kind of address.
    NotSupported,
    /// Anything else the system reported.
    Failed,
}

impl fmt::Display for LinkErrorKind {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(match self {
            Self::Refused => "connection refused",
            Self::NotFound => "no such host or device",
            Self::Denied => "access denied",
            Self::Timeout => "deadline passed",
            Self::Closed => "link closed",
            Self::NotSupported => "not supported",
            Self::Failed => "input or output failed",
        })
    }
}

impl LinkError {
    fn new(kind: LinkErrorKind, doing: impl Into<String>) -> Self {
        Self { kind, doing: doing.into(), source: None }
    }

    fn system(doing: impl Into<String>, error: io::Error) -> Self {
        use io::ErrorKind as Io;
        let kind = match error.kind() {
            Io::ConnectionRefused => LinkErrorKind::Refused,
            Io::NotFound | Io::HostUnreachable | Io::NetworkUnreachable | Io::AddrNotAvailable => {
                LinkErrorKind::NotFound
            }
            Io::PermissionDenied | Io::ResourceBusy => LinkErrorKind::Denied,
            Io::TimedOut => LinkErrorKind::Timeout,
            Io::ConnectionReset | Io::ConnectionAborted | Io::BrokenPipe | Io::UnexpectedEof | Io::NotConnected => {
                LinkErrorKind::Closed
            }
            _ => LinkErrorKind::Failed,
        };
        Self { kind, doing: format!("{}: {error}", doing.into()), source: Some(error) }
    }

    /// Whether the link is of no use any more.
    pub fn is_loss(&self) -> bool {
        !matches!(self.kind, LinkErrorKind::Timeout)
    }
}

/// The result of the future, or a timeout at the deadline.
async fn within<T>(
    deadline: Instant,
    doing: &str,
    future: impl Future<Output = io::Result<T>> + Send,
) -> Result<T, LinkError> {
    match tokio::time::timeout_at(deadline, future).await {
        Ok(result) => result.map_err(|error| LinkError::system(doing, error)),
        Err(_) => Err(LinkError::new(LinkErrorKind::Timeout, doing)),
    }
}
