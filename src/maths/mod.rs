//! Constants with their source, small covariance matrices and a total order of floats.
//! Knows nothing of stars, files or linking.

pub mod assign;
pub mod cov2;
pub mod hull;
pub mod lnprob;
pub mod order;
pub mod sky;
pub mod units;
