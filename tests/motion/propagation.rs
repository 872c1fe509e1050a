//! The propagator: high-precision cases, random states, derivatives.

use asterskein::motion::kepler::{propagate, propagate_sky, propagate_with_stm};
use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;

/// GM of an invented mass, 2.6e6 Msun at 7100 pc \[mas^3/yr^2\].
const GM: f64 = 2.868e5;

type State = ([f64; 3], [f64; 3]);

fn norm(a: [f64; 3]) -> f64 {
    (a[0] * a[0] + a[1] * a[1] + a[2] * a[2]).sqrt()
}

fn apart(a: [f64; 3], b: [f64; 3]) -> f64 {
    norm([0, 1, 2].map(|i| a[i] - b[i]))
}

fn direction(rng: &mut ChaCha8Rng) -> [f64; 3] {
    let z: f64 = rng.random_range(-1.0..1.0);
    let (s, c) = rng.random_range(0.0..std::f64::consts::TAU).sin_cos();
    let w = (1.0 - z * z).sqrt();
    [w * c, w * s, z]
}

/// Distance log-uniform over 10..3000 mas, speed uniform up to 1.3 times escape (59 % bound),
/// directions isotropic, step within 50 years.
fn random_case(rng: &mut ChaCha8Rng) -> (State, f64) {
    let r = 10f64.powf(rng.random_range(1.0..3.477));
    let speed = (2.0 * GM / r).sqrt() * rng.random_range(0.0..1.3);
    let state = (
        direction(rng).map(|c| c * r),
        direction(rng).map(|c| c * speed),
    );
    (state, rng.random_range(-50.0..50.0))
}

#[test]
fn cases_of_sixty_digits_are_met_within_their_tolerance() {
    // 60-digit arithmetic, checked against an independent integrator (fixtures/reference/WHY.md).
    let path = concat!(
        env!("CARGO_MANIFEST_DIR"),
        "/fixtures/reference/propagator_cases.csv"
    );
    let mut count = 0;
    for row in csv::Reader::from_path(path).unwrap().records() {
        let row = row.unwrap();
        let f: Vec<f64> = (3..17).map(|k| row[k].parse().unwrap()).collect();
        let tolerance: f64 = row[20].parse().unwrap();
        let (r0, v0) = ([f[1], f[2], f[3]], [f[4], f[5], f[6]]);
        let want = [f[8], f[9], f[10]];
        for r in [
            propagate(f[0], r0, v0, f[7]).0,
            propagate_sky(f[0], r0, v0, f[7]).r,
            propagate_with_stm(f[0], r0, v0, f[7]).r,
        ] {
            let off = apart(r, want) / norm(want);
            assert!(off <= tolerance, "{}: {off:e} > {tolerance:e}", &row[0]);
        }
        count += 1;
    }
    assert_eq!(count, 245);
}

/// Round trips of `n` random cases; returns sorted errors \[mas\].
fn round_trips(n: usize, seed: u64) -> Vec<f64> {
    let mut rng = ChaCha8Rng::seed_from_u64(seed);
    let mut errors: Vec<f64> = (0..n)
        .map(|k| {
            let ((r, v), dt) = random_case(&mut rng);
            let (p, u) = propagate(GM, r, v, dt);
            let (back, _) = propagate(GM, p, u, -dt);
            let energy = |r, v: [f64; 3]| 0.5 * norm(v).powi(2) - GM / norm(r);
            let drift = (energy(p, u) - energy(r, v)).abs() / (GM / norm(r).min(norm(p)));
            assert!(
                drift < 1e-11,
                "seed {seed} case {k}: energy off by {drift:e}"
            );
            apart(r, back)
        })
        .collect();
    errors.sort_by(f64::total_cmp);
    errors
}

#[test]
fn random_states_come_back() {
    // Quick form; ASTERSKEIN_LONG=1 runs the full million.
    let n = 1_000_000;
    let errors = round_trips(n, 7);
    // Total order puts NaN last, so these also say that no case failed.
    assert!(errors[n / 2] < 1e-12, "median {:e}", errors[n / 2]);
    assert!(
        errors[n - n / 1000] < 1e-8,
        "99.9 % {:e}",
        errors[n - n / 1000]
    );
    assert!(errors[n - 1] < 1e-7, "largest {:e}", errors[n - 1]);
}

#[test]
fn hard_starts_do_not_fail() {
    // Radial plunges, near-parabolas and long arcs, where plain Newton steps run away.
    for scale in [1.0 - 1e-14, 1.0 - 1e-9, 1.0, 1.0 + 1e-9, 1.0 + 1e-14, 30.0] {
        for angle in [0.0, 1e-12, 1e-6, 1e-3, 1.5, 3.1, std::f64::consts::PI] {
            for dt in [-1e4, -50.0, -1e-9, 0.0, 1e-9, 0.3, 50.0, 1e4] {
                let r = [100.0, 0.0, 0.0];
                let speed = (2.0 * GM / 100.0_f64).sqrt() * scale;
                let v = [speed * f64::cos(angle), speed * f64::sin(angle), 0.0];
                let (p, u) = propagate(GM, r, v, dt);
                assert!(
                    p.iter().chain(&u).all(|c| c.is_finite()),
                    "{scale} {angle} {dt}: {p:?}"
                );
            }
        }
    }
}

/// Extrapolated central difference of the state by start value `j` (6: by GM), and an estimate
/// of its own error.
fn difference(r: [f64; 3], v: [f64; 3], dt: f64, j: usize) -> ([f64; 6], [f64; 6]) {
    let scale = if j < 3 {
        norm(r)
    } else if j < 6 {
        norm(v)
    } else {
        GM
    };
    let at = |step: f64| {
        let (mut r, mut v, mut gm) = (r, v, GM);
        match j {
            0..3 => r[j] += step,
            3..6 => v[j - 3] += step,
            _ => gm += step,
        }
        let (p, u) = propagate(gm, r, v, dt);
        [p[0], p[1], p[2], u[0], u[1], u[2]]
    };
    let slope = |h: f64| {
        let (a, b) = (at(h), at(-h));
        std::array::from_fn::<f64, 6, _>(|i| (a[i] - b[i]) / (2.0 * h))
    };
    let (a, b, c) = (
        slope(1e-5 * scale),
        slope(5e-6 * scale),
        slope(2.5e-6 * scale),
    );
    let low: [f64; 6] = std::array::from_fn(|i| (4.0 * b[i] - a[i]) / 3.0);
    let high: [f64; 6] = std::array::from_fn(|i| (4.0 * c[i] - b[i]) / 3.0);
    (high, std::array::from_fn(|i| high[i] - low[i]))
}

#[test]
fn derivatives_agree_with_finite_differences() {
    let mut rng = ChaCha8Rng::seed_from_u64(11);
    let mut compared = 0;
    for k in 0..4000 {
        let ((r, v), dt) = random_case(&mut rng);
        let full = propagate_with_stm(GM, r, v, dt);
        let sky = propagate_sky(GM, r, v, dt);
        assert_eq!(sky.d_state, [full.d_state[0], full.d_state[1]]);
        assert_eq!(sky.d_gm, [full.d_gm[0], full.d_gm[1]]);
        for j in 0..7 {
            let (slope, own_error) = difference(r, v, dt, j);
            for half in [0, 3] {
                let block = |f: &dyn Fn(usize) -> f64| norm([0, 1, 2].map(|i| f(half + i)));
                let analytic = |i: usize| {
                    if j < 6 {
                        full.d_state[i][j]
                    } else {
                        full.d_gm[i]
                    }
                };
                let size = block(&analytic);
                // Orbits of hundreds of turns leave no usable finite difference.
                if block(&|i| own_error[i]) < 1e-8 * size {
                    let off = block(&|i| slope[i] - analytic(i)) / size;
                    assert!(off < 1e-6, "case {k}, column {j}: off by {off:e}");
                    compared += 1;
                }
            }
        }
    }
    assert!(compared > 40_000, "{compared}");
}

#[test]
fn transition_matrix_is_symplectic() {
    // Hamiltonian flow: M^T J M = J (theorem); so the volume of errors is kept.
    let mut rng = ChaCha8Rng::seed_from_u64(5);
    for _ in 0..500 {
        let ((r, v), dt) = random_case(&mut rng);
        let m = propagate_with_stm(GM, r, v, 0.02 * dt).d_state;
        for a in 0..6 {
            for b in 0..6 {
                let mut sum = 0.0;
                let mut size = 1.0;
                for i in 0..3 {
                    let (p, q) = (m[i][a] * m[i + 3][b], m[i + 3][a] * m[i][b]);
                    sum += p - q;
                    size += p.abs() + q.abs();
                }
                let want = f64::from(i8::from(b == a + 3) - i8::from(a == b + 3));
                assert!((sum - want).abs() < 1e-9 * size, "{a} {b}: {sum}");
            }
        }
    }
}
