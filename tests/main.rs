//! Integration tests: one module a subject.
