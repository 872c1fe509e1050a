//! All maps and all paths of reference stars at once: a block adjustment.
//!
//! Observation: D_e(s, t) theta_e - c = B(dt) m_k + noise, theta_e the parameters of epoch e's
//! map, m_k the path of star k, c a known curved part. Paths are eliminated star by star, the
//! reduced normal equations of the maps are solved by Cholesky (the method of photogrammetry;
//! Brown 1976, from memory; for stars Eichhorn & Jefferys 1971, Publ. Leander McCormick Obs. 16).
//! Weights are Student t (`solve`); the scale and a floor of the errors are found per instrument
//! from the residuals, corrected for the parameters spent.
//!
//! Gauge. Maps of all epochs may drift, turn or grow together while all stars seem to move the
//! other way. Known epochs far apart in time forbid it. Where they do not, the velocity prior of
//! the paths (mean zero, known dispersion) picks the one solution in which the reference stars'
//! motions, weighted by 1/dispersion^2, have no mean, no rotation, no scale rate, nor any other
//! of the maps' own modes. The covariance returned is then conditional on that rule, and the rule's own
//! error is returned beside it. Fails when the normal equations are singular: an epoch without
//! enough stars must not be given.

use nalgebra::{DMatrix, DVector, Matrix4, Vector4};

use super::path::{Path, PathPrior, PriorLaw, TERMS, powers};
use super::solve::{T_DOF, t_weight};
use super::transform::{
    Chart, MAX_PARAMS, PolyMap, basis, n_params, params_of, place_covariance, terms,
};
use crate::maths::order;
use crate::model::campaign::FrameFreedom;

/// A star's own solution once the frames are known: inverse normal matrix, right side per axis.
type BackSolve = (Matrix4<f64>, [Vector4<f64>; 2]);

/// Rounds of reweighting.
const ROUNDS: usize = 4;
/// Stars eliminated per block of the matrix product.
const BLOCK: usize = 48;
/// Relative variance of a slope below which known epochs, not the rule, have fixed it.
const TIED: f64 = 0.25;
/// Relative uncertainty of the depth-averaged pull (density slopes 1.5 to 2, cut-offs in depth).
const PULL_ERROR: f64 = 0.3;
/// Terms of a shared distortion: s^2, s t, t^2 on both axes.
const SHARED: usize = 6;

/// What is to be solved for one epoch.
#[derive(Clone, Debug)]
pub struct EpochSetup {
    pub dt_yr: f64,
    pub chart: Chart,
    /// `Known`: the map below is kept.
    pub freedom: FrameFreedom,
    pub mirrored: bool,
    /// Start, or the map that is kept.
    pub map: PolyMap,
    /// Group of epochs with one error law.
    pub instrument: usize,
    /// Group of epochs with one distortion; their charts must be equal and their freedom at
    /// most affine.
    pub shared: Option<usize>,
    pub fwhm_mas: f64,
}

/// One detection of a reference star.
#[derive(Clone, Copy, Debug)]
pub struct Observation {
    pub epoch: u32,
    pub row: u32,
    pub u_mas: f64,
    pub v_mas: f64,
    /// Stated variance per axis in the common frame.
    pub var_mas2: f64,
    /// Part of the place that is not a polynomial in time (0 unless an orbit says so).
    pub curve_mas: [f64; 2],
}

/// A reference star.
#[derive(Clone, Debug)]
pub struct StarSetup {
    pub prior: PathPrior,
    pub seen: Vec<Observation>,
}

/// Error law of an instrument: variance = factor * stated + floor^2.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct ErrorLaw {
    pub var_factor: f64,
    pub floor_mas2: f64,
    /// Ratio of the information that weights and residuals show to the plain one.
    information: f64,
}

/// Solution for one epoch.
#[derive(Clone, Debug)]
pub struct EpochFit {
    pub map: PolyMap,
    /// Of the 12 coefficients in chart units, conditional on the gauge rule.
    pub coef_cov: DMatrix<f64>,
    pub n: usize,
    pub rms_mas: f64,
}

/// Rates that no observation fixes, with the errors of the rule that does.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Gauge {
    /// True when known epochs fix the drift.
    pub tied: bool,
    pub n_stars: usize,
    pub drift_err_mas_yr: [f64; 2],
    /// Rotation and scale rate as speed at 1000 mas from the middle.
    pub rotation_err_mas_yr: f64,
    pub scale_err_mas_yr: f64,
}

/// Result of the adjustment.
#[derive(Clone, Debug)]
pub struct Adjusted {
    pub epochs: Vec<EpochFit>,
    pub paths: Vec<Option<Path>>,
    pub laws: Vec<ErrorLaw>,
    pub gauge: Option<Gauge>,
}

/// Solves maps and paths.
#[must_use]
pub fn adjust(
    epochs: &[EpochSetup],
    stars: &[StarSetup],
    n_instruments: usize,
    law: &PriorLaw,
) -> Option<Adjusted> {
    let mut problem = Problem::new(epochs, stars, n_instruments, law);
    for round in 0..ROUNDS {
        problem.step(false)?;
        problem.reweight(round);
    }
    problem.step(false)?;
    problem.finish()
}

/// Where an epoch's parameters stand in the long vector: those that move x only come first,
/// those that move both axes next, those that move y only last. A star's columns of one axis are
/// then zero over a contiguous third, and the large product leaves it out.
#[derive(Clone, Copy, Debug, Default)]
struct Slot {
    at: [usize; MAX_PARAMS],
    n_own: usize,
    shared: Option<[usize; SHARED]>,
}

struct Problem<'a> {
    epochs: &'a [EpochSetup],
    stars: &'a [StarSetup],
    slots: Vec<Slot>,
    n_par: usize,
    n_x: usize,
    n_both: usize,
    /// The depth-averaged pull: one parameter, its relative departure from the prior's mean.
    pull: Option<usize>,
    law: PriorLaw,
    priors: Vec<PathPrior>,
    laws: Vec<ErrorLaw>,
    /// Robust weight of every observation, star by star.
    weights: Vec<Vec<f64>>,
    /// Where in its list the path expects every observation.
    expected: Vec<Vec<[f64; 2]>>,
    params: DVector<f64>,
    maps: Vec<PolyMap>,
    paths: Vec<Option<Path>>,
    covariance: DMatrix<f64>,
}

impl<'a> Problem<'a> {
    fn new(
        epochs: &'a [EpochSetup],
        stars: &'a [StarSetup],
        n_instruments: usize,
        law: &PriorLaw,
    ) -> Self {
        let mut slots: Vec<Slot> = epochs
            .iter()
            .map(|e| Slot {
                n_own: n_params(e.freedom),
                ..Slot::default()
            })
            .collect();
        let half = |e: &EpochSetup| match e.freedom {
            FrameFreedom::Similarity | FrameFreedom::Known => 0,
            _ => n_params(e.freedom) / 2,
        };
        let n_x: usize = epochs.iter().map(half).sum();
        let mut next_both = n_x;
        let pull = law.has_mass().then(|| {
            next_both += 1;
            next_both - 1
        });
        let mut groups: Vec<(usize, [usize; SHARED])> = Vec::new();
        for (slot, e) in slots.iter_mut().zip(epochs) {
            if e.freedom == FrameFreedom::Similarity {
                for at in &mut slot.at[..slot.n_own] {
                    *at = next_both;
                    next_both += 1;
                }
            }
            let Some(g) = e.shared.filter(|_| slot.n_own > 0) else {
                continue;
            };
            let known = groups.iter().find(|x| x.0 == g).map(|x| x.1);
            slot.shared = Some(known.unwrap_or_else(|| {
                let at = std::array::from_fn(|k| next_both + k);
                next_both += SHARED;
                groups.push((g, at));
                at
            }));
        }
        let (mut next_x, mut next_y) = (0, next_both);
        for (slot, e) in slots.iter_mut().zip(epochs) {
            for j in 0..half(e) {
                slot.at[j] = next_x;
                slot.at[half(e) + j] = next_y;
                next_x += 1;
                next_y += 1;
            }
        }
        let n_par = next_y;
        Self {
            epochs,
            stars,
            n_par,
            n_x,
            n_both: next_both - n_x,
            pull,
            law: *law,
            priors: stars.iter().map(|s| s.prior).collect(),
            laws: vec![
                ErrorLaw {
                    var_factor: 1.0,
                    floor_mas2: 0.0,
                    information: 1.0,
                };
                n_instruments
            ],
            weights: stars.iter().map(|s| vec![1.0; s.seen.len()]).collect(),
            expected: stars
                .iter()
                .map(|s| s.seen.iter().map(|o| [o.u_mas, o.v_mas]).collect())
                .collect(),
            params: starting_params(epochs, &slots, n_par),
            maps: epochs.iter().map(|e| e.map).collect(),
            paths: vec![None; stars.len()],
            covariance: DMatrix::zeros(0, 0),
            slots,
        }
    }

    fn variance(&self, o: &Observation) -> f64 {
        let law = &self.laws[self.epochs[o.epoch as usize].instrument];
        law.var_factor * o.var_mas2 + law.floor_mas2
    }

    /// Design of an observation (columns with their index) and its constant part, per axis.
    ///
    /// The columns are taken where the path says the star should be in the list, not where it
    /// was measured: with noisy places in the columns every epoch's scale comes out a little
    /// small, and all epochs together run away along the scale rate, which nothing else holds.
    fn design(&self, star: usize, j: usize, o: &Observation, d: &mut Design) {
        let e = &self.epochs[o.epoch as usize];
        let slot = &self.slots[o.epoch as usize];
        let map = &self.maps[o.epoch as usize];
        d.n = 0;
        let (x, y) = map.apply(o.u_mas, o.v_mas);
        d.constant = [x - o.curve_mas[0], y - o.curve_mas[1]];
        if slot.n_own > 0 {
            let [u, v] = self.expected[star][j];
            let (s, t) = e.chart.scaled(u, v);
            let own = basis(e.freedom, e.mirrored, s, t);
            for k in 0..slot.n_own {
                d.push(slot.at[k], own[0][k], own[1][k]);
            }
            if let Some(at) = slot.shared {
                // Distortion of the detector, turned by the epoch's own linear part.
                let l = linear_part(map);
                for (k, q) in terms(s, t)[3..].iter().enumerate() {
                    d.push(at[k], l[0] * q, l[2] * q);
                    d.push(at[3 + k], l[1] * q, l[3] * q);
                }
            }
            for k in 0..d.n {
                for axis in 0..2 {
                    d.constant[axis] -= d.value[k][axis] * self.params[d.at[k]];
                }
            }
        }
        if let Some(at) = self.pull {
            // The path is counted from the prior's mean curve, whose size is a parameter.
            let [_, _, t2, t3] = powers(e.dt_yr);
            let [mx, my] = self.priors[star].mean;
            d.push(at, -(mx[2] * t2 + mx[3] * t3), -(my[2] * t2 + my[3] * t3));
        }
    }

    /// Where in its list every star should be.
    fn expect(&mut self) {
        for (k, star) in self.stars.iter().enumerate() {
            let Some(path) = &self.paths[k] else { continue };
            for (at, o) in self.expected[k].iter_mut().zip(&star.seen) {
                let map = &self.maps[o.epoch as usize];
                let (x, y) = map.apply(o.u_mas, o.v_mas);
                let (px, py, _) = path.at(self.epochs[o.epoch as usize].dt_yr);
                let (dx, dy) = (x - o.curve_mas[0] - px, y - o.curve_mas[1] - py);
                let [a, b, c, d] = map.jacobian(o.u_mas, o.v_mas);
                let det = a * d - b * c;
                *at = [
                    o.u_mas - (d * dx - b * dy) / det,
                    o.v_mas - (a * dy - c * dx) / det,
                ];
            }
        }
    }

    /// One linear solution with the present weights.
    fn step(&mut self, with_covariance: bool) -> Option<()> {
        let n = self.n_par;
        let mut normal = DMatrix::zeros(n, n);
        let mut rhs = DVector::zeros(n);
        let mut block = DMatrix::zeros(n, 2 * TERMS * BLOCK);
        let mut back: Vec<Option<BackSolve>> = vec![None; self.stars.len()];
        let mut d = Design::default();
        for (chunk_no, chunk) in self.stars.chunks(BLOCK).enumerate() {
            block.fill(0.0);
            for (k, star) in chunk.iter().enumerate() {
                let index = chunk_no * BLOCK + k;
                let prior = &self.priors[index];
                let mut a = Matrix4::from_diagonal(&Vector4::from(prior.inv_var));
                let mut b: [Vector4<f64>; 2] = std::array::from_fn(|axis| {
                    Vector4::from_fn(|j, _| prior.inv_var[j] * prior.mean[axis][j])
                });
                for (j_obs, (o, robust)) in star.seen.iter().zip(&self.weights[index]).enumerate() {
                    let w = robust / self.variance(o);
                    let p = Vector4::from(powers(self.epochs[o.epoch as usize].dt_yr));
                    self.design(index, j_obs, o, &mut d);
                    a += p * p.transpose() * w;
                    for axis in 0..2 {
                        b[axis] += p * (w * d.constant[axis]);
                    }
                    for i in 0..d.n {
                        let (col, v) = (d.at[i], d.value[i]);
                        rhs[col] -= w * (v[0] * d.constant[0] + v[1] * d.constant[1]);
                        for j in 0..d.n {
                            let u = d.value[j];
                            normal[(col, d.at[j])] += w * (v[0] * u[0] + v[1] * u[1]);
                        }
                        for axis in 0..2 {
                            if v[axis] != 0.0 {
                                for q in 0..TERMS {
                                    block[(col, (2 * k + axis) * TERMS + q)] += w * v[axis] * p[q];
                                }
                            }
                        }
                    }
                }
                let cholesky = a.cholesky()?;
                let inverse = cholesky.inverse();
                let whiten = cholesky.l().try_inverse()?.transpose();
                for axis in 0..2 {
                    let at = (2 * k + axis) * TERMS;
                    let solved = inverse * b[axis];
                    let mut columns = block.columns_mut(at, TERMS);
                    // rhs gains G A^-1 b; the block keeps G L^-T, so that G A^-1 G^T is its square.
                    rhs.gemv(1.0, &columns, &solved, 1.0);
                    let turned = &columns * whiten;
                    columns.copy_from(&turned);
                }
                back[index] = Some((inverse, b));
            }
            // Columns of x are zero in the rows of y only, and the other way round.
            let stars_here = chunk.len();
            for axis in 0..2 {
                let rows = self.n_x + self.n_both;
                let (from, rows) = if axis == 0 {
                    (0, rows)
                } else {
                    (self.n_x, n - self.n_x)
                };
                let part = DMatrix::from_fn(rows, TERMS * stars_here, |i, j| {
                    block[(from + i, (2 * (j / TERMS) + axis) * TERMS + j % TERMS)]
                });
                let transposed = part.transpose();
                normal
                    .view_mut((from, from), (rows, rows))
                    .gemm(-1.0, &part, &transposed, 1.0);
            }
        }
        if let Some(at) = self.pull {
            normal[(at, at)] += 1.0 / (PULL_ERROR * PULL_ERROR);
        }
        if n > 0 {
            let cholesky = normal.cholesky()?;
            self.params = cholesky.solve(&rhs);
            if with_covariance {
                self.covariance = cholesky.inverse();
            }
        }
        self.set_maps();
        for (index, star) in self.stars.iter().enumerate() {
            let Some((inverse, mut b)) = back[index] else {
                continue;
            };
            for (j_obs, (o, robust)) in star.seen.iter().zip(&self.weights[index]).enumerate() {
                let w = robust / self.variance(o);
                let p = Vector4::from(powers(self.epochs[o.epoch as usize].dt_yr));
                self.design(index, j_obs, o, &mut d);
                for axis in 0..2 {
                    let moved: f64 = (0..d.n)
                        .map(|i| d.value[i][axis] * self.params[d.at[i]])
                        .sum();
                    b[axis] += p * (w * moved);
                }
            }
            let mut coef = [inverse * b[0], inverse * b[1]];
            if let Some(at) = self.pull {
                for (c, mean) in coef.iter_mut().zip(&self.priors[index].mean) {
                    c[2] += self.params[at] * mean[2];
                    c[3] += self.params[at] * mean[3];
                }
            }
            self.paths[index] = Some(Path { coef, cov: inverse });
        }
        self.expect();
        // The pull along the path that is now known.
        for (prior, path) in self.priors.iter_mut().zip(&self.paths) {
            if let Some(p) = path {
                let [x, y] = &p.coef;
                *prior = self.law.along([x[0], y[0]], [x[1], y[1]]);
            }
        }
        Some(())
    }

    fn set_maps(&mut self) {
        for (k, (e, slot)) in self.epochs.iter().zip(&self.slots).enumerate() {
            if slot.n_own == 0 {
                continue;
            }
            let own: [f64; MAX_PARAMS] = std::array::from_fn(|j| {
                if j < slot.n_own {
                    self.params[slot.at[j]]
                } else {
                    0.0
                }
            });
            let old = linear_part(&self.maps[k]);
            let mut map = PolyMap::from_params(e.chart, e.freedom, e.mirrored, &own);
            if let Some(at) = slot.shared {
                for j in 0..3 {
                    let (qu, qv) = (self.params[at[j]], self.params[at[3 + j]]);
                    map.coef[0][3 + j] += old[0] * qu + old[1] * qv;
                    map.coef[1][3 + j] += old[2] * qu + old[3] * qv;
                }
            }
            self.maps[k] = map;
        }
    }

    /// Squared residual of every observation with the share of it that the parameters took.
    fn residuals(&self) -> Vec<Vec<Residual>> {
        self.stars
            .iter()
            .enumerate()
            .map(|(index, star)| {
                let path = self.paths[index].as_ref();
                star.seen
                    .iter()
                    .zip(&self.weights[index])
                    .map(|(o, robust)| {
                        let e = o.epoch as usize;
                        let (x, y) = self.maps[e].apply(o.u_mas, o.v_mas);
                        let (px, py, path_var) =
                            path.map_or((x, y, 0.0), |p| p.at(self.epochs[e].dt_yr));
                        let r2 =
                            (x - o.curve_mas[0] - px).powi(2) + (y - o.curve_mas[1] - py).powi(2);
                        Residual {
                            r2,
                            spent: (robust / self.variance(o) * path_var).min(0.9),
                        }
                    })
                    .collect()
            })
            .collect()
    }

    /// Error laws and robust weights from the residuals.
    fn reweight(&mut self, round: usize) {
        let residuals = self.residuals();
        for instrument in 0..self.laws.len() {
            let mut seen: Vec<(f64, f64)> = Vec::new();
            let mut n_maps = 0;
            for (slot, e) in self.slots.iter().zip(self.epochs) {
                if e.instrument == instrument {
                    n_maps += slot.n_own;
                }
            }
            for (star, of_star) in self.stars.iter().zip(&residuals) {
                for (o, r) in star.seen.iter().zip(of_star) {
                    if self.epochs[o.epoch as usize].instrument == instrument {
                        seen.push((o.var_mas2, 0.5 * r.r2 / (1.0 - r.spent)));
                    }
                }
            }
            if seen.len() > 20 {
                let for_maps = 2.0 * seen.len() as f64
                    / (2.0 * seen.len() as f64 - n_maps as f64).max(seen.len() as f64);
                self.laws[instrument] = error_law(&mut seen, for_maps);
            }
        }
        let mut sums = vec![[0.0; 4]; self.laws.len()];
        for (index, (star, of_star)) in self.stars.iter().zip(&residuals).enumerate() {
            for (j, (o, r)) in star.seen.iter().zip(of_star).enumerate() {
                let chi2 = r.r2 / (1.0 - r.spent) / self.variance(o);
                let w = t_weight(chi2);
                self.weights[index][j] = w;
                let s = &mut sums[self.epochs[o.epoch as usize].instrument];
                s[0] += 1.0;
                s[1] += w;
                s[2] += w - chi2 * w * w / (T_DOF + 2.0);
                s[3] += 0.5 * w * w * chi2;
            }
        }
        if round + 1 == ROUNDS {
            for (law, [n, w, slope, square]) in self.laws.iter_mut().zip(sums) {
                if n > 20.0 && square > 0.0 && slope > 0.0 {
                    // Sandwich: variance of an M-estimator over the plain 1 / sum(w).
                    law.information = slope * slope / (square * w);
                }
            }
        }
    }

    fn finish(mut self) -> Option<Adjusted> {
        let residuals = self.residuals();
        // Covariances with the information that weights and residuals really carry.
        let plain = std::mem::take(&mut self.weights);
        self.weights = plain
            .iter()
            .zip(self.stars)
            .map(|(w, star)| {
                w.iter()
                    .zip(&star.seen)
                    .map(|(w, o)| {
                        w * self.laws[self.epochs[o.epoch as usize].instrument].information
                    })
                    .collect()
            })
            .collect();
        let (maps, params, paths) = (self.maps.clone(), self.params.clone(), self.paths.clone());
        self.step(true)?;
        let gauge = self.settle_gauge();
        (self.maps, self.params, self.paths) = (maps, params, paths);
        let epochs = (0..self.epochs.len())
            .map(|e| {
                let (mut n, mut sum_w, mut sum_r2) = (0, 0.0, 0.0);
                for ((star, of_star), w) in self.stars.iter().zip(&residuals).zip(&plain) {
                    for ((o, r), w) in star.seen.iter().zip(of_star).zip(w) {
                        if o.epoch as usize == e {
                            n += 1;
                            sum_w += w;
                            sum_r2 += 0.5 * w * r.r2;
                        }
                    }
                }
                EpochFit {
                    map: self.maps[e],
                    coef_cov: self.coef_covariance(e),
                    n,
                    rms_mas: if sum_w > 0.0 {
                        (sum_r2 / sum_w).sqrt()
                    } else {
                        0.0
                    },
                }
            })
            .collect();
        Some(Adjusted {
            epochs,
            paths: self.paths,
            laws: self.laws,
            gauge,
        })
    }

    /// Derivative of an epoch's 12 coefficients with respect to the long vector, as (column, ...).
    fn coef_jacobian(&self, e: usize) -> (Vec<usize>, DMatrix<f64>) {
        let (setup, slot) = (&self.epochs[e], &self.slots[e]);
        let n_shared = if slot.shared.is_some() { SHARED } else { 0 };
        let mut j = DMatrix::zeros(12, slot.n_own + n_shared);
        let mut columns: Vec<usize> = slot.at[..slot.n_own].to_vec();
        let zero = PolyMap::from_params(setup.chart, setup.freedom, setup.mirrored, &[0.0; 12]);
        for p in 0..slot.n_own {
            let mut one = [0.0; MAX_PARAMS];
            one[p] = 1.0;
            let map = PolyMap::from_params(setup.chart, setup.freedom, setup.mirrored, &one);
            for axis in 0..2 {
                for k in 0..6 {
                    j[(6 * axis + k, p)] = map.coef[axis][k] - zero.coef[axis][k];
                }
            }
        }
        if let Some(at) = slot.shared {
            columns.extend(at);
            let l = linear_part(&self.maps[e]);
            for k in 0..3 {
                j[(3 + k, slot.n_own + k)] = l[0];
                j[(9 + k, slot.n_own + k)] = l[2];
                j[(3 + k, slot.n_own + 3 + k)] = l[1];
                j[(9 + k, slot.n_own + 3 + k)] = l[3];
            }
        }
        (columns, j)
    }

    fn coef_covariance(&self, e: usize) -> DMatrix<f64> {
        if self.slots[e].n_own == 0 {
            return DMatrix::zeros(12, 12);
        }
        let (columns, j) = self.coef_jacobian(e);
        let n = columns.len();
        let part = DMatrix::from_fn(n, n, |a, b| self.covariance[(columns[a], columns[b])]);
        &j * part * j.transpose()
    }

    /// Slopes in time of the maps' common modes: conditions the covariance on them where only
    /// the rule fixes them, and returns the rule's errors.
    fn settle_gauge(&mut self) -> Option<Gauge> {
        let free: Vec<usize> = (0..self.epochs.len())
            .filter(|&e| self.slots[e].n_own > 0)
            .collect();
        if free.len() < 2 {
            return None;
        }
        let mean_t = free.iter().map(|&e| self.epochs[e].dt_yr).sum::<f64>() / free.len() as f64;
        let spread: f64 = free
            .iter()
            .map(|&e| (self.epochs[e].dt_yr - mean_t).powi(2))
            .sum();
        if spread < 1e-6 {
            return None;
        }
        // Rms distance of the reference stars from their middle: the size of the modes.
        let places: Vec<[f64; 2]> = self
            .paths
            .iter()
            .flatten()
            .map(|p| [p.coef[0][0], p.coef[1][0]])
            .collect();
        let n_stars = places.len() as f64;
        let middle: [f64; 2] =
            std::array::from_fn(|a| places.iter().map(|p| p[a]).sum::<f64>() / n_stars);
        let size = (places
            .iter()
            .map(|p| (p[0] - middle[0]).powi(2) + (p[1] - middle[1]).powi(2))
            .sum::<f64>()
            / n_stars)
            .sqrt();
        if size.is_nan() || size <= 0.0 {
            return None;
        }
        let mut slopes = DMatrix::zeros(self.n_par, 12);
        for &e in &free {
            let a = (self.epochs[e].dt_yr - mean_t) / spread;
            let (columns, j) = self.coef_jacobian(e);
            let modes = common_modes(&self.maps[e], middle, size)? * j;
            for (c, column) in columns.iter().enumerate() {
                for m in 0..12 {
                    slopes[(*column, m)] += a * modes[(m, c)];
                }
            }
        }
        let crossed = &self.covariance * &slopes;
        let of_slopes = slopes.transpose() * &crossed;
        let weights: f64 = self.priors.iter().map(|p| p.inv_var[1]).sum();
        let rule_var = 1.0 / weights;
        let tied = of_slopes[(0, 0)].max(of_slopes[(6, 6)]) < TIED * rule_var;
        // Rotation: (dy/dx - dx/dy) / 2, scale: (dx/dx + dy/dy) / 2, at one size from the middle.
        let pair = |i: usize, j: usize, sign: f64| {
            let v = of_slopes[(i, i)] + of_slopes[(j, j)] + 2.0 * sign * of_slopes[(i, j)];
            0.5 * v.max(0.0).sqrt() * 1000.0 / size
        };
        let gauge = Gauge {
            tied,
            n_stars: places.len(),
            drift_err_mas_yr: [of_slopes[(0, 0)], of_slopes[(6, 6)]].map(|v| v.max(0.0).sqrt()),
            rotation_err_mas_yr: pair(7, 2, -1.0),
            scale_err_mas_yr: pair(1, 8, 1.0),
        };
        if !tied {
            let eigen = of_slopes.symmetric_eigen();
            let top = eigen.eigenvalues.amax();
            for (value, vector) in eigen
                .eigenvalues
                .iter()
                .zip(eigen.eigenvectors.column_iter())
            {
                if *value > 1e-9 * top {
                    let g = &crossed * vector;
                    self.covariance.ger(-1.0 / value, &g, &g, 1.0);
                }
            }
        }
        Some(gauge)
    }
}

/// Parameters of the maps that epochs start from; a shared distortion starts at zero.
fn starting_params(epochs: &[EpochSetup], slots: &[Slot], n_par: usize) -> DVector<f64> {
    let mut params = DVector::zeros(n_par);
    for (e, slot) in epochs.iter().zip(slots) {
        let own = params_of(&e.map, e.freedom);
        for (at, p) in slot.at[..slot.n_own].iter().zip(own) {
            params[*at] = p;
        }
    }
    params
}

/// Design rows of one observation.
#[derive(Default)]
struct Design {
    n: usize,
    at: [usize; MAX_PARAMS + SHARED + 1],
    value: [[f64; 2]; MAX_PARAMS + SHARED + 1],
    constant: [f64; 2],
}

impl Design {
    fn push(&mut self, at: usize, x: f64, y: f64) {
        self.at[self.n] = at;
        self.value[self.n] = [x, y];
        self.n += 1;
    }
}

struct Residual {
    r2: f64,
    /// Share of the variance that the star's own path took.
    spent: f64,
}

/// Linear part of a map per nominal mas, row by row.
fn linear_part(map: &PolyMap) -> [f64; 4] {
    let h = map.chart.half_mas;
    [
        map.coef[0][1] / h,
        map.coef[0][2] / h,
        map.coef[1][1] / h,
        map.coef[1][2] / h,
    ]
}

/// Coefficients (x then y) of 1, X, Y, X^2, XY, Y^2 of the common frame's displacement field, as
/// linear functions of an epoch's 12 coefficients; X, Y in units of `size` about `middle`.
fn common_modes(map: &PolyMap, middle: [f64; 2], size: f64) -> Option<DMatrix<f64>> {
    let mut common = DMatrix::zeros(25, 6);
    let mut own = DMatrix::zeros(25, 6);
    for k in 0..25 {
        let (gx, gy) = (f64::from(k % 5) / 2.0 - 1.0, f64::from(k / 5) / 2.0 - 1.0);
        let (u, v) = map.inverse(middle[0] + size * gx, middle[1] + size * gy)?;
        let (s, t) = map.chart.scaled(u, v);
        for (c, value) in terms(gx, gy).into_iter().enumerate() {
            common[(k as usize, c)] = value;
        }
        for (c, value) in terms(s, t).into_iter().enumerate() {
            own[(k as usize, c)] = value;
        }
    }
    let square = (common.transpose() * &common).cholesky()?.inverse();
    let one = square * common.transpose() * own;
    let mut both = DMatrix::zeros(12, 12);
    both.view_mut((0, 0), (6, 6)).copy_from(&one);
    both.view_mut((6, 6), (6, 6)).copy_from(&one);
    Some(both)
}

/// Variance = factor * stated + floor^2 from (stated variance, squared residual per axis):
/// robust scatter in four bins of the stated error, then a line through them.
fn error_law(seen: &mut [(f64, f64)], for_maps: f64) -> ErrorLaw {
    seen.sort_by(|a, b| order::by(a.0, b.0).then(order::by(a.1, b.1)));
    let bins = 4.min(seen.len() / 10).max(1);
    let mut points: Vec<(f64, f64)> = Vec::with_capacity(bins);
    let mut scratch: Vec<f64> = Vec::new();
    for b in 0..bins {
        let part = &seen[b * seen.len() / bins..(b + 1) * seen.len() / bins];
        let stated = part.iter().map(|p| p.0).sum::<f64>() / part.len() as f64;
        // Scale of the t distribution from the median of chi2: for 4 degrees of freedom and two
        // axes the median of r^2/2 per unit scale is 2 (2^(1/2) - 1).
        scratch.clear();
        scratch.extend(part.iter().map(|p| p.1));
        let median = order::median(&mut scratch).unwrap_or(stated);
        points.push((stated, for_maps * median / (2.0 * (2.0_f64.sqrt() - 1.0))));
    }
    // Weighted by 1 / found^2: equal relative errors.
    let (mut s, mut sx, mut sy, mut sxx, mut sxy) = (0.0, 0.0, 0.0, 0.0, 0.0);
    for (x, y) in &points {
        let w = 1.0 / (y * y).max(1e-24);
        s += w;
        sx += w * x;
        sy += w * y;
        sxx += w * x * x;
        sxy += w * x * y;
    }
    let det = s * sxx - sx * sx;
    let (mut factor, mut floor) = if det > 1e-9 * s * sxx {
        ((s * sxy - sx * sy) / det, (sxx * sy - sx * sxy) / det)
    } else {
        (sxy / sxx, 0.0)
    };
    if floor < 0.0 {
        (factor, floor) = (sxy / sxx, 0.0);
    }
    if factor < 0.1 {
        factor = 0.1;
        floor = ((sy - factor * sx) / s).max(0.0);
    }
    ErrorLaw {
        var_factor: factor,
        floor_mas2: floor,
        information: 1.0,
    }
}

/// Covariance of the place of a detection due to its epoch's map.
#[must_use]
pub fn frame_covariance(fit: &EpochFit, u_mas: f64, v_mas: f64) -> crate::maths::cov2::Cov2 {
    let (s, t) = fit.map.chart.scaled(u_mas, v_mas);
    place_covariance(&fit.coef_cov, s, t)
}
