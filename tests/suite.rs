//! All integration tests, one binary.
mod cli;
mod layering;
mod motion;
mod reading;
mod readme;
mod report;
mod results;
mod solver;
