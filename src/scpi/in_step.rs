//! Keeps questions and answers in step: nothing of an earlier answer may be left or under way when a question is asked.

use super::{
    ScpiErrorKind,
    error::Failure,
    owner::{IDENTITY, Owner},
    response::integer,
};
use std::time::Duration;
use tokio::time::Instant;

/// Silence after which nothing more of an old answer is expected to be under way.
const QUIET: Duration = Duration::from_millis(50);
/// Values of the event enable register that serve as markers: odd ones, large enough to be no usual answer.
const MARKS: std::ops::Range<u8> = 64..127;

impl Owner {
    /// Before a question: nothing of an earlier answer may be left or under way.
    pub(super) async fn come_into_step(&mut self, patience: Duration) -> Result<(), Failure> {
        let arrived = self.link()?.take_arrived().await;
        match arrived {
            Ok(arrived) => self.buffer.extend(arrived),
            Err(error) => {
                self.forget_link();
                return Err(error.into());
            }
        }
        if !self.out_of_step && self.buffer.iter().all(|byte| matches!(byte, b'\r' | b'\n')) {
            self.buffer.clear();
            return Ok(());
        }
        self.out_of_step = true;
        match self.resynchronise(Instant::now() + patience.max(4 * QUIET)).await {
            Err(failure) if failure.kind == ScpiErrorKind::Lost => {
                self.forget_link();
                Err(failure)
            }
            Err(failure) => Err(Failure { kind: ScpiErrorKind::OutOfStep, ..failure }),
            Ok(()) => {
                self.out_of_step = false;
                self.outstanding.clear();
                Ok(())
            }
        }
    }

    /// Waits for quiet, then asks a marker and drops everything before its answer. Instruments answer in order: what comes
    /// after the marker's answer is new. The marker is the identity, unless an answer to that very question may still be
    /// under way; then it is a value that was never asked for before, written into the event enable register, which
    /// nothing here uses otherwise.
    async fn resynchronise(&mut self, deadline: Instant) -> Result<(), Failure> {
        self.drop_until_quiet(deadline).await?;
        let numbered = self.outstanding.iter().any(|asked| asked == IDENTITY);
        let mark = numbered.then(|| self.next_mark());
        let marker = match mark {
            Some(mark) => {
                self.send(&format!("*ESE {mark}"), deadline).await?;
                "*ESE?"
            }
            None => IDENTITY,
        };
        self.outstanding.push(marker.to_owned());
        self.send(marker, deadline).await?;
        loop {
            match self.read_line(deadline).await {
                Ok(line) if self.answers(mark, &line) => break,
                Ok(_) => {}
                Err(failure) if failure.kind == ScpiErrorKind::Garbled => self.buffer.clear(),
                Err(failure) => return Err(failure),
            }
        }
        if numbered {
            self.send("*ESE 0", deadline).await?;
        }
        self.note("in step again");
        Ok(())
    }

    fn next_mark(&mut self) -> i64 {
        self.marks = if MARKS.contains(&(self.marks + 1)) { self.marks + 1 } else { MARKS.start };
        2 * i64::from(self.marks) + 1
    }

    fn answers(&self, mark: Option<i64>, line: &str) -> bool {
        match (mark, &self.identity) {
            (Some(mark), _) => integer(line) == Ok(mark),
            (None, Some(identity)) => line == identity,
            (None, None) => line.matches(',').count() >= 3,
        }
    }

    pub(super) async fn drop_until_quiet(&mut self, deadline: Instant) -> Result<(), Failure> {
        let mut dropped = 0;
        loop {
            dropped += std::mem::take(&mut self.buffer).len();
            let quiet = Instant::now() + QUIET;
            if quiet > deadline {
                return Err(Failure::new(ScpiErrorKind::OutOfStep));
            }
            match self.receive(quiet).await {
                Ok(_) => {}
                Err(failure) if failure.kind == ScpiErrorKind::NoAnswer => break,
                Err(failure) => return Err(failure),
            }
        }
        if dropped > 0 {
            self.note(&format!("dropped {dropped} bytes that belong to no question"));
        }
        Ok(())
    }
}
