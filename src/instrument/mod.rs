//! What a scope, a load and a line source can do, whatever their dialect.

mod capability;
mod check;
mod definition;
mod dialect;
mod error;
mod identify;
mod load;
mod scope;
mod source;

pub use capability::*;
pub use check::{VERSION as DRIVER_VERSION, check as check_driver};
pub use definition::{
    Command, Converter, Definition, Facts, LoadFacts, PreambleField, RoleKind, ScopeFacts, SourceFacts,
};
pub use dialect::{Dialect, OffSwitch};
pub use error::{InstrumentError, InstrumentErrorKind};
pub use identify::{Drivers, DriversError, EMBEDDED, identity};
pub use load::DialectLoad;
pub use scope::DialectScope;
pub use source::DialectSource;
