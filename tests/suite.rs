//! All integration tests, one binary.
mod motion;
mod solver;
