//! All integration tests, one binary.
mod audit;
mod cli;
mod frames;
mod inject;
mod layering;
mod linking;
mod motion;
mod reading;
mod readme;
mod report;
mod results;
mod score;
mod solver;
