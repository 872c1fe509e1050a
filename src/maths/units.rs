//! Physical constants and unit changes, each with value, unit and source.

/// Gaussian gravitational constant \[au^1.5 day^-1 Msun^-0.5\] (IAU 1976 system; value from memory).
pub const GAUSS_K: f64 = 0.017_202_098_95;

/// Days in a Julian year (IAU convention).
pub const JULIAN_YEAR_DAYS: f64 = 365.25;

/// GM of the Sun \[au^3 yr^-2\], from the Gaussian constant and the Julian year (39.476926).
pub const GM_SUN_AU3_YR2: f64 = (GAUSS_K * JULIAN_YEAR_DAYS) * (GAUSS_K * JULIAN_YEAR_DAYS);

/// Astronomical unit \[km\] (IAU 2012 resolution B2).
pub const AU_KM: f64 = 149_597_870.7;

/// One au per Julian year \[km/s\].
pub const AU_YR_KM_S: f64 = AU_KM / (JULIAN_YEAR_DAYS * 86_400.0);

/// Speed of light \[km/s\] (SI definition).
pub const LIGHT_KM_S: f64 = 299_792.458;

/// Speed of light \[au/yr\].
pub const LIGHT_AU_YR: f64 = LIGHT_KM_S / AU_YR_KM_S;

/// Milliarcseconds in a degree.
pub const MAS_PER_DEG: f64 = 3_600_000.0;

/// Milliarcseconds in a radian.
pub const MAS_PER_RAD: f64 = MAS_PER_DEG * 180.0 / std::f64::consts::PI;

/// Full width at half maximum of a Gaussian in units of its sigma, 2 sqrt(2 ln 2).
pub const FWHM_PER_SIGMA: f64 = 2.354_820_045_030_949;

/// Length \[au\] of one mas at a distance \[pc\] (definition of the parsec, small angles).
#[must_use]
pub fn au_per_mas(distance_pc: f64) -> f64 {
    distance_pc / 1000.0
}

/// GM in mas^3 / yr^2 of a mass \[Msun\] seen from a distance \[pc\].
#[must_use]
pub fn gm_mas3_yr2(mass_msun: f64, distance_pc: f64) -> f64 {
    GM_SUN_AU3_YR2 * mass_msun / au_per_mas(distance_pc).powi(3)
}

/// Speed \[km/s\] of one mas/yr at a distance \[pc\].
#[must_use]
pub fn km_s_per_mas_yr(distance_pc: f64) -> f64 {
    au_per_mas(distance_pc) * AU_YR_KM_S
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn gm_of_the_sun_is_the_gaussian_one() {
        // 39.476926 au^3/yr^2 for the Julian year (from the Gaussian constant, from memory).
        assert!((GM_SUN_AU3_YR2 - 39.476_926).abs() < 1e-6);
        // 4.740470 km/s per au/yr (IAU au and Julian year).
        assert!((AU_YR_KM_S - 4.740_470_46).abs() < 1e-6);
    }
}
