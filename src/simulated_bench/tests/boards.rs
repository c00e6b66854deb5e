//! The shipped boards.
