//! Raw TCP sockets, without Nagle's delay: questions are short and wait for their answers.

use super::{Chunk, Link, LinkError, LinkErrorKind, Wire, within};
use tokio::{
    io::{AsyncReadExt, AsyncWriteExt},
    net::TcpStream,
    time::Instant,
};

struct Tcp {
    stream: TcpStream,
    buffer: Box<[u8]>,
}

pub(super) async fn open(host: &str, port: u16, deadline: Instant) -> Result<Box<dyn Link>, LinkError> {
    let stream = within(deadline, &format!("connect to {host} port {port}"), TcpStream::connect((host, port))).await?;
    stream.set_nodelay(true).map_err(|error| LinkError::system("set no delay", error))?;
    Ok(Box::new(Tcp { stream, buffer: vec![0; 64 * 1024].into() }))
}

impl Link for Tcp {
    fn write<'a>(&'a mut self, bytes: &'a [u8], deadline: Instant) -> Wire<'a, ()> {
        Box::pin(within(deadline, "write to the socket", self.stream.write_all(bytes)))
    }

    fn read(&mut self, deadline: Instant) -> Wire<'_, Chunk> {
        Box::pin(async move {
            match within(deadline, "read from the socket", self.stream.read(&mut self.buffer)).await? {
                0 => Err(LinkError::new(LinkErrorKind::Closed, "read from the socket: the other side closed it")),
                count => Ok(Chunk { bytes: self.buffer[..count].to_vec(), end: false }),
            }
        })
    }

    fn take_arrived(&mut self) -> Wire<'_, Vec<u8>> {
        Box::pin(async move {
            let mut arrived = Vec::new();
            loop {
                match self.stream.try_read(&mut self.buffer) {
                    Ok(0) => return Err(LinkError::new(LinkErrorKind::Closed, "the other side closed the socket")),
                    Ok(count) => arrived.extend_from_slice(&self.buffer[..count]),
                    Err(error) if error.kind() == std::io::ErrorKind::WouldBlock => return Ok(arrived),
                    Err(error) => return Err(LinkError::system("read from the socket", error)),
                }
            }
        })
    }

    fn close(&mut self) -> Wire<'_, ()> {
        Box::pin(
            async move { self.stream.shutdown().await.map_err(|error| LinkError::system("close the socket", error)) },
        )
    }
}
