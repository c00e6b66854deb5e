//! Integration tests: one module a subject.
#![allow(clippy::unwrap_used, missing_docs)]

#[allow(unreachable_pub)]
#[path = "../../../tests/need.rs"]
mod need;

mod boards;
mod client;
mod converter;
mod instruments;
mod ngspice;
mod process;
mod pyvisa;
mod scope;
mod trace;
mod wires;
