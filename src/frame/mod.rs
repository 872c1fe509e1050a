//! Instrument coordinates to the common frame.

pub mod footprint;
pub mod known;
