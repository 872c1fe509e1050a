//! Time of one propagation about a mass, with and without derivatives, beside a plain f-and-g
//! propagation for ellipses by Newton's method without derivatives.
//!
//! `cargo bench --bench kepler`

use asterskein::motion::kepler;
use divan::{Bencher, black_box};
use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;

const GM: f64 = 2.868e5;

type Case = ([f64; 3], [f64; 3], f64);

fn main() {
    divan::main();
}

/// Bound orbits 100 to 1000 mas from the mass, steps within 10 years; all shapes when `bound` is
/// false.
fn cases(bound: bool) -> Vec<Case> {
    let mut rng = ChaCha8Rng::seed_from_u64(1);
    let mut direction = move || {
        let z: f64 = rng.random_range(-1.0..1.0);
        let (s, c) = rng.random_range(0.0..std::f64::consts::TAU).sin_cos();
        let w = (1.0 - z * z).sqrt();
        ([w * c, w * s, z], rng.random::<f64>(), rng.random::<f64>())
    };
    (0..1024)
        .map(|_| {
            let (d, a, b) = direction();
            let r = 100.0 * 10f64.powf(a);
            let (e, _, t) = direction();
            let most = if bound { 0.95 } else { 1.3 };
            let speed = (2.0 * GM / r).sqrt() * most * b;
            (d.map(|c| c * r), e.map(|c| c * speed), 20.0 * t - 10.0)
        })
        .collect()
}

/// Lagrange's f and g with Kepler's equation in the difference of eccentric anomalies, by plain
/// Newton steps (textbook form; ellipses only).
fn plain_f_and_g(gm: f64, r0: [f64; 3], v0: [f64; 3], dt: f64) -> ([f64; 3], [f64; 3]) {
    let dot = |a: [f64; 3], b: [f64; 3]| a[0] * b[0] + a[1] * b[1] + a[2] * b[2];
    let d = dot(r0, r0).sqrt();
    let a = 1.0 / (2.0 / d - dot(v0, v0) / gm);
    let n = (gm / (a * a * a)).sqrt();
    let (ec, es) = (1.0 - d / a, dot(r0, v0) / (gm * a).sqrt());
    let m = n * dt - std::f64::consts::TAU * (n * dt / std::f64::consts::TAU).round();
    let mut x = m;
    for _ in 0..50 {
        let (s, c) = x.sin_cos();
        let step = (x - ec * s + es * (1.0 - c) - m) / (1.0 - ec * c + es * s);
        x -= step;
        if step.abs() < 1e-14 {
            break;
        }
    }
    let (s, c) = x.sin_cos();
    let r = a * (1.0 - ec * c + es * s);
    let (f, g) = (1.0 - a / d * (1.0 - c), (m - x + s) / n);
    let (fd, gd) = (-n * a * a / (r * d) * s, 1.0 - a / r * (1.0 - c));
    (
        [0, 1, 2].map(|i| f * r0[i] + g * v0[i]),
        [0, 1, 2].map(|i| fd * r0[i] + gd * v0[i]),
    )
}

fn each(bencher: Bencher, bound: bool, work: impl Fn(&Case) + Sync) {
    let cases = cases(bound);
    bencher
        .counter(divan::counter::ItemsCount::new(cases.len()))
        .bench(|| cases.iter().for_each(&work));
}

#[divan::bench]
fn ellipses_plain_f_and_g(bencher: Bencher) {
    each(bencher, true, |(r, v, dt)| {
        black_box(plain_f_and_g(GM, *r, *v, *dt));
    });
}

#[divan::bench]
fn ellipses_state(bencher: Bencher) {
    each(bencher, true, |(r, v, dt)| {
        black_box(kepler::propagate(GM, *r, *v, *dt));
    });
}

#[divan::bench]
fn ellipses_sky_derivatives(bencher: Bencher) {
    each(bencher, true, |(r, v, dt)| {
        black_box(kepler::propagate_sky(GM, *r, *v, *dt));
    });
}

#[divan::bench]
fn ellipses_full_matrix(bencher: Bencher) {
    each(bencher, true, |(r, v, dt)| {
        black_box(kepler::propagate_with_stm(GM, *r, *v, *dt));
    });
}

#[divan::bench]
fn all_conics_sky_derivatives(bencher: Bencher) {
    each(bencher, false, |(r, v, dt)| {
        black_box(kepler::propagate_sky(GM, *r, *v, *dt));
    });
}
