//! Polynomial maps: inverse, derivatives, change of units, covariance, least squares.

use asterskein::frame::solve::{Match, fit};
use asterskein::frame::transform::{
    Chart, LADDER, PolyMap, basis, coef_covariance, n_params, place_covariance,
};
use asterskein::model::campaign::FrameFreedom;
use nalgebra::DMatrix;

use super::made::{normal, rng};

fn bent() -> PolyMap {
    PolyMap {
        chart: Chart {
            centre_mas: [300.0, -120.0],
            half_mas: 1500.0,
        },
        coef: [
            [12.0, 900.0, -1190.0, 3.0, -2.0, 5.0],
            [-40.0, 1210.0, 880.0, 1.0, 4.0, -6.0],
        ],
    }
}

#[test]
fn inverse_undoes_the_map_and_the_jacobian_is_its_slope() {
    let map = bent();
    for k in 0..49 {
        let (u, v) = (
            f64::from(k % 7) * 450.0 - 1100.0,
            f64::from(k / 7) * 450.0 - 1400.0,
        );
        let (x, y) = map.apply(u, v);
        let (p, q) = map.inverse(x, y).unwrap();
        assert!(
            (p - u).abs() < 1e-6 && (q - v).abs() < 1e-6,
            "{p} {u} {q} {v}"
        );
        let h = 0.5;
        let j = map.jacobian(u, v);
        let (right, left) = (map.apply(u + h, v), map.apply(u - h, v));
        let (up, down) = (map.apply(u, v + h), map.apply(u, v - h));
        let slopes = [
            right.0 - left.0,
            up.0 - down.0,
            right.1 - left.1,
            up.1 - down.1,
        ]
        .map(|d| d / (2.0 * h));
        for (a, b) in j.iter().zip(slopes) {
            assert!((a - b).abs() < 1e-9);
        }
    }
}

#[test]
fn list_units_give_the_same_places_and_errors() {
    let map = bent();
    let mut r = rng(3);
    let root = DMatrix::from_fn(12, 12, |_, _| normal(&mut r));
    let cov = &root * root.transpose();
    let nominal = [3.0, 26.0, -26.0, 3.0];
    let (coef, list_cov) = map.in_list_units(nominal, [7.0, -9.0], &cov);
    for (p, q) in [(0.0, 0.0), (31.0, -12.5), (-50.0, 44.0)] {
        let u = nominal[0] * p + nominal[1] * q + 7.0;
        let v = nominal[2] * p + nominal[3] * q - 9.0;
        let terms = [1.0, p, q, p * p, p * q, q * q];
        let at = |k: usize| -> f64 { coef[k].iter().zip(terms).map(|(c, t)| c * t).sum() };
        let (x, y) = map.apply(u, v);
        assert!((at(0) - x).abs() < 1e-8 && (at(1) - y).abs() < 1e-8);
        let (s, t) = map.chart.scaled(u, v);
        let there = place_covariance(&cov, s, t);
        let mut var = 0.0;
        for i in 0..6 {
            for j in 0..6 {
                var += terms[i] * list_cov[(i, j)] * terms[j];
            }
        }
        assert!((var / there.xx - 1.0).abs() < 1e-8, "{var} {}", there.xx);
    }
}

#[test]
fn every_freedom_is_linear_in_its_parameters() {
    let chart = bent().chart;
    for freedom in LADDER {
        for mirrored in [false, true] {
            let p: Vec<f64> = (0..n_params(freedom)).map(|k| 10.0 + k as f64).collect();
            let map = PolyMap::from_params(chart, freedom, mirrored, &p);
            let zero = PolyMap::from_params(chart, freedom, mirrored, &[0.0; 12]);
            let (u, v) = (800.0, -700.0);
            let (s, t) = chart.scaled(u, v);
            let d = basis(freedom, mirrored, s, t);
            let (x, y) = map.apply(u, v);
            let (x0, y0) = zero.apply(u, v);
            for (axis, seen) in [(0, x - x0), (1, y - y0)] {
                let sum: f64 = p.iter().zip(&d[axis]).map(|(p, d)| p * d).sum();
                assert!((sum - seen).abs() < 1e-9, "{freedom:?} {mirrored}");
            }
            let cov = coef_covariance(freedom, mirrored, &DMatrix::identity(p.len(), p.len()));
            let at = place_covariance(&cov, s, t);
            let plain: f64 = d[0].iter().map(|d| d * d).sum();
            assert!((at.xx - plain).abs() < 1e-9);
        }
    }
}

/// Recorded with numpy 2 (`numpy.linalg.lstsq` on the design matrix divided by the errors): the
/// script is `tests/outside/numpy_maps.py`.
#[test]
fn agrees_with_numpy_least_squares() {
    let text = include_str!("../outside/numpy_maps.csv");
    let mut stars = Vec::new();
    let mut expected: Vec<(FrameFreedom, Vec<f64>)> = Vec::new();
    for line in text.lines().filter(|l| !l.starts_with('#')) {
        let cells: Vec<&str> = line.split(',').collect();
        let number = |k: usize| cells[k].parse::<f64>().unwrap();
        match cells[0] {
            "star" => stars.push(Match {
                u_mas: number(1),
                v_mas: number(2),
                x_mas: number(3),
                y_mas: number(4),
                var_mas2: number(5).powi(2),
            }),
            "affine" => expected.push((FrameFreedom::Affine, (1..7).map(number).collect())),
            "quadratic" => expected.push((FrameFreedom::Quadratic, (1..13).map(number).collect())),
            other => panic!("{other}"),
        }
    }
    let chart = Chart {
        centre_mas: [0.0; 2],
        half_mas: 1000.0,
    };
    assert_eq!(expected.len(), 2);
    for (freedom, coef) in expected {
        let found = fit(chart, freedom, false, &stars).unwrap();
        for (a, b) in found.params.iter().zip(&coef) {
            // The recorded cases have no noise beyond rounding, so that robust weights are even.
            assert!((a - b).abs() < 1e-6, "{freedom:?} {a} {b}");
        }
    }
}
