//! A raw socket on the loopback interface: any number of clients, one after another or at once.

use super::{Ended, Port, converse};
use std::io;
use tokio::{net::TcpListener, task::JoinSet};

/// A listening socket in front of an instrument.
pub struct TcpWire {
    listener: TcpListener,
    port: Port,
}

impl TcpWire {
    /// Listens on a free port of 127.0.0.1.
    ///
    /// # Errors
    /// If no socket can be had.
    pub async fn bind(port: Port) -> io::Result<Self> {
        Ok(Self { listener: TcpListener::bind(("127.0.0.1", 0)).await?, port })
    }

    /// Its address in the open VISA resource syntax.
    ///
    /// # Errors
    /// If the system does not tell the port.
    pub fn address(&self) -> io::Result<String> {
        Ok(format!("TCPIP::127.0.0.1::{}::SOCKET", self.listener.local_addr()?.port()))
    }

    /// Serves clients until the instrument is gone; then the port refuses connections.
    pub async fn serve(self) {
        let mut clients = JoinSet::new();
        let mut gone = self.port.gone();
        loop {
            let accepted = tokio::select! {
                accepted = self.listener.accept() => accepted,
                _ = gone.wait_for(|gone| *gone) => return,
            };
            let Ok((mut stream, _)) = accepted else { continue };
            // Small answers must not wait for more.
            let _ = stream.set_nodelay(true);
            let port = self.port.clone();
            clients.spawn(async move { converse(&mut stream, &port).await == Ended::Gone });
            while clients.try_join_next().is_some() {}
        }
    }
}
