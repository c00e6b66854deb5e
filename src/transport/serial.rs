//! Serial lines, real ones and pseudo-terminals. Held exclusively; deadlines are ours, since the port's own timeout does
//! nothing for asynchronous reads.

use super::{Chunk, Link, LinkError, LinkErrorKind, Wire, within};
use std::io;
use tokio::{
    io::{AsyncReadExt, AsyncWriteExt},
    time::Instant,
};
use tokio_serial::{SerialPort, SerialStream};

/// How a serial line is set.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct SerialOptions {
    /// Bits a second.
    pub baud: u32,
    /// Data bits, 7 or 8.
    pub data_bits: u8,
    /// Parity.
    pub parity: Parity,
    /// Stop bits.
    pub stop_bits: StopBits,
}

impl Default for SerialOptions {
    /// 9600 baud, eight data bits, no parity, one stop bit: what most instruments leave the factory with.
    fn default() -> Self {
        Self { baud: 9600, data_bits: 8, parity: Parity::None, stop_bits: StopBits::One }
    }
}

/// Parity of a serial line.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Parity {
    /// None.
    None,
    /// Even.
    Even,
    /// Odd.
    Odd,
}

/// Stop bits of a serial line.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum StopBits {
    /// One.
    One,
    /// Two.
    Two,
}

struct Serial {
    stream: SerialStream,
}

pub(super) fn open(device: &str, options: &SerialOptions) -> Result<Box<dyn Link>, LinkError> {
    let builder = tokio_serial::new(device, options.baud)
        .data_bits(if options.data_bits == 7 { tokio_serial::DataBits::Seven } else { tokio_serial::DataBits::Eight })
        .parity(match options.parity {
            Parity::None => tokio_serial::Parity::None,
            Parity::Even => tokio_serial::Parity::Even,
            Parity::Odd => tokio_serial::Parity::Odd,
        })
        .stop_bits(match options.stop_bits {
            StopBits::One => tokio_serial::StopBits::One,
            StopBits::Two => tokio_serial::StopBits::Two,
        });
    let stream = SerialStream::open(&builder).map_err(|error| refused(device, error))?;
    Ok(Box::new(Serial { stream }))
}

fn refused(device: &str, error: tokio_serial::Error) -> LinkError {
    let doing = format!("open {device}: {error}");
    let kind = match error.kind() {
        // The same kind stands for a line that another program holds.
        tokio_serial::ErrorKind::NoDevice if std::path::Path::new(device).exists() => LinkErrorKind::Denied,
        tokio_serial::ErrorKind::NoDevice => LinkErrorKind::NotFound,
        tokio_serial::ErrorKind::Io(kind) => LinkError::system("", kind.into()).kind,
        _ => LinkErrorKind::Failed,
    };
    LinkError { kind, doing, source: None }
}

/// What a serial line reports when its other end has gone: a pulled adapter, or a pseudo-terminal whose master closed.
fn closed(error: LinkError) -> LinkError {
    match error.kind {
        LinkErrorKind::Failed => LinkError { kind: LinkErrorKind::Closed, ..error },
        _ => error,
    }
}

impl Link for Serial {
    fn write<'a>(&'a mut self, bytes: &'a [u8], deadline: Instant) -> Wire<'a, ()> {
        Box::pin(async move {
            within(deadline, "write to the serial line", self.stream.write_all(bytes)).await.map_err(closed)
        })
    }

    fn read(&mut self, deadline: Instant) -> Wire<'_, Chunk> {
        Box::pin(async move {
            let mut buffer = vec![0; 4096];
            let reading = self.stream.read(&mut buffer);
            match within(deadline, "read from the serial line", reading).await.map_err(closed)? {
                0 => Err(LinkError::new(LinkErrorKind::Closed, "read from the serial line: it hung up")),
                count => {
                    buffer.truncate(count);
                    Ok(Chunk { bytes: buffer, end: false })
                }
            }
        })
    }

    fn take_arrived(&mut self) -> Wire<'_, Vec<u8>> {
        Box::pin(async move {
            let mut arrived = Vec::new();
            let mut buffer = [0; 4096];
            loop {
                match self.stream.try_read(&mut buffer) {
                    Ok(0) => return Err(LinkError::new(LinkErrorKind::Closed, "the serial line hung up")),
                    Ok(count) => arrived.extend_from_slice(&buffer[..count]),
                    Err(error) if error.kind() == io::ErrorKind::WouldBlock => return Ok(arrived),
                    Err(error) => return Err(closed(LinkError::system("read from the serial line", error))),
                }
            }
        })
    }

    fn close(&mut self) -> Wire<'_, ()> {
        Box::pin(async move {
            // A pseudo-terminal has nothing to discard and says so; the port closes with the value.
            let _ = self.stream.clear(tokio_serial::ClearBuffer::All);
            Ok(())
        })
    }
}
