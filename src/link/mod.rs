//! Which detections of different epochs may be the same star, and which tracks are so close
//! that they must be decided together.

pub mod candidates;
pub mod gate;
pub mod tangles;
