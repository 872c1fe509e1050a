//! How a star moves: parameters with covariance at a reference time.

use nalgebra::{SMatrix, SVector};

/// Which law of motion a track follows.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub enum MotionKind {
    Linear,
    Accelerated,
    Keplerian,
}

impl MotionKind {
    /// The word used in tables.
    #[must_use]
    pub fn word(self) -> &'static str {
        match self {
            Self::Linear => "linear",
            Self::Accelerated => "accelerated",
            Self::Keplerian => "keplerian",
        }
    }
}

/// Six motion parameters at a time, with covariance.
///
/// Linear and accelerated: (x, y, vx, vy, ax, ay); a linear motion has zero acceleration with
/// zero covariance. Keplerian: (x, y, z, vx, vy, vz) in the field frame, the mass's position
/// included in x and y. Units mas, mas/yr, mas/yr^2.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Motion {
    pub kind: MotionKind,
    pub t_ref_yr: f64,
    pub p: SVector<f64, 6>,
    pub cov: SMatrix<f64, 6, 6>,
}
