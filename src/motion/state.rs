//! Law of motion of the stars of a field, with the prior on its six parameters.
//!
//! Near a known mass a star is a two-body state (x, y, z, vx, vy, vz) relative to the mass;
//! the prior is an isotropic cusp, density r^-gamma with velocity variance mu / ((gamma + 1) r)
//! per axis (spherical Jeans equation, Binney & Tremaine 2008, section 4.8; from memory).
//! Elsewhere it is (x, y, vx, vy, ax, ay) with Gaussian priors on velocity and acceleration.

use nalgebra::{SMatrix, SVector};

use super::kepler;

/// Six parameters of one star.
pub type P6 = SVector<f64, 6>;
/// Their covariance or normal matrix.
pub type M6 = SMatrix<f64, 6, 6>;
/// Derivatives of the sky position with respect to the parameters.
pub type H26 = SMatrix<f64, 2, 6>;

/// Slope of the stellar density around a mass, n ~ r^-gamma (a relaxed cusp; Bahcall & Wolf 1976).
pub const CUSP_GAMMA: f64 = 1.75;

/// ln of the constant C in p(u) = C (1 + u^2)^(-gamma/2), u = z / R, for gamma = 1.75:
/// C = Gamma(7/8) / (sqrt(pi) Gamma(3/8)) = 0.2594.
const LN_CUSP_NORM: f64 = -1.349_4;

/// A second, wide component of the velocity prior: a single Gaussian would reject exactly the
/// fast stars.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Wide {
    pub fraction: f64,
    pub speed_mas_yr: f64,
}

impl Wide {
    /// ln of the density of the fast stars' velocity \[(mas/yr)^-2\] at a squared speed: as
    /// 1 / (1 + v^2 / s^2) up to [`TOP_SPEEDS`] s, so that each factor of two in speed beyond s is
    /// as likely as the next (Jeffreys 1939; from memory).
    #[must_use]
    pub fn ln_density(self, v2: f64) -> f64 {
        let s2 = self.speed_mas_yr * self.speed_mas_yr;
        let norm = std::f64::consts::PI * s2 * (1.0 + TOP_SPEEDS * TOP_SPEEDS).ln();
        -norm.ln() - (1.0 + v2 / s2).ln()
    }
}

/// Speeds up to so many times the tail's width are looked for where the field is empty enough.
pub const TOP_SPEEDS: f64 = 200.0;

/// How stars of this field move.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Dynamics {
    /// Two-body motion about a mass; parameters relative to its place.
    Central {
        gm_mas3_yr2: f64,
        x_mas: f64,
        y_mas: f64,
        vx_mas_yr: f64,
        vy_mas_yr: f64,
        /// Time at which (x, y) holds.
        t_yr: f64,
    },
    /// No mass: constant acceleration with a narrow prior about zero.
    Free {
        speed_mas_yr: f64,
        accel_mas_yr2: f64,
        /// Fast component of the velocity prior.
        wide: Wide,
    },
}

/// Logarithm of the prior density of a parameter vector with gradient and a positive
/// semidefinite curvature for Newton steps.
#[derive(Clone, Copy, Debug)]
pub struct Prior {
    pub ln: f64,
    pub grad: P6,
    pub curv: M6,
}

impl Dynamics {
    /// Place of the mass at a time (the origin of the parameters); (0, 0) without one.
    #[must_use]
    pub fn centre_at(&self, t: f64) -> (f64, f64) {
        match *self {
            Self::Central {
                x_mas,
                y_mas,
                vx_mas_yr,
                vy_mas_yr,
                t_yr,
                ..
            } => (
                x_mas + vx_mas_yr * (t - t_yr),
                y_mas + vy_mas_yr * (t - t_yr),
            ),
            Self::Free { .. } => (0.0, 0.0),
        }
    }

    /// Motion of the mass on the sky \[mas/yr\]; (0, 0) without one.
    #[must_use]
    pub fn centre_velocity(&self) -> (f64, f64) {
        match *self {
            Self::Central {
                vx_mas_yr,
                vy_mas_yr,
                ..
            } => (vx_mas_yr, vy_mas_yr),
            Self::Free { .. } => (0.0, 0.0),
        }
    }

    #[must_use]
    pub fn is_central(&self) -> bool {
        matches!(self, Self::Central { .. })
    }

    /// Sky position \[mas, common frame\] at time `t` of parameters that hold at `t0`.
    #[must_use]
    pub fn position(&self, p: &P6, t0: f64, t: f64) -> (f64, f64) {
        let dt = t - t0;
        match *self {
            Self::Central { gm_mas3_yr2, .. } => {
                let (r, _) =
                    kepler::propagate(gm_mas3_yr2, [p[0], p[1], p[2]], [p[3], p[4], p[5]], dt);
                let (cx, cy) = self.centre_at(t);
                (cx + r[0], cy + r[1])
            }
            Self::Free { .. } => (
                p[0] + p[2] * dt + 0.5 * p[4] * dt * dt,
                p[1] + p[3] * dt + 0.5 * p[5] * dt * dt,
            ),
        }
    }

    /// Sky position and its derivatives with respect to the parameters.
    #[must_use]
    pub fn position_with_partials(&self, p: &P6, t0: f64, t: f64) -> ((f64, f64), H26) {
        let dt = t - t0;
        match *self {
            Self::Central { gm_mas3_yr2, .. } => {
                let s =
                    kepler::propagate_sky(gm_mas3_yr2, [p[0], p[1], p[2]], [p[3], p[4], p[5]], dt);
                let (cx, cy) = self.centre_at(t);
                (
                    (cx + s.r[0], cy + s.r[1]),
                    H26::from_fn(|i, j| s.d_state[i][j]),
                )
            }
            Self::Free { .. } => {
                let q = 0.5 * dt * dt;
                (
                    self.position(p, t0, t),
                    H26::new(1.0, 0.0, dt, 0.0, q, 0.0, 0.0, 1.0, 0.0, dt, 0.0, q),
                )
            }
        }
    }

    /// Prior density of the parameters other than the sky position (which has density one per
    /// mas^2 here: the caller multiplies by the surface density of stars).
    #[must_use]
    pub fn prior(&self, p: &P6) -> Prior {
        match *self {
            Self::Central { gm_mas3_yr2, .. } => central_prior(gm_mas3_yr2, p),
            Self::Free {
                speed_mas_yr,
                accel_mas_yr2,
                wide,
            } => free_prior(speed_mas_yr, accel_mas_yr2, wide, p),
        }
    }

    /// ln of the prior density of a velocity on the sky \[(mas/yr)^-2\]; `None` near a mass, where
    /// it depends on the place.
    #[must_use]
    pub fn ln_velocity(&self, vx: f64, vy: f64) -> Option<f64> {
        match *self {
            Self::Central { .. } => None,
            Self::Free {
                speed_mas_yr, wide, ..
            } => {
                let v2 = vx * vx + vy * vy;
                let (core, far) = velocity_parts(speed_mas_yr, wide, v2);
                Some(crate::maths::lnprob::ln_add(core, far))
            }
        }
    }

    /// Largest plausible sky speed at a projected radius \[mas/yr\].
    #[must_use]
    pub fn top_speed_mas_yr(&self, x_mas: f64, y_mas: f64, t: f64) -> f64 {
        match *self {
            Self::Central { gm_mas3_yr2, .. } => {
                let (cx, cy) = self.centre_at(t);
                let r = (x_mas - cx).hypot(y_mas - cy).max(10.0);
                (2.0 * gm_mas3_yr2 / r).sqrt()
            }
            Self::Free {
                speed_mas_yr, wide, ..
            } => TOP_SPEEDS * speed_mas_yr.max(wide.speed_mas_yr),
        }
    }

    /// Velocity dispersion per axis to be expected at a projected radius \[mas/yr\].
    #[must_use]
    pub fn speed_mas_yr(&self, x_mas: f64, y_mas: f64, t: f64) -> f64 {
        match *self {
            Self::Central { gm_mas3_yr2, .. } => {
                let (cx, cy) = self.centre_at(t);
                let r = (x_mas - cx).hypot(y_mas - cy).max(10.0);
                (gm_mas3_yr2 / ((CUSP_GAMMA + 1.0) * r)).sqrt()
            }
            Self::Free { speed_mas_yr, .. } => speed_mas_yr,
        }
    }
}

/// ln density of the Gaussian core and of the tail of [`Wide`] at a squared speed.
fn velocity_parts(speed: f64, wide: Wide, v2: f64) -> (f64, f64) {
    let core = (1.0 - wide.fraction).ln()
        - (2.0 * std::f64::consts::PI).ln()
        - 2.0 * speed.ln()
        - 0.5 * v2 / (speed * speed);
    (core, wide.fraction.ln() + wide.ln_density(v2))
}

/// Velocity: a Gaussian core and the tail of [`Wide`]. Acceleration: a Gaussian. The curvature is
/// that of the component mix at hand, which keeps Newton steps safe.
fn free_prior(speed: f64, accel: f64, wide: Wide, p: &P6) -> Prior {
    let v2 = p[2] * p[2] + p[3] * p[3];
    let two_pi = 2.0 * std::f64::consts::PI;
    let s2 = wide.speed_mas_yr * wide.speed_mas_yr;
    let (core, far) = velocity_parts(speed, wide, v2);
    let total = crate::maths::lnprob::ln_add(core, far);
    let w = (core - total).exp();
    let iv = w / (speed * speed) + (1.0 - w) * 2.0 / (s2 + v2);
    let ia = accel.powi(-2);
    let a2 = p[4] * p[4] + p[5] * p[5];
    let mut grad = P6::zeros();
    let mut curv = M6::zeros();
    for (k, q) in [(2, iv), (3, iv), (4, ia), (5, ia)] {
        grad[k] = -q * p[k];
        curv[(k, k)] = q;
    }
    Prior {
        ln: total - two_pi.ln() - 2.0 * accel.ln() - 0.5 * ia * a2,
        grad,
        curv,
    }
}

/// ln p(z | R) + ln p(v | r) of the isotropic cusp.
fn central_prior(gm: f64, p: &P6) -> Prior {
    const SOFT_MAS2: f64 = 4.0;
    let (x, y, z) = (p[0], p[1], p[2]);
    let big_r2 = x * x + y * y + SOFT_MAS2;
    let r2 = big_r2 + z * z;
    let r = r2.sqrt();
    let v2 = p[3] * p[3] + p[4] * p[4] + p[5] * p[5];
    let g1 = CUSP_GAMMA + 1.0;
    // p(z|R) = C / R (1 + z^2/R^2)^(-gamma/2)
    let ln_z = LN_CUSP_NORM - 0.5 * big_r2.ln() - 0.5 * CUSP_GAMMA * (r2 / big_r2).ln();
    // p(v|r), sigma^2 = gm / (g1 r)
    let inv_var = g1 * r / gm;
    let ln_v = 1.5 * (inv_var / (2.0 * std::f64::consts::PI)).ln() - 0.5 * inv_var * v2;
    // d/dr of the velocity prior: 1.5 / r - 0.5 g1 v2 / gm
    let dv_dr = 1.5 / r - 0.5 * g1 * v2 / gm;
    let mut grad = P6::zeros();
    for k in 0..3 {
        grad[k] = dv_dr * p[k] / r - CUSP_GAMMA * p[k] / r2;
    }
    grad[0] += (CUSP_GAMMA - 1.0) * x / big_r2;
    grad[1] += (CUSP_GAMMA - 1.0) * y / big_r2;
    let mut curv = M6::zeros();
    for k in 3..6 {
        grad[k] = -inv_var * p[k];
        curv[(k, k)] = inv_var;
    }
    curv[(2, 2)] = (CUSP_GAMMA + 0.5 * g1 * v2 * r / gm) / r2;
    Prior {
        ln: ln_z + ln_v,
        grad,
        curv,
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn prior_gradient_matches_finite_differences() {
        let d = Dynamics::Central {
            gm_mas3_yr2: 2.868e5,
            x_mas: 0.0,
            y_mas: 0.0,
            vx_mas_yr: 0.0,
            vy_mas_yr: 0.0,
            t_yr: 2000.0,
        };
        let p = P6::new(120.0, -80.0, 150.0, 11.0, -7.0, 5.0);
        let g = d.prior(&p).grad;
        for k in 0..6 {
            let h = 1e-4;
            let (mut a, mut b) = (p, p);
            a[k] -= h;
            b[k] += h;
            let num = (d.prior(&b).ln - d.prior(&a).ln) / (2.0 * h);
            assert!(
                (num - g[k]).abs() < 1e-6 * (1.0 + num.abs()),
                "parameter {k}: {num} {}",
                g[k]
            );
        }
    }
}
