//! asterskein: gives every detection of a crowded, moving star field to the right star, and
//! says how sure it is of each link.

#![deny(clippy::print_stdout, clippy::print_stderr)]
#![warn(missing_debug_implementations)]

pub mod audit;
pub mod engine;
pub mod frame;
pub mod inject;
pub mod io;
pub mod link;
pub mod maths;
pub mod model;
pub mod motion;
pub mod near;
pub mod output;
pub mod resolve;
pub mod sensor;
pub mod track;
