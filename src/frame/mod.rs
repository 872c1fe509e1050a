//! Instrument coordinates to the common frame.
//!
//! `register` brings lists whose frame has to be solved for onto a reference: a first alignment
//! outward in time (`chain`, `place`, `pattern`), then one adjustment of all maps and of the
//! paths of bright reference stars (`adjust`). `refine` repeats the adjustment with the
//! detections that linking has given to its securest stars. Both carry the covariance of every
//! map, fully correlated within its epoch. An epoch that cannot be placed has no rows in the
//! common frame and says why: see [`Registered::placed`].

// Indices run over matrices, axes and several columns at once.
#![allow(clippy::needless_range_loop)]

pub mod adjust;
mod chain;
pub mod footprint;
pub mod known;
pub mod path;
pub mod pattern;
pub mod place;
mod refstars;
pub mod register;
pub mod solve;
pub mod transform;
pub mod zeropoint;

pub use known::FrameError;
pub use register::{Anchor, FrameSolution, Registered, SolveEnd, refine, register};
