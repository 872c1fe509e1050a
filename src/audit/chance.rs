//! How good a path chance would offer: the lists are scrambled, the claim's places are visited
//! again, and what lies nearest is weighed by the same search.
//!
//! Two scrambles. Leftovers turned: a leftover near a much brighter star is turned about that
//! star (artefacts keep to their host), any other about the central mass or, without one, the
//! middle of the field; radius and magnitude stay. Epochs exchanged: at each epoch the list of
//! another epoch of the same instrument is visited, so that every star stands where it was at
//! another time; this is the null for claims strung from known stars.

use rand::{Rng, RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;

use super::claims::Case;
use super::path::{self, Effort, Point};
use super::search;
use crate::motion::state::P6;
use crate::motion::state_fit::Fit;
use crate::near::Hit;
use crate::resolve::scene::{Scene, Sight};
use crate::resolve::star::Group;
use crate::resolve::work::Work;

/// A leftover so much fainter than a star within so many fwhm keeps to that star.
const HOST_MAG: f64 = 2.5;
const HOST_FWHM: f64 = 3.5;
/// How far from a claimed place a scrambled detection may lie \[fwhm\].
const TURNED_FWHM: f64 = 1.5;
const EXCHANGED_FWHM: f64 = 0.75;

/// Scrambled positions lie about the claim's own path, which is the first start.
const EFFORT: Effort = Effort {
    anchors: 1,
    refined: 3,
};

/// What is scrambled.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Null {
    /// Leftovers are turned.
    Turned,
    /// Epochs are exchanged.
    Exchanged,
}

/// ln odds of the best path in one scrambled campaign \[nats\]; `-inf` without three positions.
/// `own`: the claimed star in the run, which counts as leftover; `claimed`: the claim's path.
#[must_use]
pub fn scrambled(
    scene: &Scene,
    work: &Work,
    case: &Case,
    (null, own, claimed): (Null, Option<u32>, Option<&Fit>),
    seed: u64,
    stream: u64,
) -> f64 {
    let mut rng = ChaCha8Rng::seed_from_u64(seed);
    rng.set_stream(stream);
    let points = match null {
        Null::Turned => turned(scene, work, case, own, &mut rng),
        Null::Exchanged => exchanged(scene, case, &mut rng),
    };
    let hints: Vec<(f64, P6)> = claimed.iter().map(|f| (f.t0_yr, f.p)).collect();
    path::best(&scene.dynamics, &points, &hints, EFFORT).map_or(f64::NEG_INFINITY, |p| p.ln_odds)
}

/// Does no star but `own` hold a detection?
#[must_use]
pub fn is_free(group: &Group, own: Option<u32>) -> bool {
    group.members().iter().all(|&k| Some(k) == own)
}

/// The nearest turned leftover at every claimed place.
fn turned(
    scene: &Scene,
    work: &Work,
    case: &Case,
    own: Option<u32>,
    rng: &mut impl Rng,
) -> Vec<Point> {
    let mut near = Vec::new();
    let mut points = Vec::new();
    for p in &case.places {
        let (sin, cos) = rng.random_range(0.0..std::f64::consts::TAU).sin_cos();
        let Some(e) = p.epoch else { continue };
        let s = &scene.sights[e];
        let desk = &work.desks[e];
        let middle = middle(scene, s);
        let mut best: Option<(f64, Point)> = None;
        for d in 0..s.len() {
            if !is_free(desk.holders.of(d), own) {
                continue;
            }
            let (x, y) = (s.data.x_mas[d], s.data.y_mas[d]);
            let reach = HOST_FWHM * s.sensor.fwhm_mas;
            desk.grid.within(&desk.preds, x, y, reach, &mut near);
            let host = near
                .iter()
                .filter(|&&k| Some(k) != own)
                .map(|&k| &desk.preds[k as usize])
                .filter(|q| q.mag < s.mag[d] - HOST_MAG)
                .min_by(|a, b| a.mag.total_cmp(&b.mag));
            let (cx, cy) = host.map_or(middle, |q| (q.x, q.y));
            let (dx, dy) = (x - cx, y - cy);
            let (x, y) = (cx + cos * dx - sin * dy, cy + sin * dx + cos * dy);
            let gap = (x - p.x_mas).hypot(y - p.y_mas);
            if gap < TURNED_FWHM * s.sensor.fwhm_mas && best.is_none_or(|b| gap < b.0) {
                let mut point = search::listed(scene, e, e, d as u32);
                (point.x_mas, point.y_mas) = (x, y);
                best = Some((gap, point));
            }
        }
        points.extend(best.map(|b| b.1));
    }
    points
}

/// The nearest detection at every claimed place in the list of another epoch.
fn exchanged(scene: &Scene, case: &Case, rng: &mut impl Rng) -> Vec<Point> {
    let mut hits: Vec<Hit> = Vec::new();
    let mut points = Vec::new();
    for p in &case.places {
        let Some(e) = p.epoch else { continue };
        let s = &scene.sights[e];
        let others: Vec<usize> = (0..scene.sights.len())
            .filter(|&q| q != e && scene.sights[q].data.instrument == s.data.instrument)
            .collect();
        if others.is_empty() {
            continue;
        }
        let other = others[rng.random_range(0..others.len())];
        let reach = EXCHANGED_FWHM * s.sensor.fwhm_mas;
        scene.sights[other]
            .tree
            .within(p.x_mas, p.y_mas, reach, &mut hits);
        if let Some(h) = hits.first() {
            points.push(search::listed(scene, e, other, h.row));
        }
    }
    points
}

fn middle(scene: &Scene, s: &Sight) -> (f64, f64) {
    if scene.dynamics.is_central() {
        return scene.dynamics.centre_at(s.t_yr);
    }
    let n = s.len().max(1) as f64;
    (
        s.data.x_mas.iter().sum::<f64>() / n,
        s.data.y_mas.iter().sum::<f64>() / n,
    )
}

/// Empirical p of a statistic against scrambled ones: (1 + number as good) / (1 + number).
#[must_use]
pub fn empirical_p(value: f64, scrambled: &[f64]) -> f64 {
    let as_good = scrambled.iter().filter(|s| **s >= value).count();
    (1 + as_good) as f64 / (1 + scrambled.len()) as f64
}

/// Expected number of sets of `n` or more detections on one orbit by chance among `epochs`
/// epochs, with `k` unheld detections per epoch in the area and `mu` chance hits per prediction:
/// three points fix an orbit about a known mass, C(E, 3) k^3 f seeds, each joined by further hits
/// by chance (binomial tail). `f`, the share of triples that a bound orbit allows, is 0.1 (an
/// assumption).
#[must_use]
pub fn expected_by_chance(epochs: usize, k: f64, mu: f64, n: usize) -> f64 {
    const ALLOWED: f64 = 0.1;
    if epochs < 3 || n < 3 {
        return f64::INFINITY;
    }
    let e = epochs as f64;
    let seeds = e * (e - 1.0) * (e - 2.0) / 6.0 * k.powi(3) * ALLOWED;
    seeds * binomial_tail(epochs - 3, mu.clamp(0.0, 1.0), n - 3)
}

/// P(at least `least` of `n`).
fn binomial_tail(n: usize, p: f64, least: usize) -> f64 {
    if least == 0 {
        return 1.0;
    }
    if p <= 0.0 || least > n {
        return 0.0;
    }
    if p >= 1.0 {
        return 1.0;
    }
    let mut ln_choose = 0.0;
    let mut sum = 0.0;
    for j in 0..=n {
        if j > 0 {
            ln_choose += ((n - j + 1) as f64 / j as f64).ln();
        }
        if j >= least {
            sum += (ln_choose + j as f64 * p.ln() + (n - j) as f64 * (1.0 - p).ln()).exp();
        }
    }
    sum.min(1.0)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn tail_of_a_binomial() {
        // P(X >= 2) for 10 throws of 0.1: 1 - 0.9^10 - 10 x 0.1 x 0.9^9.
        let by_hand = 1.0 - 0.9_f64.powi(10) - 0.9_f64.powi(9);
        assert!((binomial_tail(10, 0.1, 2) - by_hand).abs() < 1e-12);
        assert_eq!(binomial_tail(4, 0.3, 0), 1.0);
        assert_eq!(binomial_tail(4, 0.3, 5), 0.0);
    }

    #[test]
    fn p_counts_the_value_itself() {
        assert_eq!(empirical_p(3.0, &[1.0, 2.0, 3.0]), 0.5);
        assert_eq!(empirical_p(9.0, &[1.0; 199]), 1.0 / 200.0);
    }
}
