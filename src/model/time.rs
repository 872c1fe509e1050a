//! Times of epochs.

use crate::maths::units::JULIAN_YEAR_DAYS;

/// Julian date of J2000.0.
pub const J2000_JD: f64 = 2_451_545.0;
/// Modified Julian date of J2000.0.
pub const J2000_MJD: f64 = 51_544.5;

/// An absolute time as a Julian year (J2000.0 = JD 2451545.0). Differences between time
/// scales (UTC, TT, TDB: about a minute) are ignored.
#[derive(Clone, Copy, Debug, PartialEq, PartialOrd)]
pub struct JulianYear(pub f64);

impl JulianYear {
    /// From a modified Julian date.
    #[must_use]
    pub fn from_mjd(mjd: f64) -> Self {
        Self(2000.0 + (mjd - J2000_MJD) / JULIAN_YEAR_DAYS)
    }

    /// Modified Julian date.
    #[must_use]
    pub fn mjd(self) -> f64 {
        J2000_MJD + (self.0 - 2000.0) * JULIAN_YEAR_DAYS
    }

    /// The number of Julian years, e.g. 2008.35.
    #[must_use]
    pub fn yr(self) -> f64 {
        self.0
    }
}
