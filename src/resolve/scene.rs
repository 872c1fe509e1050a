//! What is fixed while tracks are being chosen: epochs with their laws, and how stars move.

use crate::model::detection::FieldEpoch;
use crate::motion::state::Dynamics;
use crate::near::Tree;
use crate::sensor::Sensor;

/// One epoch, ready for linking.
#[derive(Debug)]
pub struct Sight<'a> {
    pub t_yr: f64,
    pub data: &'a FieldEpoch,
    pub sensor: Sensor,
    pub tree: Tree,
    /// Magnitudes on the common scale (`NaN` = not measured).
    pub mag: Vec<f64>,
    /// Believed variance of each magnitude.
    pub mag_var: Vec<f64>,
    /// ln of the density of false detections at each detection's place and magnitude
    /// \[per mas^2 per mag\] (per mas^2 where the magnitude is missing).
    pub ln_false: Vec<f64>,
    /// ln of the share of detections that stay single around each one's magnitude, where it is
    /// known better than by the law of false detections; empty where it is not.
    pub ln_single: Vec<f64>,
    /// ln of the density of real stars at each detection's place and magnitude, same units.
    pub ln_star: Vec<f64>,
}

impl Sight<'_> {
    #[must_use]
    pub fn len(&self) -> usize {
        self.data.len()
    }
    #[must_use]
    pub fn is_empty(&self) -> bool {
        self.data.is_empty()
    }
}

/// All epochs and the law of motion.
#[derive(Debug)]
pub struct Scene<'a> {
    pub dynamics: Dynamics,
    pub sights: Vec<Sight<'a>>,
    /// Epoch indices in order of time.
    pub by_time: Vec<usize>,
}
