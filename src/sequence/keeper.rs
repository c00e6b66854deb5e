//! What the sequence needs of whoever keeps the run: events and captures on disk before it goes on.

use super::event::{Capture, Event};

/// Keeps what happens. Both calls return only when the matter is as safe as its kind asks for.
pub trait Keeper: Send {
    /// Keeps one event.
    ///
    /// # Errors
    /// When it can't be written.
    fn event(&mut self, event: &Event) -> Result<(), KeepError>;

    /// Keeps one capture with its payload and returns it with the checksum of its file; the `Captured` event is the
    /// caller's.
    ///
    /// # Errors
    /// When it can't be written.
    fn capture(&mut self, capture: Capture) -> Result<Capture, KeepError>;
}

/// The run could not be kept.
#[derive(Debug, thiserror::Error)]
#[error("failed to keep the run: {0}")]
pub struct KeepError(#[source] pub Box<dyn std::error::Error + Send + Sync>);
