//! The central mass and its place, solved jointly with all orbits about it.
//!
//! Problem: astrometry knows the mass only through mu = GM / D^3, and an orbit fitted with a
//! slightly wrong mu or centre is wrong with it. All Keplerian tracks share mu and the centre,
//! so they are solved together; the mass in solar masses follows only with the distance.
//!
//! Method: Gauss-Newton in the common values, with the normal equations in arrow form: the six
//! numbers of every star are eliminated (Schur complement), which leaves a 5 x 5 system for
//! (mu, x, y, vx, vy) of the mass. After each step every star is fitted to the new mass by
//! itself, so that one difficult star cannot hold up the rest (variable projection, Golub &
//! Pereyra 1973, SIAM J. Numer. Anal. 10, 413; from memory). Cost per step: linear in the number
//! of detections.
//!
//! A star can sit in a false minimum while mass and centre are still wrong. Joint solutions
//! alternate with fits of every star alone, from several starts, until the objective stops
//! falling.
//!
//! The result has no prior on the common values that are free. It is only as good as the tracks'
//! identities; errors shared by all stars of an epoch (the frame) are not in its covariance.
//! Fails when the free values are not determined by the tracks, and says so.

use nalgebra::{SMatrix, SVector};

use super::kepler;
use super::linear::Point;
use super::orbit_fit::{
    ErrorLaw, FitEnd, Observations, OrbitPrior, OrbitProblem, RadialVelocity, State, mirrored,
    split,
};
use super::terms::Terms;

/// Values common to all orbits: (mu, x, y, vx, vy) of the mass; mas^3/yr^2, mas, mas/yr. Position
/// at the reference time.
pub type Common = SVector<f64, 5>;

/// One star: what was measured, in the field frame, and where to begin.
#[derive(Clone, Debug)]
pub struct Orbiter {
    pub points: Vec<Point>,
    /// Relative to the mass.
    pub velocities: Vec<RadialVelocity>,
    /// Relative to the mass at the reference time.
    pub start: State,
    pub prior: OrbitPrior,
}

/// The joint problem.
#[derive(Clone, Debug)]
pub struct MassProblem<'a> {
    pub t_ref_yr: f64,
    pub orbiters: &'a [Orbiter],
    pub start: Common,
    /// Which of the common values are solved for; the others stay as they are.
    pub free: [bool; 5],
    pub errors: ErrorLaw,
}

/// Result of the joint solution.
#[derive(Clone, Debug)]
pub struct RefinedMass {
    pub common: Common,
    /// Zero rows and columns for values that were not free.
    pub cov: SMatrix<f64, 5, 5>,
    /// States of the stars relative to the refined centre, in the order given.
    pub states: Vec<State>,
    /// Plain chi2 of all measurements.
    pub chi2: f64,
    /// Measured numbers minus free values.
    pub dof: usize,
    pub steps: u32,
    pub end: FitEnd,
}

impl RefinedMass {
    /// Chi-square of the difference from given common values over the free ones, with their
    /// number: small when the refined mass and centre agree with the campaign's. `given_var` are
    /// the variances of the given values.
    #[must_use]
    pub fn disagreement(&self, given: &Common, given_var: &Common) -> (f64, usize) {
        let free: Vec<usize> = (0..5).filter(|&k| self.cov[(k, k)] > 0.0).collect();
        let n = free.len();
        let cov = nalgebra::DMatrix::from_fn(n, n, |i, j| {
            let own = self.cov[(free[i], free[j])];
            if i == j {
                own + given_var[free[i]]
            } else {
                own
            }
        });
        let d = nalgebra::DVector::from_fn(n, |i, _| self.common[free[i]] - given[free[i]]);
        let chi2 = cov
            .cholesky()
            .map_or(f64::INFINITY, |f| d.dot(&f.solve(&d)));
        (chi2, n)
    }
}

/// Why no mass came out.
#[derive(Clone, Copy, Debug, PartialEq, Eq, thiserror::Error)]
pub enum RefineError {
    #[error("no Keplerian track to refine the central mass with")]
    NoOrbits,
    #[error("{orbits} Keplerian track(s) do not determine the central mass and its position")]
    Undetermined { orbits: usize },
}

const STEP_LIMIT: u32 = 60;
const ROUND_LIMIT: usize = 8;
/// A change of the objective (in units of chi2) that does not matter.
const SMALL_GAIN: f64 = 1e-4;

/// Where a search stands.
struct Place {
    common: Common,
    states: Vec<State>,
    steps: u32,
    end: FitEnd,
}

/// Normal equations of one star: its own block, the one shared with the common values, slope.
#[derive(Clone)]
struct Block {
    own: SMatrix<f64, 6, 6>,
    shared: SMatrix<f64, 6, 5>,
    slope: State,
}

/// Normal equations of everything at one place.
struct Normal {
    objective: f64,
    blocks: Vec<Block>,
    common: SMatrix<f64, 5, 5>,
    slope: Common,
}

impl MassProblem<'_> {
    /// Solves for the free common values and all states.
    ///
    /// # Errors
    /// Without orbits, or when they do not determine the free values.
    pub fn solve(&self) -> Result<RefinedMass, RefineError> {
        if self.orbiters.is_empty() {
            return Err(RefineError::NoOrbits);
        }
        let undetermined = RefineError::Undetermined {
            orbits: self.orbiters.len(),
        };
        let mut at = Place {
            common: self.start,
            states: self.orbiters.iter().map(|o| o.start).collect(),
            steps: 0,
            end: FitEnd::StepLimit,
        };
        let mut objective = f64::INFINITY;
        for _ in 0..ROUND_LIMIT {
            self.refit_stars(at.common, &mut at.states, true);
            let found = self.descend(&mut at).ok_or(undetermined)?;
            if objective - found < 1e-3 {
                break;
            }
            objective = found;
        }
        let here = self.normal(&at.common, &at.states);
        let Place {
            common,
            states,
            steps,
            end,
        } = at;
        let cov = self.reduced(&here, 0.0).and_then(|(m, _)| m.try_inverse());
        let mut cov = cov.ok_or(undetermined)?;
        for k in (0..5).filter(|&k| !self.free[k]) {
            cov.row_mut(k).fill(0.0);
            cov.column_mut(k).fill(0.0);
        }
        if (0..5).any(|k| self.free[k] && !(cov[(k, k)] > 0.0 && cov[(k, k)].is_finite())) {
            return Err(undetermined);
        }
        let measured: usize = self
            .orbiters
            .iter()
            .map(|o| 2 * o.points.len() + o.velocities.len())
            .sum();
        let solved = 6 * states.len() + self.free.iter().filter(|f| **f).count();
        Ok(RefinedMass {
            chi2: self.plain_chi2(&common, &states),
            common,
            cov,
            states,
            dof: measured.saturating_sub(solved),
            steps,
            end,
        })
    }

    /// Fits every star alone to given common values, from where it is and, if `widely`, from
    /// starts around the given one.
    fn refit_stars(&self, common: Common, states: &mut [State], widely: bool) {
        let mut points = Vec::new();
        for (o, state) in self.orbiters.iter().zip(states) {
            points.clear();
            points.extend(o.points.iter().map(|p| {
                let dt = p.t_yr - self.t_ref_yr;
                Point {
                    x_mas: p.x_mas - common[1] - common[3] * dt,
                    y_mas: p.y_mas - common[2] - common[4] * dt,
                    ..*p
                }
            }));
            let problem = OrbitProblem {
                gm_mas3_yr2: common[0],
                t_ref_yr: self.t_ref_yr,
                observed: Observations {
                    points: &points,
                    velocities: &o.velocities,
                },
                prior: o.prior,
                errors: self.errors,
                terms: Terms::default(),
            };
            let mut starts = vec![*state];
            if widely {
                starts.push(o.start);
            }
            for (i, factor) in [(2, 0.5), (2, 1.6), (2, -1.0), (5, 0.5), (5, 1.6), (5, -1.0)]
                .into_iter()
                .filter(|_| widely)
            {
                let mut s = o.start;
                s[i] *= factor;
                starts.push(s);
            }
            if let Some(best) = problem.fit_all(&starts).first() {
                // Without velocities a fit is given with z >= 0: keep this star's own side.
                *state = if o.velocities.is_empty() && best.state[2] * state[2] < 0.0 {
                    mirrored(best).state
                } else {
                    best.state
                };
            }
        }
    }

    /// Descent in the common values with all stars fitted at each; the objective reached, `None`
    /// when the system cannot be solved.
    fn descend(&self, at: &mut Place) -> Option<f64> {
        let mut here = self.normal(&at.common, &at.states);
        let mut damping = 0.0;
        at.end = FitEnd::StepLimit;
        for _ in 0..STEP_LIMIT {
            at.steps += 1;
            let Some((d_common, d_states)) = self.step(&here, damping) else {
                damping = (damping * 10.0).max(1e-6);
                if damping > 1e9 {
                    return None;
                }
                continue;
            };
            let trial = at.common - d_common;
            let mut states: Vec<State> = at
                .states
                .iter()
                .zip(&d_states)
                .map(|(s, d)| s - d)
                .collect();
            if trial[0] > 0.0 {
                self.refit_stars(trial, &mut states, false);
            }
            let there = self.normal(&trial, &states);
            let gain = here.objective - there.objective;
            if trial[0] > 0.0 && gain >= 0.0 {
                at.common = trial;
                at.states = states;
                here = there;
                damping *= 0.1;
            } else {
                damping = (damping * 8.0).max(1e-3);
            }
            // Close to the minimum a step changes nothing that matters, in either direction.
            if trial[0] > 0.0 && gain.abs() < SMALL_GAIN || damping > 1e9 {
                at.end = FitEnd::Converged;
                break;
            }
        }
        Some(here.objective)
    }

    /// The common system with every star eliminated, and its right-hand side.
    fn reduced(&self, n: &Normal, damping: f64) -> Option<(SMatrix<f64, 5, 5>, Common)> {
        let mut matrix = n.common;
        let mut rhs = n.slope;
        for k in 0..5 {
            matrix[(k, k)] *= 1.0 + damping;
        }
        for b in &n.blocks {
            let factor = damped(&b.own, damping).cholesky()?;
            matrix -= b.shared.transpose() * factor.solve(&b.shared);
            rhs -= b.shared.transpose() * factor.solve(&b.slope);
        }
        for k in (0..5).filter(|&k| !self.free[k]) {
            matrix.row_mut(k).fill(0.0);
            matrix.column_mut(k).fill(0.0);
            matrix[(k, k)] = 1.0;
            rhs[k] = 0.0;
        }
        Some((matrix, rhs))
    }

    fn step(&self, n: &Normal, damping: f64) -> Option<(Common, Vec<State>)> {
        let (matrix, rhs) = self.reduced(n, damping)?;
        // Values of very different size: scale to unit diagonal before the factorisation.
        let scale = matrix.diagonal().map(|d| 1.0 / d.abs().sqrt());
        let scaled = SMatrix::<f64, 5, 5>::from_fn(|i, j| matrix[(i, j)] * scale[i] * scale[j]);
        let common: Common = scaled
            .cholesky()?
            .solve(&rhs.component_mul(&scale))
            .component_mul(&scale);
        let states = n
            .blocks
            .iter()
            .map(|b| {
                let factor = damped(&b.own, damping).cholesky()?;
                Some(factor.solve(&(b.slope - b.shared * common)))
            })
            .collect::<Option<_>>()?;
        Some((common, states))
    }

    fn normal(&self, common: &Common, states: &[State]) -> Normal {
        let mut out = Normal {
            objective: 0.0,
            blocks: Vec::with_capacity(states.len()),
            common: SMatrix::zeros(),
            slope: Common::zeros(),
        };
        let gm = common[0];
        for (o, state) in self.orbiters.iter().zip(states) {
            let (r, v) = split(state);
            let mut b = Block {
                own: SMatrix::zeros(),
                shared: SMatrix::zeros(),
                slope: State::zeros(),
            };
            for p in &o.points {
                let dt = p.t_yr - self.t_ref_yr;
                let at = kepler::propagate_sky(gm, r, v, dt);
                let (dx, dy) = (
                    common[1] + common[3] * dt + at.r[0] - p.x_mas,
                    common[2] + common[4] * dt + at.r[1] - p.y_mas,
                );
                let w = p.cov_mas2.inverse();
                let (wx, wy) = (w.xx * dx + w.xy * dy, w.xy * dx + w.yy * dy);
                let (cost, weight) = self.errors.cost(dx * wx + dy * wy);
                out.objective += cost;
                let jx: SVector<f64, 6> = at.d_state[0].into();
                let jy: SVector<f64, 6> = at.d_state[1].into();
                let kx = Common::from([at.d_gm[0], 1.0, 0.0, dt, 0.0]);
                let ky = Common::from([at.d_gm[1], 0.0, 1.0, 0.0, dt]);
                let (ax, ay) = (
                    (jx * w.xx + jy * w.xy) * weight,
                    (jx * w.xy + jy * w.yy) * weight,
                );
                b.own += ax * jx.transpose() + ay * jy.transpose();
                b.shared += ax * kx.transpose() + ay * ky.transpose();
                b.slope += (jx * wx + jy * wy) * weight;
                out.common += ((kx * w.xx + ky * w.xy) * kx.transpose()
                    + (kx * w.xy + ky * w.yy) * ky.transpose())
                    * weight;
                out.slope += (kx * wx + ky * wy) * weight;
            }
            for m in &o.velocities {
                let at = kepler::propagate_with_stm(gm, r, v, m.t_yr - self.t_ref_yr);
                let weight = 1.0 / (m.err_mas_yr * m.err_mas_yr);
                let d = at.v[2] - m.vz_mas_yr;
                out.objective += weight * d * d;
                let j: SVector<f64, 6> = at.d_state[5].into();
                let k = Common::from([at.d_gm[5], 0.0, 0.0, 0.0, 0.0]);
                b.own += j * j.transpose() * weight;
                b.shared += j * k.transpose() * weight;
                b.slope += j * (d * weight);
                out.common += k * k.transpose() * weight;
                out.slope += k * (d * weight);
            }
            for (i, precision) in o.prior.precision() {
                out.objective += precision * state[i] * state[i];
                b.slope[i] += precision * state[i];
                b.own[(i, i)] += precision;
            }
            out.blocks.push(b);
        }
        out
    }

    fn plain_chi2(&self, common: &Common, states: &[State]) -> f64 {
        let mut chi2 = 0.0;
        for (o, state) in self.orbiters.iter().zip(states) {
            let (r, v) = split(state);
            for p in &o.points {
                let dt = p.t_yr - self.t_ref_yr;
                let (at, _) = kepler::propagate(common[0], r, v, dt);
                chi2 += p.cov_mas2.chi2(
                    common[1] + common[3] * dt + at[0] - p.x_mas,
                    common[2] + common[4] * dt + at[1] - p.y_mas,
                );
            }
            for m in &o.velocities {
                let (_, at) = kepler::propagate(common[0], r, v, m.t_yr - self.t_ref_yr);
                chi2 += ((at[2] - m.vz_mas_yr) / m.err_mas_yr).powi(2);
            }
        }
        chi2
    }
}

fn damped(m: &SMatrix<f64, 6, 6>, damping: f64) -> SMatrix<f64, 6, 6> {
    let mut out = *m;
    for k in 0..6 {
        out[(k, k)] *= 1.0 + damping;
    }
    out
}
