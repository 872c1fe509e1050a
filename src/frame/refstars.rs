//! Which stars and which of their detections carry the frames: bright, often seen, away from
//! neighbours and from the place where paths bend too fast for a polynomial.

use crate::maths::order;
use crate::model::campaign::Campaign;
use crate::model::detection::FieldEpoch;
use crate::near::{Hit, Tree};

use super::adjust::{Observation, StarSetup};
use super::chain::{mapped, sigma_mas};
use super::path::{PathPrior, PathSums, PriorLaw};
use super::transform::PolyMap;

/// More reference stars than this add little.
pub(super) const MOST_STARS: usize = 500;
/// Fewest detections of a reference star.
const FEWEST_SEEN: usize = 4;
/// A neighbour nearer than this many fwhm and not fainter by more than this spoils a detection.
const CLEAR_FWHM: f64 = 1.2;
const CLEAR_MAG: f64 = 2.0;
/// Residual of the snap over the campaign, above which a place is too near the mass.
const SNAP_MAS: f64 = 2.0;

/// Detections of one star, as (epoch, row).
pub(super) type Members = Vec<(u32, u32)>;

/// Chooses reference stars and their clean detections.
pub(super) fn choose(
    campaign: &Campaign,
    lists: &[FieldEpoch],
    maps: &[Option<PolyMap>],
    stars: &[Members],
    t0_yr: f64,
) -> Vec<StarSetup> {
    let clean = clean_rows(lists, maps);
    let places: Vec<_> = lists
        .iter()
        .zip(maps)
        .map(|(list, map)| map.as_ref().map(|m| mapped(list, m)))
        .collect();
    let sigma: Vec<Vec<f64>> = lists.iter().map(sigma_mas).collect();
    let span = time_span(lists, maps);
    let law = PriorLaw::of(campaign);
    let mut out: Vec<(f64, StarSetup)> = Vec::new();
    for members in stars {
        let mut seen = Vec::with_capacity(members.len());
        let (mut sum_x, mut sum_y) = (0.0, 0.0);
        for &(e, row) in members {
            let (ei, r) = (e as usize, row as usize);
            let (Some(map), Some((x, y))) = (&maps[ei], &places[ei]) else {
                continue;
            };
            if !clean[ei][r] || !x[r].is_finite() || !y[r].is_finite() {
                continue;
            }
            sum_x += x[r];
            sum_y += y[r];
            seen.push(Observation {
                epoch: e,
                row,
                u_mas: lists[ei].x_mas[r],
                v_mas: lists[ei].y_mas[r],
                var_mas2: (sigma[ei][r] * map.scale_ratio()).powi(2).max(1e-12),
                curve_mas: [0.0; 2],
            });
        }
        let n = seen.len();
        if n < FEWEST_SEEN.min(maps.iter().flatten().count()) {
            continue;
        }
        let prior = law.at(sum_x / n as f64, sum_y / n as f64);
        if snap_mas(
            campaign,
            sum_x / n as f64,
            sum_y / n as f64,
            prior.speed_mas_yr,
            span,
        ) > SNAP_MAS
        {
            continue;
        }
        // How well the star's own path would be known: prefers bright and often seen.
        let mut sums = PathSums::default();
        for o in &seen {
            let dt = lists[o.epoch as usize].time.yr() - t0_yr;
            sums.add(dt, 0.0, 0.0, o.var_mas2 + 0.25);
        }
        let flat = PathPrior {
            mean: [[0.0; 4]; 2],
            ..prior
        };
        let Some(path) = sums.solve(&flat) else {
            continue;
        };
        let mid = seen
            .iter()
            .map(|o| lists[o.epoch as usize].time.yr() - t0_yr)
            .sum::<f64>()
            / n as f64;
        out.push((
            path.at(mid).2 / (n as f64).sqrt(),
            StarSetup { prior, seen },
        ));
    }
    // Stable: ties keep the order in which stars came.
    out.sort_by(|a, b| order::by(a.0, b.0));
    out.truncate(MOST_STARS);
    out.into_iter().map(|(_, s)| s).collect()
}

/// End residual of the fourth derivative, about 3 mu v^2 / R^4, over half the campaign.
fn snap_mas(campaign: &Campaign, x_mas: f64, y_mas: f64, speed_mas_yr: f64, span_yr: f64) -> f64 {
    let Some(m) = &campaign.central else {
        return 0.0;
    };
    let r = (x_mas - m.x_mas).hypot(y_mas - m.y_mas).max(1.0);
    let snap = 3.0 * 0.36 * m.gm_mas3_yr2 * 2.0 * speed_mas_yr * speed_mas_yr / r.powi(4);
    snap * (0.5 * span_yr).powi(4) / (24.0 * 8.0)
}

fn time_span(lists: &[FieldEpoch], maps: &[Option<PolyMap>]) -> f64 {
    let times = || {
        lists
            .iter()
            .zip(maps)
            .filter(|(_, m)| m.is_some())
            .map(|(l, _)| l.time.yr())
    };
    times().fold(f64::NEG_INFINITY, f64::max) - times().fold(f64::INFINITY, f64::min)
}

/// For every row: no neighbour that could have moved it much.
fn clean_rows(lists: &[FieldEpoch], maps: &[Option<PolyMap>]) -> Vec<Vec<bool>> {
    lists
        .iter()
        .zip(maps)
        .map(|(list, map)| {
            let mut clean = vec![map.is_some(); list.len()];
            let Some(map) = map else { return clean };
            let reach = CLEAR_FWHM * list.fwhm_mas / map.scale_ratio().max(1e-3);
            let tree = Tree::build(&list.x_mas, &list.y_mas);
            let mut hits: Vec<Hit> = Vec::new();
            for row in 0..list.len() {
                tree.within(list.x_mas[row], list.y_mas[row], reach, &mut hits);
                clean[row] = hits.iter().all(|h| {
                    let other = h.row as usize;
                    other == row || list.mag[other] > list.mag[row] + CLEAR_MAG
                });
            }
            clean
        })
        .collect()
}
