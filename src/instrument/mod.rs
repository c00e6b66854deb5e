//! What a scope, a load and a line source can do, whatever their dialect.

mod capability;

pub use capability::*;

/// What went wrong with an instrument: a small kind, which instrument, and what to do next. (Placeholder until the
/// session layer lands.)
#[derive(Debug, thiserror::Error)]
#[error("{message}")]
pub struct InstrumentError {
    /// What happened.
    pub message: String,
}
