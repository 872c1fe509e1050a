//! How wrong positions and magnitudes are, beyond what a list states.
//!
//! Position: (factor x stated)^2 + floor^2, and a crowding term (press x fwhm x q)^2 where a
//! neighbour of flux ratio q presses. Magnitude: (factor x stated)^2 + floor^2.
//! Factors are estimated from residuals of tracks, shrunk hard towards wide defaults.

use crate::maths::cov2::Cov2;

#[derive(Clone, Copy, Debug, PartialEq)]
pub struct ErrorLaw {
    /// Factor on stated position errors.
    pub factor: f64,
    /// Floor added in quadrature \[mas\].
    pub floor_mas: f64,
    /// Position error of a blend's predicted place \[fwhm\].
    pub blend_fwhm: f64,
    /// Position error per axis due to a neighbour of equal flux at one fwhm \[fwhm\].
    pub press_fwhm: f64,
    pub mag_factor: f64,
    pub mag_floor: f64,
    /// Magnitude error of a blend against the sum of its stars.
    pub blend_mag: f64,
}

impl ErrorLaw {
    /// Wide defaults for an instrument.
    #[must_use]
    pub fn wide(fwhm_mas: f64) -> Self {
        Self {
            factor: 1.3,
            floor_mas: 0.015 * fwhm_mas,
            blend_fwhm: 0.04,
            press_fwhm: 0.05,
            mag_factor: 1.3,
            mag_floor: 0.10,
            blend_mag: 0.12,
        }
    }

    /// Believed covariance of a stated one.
    #[must_use]
    pub fn position(&self, stated: Cov2, press: f64, fwhm_mas: f64) -> Cov2 {
        let extra = self.floor_mas * self.floor_mas + (self.press_fwhm * fwhm_mas * press).powi(2);
        stated.scaled(self.factor * self.factor) + Cov2::round(extra)
    }

    /// Believed variance of a magnitude with stated error `mag_err` (NaN: not given).
    #[must_use]
    pub fn magnitude_var(&self, mag_err: f64) -> f64 {
        let stated = if mag_err.is_finite() {
            self.mag_factor * mag_err
        } else {
            0.2
        };
        stated * stated + self.mag_floor * self.mag_floor
    }
}
