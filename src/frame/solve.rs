//! One epoch's map from matched places: iteratively reweighted least squares, and the choice of
//! the order.
//!
//! Weights are those of a bivariate Student t with 4 degrees of freedom (Lange, Little & Taylor
//! 1989, JASA 84, 881): w = 6 / (4 + chi2), with the scale of chi2 taken from its median, so that
//! understated errors and wrong matches do not steer the map. The order is the freest one that
//! the instrument allows, that has five stars per pair of parameters, and that predicts left-out
//! stars better than the simpler ones (leave-one-out residuals r / (1 - h)). Fails when fewer
//! stars than a shift needs are given, or when they lie on a line: the caller gets `None`.

use nalgebra::{DMatrix, DVector};

use super::transform::{Chart, LADDER, MAX_PARAMS, PolyMap, basis, n_params};
use crate::maths::order;
use crate::model::campaign::FrameFreedom;

/// Degrees of freedom of the weights.
pub const T_DOF: f64 = 4.0;
/// Good stars needed per pair of parameters.
pub const STARS_PER_PAIR: usize = 5;
const ROUNDS: usize = 8;
/// Median of chi2 with two degrees of freedom, 2 ln 2.
const CHI2_MEDIAN: f64 = 1.386_294_361_119_890_6;

/// A place in the list's chart and where the common frame has that star.
#[derive(Clone, Copy, Debug)]
pub struct Match {
    pub u_mas: f64,
    pub v_mas: f64,
    pub x_mas: f64,
    pub y_mas: f64,
    /// Variance per axis of the difference \[mas^2\].
    pub var_mas2: f64,
}

/// A fitted map.
#[derive(Clone, Debug)]
pub struct Fit {
    pub freedom: FrameFreedom,
    pub mirrored: bool,
    pub map: PolyMap,
    /// The freedom's own parameters and their covariance.
    pub params: Vec<f64>,
    pub cov: DMatrix<f64>,
    pub n: usize,
    /// Weighted rms residual per axis.
    pub rms_mas: f64,
    /// Factor found for the stated variances.
    pub var_factor: f64,
    /// Sum of squared leave-one-out residuals over their variance.
    pub left_out_chi2: f64,
}

/// Weight of a residual of `chi2` (two degrees of freedom).
#[must_use]
pub fn t_weight(chi2: f64) -> f64 {
    (T_DOF + 2.0) / (T_DOF + chi2)
}

/// Fits a map of exactly this freedom.
#[must_use]
pub fn fit(chart: Chart, freedom: FrameFreedom, mirrored: bool, stars: &[Match]) -> Option<Fit> {
    let n_par = n_params(freedom);
    if n_par == 0 || 2 * stars.len() < n_par {
        return None;
    }
    // A shift keeps the nominal linear part: its targets are differences from it.
    let origin = PolyMap::from_params(chart, freedom, mirrored, &[0.0; MAX_PARAMS]);
    let rows: Vec<_> = stars
        .iter()
        .map(|m| {
            let (s, t) = chart.scaled(m.u_mas, m.v_mas);
            let (x0, y0) = origin.apply(m.u_mas, m.v_mas);
            (
                basis(freedom, mirrored, s, t),
                [m.x_mas - x0, m.y_mas - y0],
                m.var_mas2,
            )
        })
        .collect();
    let mut weight = vec![1.0; rows.len()];
    let mut chi2 = vec![0.0; rows.len()];
    let mut scratch = vec![0.0; rows.len()];
    let mut params = DVector::zeros(n_par);
    let mut inverse = DMatrix::zeros(n_par, n_par);
    let mut var_factor = 1.0;
    for _ in 0..ROUNDS {
        let mut normal = DMatrix::zeros(n_par, n_par);
        let mut rhs = DVector::zeros(n_par);
        for ((d, z, var), w) in rows.iter().zip(&weight) {
            let w = w / var;
            for axis in 0..2 {
                let d = &d[axis];
                for i in 0..n_par {
                    if d[i] == 0.0 {
                        continue;
                    }
                    rhs[i] += w * d[i] * z[axis];
                    for j in 0..=i {
                        normal[(i, j)] += w * d[i] * d[j];
                    }
                }
            }
        }
        normal.fill_upper_triangle_with_lower_triangle();
        let cholesky = normal.cholesky()?;
        params = cholesky.solve(&rhs);
        inverse = cholesky.inverse();
        for (c, (d, z, var)) in chi2.iter_mut().zip(&rows) {
            let r = residual(d, z, &params);
            *c = (r[0] * r[0] + r[1] * r[1]) / var;
        }
        scratch.copy_from_slice(&chi2);
        var_factor = order::median(&mut scratch).map_or(1.0, |m| (m / CHI2_MEDIAN).max(1e-12));
        for (w, c) in weight.iter_mut().zip(&chi2) {
            *w = t_weight(c / var_factor);
        }
    }
    let (mut left_out, mut sum_w, mut sum_r2) = (0.0, 0.0, 0.0);
    for ((d, z, var), w) in rows.iter().zip(&weight) {
        let r = residual(d, z, &params);
        let lever = 0.5 * w / var * (quadratic(&inverse, &d[0]) + quadratic(&inverse, &d[1]));
        let keep = (1.0 - lever).max(0.05);
        left_out += w * (r[0] * r[0] + r[1] * r[1]) / (var * var_factor * keep * keep);
        sum_w += w;
        sum_r2 += 0.5 * w * (r[0] * r[0] + r[1] * r[1]);
    }
    let free = (2 * rows.len()).saturating_sub(n_par).max(1) as f64;
    let inflate = 2.0 * rows.len() as f64 / free;
    let params: Vec<f64> = params.iter().copied().collect();
    Some(Fit {
        freedom,
        mirrored,
        map: PolyMap::from_params(chart, freedom, mirrored, &params),
        params,
        cov: inverse * (var_factor * inflate),
        n: rows.len(),
        rms_mas: (sum_r2 / sum_w).sqrt(),
        var_factor,
        left_out_chi2: left_out,
    })
}

/// Fits the freest map that is allowed and that the stars support.
#[must_use]
pub fn fit_supported(
    chart: Chart,
    allowed: FrameFreedom,
    mirrored: bool,
    stars: &[Match],
) -> Option<Fit> {
    let mut best: Option<Fit> = None;
    for freedom in LADDER {
        if freedom > allowed || (freedom == FrameFreedom::Shift && mirrored) {
            continue;
        }
        if stars.len() < STARS_PER_PAIR * n_params(freedom) / 2 && best.is_some() {
            break;
        }
        let Some(next) = fit(chart, freedom, mirrored, stars) else {
            continue;
        };
        // Left-out residuals of both orders in units of the freer order's variance.
        let better = best.as_ref().is_none_or(|old| {
            next.left_out_chi2 * next.var_factor < old.left_out_chi2 * old.var_factor
        });
        if better {
            best = Some(next);
        }
    }
    best
}

fn residual(d: &[[f64; MAX_PARAMS]; 2], z: &[f64; 2], params: &DVector<f64>) -> [f64; 2] {
    std::array::from_fn(|axis| {
        z[axis] - params.iter().zip(&d[axis]).map(|(p, d)| p * d).sum::<f64>()
    })
}

fn quadratic(m: &DMatrix<f64>, d: &[f64; MAX_PARAMS]) -> f64 {
    let n = m.nrows();
    (0..n)
        .map(|i| d[i] * (0..n).map(|j| m[(i, j)] * d[j]).sum::<f64>())
        .sum()
}
