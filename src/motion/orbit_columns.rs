//! Orbit columns of the track table, with errors.
//!
//! Errors are linearised: elements are differentiated numerically by the six state values
//! (central differences) and the state's covariance is mapped through. For a weakly determined
//! orbit this is a rough guide only; errors of angles are capped at 180 deg. The error of GM is
//! not included: the mass is taken as given.

use super::elements::Elements;
use crate::maths::units;
use crate::model::motion::{Motion, MotionKind};
use crate::model::result::OrbitColumns;

/// The mass about which a star moves, as far as orbit columns need it.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Centre {
    pub gm_mas3_yr2: f64,
    /// Position of the mass at the time of the state, in the field frame.
    pub x_mas: f64,
    pub y_mas: f64,
    /// Motion of the mass on the sky.
    pub vx_mas_yr: f64,
    pub vy_mas_yr: f64,
    /// Needed for au and km/s; those columns stay empty without it.
    pub distance_pc: Option<f64>,
}

/// Number of differentiated quantities.
const N: usize = 11;
/// Which of them are angles: differences are taken across the wrap, errors capped.
const ANGLES: [usize; 3] = [4, 5, 6];
/// Step of the central differences relative to distance and speed.
const STEP: f64 = 1e-6;

/// Elements of a Keplerian motion with errors; `None` for any other kind of motion.
///
/// `sign_known`: a radial velocity has told front from back. Otherwise the mirror image with
/// its node in [0, 180) deg is given, and `z_mas`, `vz_km_s` belong to that image.
/// `vz_km_s` is relative to the mass.
#[must_use]
pub fn orbit_columns(motion: &Motion, centre: &Centre, sign_known: bool) -> Option<OrbitColumns> {
    if motion.kind != MotionKind::Keplerian {
        return None;
    }
    let p = &motion.p;
    let mut state = [
        p[0] - centre.x_mas,
        p[1] - centre.y_mas,
        p[2],
        p[3] - centre.vx_mas_yr,
        p[4] - centre.vy_mas_yr,
        p[5],
    ];
    let gm = centre.gm_mas3_yr2;
    let mut mirror = 1.0;
    if !sign_known && of(gm, &state, motion.t_ref_yr).node_deg >= 180.0 {
        mirror = -1.0;
        state[2] = -state[2];
        state[5] = -state[5];
    }
    let best = of(gm, &state, motion.t_ref_yr);
    let values = quantities(&best, &state);
    let jac = jacobian(gm, &state, motion.t_ref_yr);
    let sign = [1.0, 1.0, mirror, 1.0, 1.0, mirror];
    let errors: [f64; N] = std::array::from_fn(|k| {
        let mut var = 0.0;
        for i in 0..6 {
            for j in 0..6 {
                var += jac[k][i] * jac[k][j] * sign[i] * sign[j] * motion.cov[(i, j)];
            }
        }
        let err = var.max(0.0).sqrt();
        if ANGLES.contains(&k) {
            err.min(180.0)
        } else {
            err
        }
    });
    let pair = |k: usize, unit: f64| (values[k] * unit, errors[k] * unit);
    let bound = best.semi_major_mas.is_some();
    let au = centre.distance_pc.map(units::au_per_mas);
    let km_s = centre.distance_pc.map(units::km_s_per_mas_yr);
    Some(OrbitColumns {
        z_mas: pair(0, 1.0),
        vz_km_s: km_s.map(|u| pair(1, u)),
        semi_major_mas: bound.then(|| pair(2, 1.0)),
        semi_major_au: au.filter(|_| bound).map(|u| pair(2, u)),
        eccentricity: pair(3, 1.0),
        inclination_deg: pair(4, 1.0),
        node_deg: pair(5, 1.0),
        arg_pericentre_deg: pair(6, 1.0),
        t_pericentre_yr: pair(7, 1.0),
        period_yr: bound.then(|| pair(8, 1.0)),
        pericentre_au: au.map(|u| pair(9, u)),
        apocentre_au: au.filter(|_| bound).map(|u| {
            let value = 2.0 * values[2] - values[9];
            (value * u, apocentre_error(&jac, motion, &sign) * u)
        }),
        pericentre_speed_km_s: km_s.map(|u| pair(10, u)),
        sign_known,
    })
}

fn of(gm: f64, s: &[f64; 6], t_yr: f64) -> Elements {
    Elements::from_state(gm, [s[0], s[1], s[2]], [s[3], s[4], s[5]], t_yr)
}

/// (z, vz, a, e, i, node, arg, t_pericentre, period, q, pericentre speed); 0 for what an unbound
/// orbit lacks.
fn quantities(e: &Elements, state: &[f64; 6]) -> [f64; N] {
    [
        state[2],
        state[5],
        e.semi_major_mas.unwrap_or(0.0),
        e.eccentricity,
        e.inclination_deg,
        e.node_deg,
        e.arg_pericentre_deg,
        e.t_pericentre_yr,
        e.period_yr().unwrap_or(0.0),
        e.pericentre_mas,
        e.pericentre_speed_mas_yr(),
    ]
}

fn jacobian(gm: f64, state: &[f64; 6], t_yr: f64) -> [[f64; 6]; N] {
    let size = |k: usize| (state[k].powi(2) + state[k + 1].powi(2) + state[k + 2].powi(2)).sqrt();
    let steps = [STEP * size(0), STEP * size(3)];
    let period = of(gm, state, t_yr).period_yr();
    let mut jac = [[0.0; 6]; N];
    for j in 0..6 {
        let h = steps[j / 3];
        let (mut up, mut down) = (*state, *state);
        up[j] += h;
        down[j] -= h;
        let (up, down) = (
            quantities(&of(gm, &up, t_yr), &up),
            quantities(&of(gm, &down, t_yr), &down),
        );
        for k in 0..N {
            let mut d = up[k] - down[k];
            if ANGLES.contains(&k) {
                d -= 360.0 * (d / 360.0).round();
            } else if let (7, Some(p)) = (k, period) {
                d -= p * (d / p).round();
            }
            jac[k][j] = d / (2.0 * h);
        }
    }
    jac
}

fn apocentre_error(jac: &[[f64; 6]; N], motion: &Motion, sign: &[f64; 6]) -> f64 {
    let row: [f64; 6] = std::array::from_fn(|j| (2.0 * jac[2][j] - jac[9][j]) * sign[j]);
    let mut var = 0.0;
    for i in 0..6 {
        for j in 0..6 {
            var += row[i] * row[j] * motion.cov[(i, j)];
        }
    }
    var.max(0.0).sqrt()
}
