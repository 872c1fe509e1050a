//! Symmetric 2x2 covariance matrices of a position on the sky.

use std::ops::{Add, AddAssign};

/// Covariance of (x, y); units are the square of the position's unit.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Cov2 {
    pub xx: f64,
    pub xy: f64,
    pub yy: f64,
}

impl Cov2 {
    /// From standard deviations and the correlation coefficient.
    #[must_use]
    pub fn from_sigmas(sx: f64, sy: f64, corr: f64) -> Self {
        Self {
            xx: sx * sx,
            xy: corr * sx * sy,
            yy: sy * sy,
        }
    }

    /// Round covariance with the same variance on both axes.
    #[must_use]
    pub fn round(var: f64) -> Self {
        Self {
            xx: var,
            xy: 0.0,
            yy: var,
        }
    }

    #[must_use]
    pub fn det(self) -> f64 {
        self.xx * self.yy - self.xy * self.xy
    }

    #[must_use]
    pub fn scaled(self, factor: f64) -> Self {
        Self {
            xx: self.xx * factor,
            xy: self.xy * factor,
            yy: self.yy * factor,
        }
    }

    /// Inverse; the caller guarantees a positive determinant.
    #[must_use]
    pub fn inverse(self) -> Self {
        let d = 1.0 / self.det();
        Self {
            xx: self.yy * d,
            xy: -self.xy * d,
            yy: self.xx * d,
        }
    }

    /// Mahalanobis distance squared of an offset.
    #[must_use]
    pub fn chi2(self, dx: f64, dy: f64) -> f64 {
        (self.yy * dx * dx - 2.0 * self.xy * dx * dy + self.xx * dy * dy) / self.det()
    }

    /// Logarithm of the two-dimensional normal density at an offset.
    #[must_use]
    pub fn ln_normal(self, dx: f64, dy: f64) -> f64 {
        -0.5 * (self.chi2(dx, dy) + self.det().ln()) - (2.0 * std::f64::consts::PI).ln()
    }

    /// Largest variance over all directions.
    #[must_use]
    pub fn max_var(self) -> f64 {
        let mean = 0.5 * (self.xx + self.yy);
        mean + (0.25 * (self.xx - self.yy).powi(2) + self.xy * self.xy).sqrt()
    }

    /// `J C J^T` for the linear map x' = a x + b y, y' = c x + d y.
    #[must_use]
    pub fn mapped(self, [a, b, c, d]: [f64; 4]) -> Self {
        Self {
            xx: a * a * self.xx + 2.0 * a * b * self.xy + b * b * self.yy,
            xy: a * c * self.xx + (a * d + b * c) * self.xy + b * d * self.yy,
            yy: c * c * self.xx + 2.0 * c * d * self.xy + d * d * self.yy,
        }
    }
}

impl Add for Cov2 {
    type Output = Self;
    fn add(self, o: Self) -> Self {
        Self {
            xx: self.xx + o.xx,
            xy: self.xy + o.xy,
            yy: self.yy + o.yy,
        }
    }
}

impl AddAssign for Cov2 {
    fn add_assign(&mut self, o: Self) {
        *self = *self + o;
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn chi2_agrees_with_the_inverse() {
        let c = Cov2::from_sigmas(2.0, 3.0, 0.4);
        let i = c.inverse();
        let (dx, dy) = (0.7, -1.9);
        let by_inverse = i.xx * dx * dx + 2.0 * i.xy * dx * dy + i.yy * dy * dy;
        assert!((c.chi2(dx, dy) - by_inverse).abs() < 1e-12);
    }

    #[test]
    fn quarter_turn_swaps_the_axes() {
        let c = Cov2::from_sigmas(2.0, 3.0, 0.4).mapped([0.0, -1.0, 1.0, 0.0]);
        assert!(
            (c.xx - 9.0).abs() < 1e-12 && (c.yy - 4.0).abs() < 1e-12 && (c.xy + 2.4).abs() < 1e-12
        );
    }
}
