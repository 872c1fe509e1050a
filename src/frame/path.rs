//! Paths of reference stars while frames are being found: polynomials in time with priors.
//!
//! Per axis x(t) = p0 + p1 dt + p2 dt^2 + p3 dt^3. Velocity, acceleration and jerk carry normal
//! priors, so that one detection predicts a place as honestly as sixty do. Near a central mass
//! the priors follow its pull averaged over the unknown depth: for star density ~ r^-1.75 the
//! mean acceleration toward the mass is 0.36 GM/R^2 with a scatter of the same size (integrals of
//! (1 + z^2)^-k along the line of sight); without that mean the frames of a campaign would
//! shrink and grow quadratically in time to hide it. Drift, rotation and scale rate are not
//! touched by it. Fails where a star turns within the campaign (R below a few hundred mas): such
//! stars come out with large residuals and are dropped by whoever uses this.

use nalgebra::{Matrix4, Vector4};

use crate::model::campaign::Campaign;

/// Coefficients per axis.
pub const TERMS: usize = 4;

/// Depth-averaged pull in units of GM/R^2: mean and scatter (see the head of the module).
const PULL_MEAN: f64 = 0.36;
const PULL_SCATTER: f64 = 0.36;
/// Acceleration \[mas/yr^2\] that is always allowed for, e.g. by unseen companions.
const ACCEL_FLOOR_MAS_YR2: f64 = 0.01;
/// Closest approach to the mass for which priors are formed.
const R_MIN_MAS: f64 = 20.0;

/// Prior of a path: mean and inverse variance per coefficient.
#[derive(Clone, Copy, Debug)]
pub struct PathPrior {
    pub mean: [[f64; TERMS]; 2],
    pub inv_var: [f64; TERMS],
    /// Velocity dispersion per axis the prior was made with.
    pub speed_mas_yr: f64,
}

/// What the campaign says about motions, in the form that priors need.
#[derive(Clone, Copy, Debug)]
pub struct PriorLaw {
    speed_mas_yr: f64,
    /// GM and place of the mass; zero without one.
    gm_mas3_yr2: f64,
    centre_mas: [f64; 2],
}

impl PriorLaw {
    #[must_use]
    pub fn of(campaign: &Campaign) -> Self {
        let (gm, centre) = campaign
            .central
            .as_ref()
            .map_or((0.0, [0.0; 2]), |m| (m.gm_mas3_yr2, [m.x_mas, m.y_mas]));
        Self {
            speed_mas_yr: campaign.stars.speed_mas_yr,
            gm_mas3_yr2: gm,
            centre_mas: centre,
        }
    }

    /// Whether there is a central mass.
    #[must_use]
    pub fn has_mass(&self) -> bool {
        self.gm_mas3_yr2 > 0.0
    }

    /// Prior of a star at a place at time zero, its velocity not known.
    #[must_use]
    pub fn at(&self, x_mas: f64, y_mas: f64) -> PathPrior {
        self.along([x_mas, y_mas], [0.0; 2])
    }

    /// Prior of a star at a place at time zero that moves so: the pull changes on the way.
    #[must_use]
    pub fn along(&self, at_mas: [f64; 2], v_mas_yr: [f64; 2]) -> PathPrior {
        let mu = self.gm_mas3_yr2;
        let d = [
            at_mas[0] - self.centre_mas[0],
            at_mas[1] - self.centre_mas[1],
        ];
        let r = d[0].hypot(d[1]).max(R_MIN_MAS);
        // Jeans dispersion of an r^-1.75 cusp seen in projection, about mu / (2.75 r).
        let speed = self.speed_mas_yr.hypot((mu / (2.75 * r)).sqrt());
        let pull = mu / (r * r);
        let accel = ACCEL_FLOOR_MAS_YR2.hypot(PULL_SCATTER * pull);
        let jerk = (0.1 * ACCEL_FLOOR_MAS_YR2).hypot(PULL_MEAN * pull * speed / r);
        let out = (d[0] * v_mas_yr[0] + d[1] * v_mas_yr[1]) / (r * r);
        let mut mean = [[0.0; TERMS]; 2];
        for axis in 0..2 {
            let toward = -PULL_MEAN * pull / r;
            mean[axis][2] = 0.5 * toward * d[axis];
            mean[axis][3] = toward * (v_mas_yr[axis] - 3.0 * out * d[axis]) / 6.0;
        }
        let inv = |sd: f64| 1.0 / (sd * sd);
        PathPrior {
            mean,
            inv_var: [0.0, inv(speed), inv(0.5 * accel), inv(jerk / 6.0)],
            speed_mas_yr: speed,
        }
    }
}

/// Powers of a time difference.
#[must_use]
pub fn powers(dt_yr: f64) -> [f64; TERMS] {
    [1.0, dt_yr, dt_yr * dt_yr, dt_yr * dt_yr * dt_yr]
}

/// Running normal equations of one star's path about a time zero shared by all stars.
#[derive(Clone, Copy, Debug, Default)]
pub struct PathSums {
    moments: [f64; 2 * TERMS - 1],
    rhs: [[f64; TERMS]; 2],
    pub n: usize,
}

impl PathSums {
    /// Takes in one detection with a round error.
    pub fn add(&mut self, dt_yr: f64, x_mas: f64, y_mas: f64, var_mas2: f64) {
        let w = 1.0 / var_mas2;
        let mut p = w;
        for (k, m) in self.moments.iter_mut().enumerate() {
            *m += p;
            if k < TERMS {
                self.rhs[0][k] += p * x_mas;
                self.rhs[1][k] += p * y_mas;
            }
            p *= dt_yr;
        }
        self.n += 1;
    }

    /// The best path under a prior; `None` without detections.
    #[must_use]
    pub fn solve(&self, prior: &PathPrior) -> Option<Path> {
        if self.n == 0 {
            return None;
        }
        let mut a = Matrix4::from_fn(|i, j| self.moments[i + j]);
        let mut b = self.rhs.map(Vector4::from);
        for k in 0..TERMS {
            a[(k, k)] += prior.inv_var[k];
            for axis in 0..2 {
                b[axis][k] += prior.inv_var[k] * prior.mean[axis][k];
            }
        }
        let cov = a.cholesky()?.inverse();
        Some(Path {
            coef: [cov * b[0], cov * b[1]],
            cov,
        })
    }
}

/// A path with the covariance of its coefficients (the same on both axes).
#[derive(Clone, Copy, Debug)]
pub struct Path {
    pub coef: [Vector4<f64>; 2],
    pub cov: Matrix4<f64>,
}

impl Path {
    /// Place \[mas\] and variance per axis \[mas^2\] at a time.
    #[must_use]
    pub fn at(&self, dt_yr: f64) -> (f64, f64, f64) {
        let p = Vector4::from(powers(dt_yr));
        (
            self.coef[0].dot(&p),
            self.coef[1].dot(&p),
            p.dot(&(self.cov * p)).max(0.0),
        )
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn one_detection_spreads_with_the_velocity_prior() {
        let prior = PathPrior {
            mean: [[0.0; TERMS]; 2],
            inv_var: [0.0, 1.0 / 36.0, 1e8, 1e8],
            speed_mas_yr: 6.0,
        };
        let mut sums = PathSums::default();
        sums.add(1.0, 10.0, -5.0, 4.0);
        let path = sums.solve(&prior).unwrap();
        let (x, y, var) = path.at(4.0);
        assert!((x - 10.0).abs() < 1e-6 && (y + 5.0).abs() < 1e-6);
        assert!((var - (4.0 + 9.0 * 36.0)).abs() < 0.1, "{var}");
    }

    #[test]
    fn a_straight_path_is_recovered() {
        let prior = PathPrior {
            mean: [[0.0; TERMS]; 2],
            inv_var: [0.0, 1e-4, 1e4, 1e6],
            speed_mas_yr: 100.0,
        };
        let mut sums = PathSums::default();
        for t in 0..10 {
            let t = f64::from(t);
            sums.add(t, 1.0 + 2.0 * t, 3.0 - t, 1.0);
        }
        let (x, y, _) = sums.solve(&prior).unwrap().at(20.0);
        assert!((x - 41.0).abs() < 0.2 && (y + 17.0).abs() < 0.2, "{x} {y}");
    }
}
