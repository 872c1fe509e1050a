//! Judging results: against the truth of a made-up campaign.

pub mod score;
