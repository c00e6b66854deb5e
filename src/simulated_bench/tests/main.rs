//! Integration tests: one module a subject.
#![allow(clippy::unwrap_used, missing_docs)]

#[allow(unreachable_pub)]
#[path = "../../../tests/need.rs"]
mod need;

mod boards;
mod client;
mod converter;
mod front_end;
mod instruments;
mod ngspice;
mod plant;
mod process;
mod pyvisa;
mod scope;
mod trace;
mod wires;
