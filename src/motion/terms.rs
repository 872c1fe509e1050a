//! Optional refinements of motion about a mass: light-travel time, relativity, extended mass.
//! All are off unless a campaign asks for them.
//!
//! * Light time: a star behind the mass is seen where it was earlier; with z away from the
//!   observer the time of the path is t - z/c (the constant part, the distance of the mass, drops
//!   out). Iterated.
//! * Relativity: first post-Newtonian acceleration of a light body about a mass at rest, in
//!   harmonic coordinates, `gm / (c^2 r^3) [(4 gm / r - v^2) r + 4 (r.v) v]` (standard; e.g. Will
//!   1993, Theory and Experiment in Gravitational Physics, from memory). Pericentre advances by
//!   6 pi gm / (c^2 a (1 - e^2)) per revolution. For radial velocities: transverse Doppler shift
//!   and gravitational redshift, (v^2 / 2 + gm / r) / c.
//! * Extended mass M(r) = m (r / r_in)^(3 - slope) around the point mass: pericentre goes back.
//!
//! Perturbed orbits are integrated (Dormand & Prince 1980, J. Comp. Appl. Math. 6, 19: order
//! 5(4), adaptive), some hundred times slower than the two-body step; the derivatives given
//! along with them are those of the two-body orbit, good enough for a fit's steps.
//!
//! Left out: Shapiro delay and lensing by the mass (tens of microarcseconds at most for the
//! tightest orbits), spin.

use super::kepler::{self, SkyPartials};
use crate::maths::units;
use crate::model::campaign::CentralMass;

/// Which terms are on.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Terms {
    /// Speed of light \[mas/yr\] at the distance of the mass, for light time.
    pub light_time: Option<f64>,
    /// The same, for post-Newtonian motion and shifts of radial velocities.
    pub relativity: Option<f64>,
    pub extended: Option<Extended>,
}

/// Power-law mass around the point mass, in angular units.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Extended {
    /// GM of the extended mass inside `radius_mas` \[mas^3/yr^2\].
    pub gm_mas3_yr2: f64,
    pub radius_mas: f64,
    /// Density falls as r^-slope.
    pub slope: f64,
}

/// An optional term was asked for but the distance that it needs is missing.
#[derive(Clone, Copy, Debug, PartialEq, Eq, thiserror::Error)]
#[error("[central_mass] {term} needs distance_pc: the size of the effect depends on it")]
pub struct NeedsDistance {
    pub term: &'static str,
}

/// Relative accuracy asked of each integration step.
const STEP_ACCURACY: f64 = 1e-12;
/// Integration steps allowed; far more than any campaign's arc needs.
const STEP_LIMIT: usize = 2_000_000;

impl Terms {
    /// Terms a campaign asks for.
    ///
    /// # Errors
    /// When a term is on and the distance of the mass is not given.
    pub fn of(central: &CentralMass) -> Result<Self, NeedsDistance> {
        let need = |term| central.distance_pc.ok_or(NeedsDistance { term });
        let light = |d: f64| units::LIGHT_AU_YR / units::au_per_mas(d);
        Ok(Self {
            light_time: central
                .light_time
                .then(|| need("light_time").map(light))
                .transpose()?,
            relativity: central
                .relativity
                .then(|| need("relativity").map(light))
                .transpose()?,
            extended: central
                .extended
                .map(|e| {
                    need("extended").map(|d| Extended {
                        gm_mas3_yr2: units::gm_mas3_yr2(e.mass_msun, d),
                        radius_mas: e.inside_pc / d * units::MAS_PER_RAD,
                        slope: e.slope,
                    })
                })
                .transpose()?,
        })
    }

    /// True when motion is plain two-body motion seen at once.
    #[must_use]
    pub fn are_off(&self) -> bool {
        *self == Self::default()
    }

    fn is_two_body(&self) -> bool {
        self.relativity.is_none() && self.extended.is_none()
    }

    /// State after `dt`, as it is (not as it is seen).
    #[must_use]
    pub fn propagate(&self, gm: f64, r0: [f64; 3], v0: [f64; 3], dt: f64) -> ([f64; 3], [f64; 3]) {
        if self.is_two_body() {
            return kepler::propagate(gm, r0, v0, dt);
        }
        let y = integrate(|y| self.rates(gm, y), join(r0, v0), dt);
        ([y[0], y[1], y[2]], [y[3], y[4], y[5]])
    }

    /// State as seen `dt` after the start, light time included, with two-body derivatives.
    #[must_use]
    pub fn seen(&self, gm: f64, r0: [f64; 3], v0: [f64; 3], dt: f64) -> SkyPartials {
        let at = self.emission_dt(gm, r0, v0, dt);
        let mut out = kepler::propagate_sky(gm, r0, v0, at);
        if !self.is_two_body() {
            (out.r, out.v) = self.propagate(gm, r0, v0, at);
        }
        out
    }

    /// Time of the path at which light seen at `dt` left the star. `dt` counts from the start
    /// state, whose own time is that of the path.
    #[must_use]
    pub fn emission_dt(&self, gm: f64, r0: [f64; 3], v0: [f64; 3], dt: f64) -> f64 {
        let Some(c) = self.light_time else { return dt };
        let (r, v) = self.propagate(gm, r0, v0, dt);
        let mut at = dt - r[2] / (c + v[2]);
        for _ in 0..2 {
            let (r, v) = self.propagate(gm, r0, v0, at);
            // Newton's step for at + z(at) / c = dt.
            at -= (at + r[2] / c - dt) / (1.0 + v[2] / c);
        }
        at
    }

    /// What adds to the line-of-sight velocity \[mas/yr\] in a spectrum; 0 without relativity.
    #[must_use]
    pub fn velocity_shift(&self, gm: f64, r: [f64; 3], v: [f64; 3]) -> f64 {
        self.relativity
            .map_or(0.0, |c| (0.5 * dot(v, v) + gm / dot(r, r).sqrt()) / c)
    }

    fn rates(&self, gm: f64, y: &[f64; 6]) -> [f64; 6] {
        let (r, v) = ([y[0], y[1], y[2]], [y[3], y[4], y[5]]);
        let d2 = dot(r, r);
        let d = d2.sqrt();
        let d3 = d2 * d;
        let (mut along_r, mut along_v) = (-gm / d3, 0.0);
        if let Some(c) = self.relativity {
            let k = gm / (c * c * d3);
            along_r += k * (4.0 * gm / d - dot(v, v));
            along_v += k * 4.0 * dot(r, v);
        }
        if let Some(e) = self.extended {
            along_r -= e.gm_mas3_yr2 * (d / e.radius_mas).powf(3.0 - e.slope) / d3;
        }
        let a = [0, 1, 2].map(|i| along_r * r[i] + along_v * v[i]);
        join(v, a)
    }
}

/// Solves y' = f(y) over `span` (either sign). Ends early, with what it has, at the step limit.
fn integrate(f: impl Fn(&[f64; 6]) -> [f64; 6], start: [f64; 6], span: f64) -> [f64; 6] {
    // Dormand & Prince's coefficients: rows of the stages, then the error weights.
    const A: [&[f64]; 6] = [
        &[1.0 / 5.0],
        &[3.0 / 40.0, 9.0 / 40.0],
        &[44.0 / 45.0, -56.0 / 15.0, 32.0 / 9.0],
        &[
            19_372.0 / 6561.0,
            -25_360.0 / 2187.0,
            64_448.0 / 6561.0,
            -212.0 / 729.0,
        ],
        &[
            9017.0 / 3168.0,
            -355.0 / 33.0,
            46_732.0 / 5247.0,
            49.0 / 176.0,
            -5103.0 / 18_656.0,
        ],
        &[
            35.0 / 384.0,
            0.0,
            500.0 / 1113.0,
            125.0 / 192.0,
            -2187.0 / 6784.0,
            11.0 / 84.0,
        ],
    ];
    const E: [f64; 7] = [
        71.0 / 57_600.0,
        0.0,
        -71.0 / 16_695.0,
        71.0 / 1920.0,
        -17_253.0 / 339_200.0,
        22.0 / 525.0,
        -1.0 / 40.0,
    ];
    let mut y = start;
    if span == 0.0 || !span.is_finite() {
        return y;
    }
    let mut k = [[0.0; 6]; 7];
    k[0] = f(&y);
    let (size, rate) = (norm6(&y, 0), norm6(&k[0], 0));
    let mut h = (1e-3 * size / rate).min(span.abs());
    let mut done = 0.0;
    for _ in 0..STEP_LIMIT {
        let left = span.abs() - done;
        if left <= 1e-15 * span.abs() {
            break;
        }
        h = h.min(left);
        let signed = h.copysign(span);
        let mut next = y;
        for (stage, row) in A.iter().enumerate() {
            next = y;
            for (c, slope) in row.iter().zip(&k) {
                for (n, s) in next.iter_mut().zip(slope) {
                    *n += signed * c * s;
                }
            }
            k[stage + 1] = f(&next);
        }
        let mut miss = [0.0; 6];
        for (c, slope) in E.iter().zip(&k) {
            for (m, s) in miss.iter_mut().zip(slope) {
                *m += h * c * s;
            }
        }
        let error = (norm6(&miss, 0) / norm6(&y, 0).min(norm6(&next, 0)))
            .max(norm6(&miss, 3) / norm6(&y, 3).min(norm6(&next, 3)))
            / STEP_ACCURACY;
        if error <= 1.0 {
            done += h;
            y = next;
            k[0] = k[6];
        }
        h *= (0.9 * error.max(1e-10).powf(-0.2)).clamp(0.2, 5.0);
    }
    y
}

/// Length of the position (from 0) or velocity (from 3) part.
fn norm6(y: &[f64; 6], from: usize) -> f64 {
    (y[from].powi(2) + y[from + 1].powi(2) + y[from + 2].powi(2)).sqrt()
}

fn join(r: [f64; 3], v: [f64; 3]) -> [f64; 6] {
    [r[0], r[1], r[2], v[0], v[1], v[2]]
}

fn dot(a: [f64; 3], b: [f64; 3]) -> f64 {
    a[0] * b[0] + a[1] * b[1] + a[2] * b[2]
}
