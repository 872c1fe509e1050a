//! Elements: there and back over random orbits, and the columns of the track table.

use asterskein::model::motion::{Motion, MotionKind};
use asterskein::motion::elements::Elements;
use asterskein::motion::kepler;
use asterskein::motion::orbit_columns::{Centre, orbit_columns};
use nalgebra::{SMatrix, SVector};
use proptest::prelude::*;

const GM: f64 = 2.868e5;

proptest! {
    #![proptest_config(ProptestConfig { failure_persistence: None, ..ProptestConfig::default() })]

    #[test]
    fn elements_give_the_state_back(
        q in 3.0..500.0f64, e in 0.0..3.0f64, i in 0.0..180.0f64, node in 0.0..360.0f64,
        arg in 0.0..360.0f64, since in -3.0..3.0f64,
    ) {
        let first = Elements {
            gm_mas3_yr2: GM, pericentre_mas: q, eccentricity: e, inclination_deg: i,
            node_deg: node, arg_pericentre_deg: arg, t_pericentre_yr: 2000.0,
            semi_major_mas: (e < 1.0).then(|| q / (1.0 - e)),
        };
        let (r, v) = first.state_at(2000.0 + since);
        let again = Elements::from_state(GM, r, v, 2000.0 + since);
        prop_assert!((again.eccentricity - e).abs() < 1e-8);
        prop_assert!((again.pericentre_mas - q).abs() < 1e-7 * q);
        prop_assert!((again.inclination_deg - i).abs() < 1e-5);
        prop_assert_eq!(again.semi_major_mas.is_some(), e < 1.0 - 1e-9 || again.semi_major_mas.is_some());
        if let Some(period) = again.period_yr() {
            // The passage given is the nearest one.
            prop_assert!((again.t_pericentre_yr - 2000.0 - since).abs() <= 0.5 * period * (1.0 + 1e-9));
        }
        let (p, u) = again.state_at(2000.0 + since);
        for k in 0..3 {
            prop_assert!((p[k] - r[k]).abs() < 1e-6 * (1.0 + q), "{:?} {:?}", first, again);
            prop_assert!((u[k] - v[k]).abs() < 1e-4 * (1.0 + v[k].abs()), "{:?} {:?}", first, again);
        }
        // Pericentre really is where the distance is least and the speed highest.
        let (p, u) = kepler::propagate(GM, r, v, again.t_pericentre_yr - 2000.0 - since);
        let dot = p[0] * u[0] + p[1] * u[1] + p[2] * u[2];
        let speed = (u[0] * u[0] + u[1] * u[1] + u[2] * u[2]).sqrt();
        prop_assert!(dot.abs() < 1e-5 * q * speed);
        prop_assert!(e < 1e-6 || (speed / again.pericentre_speed_mas_yr() - 1.0).abs() < 1e-6);
    }
}

fn motion(state: [f64; 6], sigma: f64) -> Motion {
    Motion {
        kind: MotionKind::Keplerian,
        t_ref_yr: 2008.0,
        p: SVector::from(state),
        cov: SMatrix::identity() * (sigma * sigma),
    }
}

fn centre() -> Centre {
    Centre {
        gm_mas3_yr2: GM,
        x_mas: 10.0,
        y_mas: -5.0,
        vx_mas_yr: 0.2,
        vy_mas_yr: 0.1,
        distance_pc: Some(7100.0),
    }
}

#[test]
fn columns_of_a_bound_orbit_are_complete_and_consistent() {
    let m = motion([110.0, 55.0, 30.0, -20.0, 45.0, 15.0], 0.01);
    let c = orbit_columns(&m, &centre(), true).unwrap();
    let a = c.semi_major_au.unwrap().0;
    let (q, big_q) = (c.pericentre_au.unwrap().0, c.apocentre_au.unwrap().0);
    assert!((q + big_q - 2.0 * a).abs() < 1e-9 * a);
    assert!((q - a * (1.0 - c.eccentricity.0)).abs() < 1e-9 * a);
    // Kepler's third law in au, yr, Msun: P^2 = 4 pi^2 a^3 / GM.
    let mass = GM * 7.1f64.powi(3) / asterskein::maths::units::GM_SUN_AU3_YR2;
    let p = std::f64::consts::TAU
        * (a.powi(3) / (asterskein::maths::units::GM_SUN_AU3_YR2 * mass)).sqrt();
    assert!((c.period_yr.unwrap().0 - p).abs() < 1e-9 * p);
    assert!(c.period_yr.unwrap().1 > 0.0 && c.inclination_deg.1 > 0.0);
}

#[test]
fn an_unbound_orbit_has_no_period_and_no_negative_axis() {
    let m = motion([110.0, 55.0, 30.0, -60.0, 85.0, 55.0], 0.01);
    let c = orbit_columns(&m, &centre(), true).unwrap();
    assert!(c.eccentricity.0 > 1.0);
    assert!(c.period_yr.is_none() && c.semi_major_mas.is_none() && c.semi_major_au.is_none());
    assert!(c.apocentre_au.is_none() && c.pericentre_au.is_some());
}

#[test]
fn without_velocities_front_and_back_give_the_same_columns() {
    let front = motion([110.0, 55.0, 30.0, -20.0, 45.0, 15.0], 0.01);
    let back = motion([110.0, 55.0, -30.0, -20.0, 45.0, -15.0], 0.01);
    let a = orbit_columns(&front, &centre(), false).unwrap();
    let b = orbit_columns(&back, &centre(), false).unwrap();
    assert!((a.node_deg.0 - b.node_deg.0).abs() < 1e-9 && a.node_deg.0 < 180.0);
    assert!((a.z_mas.0 - b.z_mas.0).abs() < 1e-12);
    assert!((a.arg_pericentre_deg.1 - b.arg_pericentre_deg.1).abs() < 1e-6);
    assert!(!a.sign_known);
}

#[test]
fn linearised_errors_agree_with_sampling() {
    // Seeded sampling of the state; errors must agree where they are small.
    use rand::SeedableRng;
    use rand_distr::{Distribution, StandardNormal};
    let mut rng = rand_chacha::ChaCha8Rng::seed_from_u64(3);
    let start = [110.0, 55.0, 30.0, -20.0, 45.0, 15.0];
    let sigma = 0.02;
    let c = orbit_columns(&motion(start, sigma), &centre(), true).unwrap();
    let mut samples: Vec<[f64; 4]> = Vec::new();
    for _ in 0..4000 {
        let s = start.map(|v| {
            let n: f64 = StandardNormal.sample(&mut rng);
            v + sigma * n
        });
        let r = [s[0] - 10.0, s[1] + 5.0, s[2]];
        let e = Elements::from_state(GM, r, [s[3] - 0.2, s[4] - 0.1, s[5]], 2008.0);
        samples.push([
            e.period_yr().unwrap(),
            e.eccentricity,
            e.node_deg,
            e.t_pericentre_yr,
        ]);
    }
    let expected = [
        c.period_yr.unwrap().1,
        c.eccentricity.1,
        c.node_deg.1,
        c.t_pericentre_yr.1,
    ];
    for (k, want) in expected.into_iter().enumerate() {
        let n = samples.len() as f64;
        let mean = samples.iter().map(|s| s[k]).sum::<f64>() / n;
        let sd = (samples.iter().map(|s| (s[k] - mean).powi(2)).sum::<f64>() / n).sqrt();
        assert!(
            (sd / want - 1.0).abs() < 0.06,
            "{k}: sampled {sd}, linearised {want}"
        );
    }
}
