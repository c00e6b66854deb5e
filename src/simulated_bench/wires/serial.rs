//! A serial line: a pseudo-terminal in raw mode. Our own hold on its far end keeps the line up while no client has it open.

use super::{Ended, Port, converse};
use std::{
    pin::Pin,
    task::{Context, Poll},
};
use tokio::io::{self, AsyncRead, AsyncWrite, ReadBuf};
use tokio_serial::{SerialPort, SerialStream};

/// A pseudo-terminal in front of an instrument.
pub struct SerialWire {
    line: Line,
    port: Port,
}

impl SerialWire {
    /// Opens a pseudo-terminal.
    ///
    /// # Errors
    /// If none can be had.
    pub fn open(port: Port) -> io::Result<Self> {
        let (near, far) = SerialStream::pair()?;
        Ok(Self { line: Line { near, far }, port })
    }

    /// Its address in the open VISA resource syntax.
    ///
    /// # Errors
    /// If the system does not tell its name.
    pub fn address(&self) -> io::Result<String> {
        let name = self.line.far.name().ok_or_else(|| io::Error::other("the pseudo-terminal has no name"))?;
        Ok(format!("ASRL{name}::INSTR"))
    }

    /// Serves the line until the instrument is gone; then it hangs up.
    pub async fn serve(mut self) {
        while converse(&mut self.line, &self.port).await != Ended::Gone {
            // Only a failing system call ends a conversation on a line that we hold ourselves.
            tokio::time::sleep(std::time::Duration::from_millis(10)).await;
        }
    }
}

/// Both ends of the line: we talk on the near one and hold the far one.
struct Line {
    near: SerialStream,
    far: SerialStream,
}

impl AsyncRead for Line {
    fn poll_read(
        mut self: Pin<&mut Self>,
        context: &mut Context<'_>,
        buffer: &mut ReadBuf<'_>,
    ) -> Poll<io::Result<()>> {
        let polled = Pin::new(&mut self.near).poll_read(context, buffer);
        if matches!(polled, Poll::Ready(Ok(()))) {
            // A client may claim the line for itself alone. The claim outlives the client for as long as we hold the far
            // end, and would keep the next one out.
            let _ = self.far.set_exclusive(false);
        }
        polled
    }
}

impl AsyncWrite for Line {
    fn poll_write(mut self: Pin<&mut Self>, context: &mut Context<'_>, bytes: &[u8]) -> Poll<io::Result<usize>> {
        Pin::new(&mut self.near).poll_write(context, bytes)
    }

    fn poll_flush(mut self: Pin<&mut Self>, context: &mut Context<'_>) -> Poll<io::Result<()>> {
        Pin::new(&mut self.near).poll_flush(context)
    }

    fn poll_shutdown(mut self: Pin<&mut Self>, context: &mut Context<'_>) -> Poll<io::Result<()>> {
        Pin::new(&mut self.near).poll_shutdown(context)
    }
}
