//! From the state of the search to the tables' tracks, memberships, leftovers and tangles.

pub mod assemble;
pub mod flags;
pub mod orbits;
pub mod proof;
pub mod rivals;
pub mod summary;
