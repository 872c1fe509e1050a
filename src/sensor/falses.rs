//! Density of false detections per mas^2 and magnitude.
//!
//! lambda(m, place) = share x (density of all detections there and at that magnitude): unknown
//! faint stars and artefacts crowd where stars crowd. The density is that of the epoch's own
//! list; the share, one per instrument, leans on a fixed start and a little on the leftovers.

#[derive(Clone, Copy, Debug, PartialEq)]
pub struct FalseLaw {
    /// False and unknown detections as a share of all.
    pub share: f64,
}

impl FalseLaw {
    #[must_use]
    pub fn start() -> Self {
        Self { share: 0.10 }
    }
}
