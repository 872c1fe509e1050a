//! Least-squares fits of Keplerian motion about a known mass, all distinct minima kept.
//!
//! Problem: from positions on the sky (and radial velocities, where there are any) find the
//! state (x, y, z, vx, vy, vz) relative to the mass at a reference time. Depth and line-of-sight
//! speed are seen only through the curvature of the path, so a short arc can have several
//! minima; each start is followed and every distinct end within 9 in the objective is returned.
//!
//! Method: damped Gauss-Newton steps (Marquardt 1963, J. SIAM 11, 431; from memory) with the
//! analytic derivatives of [`super::kepler`]; errors with wings enter as weights that fall with
//! the misfit. Evidence by Laplace's approximation: the posterior is taken as Gaussian around the
//! minimum with the Gauss-Newton curvature. Poor when the depth is hardly constrained (the
//! posterior in z is then far from Gaussian); exact for straight motion.
//!
//! Without radial velocities (z, vz) and (-z, -vz) fit equally well. They count as one minimum,
//! given with z >= 0; its evidence holds both when they are apart.
//!
//! Nothing is allocated per iteration.

use nalgebra::{SMatrix, SVector};

use super::kepler;
use super::linear::Point;
use super::terms::Terms;

/// State (x, y, z, vx, vy, vz) relative to the mass; mas and mas/yr.
pub type State = SVector<f64, 6>;

/// A radial velocity in angular units, relative to the mass.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct RadialVelocity {
    pub t_yr: f64,
    pub vz_mas_yr: f64,
    pub err_mas_yr: f64,
}

/// What was measured, positions relative to the mass.
#[derive(Clone, Copy, Debug)]
pub struct Observations<'a> {
    pub points: &'a [Point],
    pub velocities: &'a [RadialVelocity],
}

/// Gaussian priors about zero; the position on the sky is flat with density 1 per mas^2.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct OrbitPrior {
    pub z_sigma_mas: f64,
    /// Per axis (x, y, z).
    pub v_sigma_mas_yr: [f64; 3],
}

impl OrbitPrior {
    /// Depth comparable to the projected distance; speeds as in a relaxed cusp,
    /// sigma^2 = GM / (2.75 r) per axis (isotropic Jeans equation with density r^-1.75).
    #[must_use]
    pub fn cusp(gm_mas3_yr2: f64, projected_mas: f64) -> Self {
        let sigma = (gm_mas3_yr2 / (2.75 * projected_mas)).sqrt();
        Self {
            z_sigma_mas: projected_mas,
            v_sigma_mas_yr: [sigma; 3],
        }
    }

    /// (index, 1 / variance) of the state values that have a prior.
    pub(super) fn precision(&self) -> [(usize, f64); 4] {
        let of = |s: f64| 1.0 / (s * s);
        [
            (2, of(self.z_sigma_mas)),
            (3, of(self.v_sigma_mas_yr[0])),
            (4, of(self.v_sigma_mas_yr[1])),
            (5, of(self.v_sigma_mas_yr[2])),
        ]
    }
}

/// Law of the errors of positions, per two-dimensional residual.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum ErrorLaw {
    Gaussian,
    /// A share `wing` of errors is `widen` times as large.
    CoreWing {
        wing: f64,
        widen: f64,
    },
    /// Student's t with `nu` degrees of freedom.
    Student {
        nu: f64,
    },
}

impl ErrorLaw {
    /// -2 ln(density * 2 pi sqrt(det C)) of a squared Mahalanobis distance, and its slope.
    #[inline]
    pub(super) fn cost(self, chi2: f64) -> (f64, f64) {
        match self {
            Self::Gaussian => (chi2, 1.0),
            Self::CoreWing { wing, widen } => {
                // Relative to the wing term, so that nothing underflows far out.
                let w2 = 1.0 / (widen * widen);
                let ln_core = (1.0 - wing).ln() - 0.5 * chi2;
                let ln_wing = (wing * w2).ln() - 0.5 * chi2 * w2;
                let ln_sum = crate::maths::lnprob::ln_add(ln_core, ln_wing);
                let p_core = (ln_core - ln_sum).exp();
                (-2.0 * ln_sum, p_core + (1.0 - p_core) * w2)
            }
            Self::Student { nu } => ((nu + 2.0) * (chi2 / nu).ln_1p(), (nu + 2.0) / (nu + chi2)),
        }
    }
}

/// Why a fit ended.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum FitEnd {
    Converged,
    /// The limit on steps was reached; the state is the best so far.
    StepLimit,
}

/// One minimum.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct OrbitFit {
    pub t_ref_yr: f64,
    pub state: State,
    pub cov: SMatrix<f64, 6, 6>,
    /// Plain chi2 of all measurements, without priors and wings.
    pub chi2: f64,
    /// -2 ln(likelihood * prior) up to a constant common to all minima: what was minimised.
    pub objective: f64,
    /// Laplace evidence, for unit density of the position on the sky.
    pub ln_evidence: f64,
    pub steps: u32,
    pub end: FitEnd,
}

/// A fit problem: everything but the start.
#[derive(Clone, Copy, Debug)]
pub struct OrbitProblem<'a> {
    pub gm_mas3_yr2: f64,
    pub t_ref_yr: f64,
    pub observed: Observations<'a>,
    pub prior: OrbitPrior,
    pub errors: ErrorLaw,
    /// Optional terms; off by default.
    pub terms: Terms,
}

/// Steps allowed for one start.
pub const STEP_LIMIT: u32 = 80;
/// Minima this far above the best in the objective are dropped.
pub const KEEP_WITHIN: f64 = 9.0;
/// A step that lowers the objective by less ends the search.
const SMALL_GAIN: f64 = 1e-6;
/// Two ends closer than this squared Mahalanobis distance are one minimum.
const SAME_MINIMUM: f64 = 1.0;

/// Objective, curvature and slope at a state.
struct Local {
    objective: f64,
    curvature: SMatrix<f64, 6, 6>,
    slope: State,
}

impl OrbitProblem<'_> {
    /// Follows one start to its minimum. `None` when the curvature there is not positive
    /// definite or the start is not finite.
    #[must_use]
    pub fn fit(&self, start: State) -> Option<OrbitFit> {
        let mut state = start;
        let mut here = self.local(&state);
        if !here.objective.is_finite() {
            return None;
        }
        let mut damping = 1e-3;
        let mut end = FitEnd::StepLimit;
        let mut steps = 0;
        while steps < STEP_LIMIT {
            steps += 1;
            let mut damped = here.curvature;
            for i in 0..6 {
                damped[(i, i)] *= 1.0 + damping;
            }
            let Some(factor) = damped.cholesky() else {
                damping *= 10.0;
                continue;
            };
            let trial = state - factor.solve(&here.slope);
            let there = self.local(&trial);
            let gain = here.objective - there.objective;
            if gain.abs() < SMALL_GAIN && damping < 1.0 && gain < 0.0 {
                // Rounding decides: the minimum is reached.
                end = FitEnd::Converged;
                break;
            }
            if gain >= 0.0 {
                state = trial;
                here = there;
                if gain < SMALL_GAIN && damping < 1.0 {
                    end = FitEnd::Converged;
                    break;
                }
                damping = (damping * 0.1).max(1e-12);
            } else if damping > 1e12 {
                // No downhill step is left at the resolution of the numbers.
                end = FitEnd::Converged;
                break;
            } else {
                damping = (damping * 8.0).max(1e-6);
            }
        }
        self.finish(state, &here, steps, end)
    }

    /// All distinct minima reached from the starts, best first, none more than [`KEEP_WITHIN`]
    /// above the best.
    #[must_use]
    pub fn fit_all(&self, starts: &[State]) -> Vec<OrbitFit> {
        let mut found: Vec<OrbitFit> = Vec::new();
        for start in starts {
            let Some(fit) = self.fit(*start) else {
                continue;
            };
            match found.iter().position(|old| same_minimum(old, &fit)) {
                Some(k) if fit.objective < found[k].objective => found[k] = fit,
                Some(_) => {}
                None => found.push(fit),
            }
        }
        found.sort_by(|a, b| a.objective.total_cmp(&b.objective));
        let best = found.first().map_or(0.0, |f| f.objective);
        found.retain(|f| f.objective <= best + KEEP_WITHIN);
        found
    }

    /// Objective, Gauss-Newton curvature and half slope.
    fn local(&self, state: &State) -> Local {
        let (r, v) = split(state);
        let mut curvature = SMatrix::<f64, 6, 6>::zeros();
        let mut slope = State::zeros();
        let mut objective = 0.0;
        let is_plain = self.terms.are_off();
        for p in self.observed.points {
            let dt = p.t_yr - self.t_ref_yr;
            let at = if is_plain {
                kepler::propagate_sky(self.gm_mas3_yr2, r, v, dt)
            } else {
                self.terms.seen(self.gm_mas3_yr2, r, v, dt)
            };
            let (dx, dy) = (at.r[0] - p.x_mas, at.r[1] - p.y_mas);
            let w = p.cov_mas2.inverse();
            let (wx, wy) = (w.xx * dx + w.xy * dy, w.xy * dx + w.yy * dy);
            let (cost, weight) = self.errors.cost(dx * wx + dy * wy);
            objective += cost;
            let [jx, jy] = &at.d_state;
            for i in 0..6 {
                slope[i] += weight * (jx[i] * wx + jy[i] * wy);
                let (ax, ay) = (
                    weight * (w.xx * jx[i] + w.xy * jy[i]),
                    weight * (w.xy * jx[i] + w.yy * jy[i]),
                );
                for j in 0..=i {
                    curvature[(i, j)] += ax * jx[j] + ay * jy[j];
                }
            }
        }
        for o in self.observed.velocities {
            let at = kepler::propagate_with_stm(self.gm_mas3_yr2, r, v, o.t_yr - self.t_ref_yr);
            let weight = 1.0 / (o.err_mas_yr * o.err_mas_yr);
            let d = self.speed_at(&r, &v, o.t_yr) - o.vz_mas_yr;
            objective += weight * d * d;
            let row = &at.d_state[5];
            for i in 0..6 {
                slope[i] += weight * row[i] * d;
                for j in 0..=i {
                    curvature[(i, j)] += weight * row[i] * row[j];
                }
            }
        }
        for (i, precision) in self.prior.precision() {
            objective += precision * state[i] * state[i];
            slope[i] += precision * state[i];
            curvature[(i, i)] += precision;
        }
        for i in 0..6 {
            for j in 0..i {
                curvature[(j, i)] = curvature[(i, j)];
            }
        }
        Local {
            objective,
            curvature,
            slope,
        }
    }

    fn finish(&self, state: State, here: &Local, steps: u32, end: FitEnd) -> Option<OrbitFit> {
        let factor = here.curvature.cholesky()?;
        let cov = factor.inverse();
        let ln_det: f64 = 2.0 * factor.l().diagonal().iter().map(|d| d.ln()).sum::<f64>();
        let ln_turn = std::f64::consts::TAU.ln();
        // ln of the normalising constants of points, velocities and priors.
        let mut ln_norm = 0.0;
        for p in self.observed.points {
            ln_norm -= ln_turn + 0.5 * p.cov_mas2.det().ln();
        }
        for o in self.observed.velocities {
            ln_norm -= 0.5 * ln_turn + o.err_mas_yr.ln();
        }
        for (_, precision) in self.prior.precision() {
            ln_norm += 0.5 * (precision.ln() - ln_turn);
        }
        let mut ln_evidence = ln_norm - 0.5 * here.objective + 3.0 * ln_turn - 0.5 * ln_det;
        let mut fit = OrbitFit {
            t_ref_yr: self.t_ref_yr,
            state,
            cov,
            chi2: self.plain_chi2(&state),
            objective: here.objective,
            ln_evidence,
            steps,
            end,
        };
        if self.observed.velocities.is_empty() {
            if fit.state[2] < 0.0 {
                fit = mirrored(&fit);
            }
            // The mirror image holds as much, unless the two overlap.
            let apart2 = separation2(&fit, &mirrored(&fit));
            ln_evidence += (1.0 - (-0.25 * apart2).exp()).ln_1p();
            fit.ln_evidence = ln_evidence;
        }
        fit.ln_evidence.is_finite().then_some(fit)
    }

    /// Line-of-sight speed that a spectrum taken at a time would show.
    fn speed_at(&self, r: &[f64; 3], v: &[f64; 3], t_yr: f64) -> f64 {
        let dt = t_yr - self.t_ref_yr;
        let at = self.terms.emission_dt(self.gm_mas3_yr2, *r, *v, dt);
        let (p, u) = self.terms.propagate(self.gm_mas3_yr2, *r, *v, at);
        u[2] + self.terms.velocity_shift(self.gm_mas3_yr2, p, u)
    }

    fn plain_chi2(&self, state: &State) -> f64 {
        let (r, v) = split(state);
        let points = self.observed.points.iter().map(|p| {
            let dt = p.t_yr - self.t_ref_yr;
            let at = if self.terms.are_off() {
                kepler::propagate(self.gm_mas3_yr2, r, v, dt).0
            } else {
                self.terms.seen(self.gm_mas3_yr2, r, v, dt).r
            };
            p.cov_mas2.chi2(p.x_mas - at[0], p.y_mas - at[1])
        });
        let speeds = self
            .observed
            .velocities
            .iter()
            .map(|o| ((self.speed_at(&r, &v, o.t_yr) - o.vz_mas_yr) / o.err_mas_yr).powi(2));
        points.sum::<f64>() + speeds.sum::<f64>()
    }
}

/// The same path seen from behind: z and vz change sign.
#[must_use]
pub fn mirrored(fit: &OrbitFit) -> OrbitFit {
    let mut out = *fit;
    for k in [2, 5] {
        out.state[k] = -out.state[k];
        for j in 0..6 {
            out.cov[(k, j)] = -out.cov[(k, j)];
            out.cov[(j, k)] = -out.cov[(j, k)];
        }
    }
    out
}

/// State as position and velocity.
#[must_use]
pub fn split(s: &State) -> ([f64; 3], [f64; 3]) {
    ([s[0], s[1], s[2]], [s[3], s[4], s[5]])
}

/// Squared Mahalanobis distance of two minima under the sum of their covariances.
fn separation2(a: &OrbitFit, b: &OrbitFit) -> f64 {
    let d = a.state - b.state;
    match (a.cov + b.cov).cholesky() {
        Some(factor) => d.dot(&factor.solve(&d)),
        None => f64::INFINITY,
    }
}

fn same_minimum(a: &OrbitFit, b: &OrbitFit) -> bool {
    (a.objective - b.objective).abs() < 1e-4 * (1.0 + a.objective.abs()) && separation2(a, b) < 25.0
        || separation2(a, b) < SAME_MINIMUM
}
