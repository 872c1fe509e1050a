//! What is derived from a result: pictures for people, tables for fitters, names that last.

pub mod handoff;
pub mod naming;
pub mod report;
