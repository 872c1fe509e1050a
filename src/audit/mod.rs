//! Judging results: against the truth of a made-up campaign, and claimed objects against what
//! else could have made their positions.

pub mod chance;
pub mod claims;
pub mod evidence;
pub mod judge;
pub mod path;
pub mod rivals;
pub mod score;
pub mod search;
pub mod tables;
pub mod verdict;
