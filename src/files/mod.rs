//! Files a user writes, held against what they should be: TOML walked value by value, with every mistake reported at
//! once and each where it stands. Knows nothing of stations, boards or plans; their readers are built on it.

mod document;
mod error;
mod suggest;
mod value;

pub use document::{Document, Table};
pub use error::{FileError, FileErrors, Mistake};
pub use suggest::closest;
pub use value::Value;
