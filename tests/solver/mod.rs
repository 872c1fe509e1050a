//! Assignment, neighbours, links and the exact choice, each against a slower way to the same
//! answer.

mod assignment;
mod links;
mod neighbours;
mod probabilities;
mod tangles;
