//! The star that a claim could be: the best path through its positions ([`super::path`]), what
//! the lists say where the claim is silent, and whether it is a track of the run.

use super::claims::{Case, Place};
use super::path::{self, Effort, Part, Path, Point};
use crate::maths::cov2::Cov2;
use crate::motion::state::P6;
use crate::near::Hit;
use crate::resolve::scene::Scene;
use crate::resolve::star::{Cell, Pred, Star};
use crate::resolve::work::{self, Work};

/// The same for claims and for scrambled ones.
pub const EFFORT: Effort = Effort {
    anchors: 6,
    refined: 5,
};
/// Neighbours press on a claimed position by as much as one of half its light \[0..1\].
const PRESS: f64 = 0.3;
/// Error of a claimed position at which nothing is listed \[mas, fwhm\].
const UNLISTED_MAS: f64 = 2.0;
const UNLISTED_FWHM: f64 = 0.05;
/// Least share of the claim's detections for a track of the run to be tried.
const LEAST_SHARE: f64 = 0.2;
/// A track is the star when it holds so much of the star's own detections, or lies this close
/// to the path over them \[fwhm\].
const SAME_SHARE: f64 = 0.5;
/// Where the star is expected alone: its place known to, and every known star farther than
/// \[fwhm\]; chance of being listed at least.
const PLACE_FWHM: f64 = 0.15;
const ALONE_FWHM: f64 = 1.3;
const SURELY_SEEN: f64 = 0.7;
/// A detection within so many fwhm and sigma of the place is the star's.
const HIT_FWHM: f64 = 0.1;
const HIT_SIGMA: f64 = 3.0;
/// Chance of a detection there with and without the star.
const SEEN_IF_REAL: f64 = 0.85;
const SEEN_IF_NOT: f64 = 0.12;

/// A star that could be the claimed object.
#[derive(Clone, Debug)]
pub struct Candidate {
    pub path: Path,
    /// Numbers of the places that the path was weighed with.
    pub used: Vec<usize>,
    /// With what it is at each epoch.
    pub star: Star,
    /// Its number in the run's work, when the run has found it.
    pub own: Option<u32>,
    /// Epochs at which the claim is silent and the star should stand alone: seen, missed.
    pub seen: usize,
    pub missed: usize,
}

impl Candidate {
    /// ln odds from the epochs at which the claim is silent \[nats\].
    #[must_use]
    pub fn silent_nats(&self) -> f64 {
        self.seen as f64 * (SEEN_IF_REAL / SEEN_IF_NOT).ln()
            + self.missed as f64 * ((1.0 - SEEN_IF_REAL) / (1.0 - SEEN_IF_NOT)).ln()
    }

    /// What a claimed place is on the path; `None` where it was not weighed.
    #[must_use]
    pub fn part(&self, place: usize) -> Option<Part> {
        let k = self.used.iter().position(|&u| u == place)?;
        Some(self.path.part(k))
    }

    /// Contribution of a claimed place \[nats\].
    #[must_use]
    pub fn nats(&self, place: usize) -> Option<f64> {
        let k = self.used.iter().position(|&u| u == place)?;
        Some(self.path.nats[k])
    }
}

/// The best star for a claim; `None` when it has fewer than three positions.
#[must_use]
pub fn best(scene: &Scene, work: &Work, case: &Case) -> Option<Candidate> {
    let (used, points): (Vec<usize>, Vec<Point>) = case
        .places
        .iter()
        .enumerate()
        .filter_map(|(k, p)| Some((k, point(scene, p)?)))
        .unzip();
    let hints: Vec<(f64, P6)> = holders(work, case)
        .into_iter()
        .map(|k| {
            let fit = &work.stars[k as usize].fit;
            (fit.t0_yr, fit.p)
        })
        .collect();
    let path = path::best(&scene.dynamics, &points, &hints, EFFORT)?;
    let mut star = Star {
        fit: path.fit,
        mag: path.mag,
        mag_var: path.mag_var,
        cells: vec![Cell::Missed; scene.sights.len()],
        worth: path.ln_odds,
        blends: Vec::new(),
        ln_extra: 0.0,
    };
    for (&k, n) in used.iter().zip(0..) {
        if let (Some(e), Some(d)) = (case.places[k].epoch, case.places[k].row) {
            star.cells[e] = match path.part(n) {
                Part::Core => Cell::Alone(d),
                Part::Blend => Cell::Shared(d),
                Part::Stranger => Cell::Missed,
            };
        }
    }
    let own = found(scene, work, &star);
    let mut c = Candidate {
        path,
        used,
        star,
        own,
        seen: 0,
        missed: 0,
    };
    where_silent(scene, work, case, &mut c);
    Some(c)
}

/// A claimed place as a position with believed errors.
fn point(scene: &Scene, p: &Place) -> Option<Point> {
    if let (Some(e), Some(d)) = (p.epoch, p.row) {
        return Some(listed(scene, e, e, d));
    }
    let fwhm_mas = match p.epoch {
        Some(e) => scene.sights[e].sensor.fwhm_mas,
        None => scene.sights.first()?.sensor.fwhm_mas,
    };
    p.x_mas.is_finite().then(|| Point {
        t_yr: p.t_yr,
        x_mas: p.x_mas,
        y_mas: p.y_mas,
        cov: Cov2::round(UNLISTED_MAS.powi(2) + (UNLISTED_FWHM * fwhm_mas).powi(2)),
        fwhm_mas,
        mag: f64::NAN,
        mag_var: 1.0,
    })
}

/// A detection of the list of epoch `list` as if it had been taken at epoch `e`.
#[must_use]
pub fn listed(scene: &Scene, e: usize, list: usize, d: u32) -> Point {
    let s = &scene.sights[list];
    let o = work::observation(scene, list, d as usize, PRESS);
    Point {
        t_yr: scene.sights[e].t_yr,
        x_mas: o.x_mas,
        y_mas: o.y_mas,
        cov: o.cov,
        fwhm_mas: s.sensor.fwhm_mas,
        mag: s.mag[d as usize],
        mag_var: s.mag_var[d as usize],
    }
}

/// Tracks of the run that hold a fair part of the claim's detections.
fn holders(work: &Work, case: &Case) -> Vec<u32> {
    let n = case.detections().count() as f64;
    let held = case
        .detections()
        .flat_map(|(e, d)| work.desks[e].holders.of(d as usize).members().to_vec());
    super::rivals::most_often(held)
        .into_iter()
        .filter(|c| c.1 >= 2 && c.1 as f64 >= LEAST_SHARE * n)
        .map(|c| c.0)
        .collect()
}

/// The track of the run that is this star: it holds most of the star's own detections.
fn found(scene: &Scene, work: &Work, star: &Star) -> Option<u32> {
    let own: Vec<(usize, u32)> = star
        .cells
        .iter()
        .enumerate()
        .filter_map(|(e, c)| match c {
            Cell::Alone(d) => Some((e, *d)),
            _ => None,
        })
        .collect();
    let held = own
        .iter()
        .flat_map(|&(e, d)| work.desks[e].holders.of(d as usize).members().to_vec());
    let (k, count) = *super::rivals::most_often(held).first()?;
    let near = own
        .iter()
        .filter(|(e, _)| {
            let s = &scene.sights[*e];
            let p = &work.desks[*e].preds[k as usize];
            let ((x, y), _) = star.fit.predict(&scene.dynamics, s.t_yr);
            p.active && (p.x - x).hypot(p.y - y) < PLACE_FWHM * s.sensor.fwhm_mas
        })
        .count();
    let enough = |n: usize| n >= 2 && n as f64 >= SAME_SHARE * own.len() as f64;
    (enough(count) && enough(near)).then_some(k)
}

/// A star as it would be seen at an epoch.
#[must_use]
pub fn prediction(scene: &Scene, work: &Work, e: usize, star: &Star, own: Option<u32>) -> Pred {
    let mut p = work::predict(scene, e, star, 0.0);
    if p.active {
        work::settle(scene, e, &work.desks[e], &mut p, own);
    }
    p
}

/// Epochs at which the claim is silent: where the star should stand alone, is it there?
fn where_silent(scene: &Scene, work: &Work, case: &Case, c: &mut Candidate) {
    let (mut near, mut hits): (Vec<u32>, Vec<Hit>) = (Vec::new(), Vec::new());
    for (e, s) in scene.sights.iter().enumerate() {
        if s.sensor.targeted || case.places.iter().any(|p| p.epoch == Some(e)) {
            continue;
        }
        let p = prediction(scene, work, e, &c.star, c.own);
        if !p.active {
            c.star.cells[e] = Cell::Out;
            continue;
        }
        let f = s.sensor.fwhm_mas;
        let sigma = p.cov.max_var().sqrt();
        s.tree
            .within(p.x, p.y, HIT_FWHM * f + HIT_SIGMA * sigma, &mut hits);
        let desk = &work.desks[e];
        desk.grid
            .within(&desk.preds, p.x, p.y, ALONE_FWHM * f, &mut near);
        let is_alone = near.iter().all(|&k| Some(k) == c.own);
        if let Some(h) = hits.first() {
            c.star.cells[e] = if is_alone {
                Cell::Alone(h.row)
            } else {
                Cell::Shared(h.row)
            };
        }
        let should = is_alone
            && sigma < PLACE_FWHM * f
            && s.sensor.depth.alone(c.star.mag + 0.2) * p.contrast > SURELY_SEEN;
        if should && hits.is_empty() {
            c.missed += 1;
        } else if should {
            c.seen += 1;
        }
    }
}
