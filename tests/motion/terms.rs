//! Optional terms against published values and formulae.

use asterskein::maths::units;
use asterskein::model::campaign::{CentralMass, ExtendedMass};
use asterskein::motion::elements::Elements;
use asterskein::motion::kepler;
use asterskein::motion::terms::{Extended, Terms};
use std::f64::consts::{PI, TAU};

/// Advance of pericentre \[rad\] over one revolution that starts at apocentre.
fn advance(terms: &Terms, gm: f64, a: f64, e: f64) -> f64 {
    let start = Elements {
        gm_mas3_yr2: gm,
        pericentre_mas: a * (1.0 - e),
        eccentricity: e,
        inclination_deg: 0.0,
        node_deg: 0.0,
        arg_pericentre_deg: 90.0,
        t_pericentre_yr: 0.0,
        semi_major_mas: Some(a),
    };
    let period = start.period_yr().unwrap();
    // Osculating elements half a revolution before and after pericentre differ by the advance;
    // at apocentre their periodic part is the same at both ends.
    let (r, v) = start.state_at(-0.5 * period);
    let before = Elements::from_state(gm, r, v, 0.0).arg_pericentre_deg;
    let mut dt = period;
    let (mut r1, mut v1) = terms.propagate(gm, r, v, dt);
    for _ in 0..20 {
        // To the true apocentre of the perturbed orbit, where r.v = 0.
        let rv = r1[0] * v1[0] + r1[1] * v1[1] + r1[2] * v1[2];
        let d = (r1[0] * r1[0] + r1[1] * r1[1] + r1[2] * r1[2]).sqrt();
        let v2 = v1[0] * v1[0] + v1[1] * v1[1] + v1[2] * v1[2];
        dt -= rv / (v2 - gm / d);
        (r1, v1) = terms.propagate(gm, r, v, dt);
    }
    let after = Elements::from_state(gm, r1, v1, 0.0).arg_pericentre_deg;
    (after - before).to_radians()
}

#[test]
fn the_innermost_planet_advances_by_43_seconds_a_century() {
    // 42.98 arcsec per century (e.g. Will 2014, Living Rev. Relativity 17, 4; from memory).
    // One mas at 1000 pc is one au.
    let c = units::LIGHT_AU_YR;
    let gm = units::gm_mas3_yr2(1.0, 1000.0);
    let terms = Terms {
        relativity: Some(c),
        ..Terms::default()
    };
    let (a, e) = (0.387_098, 0.205_63);
    let per_turn = advance(&terms, gm, a, e);
    let period = TAU * (a * a * a / gm).sqrt();
    let arcsec = per_turn.to_degrees() * 3600.0 * 100.0 / period;
    assert!((arcsec - 42.98).abs() < 0.02, "{arcsec}");
}

#[test]
fn compact_orbits_advance_by_the_formula() {
    // 6 pi gm / (c^2 a (1 - e^2)), first order (Einstein 1915).
    let gm = units::gm_mas3_yr2(2.6e6, 7100.0);
    let c = units::LIGHT_AU_YR / units::au_per_mas(7100.0);
    let terms = Terms {
        relativity: Some(c),
        ..Terms::default()
    };
    for (a, e) in [(100.0, 0.5), (100.0, 0.88), (120.0, 0.95)] {
        let want = 6.0 * PI * gm / (c * c * a * (1.0 - e * e));
        let found = advance(&terms, gm, a, e);
        // Terms of the next order are of relative size gm / (c^2 q).
        let next = 20.0 * gm / (c * c * a * (1.0 - e));
        assert!(
            (found / want - 1.0).abs() < next + 1e-4,
            "{a} {e}: {found} {want}"
        );
    }
}

#[test]
fn an_extended_mass_turns_the_orbit_back_by_the_formula() {
    // Slope 2: -2 pi (M(a) / M) sqrt(1 - e^2) (1 - sqrt(1 - e^2)) / e^2 (first-order
    // perturbation theory); other slopes by the quadrature (1/e) int M(r)/M cos f df.
    let gm = 2.868e5;
    for slope in [1.75, 2.0, 1.2] {
        for e in [0.5, 0.88] {
            let a = 100.0;
            let share = 1e-5;
            let terms = Terms {
                extended: Some(Extended {
                    gm_mas3_yr2: share * gm,
                    radius_mas: a,
                    slope,
                }),
                ..Terms::default()
            };
            let n = 4000;
            let mut sum = 0.0;
            for k in 0..n {
                let f = TAU * f64::from(k) / f64::from(n);
                let r = (1.0 - e * e) / (1.0 + e * f.cos());
                sum += r.powf(3.0 - slope) * f.cos();
            }
            let want = share / e * sum * TAU / f64::from(n);
            if slope == 2.0 {
                let w = f64::sqrt(1.0 - e * e);
                let closed = -TAU * share * w * (1.0 - w) / (e * e);
                assert!((closed / want - 1.0).abs() < 1e-6, "{closed} {want}");
            }
            let found = advance(&terms, gm, a, e);
            assert!(
                (found / want - 1.0).abs() < 2e-3,
                "{slope} {e}: {found} {want}"
            );
        }
    }
}

#[test]
fn light_time_shows_far_stars_where_they_were() {
    // Light takes 499.004784 s over one au (IAU 2012 au and SI c; from memory): 1.5813e-5 yr.
    let c = units::LIGHT_AU_YR / units::au_per_mas(7100.0);
    assert!((1.0 / units::LIGHT_AU_YR * 365.25 * 86_400.0 - 499.004_784).abs() < 1e-5);
    let terms = Terms {
        light_time: Some(c),
        ..Terms::default()
    };
    let gm = 2.868e5;
    let (r, v) = ([100.0, 20.0, 80.0], [20.0, -10.0, 15.0]);
    for dt in [-6.0, 0.0, 3.0] {
        let seen = terms.seen(gm, r, v, dt);
        let (now, speed) = kepler::propagate(gm, r, v, dt);
        // First order: shift = -v z / c.
        for i in 0..2 {
            let want = now[i] - speed[i] * now[2] / c;
            assert!(
                (seen.r[i] - want).abs() < 0.02,
                "{dt}: {} {want}",
                seen.r[i]
            );
        }
        // Exactly: light left at a time that differs by z / c.
        let at = terms.emission_dt(gm, r, v, dt);
        let (then, _) = kepler::propagate(gm, r, v, at);
        assert!((at + then[2] / c - dt).abs() < 1e-12);
    }
}

#[test]
fn shifts_of_radial_velocities_at_a_compact_pericentre() {
    // About 200 km/s for a pericentre of 120 au and 7700 km/s about 4.1e6 Msun
    // (A&A 615, L15, 2018; from memory).
    let gm = units::gm_mas3_yr2(4.1e6, 1000.0);
    let k = units::km_s_per_mas_yr(1000.0);
    let terms = Terms {
        relativity: Some(units::LIGHT_AU_YR),
        ..Terms::default()
    };
    let shift = terms.velocity_shift(gm, [120.0, 0.0, 0.0], [0.0, 7700.0 / k, 0.0]) * k;
    assert!((shift - 200.0).abs() < 10.0, "{shift}");
    let off = Terms::default().velocity_shift(gm, [120.0, 0.0, 0.0], [0.0, 7700.0 / k, 0.0]);
    assert!(off == 0.0);
}

#[test]
fn terms_come_from_the_campaign_and_need_a_distance() {
    let mut mass = CentralMass::point(2.6e6, 7100.0, 0.0, 0.0);
    assert!(Terms::of(&mass).unwrap().are_off());
    mass.light_time = true;
    mass.extended = Some(ExtendedMass {
        mass_msun: 2.0e4,
        inside_pc: 0.1,
        slope: 1.75,
    });
    let terms = Terms::of(&mass).unwrap();
    // 0.1 pc at 7100 pc is 2905 mas (definition of the parsec).
    assert!((terms.extended.unwrap().radius_mas - 2905.15).abs() < 0.1);
    mass.distance_pc = None;
    let words = Terms::of(&mass).unwrap_err().to_string();
    assert!(
        words.contains("light_time") && words.contains("distance_pc"),
        "{words}"
    );
}
