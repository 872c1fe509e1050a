//! Straight and uniformly accelerated motion: exact linear-Gaussian fits.
//!
//! Problem: posterior of (x, y, vx, vy, ax, ay) and the exact marginal likelihood of a star's
//! positions, with Gaussian priors on velocity and acceleration and a position prior that is
//! flat in area. The evidence is for unit density of the position: a caller adds
//! ln(stars per mas^2). Integrating the parameters out is what keeps the freer model from always
//! winning.
//!
//! Method: normal equations of the whitened points plus prior precision, Cholesky; the integral
//! of a Gaussian gives the evidence. Same value as the sum of Kalman innovations (Reid 1979,
//! IEEE TAC 24, 843; from memory).
//!
//! Fails (returns `None`) without points, or when a covariance is not positive definite.

use nalgebra::{SMatrix, SVector};

use crate::maths::cov2::Cov2;
use crate::model::motion::{Motion, MotionKind};

/// One measured position.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Point {
    pub t_yr: f64,
    pub x_mas: f64,
    pub y_mas: f64,
    pub cov_mas2: Cov2,
}

/// Gaussian prior of a two-component quantity.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Prior2 {
    pub mean: [f64; 2],
    pub cov: Cov2,
}

impl Prior2 {
    /// Zero mean, the same standard deviation on both axes.
    #[must_use]
    pub fn isotropic(sigma: f64) -> Self {
        Self {
            mean: [0.0; 2],
            cov: Cov2::round(sigma * sigma),
        }
    }
}

/// Result of a fit: parameters at `motion.t_ref_yr`, evidence and chi2.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct LinearFit {
    pub motion: Motion,
    /// ln of the marginal likelihood, position prior 1 per mas^2.
    pub ln_evidence: f64,
    /// Of the points alone at the posterior mean.
    pub chi2: f64,
    /// Measured numbers minus fitted parameters, not below zero.
    pub dof: usize,
}

/// Position with covariance at some time.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Prediction {
    pub x_mas: f64,
    pub y_mas: f64,
    pub cov_mas2: Cov2,
}

/// Straight motion: prior on the velocity \[mas/yr\] at `t_ref_yr`.
#[must_use]
pub fn fit_linear(points: &[Point], t_ref_yr: f64, velocity: &Prior2) -> Option<LinearFit> {
    fit::<4>(points, t_ref_yr, &[*velocity])
}

/// Uniformly accelerated motion: priors on velocity \[mas/yr\] and acceleration \[mas/yr^2\] at
/// `t_ref_yr`, which should lie near the middle of the points.
#[must_use]
pub fn fit_accelerated(
    points: &[Point],
    t_ref_yr: f64,
    velocity: &Prior2,
    acceleration: &Prior2,
) -> Option<LinearFit> {
    fit::<6>(points, t_ref_yr, &[*velocity, *acceleration])
}

/// Position and covariance of a straight or accelerated motion at a time.
#[must_use]
pub fn predict(motion: &Motion, t_yr: f64) -> Prediction {
    let dt = t_yr - motion.t_ref_yr;
    let w = [1.0, dt, 0.5 * dt * dt];
    let position = |axis: usize| (0..3).map(|k| w[k] * motion.p[2 * k + axis]).sum::<f64>();
    let covariance = |a: usize, b: usize| {
        let mut sum = 0.0;
        for k in 0..3 {
            for l in 0..3 {
                sum += w[k] * w[l] * motion.cov[(2 * k + a, 2 * l + b)];
            }
        }
        sum
    };
    Prediction {
        x_mas: position(0),
        y_mas: position(1),
        cov_mas2: Cov2 {
            xx: covariance(0, 0),
            xy: covariance(0, 1),
            yy: covariance(1, 1),
        },
    }
}

/// The same straight or accelerated motion expressed at another time.
#[must_use]
pub fn moved_to(motion: &Motion, t_yr: f64) -> Motion {
    let dt = t_yr - motion.t_ref_yr;
    let mut step = SMatrix::<f64, 6, 6>::identity();
    for axis in 0..2 {
        step[(axis, 2 + axis)] = dt;
        step[(axis, 4 + axis)] = 0.5 * dt * dt;
        step[(2 + axis, 4 + axis)] = dt;
    }
    Motion {
        kind: motion.kind,
        t_ref_yr: t_yr,
        p: step * motion.p,
        cov: step * motion.cov * step.transpose(),
    }
}

/// Fit of N = 2 (1 + priors) parameters.
fn fit<const N: usize>(points: &[Point], t_ref_yr: f64, priors: &[Prior2]) -> Option<LinearFit> {
    let origin = points.first()?;
    let terms = N / 2;
    let mut precision = SMatrix::<f64, N, N>::zeros();
    let mut rhs = SVector::<f64, N>::zeros();
    // Sum of residual^2 at zero parameters and ln of all normalising constants, in halves.
    let (mut square, mut ln_norm) = (0.0, 0.0);
    for (k, prior) in priors.iter().enumerate() {
        if !is_positive(prior.cov) {
            return None;
        }
        let w = prior.cov.inverse();
        let (i, [mx, my]) = (2 + 2 * k, prior.mean);
        add_block(&mut precision, i, i, w, 1.0);
        rhs[i] += w.xx * mx + w.xy * my;
        rhs[i + 1] += w.xy * mx + w.yy * my;
        square += prior.cov.chi2(mx, my);
        ln_norm -= prior.cov.det().ln();
    }
    for p in points {
        if !is_positive(p.cov_mas2) {
            return None;
        }
        let w = p.cov_mas2.inverse();
        let (x, y) = (p.x_mas - origin.x_mas, p.y_mas - origin.y_mas);
        let dt = p.t_yr - t_ref_yr;
        let h = [1.0, dt, 0.5 * dt * dt];
        let (wx, wy) = (w.xx * x + w.xy * y, w.xy * x + w.yy * y);
        for k in 0..terms {
            rhs[2 * k] += h[k] * wx;
            rhs[2 * k + 1] += h[k] * wy;
            for l in 0..terms {
                add_block(&mut precision, 2 * k, 2 * l, w, h[k] * h[l]);
            }
        }
        square += x * wx + y * wy;
        ln_norm -= p.cov_mas2.det().ln();
    }
    let factor = precision.cholesky()?;
    let mean = factor.solve(&rhs);
    let ln_det: f64 = 2.0 * factor.l().diagonal().iter().map(|d| d.ln()).sum::<f64>();
    // Gaussian integral: every point and prior brings (2 pi)^-1, every parameter (2 pi)^1/2.
    let turns = (terms as f64) - (points.len() + priors.len()) as f64;
    let ln_evidence = turns * std::f64::consts::TAU.ln()
        + 0.5 * (ln_norm - ln_det - (square - rhs.dot(&mean)).max(0.0));

    let cov = factor.inverse();
    let mut motion = Motion {
        kind: if N == 4 {
            MotionKind::Linear
        } else {
            MotionKind::Accelerated
        },
        t_ref_yr,
        p: SVector::zeros(),
        cov: SMatrix::zeros(),
    };
    for i in 0..N {
        motion.p[i] = mean[i];
        for j in 0..N {
            motion.cov[(i, j)] = cov[(i, j)];
        }
    }
    motion.p[0] += origin.x_mas;
    motion.p[1] += origin.y_mas;
    let chi2 = points
        .iter()
        .map(|p| {
            let at = predict(&motion, p.t_yr);
            p.cov_mas2.chi2(p.x_mas - at.x_mas, p.y_mas - at.y_mas)
        })
        .sum();
    Some(LinearFit {
        motion,
        ln_evidence,
        chi2,
        dof: (2 * points.len()).saturating_sub(N),
    })
}

fn is_positive(c: Cov2) -> bool {
    c.xx > 0.0 && c.yy > 0.0 && c.det() > 0.0
}

fn add_block<const N: usize>(m: &mut SMatrix<f64, N, N>, i: usize, j: usize, w: Cov2, by: f64) {
    m[(i, j)] += by * w.xx;
    m[(i, j + 1)] += by * w.xy;
    m[(i + 1, j)] += by * w.xy;
    m[(i + 1, j + 1)] += by * w.yy;
}

#[cfg(test)]
mod tests {
    use super::*;

    fn point(t_yr: f64, x_mas: f64, y_mas: f64, s: f64) -> Point {
        Point {
            t_yr,
            x_mas,
            y_mas,
            cov_mas2: Cov2::from_sigmas(s, 1.3 * s, 0.3),
        }
    }

    #[test]
    fn one_point_has_evidence_one_per_area() {
        // Flat prior of density 1: the integral of N(z; x, R) over x is 1.
        let f = fit_linear(&[point(3.0, 5.0, 6.0, 0.7)], 0.0, &Prior2::isotropic(4.0)).unwrap();
        assert!(f.ln_evidence.abs() < 1e-10, "{}", f.ln_evidence);
    }

    #[test]
    fn two_points_agree_with_the_predictive_density() {
        // Second point given the first: N(z2; z1 + m dt, R1 + R2 + V dt^2) (closed form).
        let (a, b) = (point(0.0, 1.0, 2.0, 0.5), point(2.5, 14.0, -3.0, 0.8));
        let prior = Prior2 {
            mean: [3.0, -1.0],
            cov: Cov2::from_sigmas(2.0, 1.0, -0.2),
        };
        let f = fit_linear(&[a, b], 7.0, &prior).unwrap();
        let var = a.cov_mas2 + b.cov_mas2 + prior.cov.scaled(2.5 * 2.5);
        let want = var.ln_normal(14.0 - 1.0 - 7.5, -3.0 - 2.0 + 2.5);
        assert!((f.ln_evidence - want).abs() < 1e-10);
    }

    #[test]
    fn evidence_is_the_sum_of_innovations() {
        // Chain rule: adding a point adds the log density of its prediction.
        let pts: Vec<Point> = (0..7)
            .map(|k| {
                let t = f64::from(k) * 1.3 - 4.0;
                point(t, 10.0 + 3.0 * t - 0.4 * t * t, -5.0 + t + 0.1 * t * t, 0.4)
            })
            .collect();
        let (v, a) = (Prior2::isotropic(5.0), Prior2::isotropic(1.0));
        let mut sum = 0.0;
        for n in 1..pts.len() {
            let f = fit_accelerated(&pts[..n], 0.0, &v, &a).unwrap();
            let at = predict(&f.motion, pts[n].t_yr);
            let var = at.cov_mas2 + pts[n].cov_mas2;
            sum += var.ln_normal(pts[n].x_mas - at.x_mas, pts[n].y_mas - at.y_mas);
        }
        let f = fit_accelerated(&pts, 0.0, &v, &a).unwrap();
        assert!(
            (f.ln_evidence - sum).abs() < 1e-8,
            "{} {sum}",
            f.ln_evidence
        );
    }

    #[test]
    fn moving_the_time_keeps_the_prediction() {
        let pts = [
            point(0.0, 1.0, 2.0, 0.5),
            point(2.0, 4.0, 2.5, 0.5),
            point(5.0, 3.0, 1.0, 0.5),
        ];
        let (v, a) = (Prior2::isotropic(5.0), Prior2::isotropic(1.0));
        let f = fit_accelerated(&pts, 1.0, &v, &a).unwrap().motion;
        let (p, q) = (predict(&f, 9.0), predict(&moved_to(&f, -3.0), 9.0));
        assert!((p.x_mas - q.x_mas).abs() < 1e-9 && (p.cov_mas2.xy - q.cov_mas2.xy).abs() < 1e-8);
    }
}
