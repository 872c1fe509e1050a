//! The observing laws that make up the cost: who is seen, who is resolved, how wrong positions
//! and magnitudes are, and how many detections are false. Each law starts from wide defaults
//! and is estimated from the lists.

pub mod blend;
pub mod depth;
pub mod errors;
pub mod falses;
pub mod pairs;

use crate::model::campaign::BlendLaw;
use depth::Depth;
use errors::ErrorLaw;
use falses::FalseLaw;
use pairs::PairLaw;

/// All laws of one epoch.
#[derive(Clone, Debug)]
pub struct Sensor {
    pub fwhm_mas: f64,
    pub depth: Depth,
    pub errors: ErrorLaw,
    pub pairs: PairLaw,
    pub falses: FalseLaw,
    pub blend: BlendLaw,
    /// The campaign states the law of blends; otherwise it is learnt.
    pub blend_stated: bool,
    /// Magnitude to add to this epoch's list to bring it to the common scale.
    pub zero_point_mag: f64,
    /// Absence means nothing and no star is born here.
    pub targeted: bool,
}

impl Sensor {
    /// Error of a blend's predicted place per axis \[mas\], from how much of a blend it is
    /// ([`blend::mixed`]) and the variance of its stars' places, weighted by light \[mas^2\].
    #[must_use]
    pub fn blend_error_mas(&self, mixed: f64, spread_mas2: f64) -> f64 {
        // A profile fit depends on the profile, a centroid hardly.
        let of_extent = match self.blend {
            BlendLaw::Psf => 0.15,
            BlendLaw::Centroid => 0.03,
        };
        mixed * (self.errors.blend_fwhm * self.fwhm_mas + of_extent * spread_mas2.sqrt())
    }
}
