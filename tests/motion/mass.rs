//! Joint solution of the central mass and its place.

use asterskein::maths::cov2::Cov2;
use asterskein::motion::kepler;
use asterskein::motion::linear::Point;
use asterskein::motion::orbit_fit::{ErrorLaw, FitEnd, OrbitPrior, State, split};
use asterskein::motion::refine_mass::{Common, MassProblem, Orbiter, RefineError};
use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};

const GM: f64 = 2.868e5;
const CENTRE: [f64; 2] = [3.0, -2.0];

fn normal(rng: &mut ChaCha8Rng) -> f64 {
    StandardNormal.sample(rng)
}

/// Stars 60 to 250 mas from a mass that lies off the origin, 20 epochs in 16 years.
fn stars(n: usize, sigma: f64, rng: &mut ChaCha8Rng) -> Vec<Orbiter> {
    let mut out = Vec::new();
    while out.len() < n {
        let r = [0, 1, 2].map(|_| 90.0 * normal(rng));
        let d = (r[0] * r[0] + r[1] * r[1] + r[2] * r[2]).sqrt();
        let v = [0, 1, 2].map(|_| normal(rng) * (GM / (2.75 * d)).sqrt());
        if !(60.0..250.0).contains(&d) || v.iter().map(|c| c * c).sum::<f64>() > 1.8 * GM / d {
            continue;
        }
        let truth = State::from([r[0], r[1], r[2], v[0], v[1], v[2]]);
        let points = (0..20)
            .map(|k| {
                let t = 2000.0 + 0.8 * f64::from(k) + rng.random_range(0.0..0.3);
                let (p, _) = kepler::propagate(GM, r, v, t - 2008.0);
                Point {
                    t_yr: t,
                    x_mas: CENTRE[0] + p[0] + sigma * normal(rng),
                    y_mas: CENTRE[1] + p[1] + sigma * normal(rng),
                    cov_mas2: Cov2::round(sigma * sigma),
                }
            })
            .collect();
        out.push(Orbiter {
            points,
            velocities: Vec::new(),
            start: truth,
            prior: OrbitPrior {
                z_sigma_mas: 300.0,
                v_sigma_mas_yr: [100.0; 3],
            },
        });
    }
    out
}

fn problem(orbiters: &[Orbiter]) -> MassProblem<'_> {
    MassProblem {
        t_ref_yr: 2008.0,
        orbiters,
        // Two per cent and two mas away.
        start: Common::from([1.02 * GM, CENTRE[0] + 2.0, CENTRE[1] - 1.0, 0.0, 0.0]),
        free: [true, true, true, false, false],
        errors: ErrorLaw::Gaussian,
    }
}

#[test]
fn mass_and_centre_come_back_within_their_errors() {
    let mut pulls = Vec::new();
    let (mut chi2, mut dof) = (0.0, 0);
    for seed in 0..8 {
        let mut rng = ChaCha8Rng::seed_from_u64(seed);
        let orbiters = stars(8, 0.5, &mut rng);
        let found = problem(&orbiters).solve().unwrap();
        assert_eq!(found.end, FitEnd::Converged);
        let truth = [GM, CENTRE[0], CENTRE[1]];
        for (k, t) in truth.into_iter().enumerate() {
            pulls.push((found.common[k] - t) / found.cov[(k, k)].sqrt());
        }
        assert!(found.cov[(0, 0)].sqrt() < 0.02 * GM);
        chi2 += found.chi2;
        dof += found.dof;
        let given = Common::from([GM, CENTRE[0], CENTRE[1], 0.0, 0.0]);
        let (off, n) = found.disagreement(&given, &Common::zeros());
        assert!(n == 3 && off < 25.0, "{off}");
    }
    let spread = (pulls.iter().map(|p| p * p).sum::<f64>() / pulls.len() as f64).sqrt();
    assert!((0.65..1.4).contains(&spread), "pulls spread by {spread}");
    // chi2 per degree of freedom of 8 x 269 numbers: 1 +- 0.03.
    let per = chi2 / dof as f64;
    assert!((per - 1.0).abs() < 0.12, "{per}");
}

#[test]
fn too_few_stars_are_refused() {
    assert_eq!(problem(&[]).solve().unwrap_err(), RefineError::NoOrbits);
    let mut rng = ChaCha8Rng::seed_from_u64(1);
    let mut one = stars(1, 0.5, &mut rng);
    one[0].points.truncate(2);
    let off = problem(&one).solve();
    // Two positions and priors: the mass stays open.
    assert!(off.is_err() || off.unwrap().cov[(0, 0)].sqrt() > 0.3 * GM);
}

#[test]
fn derivatives_by_the_mass_drive_the_fit() {
    // With exact data the joint solution is exact.
    let mut rng = ChaCha8Rng::seed_from_u64(3);
    let orbiters = stars(5, 1e-4, &mut rng);
    let found = problem(&orbiters).solve().unwrap();
    assert!(
        (found.common[0] / GM - 1.0).abs() < 1e-4,
        "{}",
        found.common[0]
    );
    let (r, _) = split(&found.states[0]);
    let (t, _) = split(&orbiters[0].start);
    assert!((r[0] - t[0]).abs() < 0.05);
}
