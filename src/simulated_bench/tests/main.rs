//! Integration tests: one module a subject.
#![allow(clippy::unwrap_used, missing_docs)]

#[allow(unreachable_pub)]
#[path = "../../../tests/need.rs"]
mod need;

mod client;
mod instruments;
mod process;
mod pyvisa;
mod scope;
mod wires;
mod boards;
mod converter;
mod ngspice;
mod trace;
