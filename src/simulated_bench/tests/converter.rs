//! The converter.
