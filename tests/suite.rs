//! All integration tests, one binary.
mod solver;
