//! The evidence behind a verdict, epoch by epoch, and what would settle it.

use super::claims::Case;
use super::path::Part;
use super::rivals::Rivals;
use super::search::{self, Candidate};
use crate::resolve::scene::Scene;
use crate::resolve::star::Cell;
use crate::resolve::work::Work;

/// One claim at one epoch.
#[derive(Clone, Debug)]
pub struct Row {
    pub epoch: Option<usize>,
    pub t_yr: f64,
    /// Position claimed.
    pub claimed_mas: Option<[f64; 2]>,
    /// Where and how bright the star behind the claim should be, with errors.
    pub expected: Option<Expected>,
    /// Row of the detection meant.
    pub row: Option<u32>,
    /// Stars of the run that make it without the claimed one, with their flux shares.
    pub holders: Vec<(u32, f64)>,
    /// The claimed star in it: its own detection, a blend, or not there.
    pub part: Option<Part>,
    /// Nearest known star and its distance \[fwhm\].
    pub nearest: Option<(u32, f64)>,
    /// Magnitude of the detection.
    pub det_mag: Option<f64>,
    /// Nats for one star against a path that nobody follows.
    pub star_nats: Option<f64>,
    /// Nats over a false detection: best single known star, best blend of known stars, known
    /// stars as assigned.
    pub single_nats: Option<f64>,
    pub blend_nats: Option<f64>,
    pub known_nats: Option<f64>,
    /// ln P(not listed) where the star should have been seen and nothing is there.
    pub missed_nats: Option<f64>,
}

/// A prediction.
#[derive(Clone, Copy, Debug)]
pub struct Expected {
    pub x_mas: f64,
    pub y_mas: f64,
    pub x_err_mas: f64,
    pub y_err_mas: f64,
    pub mag: f64,
    pub mag_err: f64,
}

/// Evidence of every epoch of the campaign and of claimed positions with their own dates.
#[must_use]
pub fn rows(
    scene: &Scene,
    work: &Work,
    case: &Case,
    candidate: Option<&Candidate>,
    rivals: &Rivals,
) -> Vec<Row> {
    let mut out = Vec::new();
    for (k, p) in case.places.iter().enumerate() {
        let w = &rivals.places[k];
        let row = Row {
            epoch: p.epoch,
            t_yr: p.t_yr,
            claimed_mas: Some([p.x_mas, p.y_mas]),
            expected: candidate.map(|c| expected(scene, c, p.t_yr)),
            row: p.row,
            holders: w
                .holders
                .iter()
                .copied()
                .zip(w.shares.iter().copied())
                .collect(),
            part: candidate.and_then(|c| c.part(k)),
            nearest: w.nearest,
            det_mag: det_mag(scene, p.epoch, p.row),
            star_nats: candidate.and_then(|c| c.nats(k)),
            single_nats: w.single.map(|s| s.1),
            blend_nats: w.blend,
            known_nats: p.row.map(|_| w.gain),
            missed_nats: None,
        };
        out.push(row);
    }
    if let Some(c) = candidate {
        let claimed: Vec<usize> = case.places.iter().filter_map(|p| p.epoch).collect();
        for (e, s) in scene.sights.iter().enumerate() {
            if claimed.contains(&e) {
                continue;
            }
            let p = search::prediction(scene, work, e, &c.star, c.own);
            if !p.active {
                continue;
            }
            let cell = c.star.cells[e];
            out.push(Row {
                epoch: Some(e),
                t_yr: s.t_yr,
                claimed_mas: None,
                expected: Some(expected(scene, c, s.t_yr)),
                row: cell.detection(),
                holders: Vec::new(),
                part: match cell {
                    Cell::Alone(_) => Some(Part::Core),
                    Cell::Shared(_) => Some(Part::Blend),
                    _ => None,
                },
                nearest: None,
                det_mag: det_mag(scene, Some(e), cell.detection()),
                star_nats: None,
                single_nats: None,
                blend_nats: None,
                known_nats: None,
                missed_nats: (cell == Cell::Missed).then_some(p.ln_miss),
            });
        }
    }
    out.sort_by(|a, b| a.t_yr.total_cmp(&b.t_yr));
    out
}

fn det_mag(scene: &Scene, epoch: Option<usize>, row: Option<u32>) -> Option<f64> {
    Some(scene.sights[epoch?].mag[row? as usize]).filter(|m| m.is_finite())
}

fn expected(scene: &Scene, c: &Candidate, t_yr: f64) -> Expected {
    let ((x, y), cov) = c.star.fit.predict(&scene.dynamics, t_yr);
    Expected {
        x_mas: x,
        y_mas: y,
        x_err_mas: cov.xx.max(0.0).sqrt(),
        y_err_mas: cov.yy.max(0.0).sqrt(),
        mag: c.star.mag,
        mag_err: c.star.mag_var.sqrt(),
    }
}

/// A future epoch at which the claimed star would be told apart from everything known.
#[derive(Clone, Debug)]
pub struct Settling {
    pub t_yr: f64,
    pub expected: Expected,
    /// Nearest known star, its distance, and the resolution needed to part the two.
    pub nearest: Option<(u32, f64)>,
    pub is_decisive: bool,
}

/// Years after the last epoch that are looked at.
const AHEAD_YR: [f64; 6] = [0.5, 1.0, 2.0, 3.0, 5.0, 8.0];
/// A prediction that is worse than this says nothing \[fwhm\].
const WORST_FWHM: f64 = 0.5;
/// Separation from every known star at which the two are seen apart \[fwhm\].
const APART_FWHM: f64 = 1.2;

/// Predicted positions after the campaign, seen with the last epoch's instrument.
#[must_use]
pub fn settling(scene: &Scene, work: &Work, c: &Candidate) -> Vec<Settling> {
    let Some(&last) = scene.by_time.last() else {
        return Vec::new();
    };
    let s = &scene.sights[last];
    let f = s.sensor.fwhm_mas;
    AHEAD_YR
        .iter()
        .map(|ahead| {
            let t = s.t_yr + ahead;
            let at = expected(scene, c, t);
            let err = at.x_err_mas.max(at.y_err_mas);
            let nearest = work
                .stars
                .iter()
                .enumerate()
                .filter(|(k, _)| Some(*k as u32) != c.own)
                .map(|(k, star)| {
                    let (x, y) = scene.dynamics.position(&star.fit.p, star.fit.t0_yr, t);
                    (k as u32, (x - at.x_mas).hypot(y - at.y_mas))
                })
                .min_by(|a, b| a.1.total_cmp(&b.1).then(a.0.cmp(&b.0)));
            Settling {
                t_yr: t,
                expected: at,
                is_decisive: err < WORST_FWHM * f
                    && nearest.is_none_or(|n| n.1 > APART_FWHM * f + 3.0 * err),
                nearest,
            }
        })
        .collect()
}
