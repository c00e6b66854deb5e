//! The person at the terminal, asked for what has no interface.

use ringstep::station::Operator;
use std::{future::Future, io::BufRead, pin::Pin};

/// Asks on the standard error and reads the standard input.
pub(super) struct Terminal;

impl Operator for Terminal {
    fn ask<'a>(&'a self, prompt: &'a str) -> Pin<Box<dyn Future<Output = Option<String>> + Send + 'a>> {
        Box::pin(async move {
            super::output::note(prompt);
            let read = tokio::task::spawn_blocking(|| {
                let mut line = String::new();
                let count = std::io::stdin().lock().read_line(&mut line).unwrap_or(0);
                (count > 0).then(|| line.trim().to_owned())
            });
            read.await.ok().flatten()
        })
    }
}
