//! Messages and sessions (IEEE 488.2, SCPI-99): pure parsing over bytes, and one owner task an instrument that keeps
//! questions and answers in step.

pub mod block;
mod error;
mod in_step;
mod owner;
pub mod response;
mod session;
pub mod status;

pub use error::{ScpiError, ScpiErrorKind};
pub use session::{DrainedErrors, Session, SessionOptions};
