//! Robust fit of six motion parameters to clean detections, with Laplace evidence.
//!
//! Likelihood of a position: a core and a wing, (1 - w) N(r; C) + w N(r; k^2 C): errors of
//! crowded fields are underestimated, so no detection may decide a track alone. The maximum
//! is found by damped Gauss-Newton steps (Levenberg 1944, Marquardt 1963) on the mixture's
//! own weights (expectation maximisation, Dempster, Laird & Rubin 1977); the integral over
//! the parameters by Laplace's method. It fails only where the normal matrix is singular,
//! which the prior prevents.

use super::state::{Dynamics, H26, M6, P6};
use crate::maths::cov2::Cov2;

/// Weight and width (in core sigmas) of the wing.
pub const WING_WEIGHT: f64 = 0.08;
pub const WING_SCALE: f64 = 3.5;

/// One clean position.
#[derive(Clone, Copy, Debug)]
pub struct Obs {
    pub t_yr: f64,
    pub x_mas: f64,
    pub y_mas: f64,
    /// Error as believed, inflation included.
    pub cov: Cov2,
}

/// A maximum of the posterior.
#[derive(Clone, Copy, Debug)]
pub struct Fit {
    pub t0_yr: f64,
    pub p: P6,
    pub cov: M6,
    /// Robust ln likelihood of the positions.
    pub ln_like: f64,
    pub ln_prior: f64,
    /// ln of the integral of likelihood times prior over the parameters, per unit surface density.
    pub ln_evidence: f64,
    /// Sum of squared normalised residuals.
    pub chi2: f64,
    pub n: usize,
}

/// ln of core-plus-wing density and the weight of the core's inverse covariance.
#[must_use]
pub fn core_wing(chi2: f64, ln_det: f64) -> (f64, f64) {
    let base = -0.5 * ln_det - (2.0 * std::f64::consts::PI).ln();
    let core = (1.0 - WING_WEIGHT) * (-0.5 * chi2).exp();
    let k2 = WING_SCALE * WING_SCALE;
    let wing = WING_WEIGHT / k2 * (-0.5 * chi2 / k2).exp();
    let sum = core + wing;
    (base + sum.ln(), (core + wing / k2) / sum)
}

struct Normal {
    a: M6,
    b: P6,
    ln_like: f64,
    chi2: f64,
}

fn normal_equations(dynamics: &Dynamics, obs: &[Obs], t0: f64, p: &P6) -> Normal {
    let mut n = Normal {
        a: M6::zeros(),
        b: P6::zeros(),
        ln_like: 0.0,
        chi2: 0.0,
    };
    for o in obs {
        let ((x, y), h) = dynamics.position_with_partials(p, t0, o.t_yr);
        let (dx, dy) = (o.x_mas - x, o.y_mas - y);
        let chi2 = o.cov.chi2(dx, dy);
        let (ln, w) = core_wing(chi2, o.cov.det().ln());
        n.ln_like += ln;
        n.chi2 += chi2;
        add_row(&mut n.a, &mut n.b, &h, o.cov.inverse().scaled(w), dx, dy);
    }
    n
}

fn add_row(a: &mut M6, b: &mut P6, h: &H26, w: Cov2, dx: f64, dy: f64) {
    let (wx, wy) = (w.xx * dx + w.xy * dy, w.xy * dx + w.yy * dy);
    for i in 0..6 {
        let (hx, hy) = (h[(0, i)], h[(1, i)]);
        b[i] += hx * wx + hy * wy;
        let (gx, gy) = (hx * w.xx + hy * w.xy, hx * w.xy + hy * w.yy);
        for j in 0..=i {
            let v = gx * h[(0, j)] + gy * h[(1, j)];
            a[(i, j)] += v;
            if i != j {
                a[(j, i)] += v;
            }
        }
    }
}

/// Fit from a start; `None` only when the matrices are not finite.
#[must_use]
pub fn fit(dynamics: &Dynamics, obs: &[Obs], t0: f64, start: &P6, max_steps: usize) -> Option<Fit> {
    fit_with(dynamics, obs, obs.len(), t0, start, max_steps)
}

/// Fit to all positions, with the evidence of the first `n_clean` alone: the rest (places
/// worked out from blends) help to find the motion, but what they say for the star is counted
/// where blends are priced.
#[must_use]
pub fn fit_with(
    dynamics: &Dynamics,
    obs: &[Obs],
    n_clean: usize,
    t0: f64,
    start: &P6,
    max_steps: usize,
) -> Option<Fit> {
    let mut p = *start;
    let mut n = normal_equations(dynamics, obs, t0, &p);
    let mut prior = dynamics.prior(&p);
    let mut value = n.ln_like + prior.ln;
    if !value.is_finite() {
        return None;
    }
    let mut lambda = 1e-4;
    for _ in 0..max_steps {
        let a = n.a + prior.curv;
        let b = n.b + prior.grad;
        let mut better = false;
        let mut gain = 0.0;
        for _ in 0..8 {
            let mut damped = a;
            for k in 0..6 {
                damped[(k, k)] *= 1.0 + lambda;
            }
            let Some(ch) = damped.cholesky() else {
                lambda = (lambda * 10.0).max(1e-6);
                continue;
            };
            let trial = p + ch.solve(&b);
            let tn = normal_equations(dynamics, obs, t0, &trial);
            let tp = dynamics.prior(&trial);
            let tv = tn.ln_like + tp.ln;
            if tv.is_finite() && tv >= value - 1e-9 {
                gain = tv - value;
                (p, n, prior, value) = (trial, tn, tp, tv);
                lambda = (lambda * 0.2).max(1e-9);
                better = true;
                break;
            }
            lambda = (lambda * 8.0).max(1e-6);
        }
        if !better || gain < 1e-3 {
            break;
        }
    }
    let cov = (n.a + prior.curv).cholesky()?.inverse();
    if n_clean < obs.len() {
        n = normal_equations(dynamics, &obs[..n_clean], t0, &p);
    }
    let a = n.a + prior.curv;
    let ch = a.cholesky()?;
    let ln_det: f64 = 2.0 * (0..6).map(|k| ch.l_dirty()[(k, k)].ln()).sum::<f64>();
    let mut ln_evidence =
        n.ln_like + prior.ln + 3.0 * (2.0 * std::f64::consts::PI).ln() - 0.5 * ln_det;
    if n_clean < obs.len() {
        // The maximum of the clean positions alone lies a Newton step away.
        let b = n.b + prior.grad;
        ln_evidence += 0.5 * b.dot(&ch.solve(&b));
    }
    if dynamics.is_central() {
        ln_evidence += std::f64::consts::LN_2;
    }
    ln_evidence.is_finite().then_some(Fit {
        t0_yr: t0,
        p,
        cov,
        ln_like: n.ln_like,
        ln_prior: prior.ln,
        ln_evidence,
        chi2: n.chi2,
        n: n_clean,
    })
}

impl Fit {
    /// Predicted sky position and covariance at a time.
    #[must_use]
    pub fn predict(&self, dynamics: &Dynamics, t: f64) -> ((f64, f64), Cov2) {
        let (pos, h) = dynamics.position_with_partials(&self.p, self.t0_yr, t);
        let s = h * self.cov * h.transpose();
        (
            pos,
            Cov2 {
                xx: s[(0, 0)],
                xy: s[(0, 1)],
                yy: s[(1, 1)],
            },
        )
    }
}
