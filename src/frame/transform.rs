//! Polynomial maps from one epoch's nominal plane (its list taken to mas with the nominal scale
//! and angle) to the common frame.
//!
//! x = sum c0k T_k(s, t), y = sum c1k T_k(s, t) with T = 1, s, t, s^2, s t, t^2 and
//! s = (u - centre_u) / half, t = (v - centre_v) / half: numbers of order one, so that the normal
//! equations stay well conditioned whatever the size of the field. Parameters by freedom: shift 2,
//! similarity 4, affine 6, quadratic 12; the similarity has a mirrored form.
//! Fails (returns `None`) only in the inverse, where the map folds over itself.

use nalgebra::{DMatrix, Matrix6, Vector6};

use crate::maths::cov2::Cov2;
use crate::model::campaign::FrameFreedom;

/// Number of parameters of the freest map.
pub const MAX_PARAMS: usize = 12;

/// Number of free parameters of a freedom.
#[must_use]
pub fn n_params(freedom: FrameFreedom) -> usize {
    match freedom {
        FrameFreedom::Known => 0,
        FrameFreedom::Shift => 2,
        FrameFreedom::Similarity => 4,
        FrameFreedom::Affine => 6,
        FrameFreedom::Quadratic => 12,
    }
}

/// The freedoms that can be solved, simplest first.
pub const LADDER: [FrameFreedom; 4] = [
    FrameFreedom::Shift,
    FrameFreedom::Similarity,
    FrameFreedom::Affine,
    FrameFreedom::Quadratic,
];

/// Where a nominal plane is centred and how long its unit is.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Chart {
    pub centre_mas: [f64; 2],
    pub half_mas: f64,
}

impl Chart {
    /// Chart of a list: the middle of its extent, unit half its larger side (at least 1 mas).
    #[must_use]
    pub fn of(u_mas: &[f64], v_mas: &[f64]) -> Self {
        let span = |w: &[f64]| {
            w.iter()
                .filter(|z| z.is_finite())
                .fold((f64::INFINITY, f64::NEG_INFINITY), |(lo, hi), &z| {
                    (lo.min(z), hi.max(z))
                })
        };
        let ((u0, u1), (v0, v1)) = (span(u_mas), span(v_mas));
        if u0 > u1 || v0 > v1 {
            return Self {
                centre_mas: [0.0; 2],
                half_mas: 1.0,
            };
        }
        Self {
            centre_mas: [0.5 * (u0 + u1), 0.5 * (v0 + v1)],
            half_mas: (0.5 * (u1 - u0).max(v1 - v0)).max(1.0),
        }
    }

    /// Nominal position in units of the chart.
    #[must_use]
    pub fn scaled(&self, u_mas: f64, v_mas: f64) -> (f64, f64) {
        (
            (u_mas - self.centre_mas[0]) / self.half_mas,
            (v_mas - self.centre_mas[1]) / self.half_mas,
        )
    }
}

/// The six polynomial terms.
#[must_use]
pub fn terms(s: f64, t: f64) -> [f64; 6] {
    [1.0, s, t, s * s, s * t, t * t]
}

/// Derivative of (x, y) with respect to the parameters at (s, t): two rows of which the first
/// `n_params` entries count.
#[must_use]
pub fn basis(freedom: FrameFreedom, mirrored: bool, s: f64, t: f64) -> [[f64; MAX_PARAMS]; 2] {
    let mut d = [[0.0; MAX_PARAMS]; 2];
    match freedom {
        FrameFreedom::Known => {}
        FrameFreedom::Shift => {
            d[0][0] = 1.0;
            d[1][1] = 1.0;
        }
        FrameFreedom::Similarity => {
            let f = if mirrored { -1.0 } else { 1.0 };
            d[0][..4].copy_from_slice(&[1.0, 0.0, s, -f * t]);
            d[1][..4].copy_from_slice(&[0.0, 1.0, f * t, s]);
        }
        FrameFreedom::Affine => {
            d[0][..3].copy_from_slice(&[1.0, s, t]);
            d[1][3..6].copy_from_slice(&[1.0, s, t]);
        }
        FrameFreedom::Quadratic => {
            d[0][..6].copy_from_slice(&terms(s, t));
            d[1][6..].copy_from_slice(&terms(s, t));
        }
    }
    d
}

/// A map with its chart; see the head of the module.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct PolyMap {
    pub chart: Chart,
    /// \[mas\], in chart units.
    pub coef: [[f64; 6]; 2],
}

impl PolyMap {
    /// The map that changes nothing.
    #[must_use]
    pub fn identity(chart: Chart) -> Self {
        let [u, v] = chart.centre_mas;
        let h = chart.half_mas;
        Self {
            chart,
            coef: [[u, h, 0.0, 0.0, 0.0, 0.0], [v, 0.0, h, 0.0, 0.0, 0.0]],
        }
    }

    /// The map of a freedom whose parameters are `p`; a shift keeps the nominal linear part.
    #[must_use]
    pub fn from_params(chart: Chart, freedom: FrameFreedom, mirrored: bool, p: &[f64]) -> Self {
        let mut map = Self::identity(chart);
        match freedom {
            FrameFreedom::Known => {}
            FrameFreedom::Shift => {
                map.coef[0][0] += p[0];
                map.coef[1][0] += p[1];
            }
            FrameFreedom::Similarity => {
                let f = if mirrored { -1.0 } else { 1.0 };
                map.coef = [
                    [p[0], p[2], -f * p[3], 0.0, 0.0, 0.0],
                    [p[1], p[3], f * p[2], 0.0, 0.0, 0.0],
                ];
            }
            FrameFreedom::Affine => {
                map.coef = [
                    [p[0], p[1], p[2], 0.0, 0.0, 0.0],
                    [p[3], p[4], p[5], 0.0, 0.0, 0.0],
                ];
            }
            FrameFreedom::Quadratic => {
                map.coef[0].copy_from_slice(&p[..6]);
                map.coef[1].copy_from_slice(&p[6..12]);
            }
        }
        map
    }

    /// Common-frame position \[mas\] of a nominal position \[mas\].
    #[must_use]
    pub fn apply(&self, u_mas: f64, v_mas: f64) -> (f64, f64) {
        let (s, t) = self.chart.scaled(u_mas, v_mas);
        let k = terms(s, t);
        (dot(&self.coef[0], &k), dot(&self.coef[1], &k))
    }

    /// Derivative of the common-frame position with respect to the nominal one, row by row.
    #[must_use]
    pub fn jacobian(&self, u_mas: f64, v_mas: f64) -> [f64; 4] {
        let (s, t) = self.chart.scaled(u_mas, v_mas);
        let h = self.chart.half_mas;
        let [a, b] = &self.coef;
        let ds = |c: &[f64; 6]| (c[1] + 2.0 * c[3] * s + c[4] * t) / h;
        let dt = |c: &[f64; 6]| (c[2] + c[4] * s + 2.0 * c[5] * t) / h;
        [ds(a), dt(a), ds(b), dt(b)]
    }

    /// Nominal position of a common-frame position, by Newton steps; `None` where the map folds.
    #[must_use]
    pub fn inverse(&self, x_mas: f64, y_mas: f64) -> Option<(f64, f64)> {
        let [u0, v0] = self.chart.centre_mas;
        let (mut u, mut v) = (u0, v0);
        for _ in 0..50 {
            let (x, y) = self.apply(u, v);
            let [a, b, c, d] = self.jacobian(u, v);
            let det = a * d - b * c;
            if det.abs() < 1e-12 || !det.is_finite() {
                return None;
            }
            let (dx, dy) = (x_mas - x, y_mas - y);
            let (du, dv) = ((d * dx - b * dy) / det, (a * dy - c * dx) / det);
            u += du;
            v += dv;
            if du.abs().max(dv.abs()) <= 1e-9 * (1.0 + self.chart.half_mas * 1e-6) {
                return Some((u, v));
            }
        }
        None
    }

    /// Mean scale of the map at its centre (1: the nominal scale was right).
    #[must_use]
    pub fn scale_ratio(&self) -> f64 {
        let [u, v] = self.chart.centre_mas;
        let [a, b, c, d] = self.jacobian(u, v);
        (a * d - b * c).abs().sqrt()
    }

    /// True when the map turns the plane over: the nominal handedness was wrong.
    #[must_use]
    pub fn is_mirrored(&self) -> bool {
        let [u, v] = self.chart.centre_mas;
        let [a, b, c, d] = self.jacobian(u, v);
        a * d - b * c < 0.0
    }

    /// Turn of the nominal +v axis \[deg\], from +y toward +x (north through east).
    #[must_use]
    pub fn turn_deg(&self) -> f64 {
        let [u, v] = self.chart.centre_mas;
        let [_, b, _, d] = self.jacobian(u, v);
        b.atan2(d).to_degrees()
    }

    /// Coefficients for 1, p, q, p^2, p q, q^2 of list coordinates (p, q), where the nominal
    /// plane is `nominal` (p, q) + `offset`; and the 12 x 12 covariance taken along.
    #[must_use]
    pub fn in_list_units(
        &self,
        nominal: [f64; 4],
        offset: [f64; 2],
        cov: &DMatrix<f64>,
    ) -> ([[f64; 6]; 2], DMatrix<f64>) {
        let h = self.chart.half_mas;
        let [a, b, c, d] = nominal.map(|z| z / h);
        let e = (offset[0] - self.chart.centre_mas[0]) / h;
        let f = (offset[1] - self.chart.centre_mas[1]) / h;
        // Row k: term k of (s, t) = (e + a p + b q, f + c p + d q) in monomials of (p, q).
        #[rustfmt::skip]
        let change = Matrix6::from_row_slice(&[
            1.0,   0.0,               0.0,               0.0,   0.0,               0.0,
            e,     a,                 b,                 0.0,   0.0,               0.0,
            f,     c,                 d,                 0.0,   0.0,               0.0,
            e * e, 2.0 * e * a,       2.0 * e * b,       a * a, 2.0 * a * b,       b * b,
            e * f, e * c + f * a,     e * d + f * b,     a * c, a * d + b * c,     b * d,
            f * f, 2.0 * f * c,       2.0 * f * d,       c * c, 2.0 * c * d,       d * d,
        ])
        .transpose();
        let turn = |k: usize| {
            let out = change * Vector6::from_row_slice(&self.coef[k]);
            std::array::from_fn(|j| out[j])
        };
        let mut both = DMatrix::zeros(12, 12);
        both.view_mut((0, 0), (6, 6)).copy_from(&change);
        both.view_mut((6, 6), (6, 6)).copy_from(&change);
        ([turn(0), turn(1)], &both * cov * both.transpose())
    }
}

/// Parameters of the map of a freedom nearest to a map: its coefficients without what the
/// freedom lacks (for a similarity the mean of the two axes).
#[must_use]
pub fn params_of(map: &PolyMap, freedom: FrameFreedom) -> [f64; MAX_PARAMS] {
    let [a, b] = &map.coef;
    let mut p = [0.0; MAX_PARAMS];
    match freedom {
        FrameFreedom::Known => {}
        FrameFreedom::Shift => p[..2].copy_from_slice(&[
            a[0] - map.chart.centre_mas[0],
            b[0] - map.chart.centre_mas[1],
        ]),
        FrameFreedom::Similarity => {
            let f = if map.is_mirrored() { -1.0 } else { 1.0 };
            let (c, d) = (0.5 * (a[1] + f * b[2]), 0.5 * (b[1] - f * a[2]));
            p[..4].copy_from_slice(&[a[0], b[0], c, d]);
        }
        FrameFreedom::Affine => {
            p[..3].copy_from_slice(&a[..3]);
            p[3..6].copy_from_slice(&b[..3]);
        }
        FrameFreedom::Quadratic => {
            p[..6].copy_from_slice(a);
            p[6..].copy_from_slice(b);
        }
    }
    p
}

/// Covariance of the 12 polynomial coefficients from that of a freedom's own parameters.
#[must_use]
pub fn coef_covariance(freedom: FrameFreedom, mirrored: bool, cov: &DMatrix<f64>) -> DMatrix<f64> {
    let n = n_params(freedom);
    let mut j = DMatrix::zeros(12, n);
    for p in 0..n {
        let mut one = [0.0; MAX_PARAMS];
        one[p] = 1.0;
        let chart = Chart {
            centre_mas: [0.0; 2],
            half_mas: 1.0,
        };
        let zero = PolyMap::from_params(chart, freedom, mirrored, &[0.0; MAX_PARAMS]);
        let map = PolyMap::from_params(chart, freedom, mirrored, &one);
        for axis in 0..2 {
            for k in 0..6 {
                j[(6 * axis + k, p)] = map.coef[axis][k] - zero.coef[axis][k];
            }
        }
    }
    &j * cov * j.transpose()
}

/// Covariance \[mas^2\] that the 12 x 12 coefficient covariance gives a place (s, t) of the chart.
#[must_use]
pub fn place_covariance(cov: &DMatrix<f64>, s: f64, t: f64) -> Cov2 {
    let k = terms(s, t);
    let part = |r: usize, c: usize| {
        let mut sum = 0.0;
        for (i, ki) in k.iter().enumerate() {
            for (j, kj) in k.iter().enumerate() {
                sum += ki * cov[(6 * r + i, 6 * c + j)] * kj;
            }
        }
        sum
    };
    Cov2 {
        xx: part(0, 0),
        xy: part(0, 1),
        yy: part(1, 1),
    }
}

fn dot(a: &[f64; 6], b: &[f64; 6]) -> f64 {
    a.iter().zip(b).map(|(x, y)| x * y).sum()
}
