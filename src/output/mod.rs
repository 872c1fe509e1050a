//! What is derived from a result: pictures for people, tables for fitters, names that last.

pub mod handoff;
pub mod known_names;
pub mod naming;
pub mod report;
