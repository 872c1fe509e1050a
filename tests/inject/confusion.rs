//! Poisson rates of confusion.
//!
//! Stars of density rho and one-dimensional dispersion sigma_v, blending within r_b:
//! mean number of neighbours inside n_b = pi r_b^2 rho, chance to be blended 1 - exp(-n_b),
//! encounters per star and year 2 r_b rho sigma_v sqrt(pi) (the flux of neighbours through a
//! circle; the mean relative speed of two Gaussian stars is sigma_v sqrt(pi)), mean duration
//! (pi / 2) r_b / (sigma_v sqrt(pi)), the mean chord over the mean relative speed. Derived from
//! the kinetic theory of gases in two dimensions (common practice, no source).

use std::f64::consts::PI;

use asterskein::inject::settings::{Mass, MockInstrument, MockSettings};
use asterskein::inject::{MockCampaign, make_campaign};

const RADIUS_MAS: f64 = 5000.0;
const COUNT: usize = 4000;
const SPEED_MAS_YR: f64 = 6.0;
const FWHM_MAS: f64 = 50.0;

/// Stars of one brightness, far above the limit, with a hard limit of resolution.
fn campaign() -> MockCampaign {
    let mut s = MockSettings {
        central_mass: Mass {
            mass_msun: 0.0,
            ..Mass::default()
        },
        instrument: vec![MockInstrument {
            fwhm_mas: FWHM_MAS,
            limit_mag: 20.0,
            resolution: 0.8,
            ..MockInstrument::default()
        }],
        ..MockSettings::default()
    };
    s.stars.count = COUNT;
    s.stars.radius_mas = RADIUS_MAS;
    s.stars.speed_mas_yr = SPEED_MAS_YR;
    s.stars.variable_fraction = 0.0;
    (s.stars.bright_mag, s.stars.faint_mag) = (14.0, 14.001);
    s.blends.softness = 1e-6;
    s.times.epochs = 21;
    make_campaign(s, 20).expect("one instrument covers all times")
}

/// Far enough from the edge that every neighbour is there.
fn is_inner(p: [f64; 2]) -> bool {
    p[0].abs() < 0.85 * RADIUS_MAS && p[1].abs() < 0.85 * RADIUS_MAS
}

#[test]
fn blends_are_as_frequent_and_last_as_long_as_poisson_says() {
    let c = campaign();
    let blend_radius_mas = 0.8 * 0.847 * FWHM_MAS;
    // Straight lines from an even square keep the inner density constant for a few years.
    let density = COUNT as f64 / (2.0 * RADIUS_MAS).powi(2);
    let inside = PI * blend_radius_mas.powi(2) * density;

    let (mut blended, mut all) = (0u32, 0u32);
    for e in &c.epochs {
        for d in &e.detected {
            for &(star, _) in &d.parts {
                if is_inner(c.sky.position_mas(star as usize, e.plan.time_yr)) {
                    all += 1;
                    blended += u32::from(d.parts.len() > 1);
                }
            }
        }
    }
    let (found, expected) = (f64::from(blended) / f64::from(all), 1.0 - (-inside).exp());
    // 2900 inner stars that decorrelate within the blend duration: about 4 independent looks,
    // so sigma = sqrt(p (1 - p) / 11600) = 0.003; pairs share their fate, which doubles the
    // variance. A third star of a chain may stand alone, which costs about n_b^2 / 4.
    assert!(
        (found - expected).abs() < 0.017,
        "blended fraction {found:.4}, Poisson {expected:.4}"
    );

    // Encounters of inner stars, followed in small steps over six years.
    let (step_yr, n_steps) = (0.05, 120);
    let start = c.sky.t_ref_yr - 3.0;
    let near_at = |k: u32| -> Vec<(u32, u32)> {
        let places = c.sky.positions_mas(start + step_yr * f64::from(k));
        let (x, y): (Vec<f64>, Vec<f64>) = places.iter().map(|p| (p[0], p[1])).unzip();
        let tree = asterskein::near::Tree::build(&x, &y);
        let pairs = tree.close_pairs(blend_radius_mas);
        pairs.iter().map(|p| (p.left, p.right)).collect()
    };
    let inner: Vec<bool> = (0..COUNT)
        .map(|k| is_inner(c.sky.position_mas(k, c.sky.t_ref_yr)))
        .collect();
    let n_inner = inner.iter().filter(|i| **i).count() as f64;
    let ends = |pairs: &[(u32, u32)]| -> f64 {
        let one = |k: u32| f64::from(u8::from(inner[k as usize]));
        pairs.iter().map(|&(a, b)| one(a) + one(b)).sum()
    };
    let mut before = near_at(0);
    let (mut encounters, mut star_years_inside) = (0.0, 0.0);
    for k in 1..=n_steps {
        let now = near_at(k);
        let fresh: Vec<(u32, u32)> = (now.iter().copied())
            .filter(|p| before.binary_search(p).is_err())
            .collect();
        encounters += ends(&fresh);
        star_years_inside += step_yr * ends(&now);
        before = now;
    }
    let span_yr = step_yr * f64::from(n_steps);
    let rate = encounters / (n_inner * span_yr);
    let theory = 2.0 * blend_radius_mas * density * SPEED_MAS_YR * PI.sqrt();
    // About 500 encounters of pairs, each counted at both ends: 5 % at one sigma; 15 % allowed.
    assert!(
        (rate / theory - 1.0).abs() < 0.15,
        "encounters {rate:.4} per star and year, theory {theory:.4}"
    );
    let duration = star_years_inside / encounters;
    let theory = 0.5 * PI * blend_radius_mas / (SPEED_MAS_YR * PI.sqrt());
    // Stock and flow have counting errors of 4 to 5 % that partly cancel; 15 % allowed.
    assert!(
        (duration / theory - 1.0).abs() < 0.15,
        "mean duration {duration:.2} yr, theory {theory:.2} yr"
    );
}
