//! All integration tests, one binary.
mod layering;
mod motion;
mod reading;
mod report;
mod results;
mod solver;
