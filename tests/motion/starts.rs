//! Starts and fits: made-up arcs whose orbit is known.

use asterskein::maths::cov2::Cov2;
use asterskein::motion::kepler;
use asterskein::motion::linear::{self, Point, Prior2};
use asterskein::motion::orbit_fit::{
    ErrorLaw, FitEnd, Observations, OrbitPrior, OrbitProblem, RadialVelocity, State, split,
};
use asterskein::motion::start::{self, Arc};
use asterskein::motion::terms::Terms;
use asterskein::motion::three_points::{SkyPoint, orbits_through};
use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};

const GM: f64 = 2.868e5;

fn normal(rng: &mut ChaCha8Rng) -> f64 {
    StandardNormal.sample(rng)
}

/// A bound state at a distance drawn log-uniformly from a range \[mas\].
fn bound_state(rng: &mut ChaCha8Rng, range: std::ops::Range<f64>) -> State {
    loop {
        let scale = (range.start.ln() + (range.end / range.start).ln() * rng.random::<f64>()).exp();
        let r = [0, 1, 2].map(|_| normal(rng) * scale);
        let d = (r[0] * r[0] + r[1] * r[1] + r[2] * r[2]).sqrt();
        let s = (GM / (2.75 * d)).sqrt();
        let v = [0, 1, 2].map(|_| normal(rng) * s);
        let energy = 0.5 * (v[0] * v[0] + v[1] * v[1] + v[2] * v[2]) - GM / d;
        if range.contains(&d) && energy < -0.1 * GM / d {
            return State::from([r[0], r[1], r[2], v[0], v[1], v[2]]);
        }
    }
}

fn sky(state: &State, dt: f64) -> [f64; 2] {
    let (r, v) = split(state);
    let (p, _) = kepler::propagate(GM, r, v, dt);
    [p[0], p[1]]
}

#[test]
fn three_points_give_back_the_orbit_they_lie_on() {
    let mut rng = ChaCha8Rng::seed_from_u64(21);
    let (mut found, mut total) = (0, 0);
    let mut roots = 0;
    for _ in 0..300 {
        let truth = bound_state(&mut rng, 30.0..600.0);
        let (r, v) = split(&truth);
        let beta = 2.0 * GM / (r[0] * r[0] + r[1] * r[1] + r[2] * r[2]).sqrt()
            - (v[0] * v[0] + v[1] * v[1] + v[2] * v[2]);
        let period = std::f64::consts::TAU * GM * beta.powf(-1.5);
        let times = [
            -period * rng.random_range(0.05..0.6),
            0.0,
            period * rng.random_range(0.05..0.6),
        ];
        let points = times.map(|t| {
            let [x_mas, y_mas] = sky(&truth, t);
            SkyPoint {
                t_yr: 2000.0 + t,
                x_mas,
                y_mas,
            }
        });
        let mut out = Vec::new();
        orbits_through(GM, &points, 0, &mut out);
        for s in &out {
            for p in &points {
                let [x, y] = sky(s, p.t_yr - 2000.0);
                let scale = 1.0 + p.x_mas.hypot(p.y_mas);
                assert!(
                    (x - p.x_mas).hypot(y - p.y_mas) < 1e-4 * scale,
                    "{s} misses {p:?}"
                );
            }
        }
        let z_sign = truth[2].signum();
        let is_there = out.iter().any(|s| {
            (s[2] - truth[2].abs()).abs() < 1e-3 * (1.0 + truth[2].abs())
                && (s[5] - z_sign * truth[5]).abs() < 1e-3 * (1.0 + truth[5].abs())
        });
        found += usize::from(is_there);
        roots += out.len();
        total += 1;
    }
    assert!(
        found * 100 >= total * 97,
        "{found} of {total}, {roots} roots in all"
    );
}

fn observe(truth: &State, times: &[f64], sigma: f64, rng: &mut ChaCha8Rng) -> Vec<Point> {
    times
        .iter()
        .map(|&t_yr| {
            let [x, y] = sky(truth, t_yr - 2008.0);
            Point {
                t_yr,
                x_mas: x + sigma * normal(rng),
                y_mas: y + sigma * normal(rng),
                cov_mas2: Cov2::round(sigma * sigma),
            }
        })
        .collect()
}

fn problem<'a>(points: &'a [Point], velocities: &'a [RadialVelocity]) -> OrbitProblem<'a> {
    OrbitProblem {
        gm_mas3_yr2: GM,
        t_ref_yr: 2008.0,
        observed: Observations { points, velocities },
        prior: OrbitPrior {
            z_sigma_mas: 300.0,
            v_sigma_mas_yr: [60.0; 3],
        },
        errors: ErrorLaw::Gaussian,
        terms: Terms::default(),
    }
}

#[test]
fn fits_from_an_arc_find_the_orbit_and_honest_errors() {
    let mut rng = ChaCha8Rng::seed_from_u64(4);
    let times: Vec<f64> = (0..16).map(|k| 2003.0 + 0.66 * f64::from(k)).collect();
    let (mut good, mut total, mut chi2_sum) = (0, 0, 0.0);
    let mut pulls = Vec::new();
    for _ in 0..60 {
        let truth = bound_state(&mut rng, 80.0..250.0);
        let points = observe(&truth, &times, 0.5, &mut rng);
        let mid = &points[5..10];
        let v = Prior2::isotropic(100.0);
        let a = Prior2::isotropic(GM / 80f64.powi(2));
        let arc = linear::fit_accelerated(mid, 2008.0, &v, &a).unwrap().motion;
        let arc = Arc::new(
            [arc.p[0], arc.p[1]],
            [arc.p[2], arc.p[3]],
            [arc.p[4], arc.p[5]],
            arc.cov[(4, 4)].max(arc.cov[(5, 5)]).sqrt(),
        );
        let mut starts = Vec::new();
        start::scan(GM, &arc, &mut starts);
        let fits = problem(&points, &[]).fit_all(&starts);
        total += 1;
        let Some(best) = fits.first() else { continue };
        assert_eq!(best.end, FitEnd::Converged);
        if best.chi2 < 60.0 {
            good += 1;
            chi2_sum += best.chi2;
            pulls.push((best.state[3] - truth[3]) / best.cov[(3, 3)].sqrt());
        }
        // Evidence orders the minima sensibly and all are within reach of the best.
        assert!(fits.iter().all(|f| f.objective <= best.objective + 9.0));
    }
    // 26 degrees of freedom.
    assert!(good * 100 >= 95 * total, "{good} of {total}");
    let mean = chi2_sum / f64::from(good);
    assert!((mean - 26.0).abs() < 4.0, "mean chi2 {mean}");
    let spread = (pulls.iter().map(|p| p * p).sum::<f64>() / pulls.len() as f64).sqrt();
    assert!(
        (0.75..1.3).contains(&spread),
        "pulls of vx spread by {spread}"
    );
}

#[test]
fn a_radial_velocity_tells_front_from_back() {
    let mut rng = ChaCha8Rng::seed_from_u64(9);
    let truth = State::from([110.0, -40.0, -70.0, 18.0, 25.0, -22.0]);
    let times: Vec<f64> = (0..16).map(|k| 2002.0 + 0.8 * f64::from(k)).collect();
    let points = observe(&truth, &times, 0.3, &mut rng);
    let start = State::from([110.0, -40.0, 60.0, 18.0, 25.0, 15.0]);
    let without = problem(&points, &[]).fit(start).unwrap();
    assert!(without.state[2] > 0.0);
    let rv = [RadialVelocity {
        t_yr: 2008.0,
        vz_mas_yr: -22.0,
        err_mas_yr: 0.5,
    }];
    let starts = [start, State::from([110.0, -40.0, -60.0, 18.0, 25.0, -15.0])];
    let with = problem(&points, &rv).fit_all(&starts);
    assert!((with[0].state[2] + 70.0).abs() < 5.0 && (with[0].state[5] + 22.0).abs() < 1.0);
}

#[test]
fn far_from_any_mass_the_evidence_is_that_of_a_straight_line() {
    // Without a mass the problem is linear and Laplace's approximation exact: the depth, which
    // nothing constrains, integrates to one.
    let mut rng = ChaCha8Rng::seed_from_u64(2);
    let points: Vec<Point> = (0..9)
        .map(|k| {
            let t = f64::from(k) - 4.0;
            Point {
                t_yr: 2008.0 + t,
                x_mas: 500.0 + 5.0 * t + normal(&mut rng),
                y_mas: -300.0 - 2.0 * t + normal(&mut rng),
                cov_mas2: Cov2::from_sigmas(1.0, 0.8, 0.2),
            }
        })
        .collect();
    let orbit = OrbitProblem {
        gm_mas3_yr2: 0.0,
        prior: OrbitPrior {
            z_sigma_mas: 100.0,
            v_sigma_mas_yr: [6.0; 3],
        },
        ..problem(&points, &[])
    };
    let fit = orbit
        .fit(State::from([500.0, -300.0, 0.0, 0.0, 0.0, 0.0]))
        .unwrap();
    let line = linear::fit_linear(&points, 2008.0, &Prior2::isotropic(6.0)).unwrap();
    assert!((fit.ln_evidence - line.ln_evidence).abs() < 1e-6);
    assert!((fit.chi2 - line.chi2).abs() < 1e-6);
}

#[test]
fn wings_resist_an_outlier() {
    let mut rng = ChaCha8Rng::seed_from_u64(13);
    let truth = State::from([110.0, -40.0, 70.0, 18.0, 25.0, 22.0]);
    let times: Vec<f64> = (0..16).map(|k| 2002.0 + 0.8 * f64::from(k)).collect();
    let mut points = observe(&truth, &times, 0.3, &mut rng);
    points[9].x_mas += 20.0;
    let off = |errors: ErrorLaw| {
        let p = OrbitProblem {
            errors,
            ..problem(&points, &[])
        };
        let fit = p.fit(truth).unwrap();
        (fit.state[3] - truth[3]).abs()
    };
    let plain = off(ErrorLaw::Gaussian);
    for law in [
        ErrorLaw::Student { nu: 4.0 },
        ErrorLaw::CoreWing {
            wing: 0.1,
            widen: 5.0,
        },
    ] {
        assert!(
            off(law) < 0.3 * plain,
            "{law:?}: {} against {plain}",
            off(law)
        );
    }
}
