//! All integration tests, one binary.
mod motion;
mod reading;
mod report;
mod solver;
