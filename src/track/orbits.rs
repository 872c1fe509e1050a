//! Orbits of finished tracks: every minimum, radial velocities, and the mass itself.
//!
//! Linking follows each star at one minimum and with positions alone. Here the clean members of a
//! Keplerian track (alone in their detections) are fitted once more, with the radial velocities
//! of the lists and the campaign's optional terms, from several starts in depth and line-of-sight
//! speed; every minimum within reach is kept. Where a radial velocity or an optional term adds
//! something that linking did not know, the best minimum replaces the track's motion.
//!
//! A radial velocity of a merged detection is not used: it belongs to nobody alone.

use nalgebra::SMatrix;

use crate::maths::cov2::Cov2;
use crate::maths::units;
use crate::model::campaign::{Campaign, CentralMass};
use crate::model::detection::FieldEpoch;
use crate::model::flag::Flags;
use crate::model::motion::{Motion, MotionKind};
use crate::model::result::{OrbitMinimum, SkyMotion, Solution};
use crate::motion::kepler;
use crate::motion::linear::Point;
use crate::motion::orbit_columns::{Centre, orbit_columns};
use crate::motion::orbit_fit::{
    ErrorLaw, Observations, OrbitFit, OrbitPrior, OrbitProblem, RadialVelocity, State, split,
};
use crate::motion::terms::Terms;

/// Errors as in linking: a tenth of them three times as large.
const ERRORS: ErrorLaw = ErrorLaw::CoreWing {
    wing: 0.1,
    widen: 3.0,
};
/// Least membership probability of a detection used for an orbit.
const LEAST_PROBABILITY: f64 = 0.5;
/// Least number of clean positions for more than one start to make sense.
const LEAST_POINTS: usize = 4;

/// What is known of one track for its orbit.
#[derive(Clone, Debug)]
pub struct OrbitData {
    /// In the field frame.
    pub points: Vec<Point>,
    /// Relative to the mass.
    pub velocities: Vec<RadialVelocity>,
}

/// The mass of a campaign as orbits need it.
#[derive(Clone, Copy, Debug)]
pub struct About<'a> {
    pub mass: &'a CentralMass,
    pub t_ref_yr: f64,
}

impl<'a> About<'a> {
    /// `None` for a field without a mass.
    #[must_use]
    pub fn of(campaign: &'a Campaign) -> Option<Self> {
        Some(Self {
            mass: campaign.central.as_ref()?,
            t_ref_yr: campaign.reference.yr(),
        })
    }

    /// Place of the mass at a time.
    #[must_use]
    pub fn at(&self, t_yr: f64) -> [f64; 2] {
        let dt = t_yr - self.t_ref_yr;
        [
            self.mass.x_mas + self.mass.vx_mas_yr * dt,
            self.mass.y_mas + self.mass.vy_mas_yr * dt,
        ]
    }

    /// State of a Keplerian motion relative to the mass.
    #[must_use]
    pub fn relative(&self, motion: &Motion) -> State {
        let at = self.at(motion.t_ref_yr);
        let p = &motion.p;
        State::from([
            p[0] - at[0],
            p[1] - at[1],
            p[2],
            p[3] - self.mass.vx_mas_yr,
            p[4] - self.mass.vy_mas_yr,
            p[5],
        ])
    }

    fn centre(&self, t_yr: f64) -> Centre {
        let [x_mas, y_mas] = self.at(t_yr);
        Centre {
            gm_mas3_yr2: self.mass.gm_mas3_yr2,
            x_mas,
            y_mas,
            vx_mas_yr: self.mass.vx_mas_yr,
            vy_mas_yr: self.mass.vy_mas_yr,
            distance_pc: self.mass.distance_pc,
        }
    }
}

/// Clean positions and radial velocities of a track. Velocities are turned into angular units
/// with the distance of the mass and taken relative to its systemic one; without a distance
/// there are none.
#[must_use]
pub fn data(
    about: &About<'_>,
    epochs: &[FieldEpoch],
    solution: &Solution,
    track: usize,
) -> OrbitData {
    let from = solution.members.partition_point(|m| m.track < track);
    let mut out = OrbitData {
        points: Vec::new(),
        velocities: Vec::new(),
    };
    for m in solution.members[from..]
        .iter()
        .take_while(|m| m.track == track)
    {
        let is_clean = !m.flags.has(Flags::MERGED) && m.share >= 1.0;
        if !is_clean || m.probability < LEAST_PROBABILITY {
            continue;
        }
        let e = &epochs[m.epoch];
        let report = &solution.epochs[m.epoch];
        let factor = report.error_factor.max(1e-3);
        let floor = report.error_floor_mas;
        out.points.push(Point {
            t_yr: e.time.yr(),
            x_mas: e.x_mas[m.row],
            y_mas: e.y_mas[m.row],
            cov_mas2: e.cov_mas2[m.row].scaled(factor * factor) + Cov2::round(floor * floor),
        });
        let rv = e.rv_km_s.get(m.row).copied().unwrap_or(f64::NAN);
        let err = e.rv_err_km_s.get(m.row).copied().unwrap_or(f64::NAN);
        if let (Some(d), true) = (about.mass.distance_pc, rv.is_finite() && err > 0.0) {
            let unit = units::km_s_per_mas_yr(d);
            let systemic = about.mass.rv_km_s.unwrap_or(0.0);
            out.velocities.push(RadialVelocity {
                t_yr: e.time.yr(),
                vz_mas_yr: (rv - systemic) / unit,
                err_mas_yr: err.hypot(about.mass.rv_err_km_s.unwrap_or(0.0)) / unit,
            });
        }
    }
    out
}

/// Every minimum of a Keplerian track's orbit, best evidence first; empty for other tracks, for
/// too few clean positions, or without a mass.
#[must_use]
pub fn minima(
    about: &About<'_>,
    terms: Terms,
    data: &OrbitData,
    motion: &Motion,
    track: usize,
) -> Vec<OrbitMinimum> {
    if motion.kind != MotionKind::Keplerian || data.points.len() < LEAST_POINTS {
        return Vec::new();
    }
    let gm = about.mass.gm_mas3_yr2;
    let first = data
        .points
        .iter()
        .map(|p| p.t_yr)
        .fold(f64::INFINITY, f64::min);
    let last = data
        .points
        .iter()
        .map(|p| p.t_yr)
        .fold(f64::NEG_INFINITY, f64::max);
    // Fitted at the middle of the arc, where the numbers are best known.
    let middle = 0.5 * (first + last);
    let points: Vec<Point> = data
        .points
        .iter()
        .map(|p| {
            let c = about.at(p.t_yr);
            Point {
                x_mas: p.x_mas - c[0],
                y_mas: p.y_mas - c[1],
                ..*p
            }
        })
        .collect();
    let known = crate::motion::start::moved(gm, &about.relative(motion), middle - motion.t_ref_yr);
    let projected = known[0].hypot(known[1]).max(1.0);
    let mut prior = OrbitPrior::cusp(gm, projected);
    prior.z_sigma_mas *= 2.0;
    // Fast stars near pericentre must not be pulled down by the prior of slow ones.
    let speed = (2.0 * gm / projected).sqrt();
    prior.v_sigma_mas_yr = prior.v_sigma_mas_yr.map(|s| s.max(0.5 * speed));
    let problem = OrbitProblem {
        gm_mas3_yr2: gm,
        t_ref_yr: middle,
        observed: Observations {
            points: &points,
            velocities: &data.velocities,
        },
        prior,
        errors: ERRORS,
        terms: Terms::default(),
    };
    let mut fits = problem.fit_all(&starts(gm, &known));
    if !terms.are_off() {
        // Minima are found with plain motion, which is fast, and moved to where the terms put them.
        let problem = OrbitProblem { terms, ..problem };
        fits = fits.iter().filter_map(|f| problem.fit(f.state)).collect();
    }
    fits.sort_by(|a, b| b.ln_evidence.total_cmp(&a.ln_evidence));
    let sign_known = !data.velocities.is_empty();
    fits.iter()
        .enumerate()
        .filter_map(|(rank, fit)| {
            let motion = at_reference(about, fit)?;
            Some(OrbitMinimum {
                track,
                rank: rank + 1,
                ln_evidence: fit.ln_evidence,
                chi2: fit.chi2,
                orbit: orbit_columns(&motion, &about.centre(motion.t_ref_yr), sign_known)?,
                motion,
            })
        })
        .collect()
}

/// The known state, its mirror image, and a coarse scan of depth and line-of-sight speed.
fn starts(gm: f64, known: &State) -> Vec<State> {
    let mut out = vec![*known];
    let mut mirror = *known;
    mirror[2] = -mirror[2];
    mirror[5] = -mirror[5];
    out.push(mirror);
    let projected = known[0].hypot(known[1]);
    let sky2 = known[3].powi(2) + known[4].powi(2);
    for depth in [0.1, 0.7, 1.5] {
        let z = depth * projected;
        let room = (2.0 * gm / z.hypot(projected) - sky2)
            .max(0.1 * sky2)
            .sqrt();
        for share in [-0.7, -0.25, 0.25, 0.7] {
            let mut s = *known;
            s[2] = z;
            s[5] = share * room;
            out.push(s);
        }
    }
    out
}

/// A fit moved to the campaign's reference epoch, in the field frame.
fn at_reference(about: &About<'_>, fit: &OrbitFit) -> Option<Motion> {
    let (r, v) = split(&fit.state);
    let dt = about.t_ref_yr - fit.t_ref_yr;
    let moved = kepler::propagate_with_stm(about.mass.gm_mas3_yr2, r, v, dt);
    let step = SMatrix::<f64, 6, 6>::from_fn(|i, j| moved.d_state[i][j]);
    let cov = step * fit.cov * step.transpose();
    let at = about.at(about.t_ref_yr);
    let p = State::from([
        moved.r[0] + at[0],
        moved.r[1] + at[1],
        moved.r[2],
        moved.v[0] + about.mass.vx_mas_yr,
        moved.v[1] + about.mass.vy_mas_yr,
        moved.v[2],
    ]);
    (p.iter().chain(cov.iter()).all(|c| c.is_finite())).then_some(Motion {
        kind: MotionKind::Keplerian,
        t_ref_yr: about.t_ref_yr,
        p,
        cov: (cov + cov.transpose()) * 0.5,
    })
}

/// Puts minima into a solution, in the order of tracks. A track's own motion gives way to its
/// best minimum when `replaces` says that the fit knew more than linking.
pub fn enter(
    about: &About<'_>,
    solution: &mut Solution,
    minima: Vec<Vec<OrbitMinimum>>,
    replaces: impl Fn(usize) -> bool,
) {
    for (k, found) in minima.into_iter().enumerate() {
        if let Some(best) = found.first().filter(|_| replaces(k)) {
            let track = &mut solution.tracks[k];
            track.motion = best.motion;
            track.orbit = Some(best.orbit);
            track.chi2 = best.chi2;
            track.sky = on_sky(about, &best.motion);
        }
        solution.orbits.extend(found);
    }
}

/// Motion on the sky of a Keplerian motion: the acceleration follows from the place.
fn on_sky(about: &About<'_>, motion: &Motion) -> SkyMotion {
    let s = about.relative(motion);
    let r2 = s[0] * s[0] + s[1] * s[1] + s[2] * s[2];
    let g = -about.mass.gm_mas3_yr2 / (r2 * r2.sqrt());
    let mut j = SMatrix::<f64, 6, 6>::zeros();
    for k in 0..2 {
        j[(k, k)] = 1.0;
        j[(k + 2, k + 3)] = 1.0;
        for m in 0..3 {
            j[(k + 4, m)] = -3.0 * g * s[k] * s[m] / r2 + if k == m { g } else { 0.0 };
        }
    }
    let cov = j * motion.cov * j.transpose();
    let p = &motion.p;
    SkyMotion {
        p: [p[0], p[1], p[3], p[4], g * s[0], g * s[1]],
        cov: std::array::from_fn(|i| std::array::from_fn(|k| cov[(i, k)])),
    }
}
