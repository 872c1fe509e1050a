//! One star's motion as the track table gives it.

use nalgebra::SMatrix;

use crate::model::campaign::CentralMass;
use crate::model::motion::{Motion, MotionKind};
use crate::model::result::{OrbitColumns, SkyMotion};
use crate::motion::kepler;
use crate::motion::orbit_columns::{Centre, orbit_columns};
use crate::motion::state::{Dynamics, H26, M6, P6, Wide};
use crate::motion::state_fit::{self, Fit, Obs};

/// Significance at which an acceleration is worth its own model \[sigma\].
const CURVED_SIGMA: f64 = 3.0;

/// Motion at a time in the form of the tables.
#[derive(Clone, Copy, Debug)]
pub struct Summary {
    pub motion: Motion,
    pub sky: SkyMotion,
    pub chi2: f64,
    pub dof: usize,
    pub ln_evidence: f64,
}

/// Summarise a fit at `t_ref`. Where curvature is not significant the straight line through
/// the same detections is given: that is what the data say. `restate` gives that line the
/// errors that the fit has already.
#[must_use]
pub fn summarise(
    dynamics: &Dynamics,
    fit: &Fit,
    obs: &[Obs],
    t_ref: f64,
    restate: impl Fn(&Dynamics, &Fit) -> Fit,
) -> Summary {
    let full = match *dynamics {
        Dynamics::Central { gm_mas3_yr2, .. } => central(dynamics, gm_mas3_yr2, fit, t_ref),
        Dynamics::Free { .. } => free(fit, t_ref),
    };
    let curved = {
        let s = &full.sky;
        let (a, b) = (s.p[4], s.p[5]);
        let cov = crate::maths::cov2::Cov2 {
            xx: s.cov[4][4],
            xy: s.cov[4][5],
            yy: s.cov[5][5],
        };
        let spread = Fit::predict(fit, dynamics, t_ref).1.max_var();
        // A radial acceleration has one significant direction only.
        let a2 = a * a + b * b;
        let var = (a * a * cov.xx + 2.0 * a * b * cov.xy + b * b * cov.yy) / a2.max(1e-30);
        spread.is_finite() && a2 > CURVED_SIGMA * CURVED_SIGMA * var
    };
    let dof = |n: usize, k: usize| (2 * n).saturating_sub(k);
    if curved {
        return Summary {
            chi2: fit.chi2,
            dof: dof(obs.len(), 6),
            ln_evidence: fit.ln_evidence,
            ..full
        };
    }
    let speed = match *dynamics {
        Dynamics::Central { .. } => dynamics.top_speed_mas_yr(
            obs.iter().map(|o| o.x_mas).sum::<f64>() / obs.len().max(1) as f64,
            obs.iter().map(|o| o.y_mas).sum::<f64>() / obs.len().max(1) as f64,
            t_ref,
        ),
        Dynamics::Free { speed_mas_yr, .. } => speed_mas_yr * 3.0,
    };
    let line = Dynamics::Free {
        speed_mas_yr: speed,
        accel_mas_yr2: 1e-7,
        wide: Wide {
            fraction: 0.02,
            speed_mas_yr: 10.0 * speed,
        },
    };
    let start = P6::new(
        full.sky.p[0],
        full.sky.p[1],
        full.sky.p[2],
        full.sky.p[3],
        0.0,
        0.0,
    );
    let straight = if obs.is_empty() {
        None
    } else {
        state_fit::fit(&line, obs, t_ref, &start, 20)
    };
    match straight {
        Some(f) => {
            let mut s = free(&restate(&line, &f), t_ref);
            s.motion.kind = MotionKind::Linear;
            for k in 4..6 {
                s.motion.p[k] = 0.0;
                s.sky.p[k] = 0.0;
                for j in 0..6 {
                    s.motion.cov[(k, j)] = 0.0;
                    s.motion.cov[(j, k)] = 0.0;
                    s.sky.cov[k][j] = 0.0;
                    s.sky.cov[j][k] = 0.0;
                }
            }
            Summary {
                chi2: f.chi2,
                dof: dof(obs.len(), 4),
                ln_evidence: fit.ln_evidence,
                ..s
            }
        }
        None => Summary {
            chi2: fit.chi2,
            dof: dof(obs.len(), 6),
            ln_evidence: fit.ln_evidence,
            ..full
        },
    }
}

fn free(fit: &Fit, t_ref: f64) -> Summary {
    let dt = t_ref - fit.t0_yr;
    let mut phi = M6::identity();
    for k in 0..2 {
        phi[(k, k + 2)] = dt;
        phi[(k, k + 4)] = 0.5 * dt * dt;
        phi[(k + 2, k + 4)] = dt;
    }
    let p = phi * fit.p;
    let cov = phi * fit.cov * phi.transpose();
    let motion = Motion {
        kind: MotionKind::Accelerated,
        t_ref_yr: t_ref,
        p,
        cov,
    };
    Summary {
        motion,
        sky: sky_of(&p, &cov),
        chi2: 0.0,
        dof: 0,
        ln_evidence: 0.0,
    }
}

fn central(dynamics: &Dynamics, gm: f64, fit: &Fit, t_ref: f64) -> Summary {
    let q = &fit.p;
    let t = kepler::propagate_with_stm(
        gm,
        [q[0], q[1], q[2]],
        [q[3], q[4], q[5]],
        t_ref - fit.t0_yr,
    );
    let phi = M6::from_fn(|i, j| t.d_state[i][j]);
    let mut cov = phi * fit.cov * phi.transpose();
    cov = (cov + cov.transpose()) * 0.5;
    let (cx, cy) = dynamics.centre_at(t_ref);
    let (vx, vy) = dynamics.centre_velocity();
    let p = P6::new(
        t.r[0] + cx,
        t.r[1] + cy,
        t.r[2],
        t.v[0] + vx,
        t.v[1] + vy,
        t.v[2],
    );
    // Sky motion: the acceleration follows from the place.
    let r2 = t.r[0] * t.r[0] + t.r[1] * t.r[1] + t.r[2] * t.r[2];
    let r = r2.sqrt();
    let g = -gm / (r2 * r);
    let mut j = M6::zeros();
    for k in 0..2 {
        j[(k, k)] = 1.0;
        j[(k + 2, k + 3)] = 1.0;
        for m in 0..3 {
            j[(k + 4, m)] = -3.0 * g * t.r[k] * t.r[m] / r2 + if k == m { g } else { 0.0 };
        }
    }
    let sky = P6::new(p[0], p[1], p[3], p[4], g * t.r[0], g * t.r[1]);
    let sky_cov = j * cov * j.transpose();
    let motion = Motion {
        kind: MotionKind::Keplerian,
        t_ref_yr: t_ref,
        p,
        cov,
    };
    Summary {
        motion,
        sky: sky_of(&sky, &sky_cov),
        chi2: 0.0,
        dof: 0,
        ln_evidence: 0.0,
    }
}

fn sky_of(p: &P6, cov: &SMatrix<f64, 6, 6>) -> SkyMotion {
    let mut s = SkyMotion::default();
    for i in 0..6 {
        s.p[i] = p[i];
        for j in 0..6 {
            s.cov[i][j] = cov[(i, j)];
        }
    }
    s
}

/// Position and velocity with errors at a time, from a fit: ((x, y), (vx, vy)) each (value, error).
#[must_use]
pub fn at_mean(dynamics: &Dynamics, fit: &Fit, t: f64) -> [(f64, f64); 4] {
    let ((x, y), h) = dynamics.position_with_partials(&fit.p, fit.t0_yr, t);
    let var = |h: &H26| {
        let s = h * fit.cov * h.transpose();
        (s[(0, 0)].max(0.0).sqrt(), s[(1, 1)].max(0.0).sqrt())
    };
    const STEP: f64 = 0.01;
    let ((xb, yb), hb) = dynamics.position_with_partials(&fit.p, fit.t0_yr, t + STEP);
    let ((xa, ya), ha) = dynamics.position_with_partials(&fit.p, fit.t0_yr, t - STEP);
    let (sx, sy) = var(&h);
    let (svx, svy) = var(&((hb - ha) / (2.0 * STEP)));
    [
        (x, sx),
        (y, sy),
        ((xb - xa) / (2.0 * STEP), svx),
        ((yb - ya) / (2.0 * STEP), svy),
    ]
}

/// Orbit columns of a Keplerian summary.
#[must_use]
pub fn orbit(
    central: Option<&CentralMass>,
    dynamics: &Dynamics,
    motion: &Motion,
) -> Option<OrbitColumns> {
    let c = central?;
    let (x_mas, y_mas) = dynamics.centre_at(motion.t_ref_yr);
    let centre = Centre {
        gm_mas3_yr2: c.gm_mas3_yr2,
        x_mas,
        y_mas,
        vx_mas_yr: c.vx_mas_yr,
        vy_mas_yr: c.vy_mas_yr,
        distance_pc: c.distance_pc,
    };
    orbit_columns(motion, &centre, false)
}
