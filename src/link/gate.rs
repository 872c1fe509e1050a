//! How far a star can go, and how well two detections fit one star.
//!
//! Gate: a star seen at projected radius R from the mass moves at most
//! v_max(R) dt + mu / (2 R^2) dt^2 in dt, plus a few standard errors, where v_max is the larger of
//! the escape speed sqrt(2 mu / R) and a speed that few of the bulk of the stars exceed. Where the
//! speed prior has a tail, faster stars are looked for as far as chance neighbours of like
//! magnitude stay few.
//!
//! Odds: the Bayes factor "one star" against "two unrelated detections" of Budavari & Szalay
//! (2008, ApJ 679, 301) with an unknown proper motion (Kerekes et al. 2010, ApJ 719, 59). For two
//! epochs and Gaussian priors it is closed: the offset is normal with covariance
//! R1 + R2 + sigma_v^2 dt^2 + sigma_a^2 dt^4 / 4, compared with the local density of the second
//! list; magnitudes give an independent factor. The speed prior is
//! sigma_v^2 = sigma_0^2 + mu / ((1 + gamma) R), with an optional tail of fast stars.
//!
//! Fails where the acceleration is far from constant between the two epochs (inside about
//! 100 mas of the mass over a year): the gate stays open there, but the odds are rough.

use crate::maths::cov2::Cov2;
use crate::maths::lnprob::{ln_add, ln_normal};
use crate::motion::state::{TOP_SPEEDS, Wide};

/// Share of stars that may be faster than the gate allows.
const SPEED_TAIL: f64 = 1e-4;

/// Rms of one component of the acceleration in units of mu / R^2, for stars whose depth is
/// unknown (derived here: density falling as r^-2 along the line of sight, mass at the centre).
const ACCELERATION_SHARE: f64 = 0.4;

/// A mass at a place.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Centre {
    pub gm_mas3_yr2: f64,
    pub x_mas: f64,
    pub y_mas: f64,
    /// Radii below this count as this one: bounds speed and acceleration near the mass.
    pub softening_mas: f64,
}

/// What is known about stars before they are linked.
#[derive(Clone, Debug)]
pub struct Gates {
    /// One-dimensional speed dispersion far from the mass.
    pub speed_mas_yr: f64,
    /// Fast stars, by the law of the motion prior.
    pub tail: Option<Wide>,
    pub centre: Option<Centre>,
    /// Slope gamma of the star density, r^-gamma, in the speed dispersion near the mass.
    pub density_slope: f64,
    /// Standard errors allowed on top of the motion.
    pub sigmas: f64,
    /// Floor of a position error, added in quadrature, for stated errors that are too small.
    pub floor_mas: f64,
    /// Standard deviation of a star's own magnitude plus hidden errors of one measurement.
    pub mag_floor: f64,
    /// A blend of this many equal stars is the brightest that is still linked.
    pub group: f64,
    /// Probability that a detection holds the light of another star as well.
    pub p_blend: f64,
    /// Later epochs looked at: so many, and not later than so long.
    pub next_epochs: usize,
    pub window_yr: f64,
    /// Links kept by a detection towards one other epoch.
    pub cap: usize,
    /// Links with lower odds (nats) are dropped.
    pub min_ln_odds: f64,
}

impl Gates {
    /// Defaults around a speed dispersion and a mass.
    #[must_use]
    pub fn new(speed_mas_yr: f64, centre: Option<Centre>) -> Self {
        Self {
            speed_mas_yr,
            tail: None,
            centre,
            density_slope: 1.75,
            sigmas: 4.0,
            floor_mas: 0.0,
            mag_floor: 0.1,
            group: 4.0,
            p_blend: 0.1,
            next_epochs: 4,
            window_yr: 4.0,
            cap: 12,
            min_ln_odds: -6.0,
        }
    }

    /// Motion prior at a place.
    #[must_use]
    pub fn motion_at(&self, x_mas: f64, y_mas: f64) -> MotionPrior {
        let sigma0_2 = self.speed_mas_yr * self.speed_mas_yr;
        let mut prior = MotionPrior {
            speed_var: sigma0_2,
            speed_max_mas_yr: self.speed_mas_yr * (-2.0 * SPEED_TAIL.ln()).sqrt(),
            tail_max_mas_yr: self.tail.map_or(0.0, |t| TOP_SPEEDS * t.speed_mas_yr),
            accel_max_mas_yr2: 0.0,
        };
        if let Some(c) = self.centre {
            let r = (x_mas - c.x_mas)
                .hypot(y_mas - c.y_mas)
                .max(c.softening_mas)
                .max(f64::MIN_POSITIVE);
            prior.speed_var += c.gm_mas3_yr2 / ((1.0 + self.density_slope) * r);
            prior.speed_max_mas_yr = prior.speed_max_mas_yr.max((2.0 * c.gm_mas3_yr2 / r).sqrt());
            prior.accel_max_mas_yr2 = c.gm_mas3_yr2 / (r * r);
        }
        prior
    }

    /// ln of the density \[mas^-2\] of the offset between two detections of one star.
    #[must_use]
    pub fn ln_offset(&self, prior: MotionPrior, errors: Cov2, dt_yr: f64, d_mas: [f64; 2]) -> f64 {
        let dt2 = dt_yr * dt_yr;
        let accel = ACCELERATION_SHARE * prior.accel_max_mas_yr2 * 0.5 * dt2;
        let steady = errors + Cov2::round(accel * accel);
        let near = (steady + Cov2::round(prior.speed_var * dt2)).ln_normal(d_mas[0], d_mas[1]);
        match self.tail {
            // The tail is smooth over the errors: they widen its scale, no more.
            Some(t) if t.fraction > 0.0 && t.fraction < 1.0 && dt2 > 0.0 => {
                let scale2 = t.speed_mas_yr.powi(2) + steady.max_var() / dt2;
                let v2 = (d_mas[0].powi(2) + d_mas[1].powi(2)) / dt2;
                let far = Wide {
                    speed_mas_yr: scale2.sqrt(),
                    ..t
                };
                let far = t.fraction.ln() + far.ln_density(v2) - dt2.ln();
                ln_add((1.0 - t.fraction).ln() + near, far)
            }
            _ => near,
        }
    }

    /// How two magnitudes fit one star; `ln_crowd` is the log of the density per mag of the
    /// second list at its magnitude. `None`: too different even for a blend. A magnitude that
    /// was not measured says nothing.
    #[must_use]
    pub fn magnitudes(&self, a: Mag, b: Mag, ln_crowd: f64) -> Option<MagFit> {
        let d = b.mag - a.mag;
        if !d.is_finite() {
            return Some(MagFit {
                ln_factor: 0.0,
                blend: false,
            });
        }
        let known = |e: f64| if e.is_finite() { e * e } else { 0.0 };
        let var = known(a.err) + known(b.err) + 2.0 * self.mag_floor * self.mag_floor;
        let brighter = 2.5 * self.group.log10();
        let (tight, wide) = (
            self.sigmas * var.sqrt(),
            brighter + self.sigmas * var.sqrt(),
        );
        if d.abs() > wide {
            return None;
        }
        let alone = (1.0 - self.p_blend).ln() + ln_normal(d, var);
        let blended = self.p_blend.ln() - (2.0 * wide).ln();
        Some(MagFit {
            ln_factor: ln_add(alone, blended) - ln_crowd,
            blend: d.abs() > tight,
        })
    }
}

/// Speed and acceleration to expect at a place.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct MotionPrior {
    /// Variance of one component \[mas^2/yr^2\].
    pub speed_var: f64,
    pub speed_max_mas_yr: f64,
    /// Largest speed in the tail of fast stars, zero without one.
    pub tail_max_mas_yr: f64,
    pub accel_max_mas_yr2: f64,
}

impl MotionPrior {
    /// Farthest a star of the bulk can move in `dt_yr`.
    #[must_use]
    pub fn reach_mas(self, dt_yr: f64) -> f64 {
        let dt = dt_yr.abs();
        self.speed_max_mas_yr * dt + 0.5 * self.accel_max_mas_yr2 * dt * dt
    }

    /// How far to look for a star after `dt_yr`: as far as the bulk goes, and for stars of the
    /// tail as far as `quiet_mas`, within which chance neighbours are few.
    #[must_use]
    pub fn search_mas(self, dt_yr: f64, quiet_mas: f64) -> f64 {
        let tail = (self.tail_max_mas_yr * dt_yr.abs()).min(quiet_mas);
        self.reach_mas(dt_yr).max(tail)
    }
}

/// A magnitude with its error, either `NaN` when unknown.
#[derive(Clone, Copy, Debug)]
pub struct Mag {
    pub mag: f64,
    pub err: f64,
}

#[derive(Clone, Copy, Debug, PartialEq)]
pub struct MagFit {
    pub ln_factor: f64,
    /// One of the two is too bright to be the star alone.
    pub blend: bool,
}

#[cfg(test)]
mod tests {
    use super::*;

    /// A mass of 2.6e6 suns at 7100 pc: mu = 2.868e5 mas^3/yr^2. Bounds at 100 mas: escape
    /// speed 75.7 mas/yr, acceleration 28.7 mas/yr^2 (sqrt(2 mu/R) and mu/R^2, worked by hand).
    #[test]
    fn bounds_near_a_mass() {
        let centre = Centre {
            gm_mas3_yr2: 2.868e5,
            x_mas: 10.0,
            y_mas: 0.0,
            softening_mas: 20.0,
        };
        let m = Gates::new(3.0, Some(centre)).motion_at(110.0, 0.0);
        assert!((m.speed_max_mas_yr - 75.7).abs() < 0.05);
        assert!((m.accel_max_mas_yr2 - 28.68).abs() < 0.01);
        assert!((m.reach_mas(-2.0) - (151.47 + 57.36)).abs() < 0.05);
        let inside = Gates::new(3.0, Some(centre)).motion_at(10.0, 0.0);
        assert!(inside.speed_max_mas_yr.is_finite());
    }

    /// The odds of two detections equal the integral over the velocity done numerically.
    #[test]
    fn offset_density_is_the_velocity_integral() {
        let g = Gates::new(4.0, None);
        let (r, dt, d) = (Cov2::from_sigmas(2.0, 1.5, 0.3), 1.7, [5.0, -3.0]);
        let prior = g.motion_at(0.0, 0.0);
        let step = 0.1;
        let mut sum = 0.0;
        for i in -300..=300 {
            for j in -300..=300 {
                let (vx, vy) = (f64::from(i) * step, f64::from(j) * step);
                sum += (r.ln_normal(d[0] - vx * dt, d[1] - vy * dt)
                    + Cov2::round(prior.speed_var).ln_normal(vx, vy))
                .exp();
            }
        }
        let ln = g.ln_offset(prior, r, dt, d);
        assert!(((sum * step * step).ln() - ln).abs() < 1e-9);
    }

    #[test]
    fn a_brighter_detection_may_be_a_blend() {
        let g = Gates::new(4.0, None);
        let m = |mag| Mag { mag, err: 0.05 };
        let fit = |a, b| g.magnitudes(m(a), m(b), -1.5);
        assert!(fit(15.0, 15.1).is_some_and(|f| !f.blend && f.ln_factor > 0.0));
        assert!(fit(15.0, 14.0).is_some_and(|f| f.blend));
        assert!(fit(14.0, 15.0).is_some_and(|f| f.blend));
        assert_eq!(fit(15.0, 12.0), None);
        assert!(fit(15.0, f64::NAN).is_some_and(|f| f.ln_factor == 0.0));
    }
}
