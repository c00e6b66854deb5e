//! A bench within the test, and the plainest client that could talk to it.

use ringstep_simulated_bench::process::{self, Announcement, Options, RunningBench};
use std::{
    fs::{File, OpenOptions},
    io::{Read, Write},
    net::TcpStream,
    thread,
    time::{Duration, Instant},
};
use tokio::runtime::Runtime;

/// Longest a test waits for an answer.
pub(crate) const PATIENCE: Duration = Duration::from_secs(20);

/// A bench that runs within the test.
pub(crate) struct TestBench {
    running: Option<RunningBench>,
    runtime: Runtime,
}

impl TestBench {
    pub(crate) fn new(options: &Options) -> Self {
        let runtime = tokio::runtime::Builder::new_multi_thread().worker_threads(2).enable_all().build().unwrap();
        let running = runtime.block_on(process::start(options)).unwrap();
        Self { running: Some(running), runtime }
    }

    pub(crate) fn announcement(&self) -> &Announcement {
        &self.running.as_ref().unwrap().announcement
    }

    pub(crate) fn scope(&self) -> Client<TcpStream> {
        connect(&self.announcement().scope)
    }

    pub(crate) fn source(&self) -> Client<TcpStream> {
        connect(&self.announcement().source)
    }

    pub(crate) fn load(&self) -> Client<File> {
        open(&self.announcement().load)
    }
}

impl Drop for TestBench {
    fn drop(&mut self) {
        let _inside = self.runtime.enter();
        self.running.take();
    }
}

/// A client on some link.
pub(crate) struct Client<L> {
    pub(crate) link: L,
}

pub(crate) fn port(address: &str) -> u16 {
    address.split("::").nth(2).unwrap().parse().unwrap()
}

pub(crate) fn connect(address: &str) -> Client<TcpStream> {
    let link = TcpStream::connect(("127.0.0.1", port(address))).unwrap();
    link.set_read_timeout(Some(PATIENCE)).unwrap();
    link.set_nodelay(true).unwrap();
    Client { link }
}

/// Opens the pseudo-terminal as the plain file it is; the bench has put it into raw mode.
pub(crate) fn open(address: &str) -> Client<File> {
    let path = address.strip_prefix("ASRL").unwrap().strip_suffix("::INSTR").unwrap();
    Client { link: OpenOptions::new().read(true).write(true).open(path).unwrap() }
}

impl<L: Read + Write> Client<L> {
    pub(crate) fn send(&mut self, message: &str) {
        self.link.write_all(format!("{message}\n").as_bytes()).unwrap();
    }

    /// Reads to the newline, by single bytes: nothing of what follows is taken.
    pub(crate) fn line(&mut self) -> String {
        let mut line = vec![];
        loop {
            let mut byte = [0];
            assert_eq!(self.link.read(&mut byte).unwrap(), 1, "the link ended after {line:?}");
            if byte[0] == b'\n' {
                return String::from_utf8(line).unwrap();
            }
            line.push(byte[0]);
        }
    }

    pub(crate) fn ask(&mut self, query: &str) -> String {
        self.send(query);
        self.line()
    }

    pub(crate) fn number(&mut self, query: &str) -> f64 {
        self.ask(query).parse().unwrap()
    }

    /// Reads a definite-length block and the newline after it.
    pub(crate) fn block(&mut self, query: &str) -> Vec<u8> {
        self.send(query);
        let mut head = [0; 2];
        self.link.read_exact(&mut head).unwrap();
        assert_eq!(head[0], b'#');
        let mut digits = vec![0; usize::from(head[1] - b'0')];
        self.link.read_exact(&mut digits).unwrap();
        let length: usize = String::from_utf8(digits).unwrap().parse().unwrap();
        let mut payload = vec![0; length + 1];
        self.link.read_exact(&mut payload).unwrap();
        assert_eq!(payload.pop(), Some(b'\n'));
        payload
    }

    /// The number of the oldest error.
    pub(crate) fn error(&mut self) -> i32 {
        self.ask("SYST:ERR?").split(',').next().unwrap().parse().unwrap()
    }

    /// Sends a message and takes the error it left; none may be left from before.
    pub(crate) fn refused(&mut self, message: &str) -> i32 {
        assert_eq!(self.error(), 0, "before {message}");
        self.send(message);
        let error = self.error();
        assert_eq!(self.error(), 0, "{message} left more than one error");
        error
    }

    /// Sends a message that must not leave an error.
    pub(crate) fn accepted(&mut self, message: &str) {
        assert_eq!(self.refused(message), 0, "{message}");
    }

    pub(crate) fn wait_for(&mut self, query: &str, wanted: &str) {
        let start = Instant::now();
        loop {
            let answer = self.ask(query);
            if answer == wanted {
                return;
            }
            assert!(start.elapsed() < PATIENCE, "{query} says {answer} and not {wanted}");
            thread::sleep(Duration::from_millis(5));
        }
    }

    /// Acquires once and waits for it.
    pub(crate) fn single(&mut self) {
        self.send("SING");
        self.wait_for("ACQ:COMP?", "100");
    }
}
