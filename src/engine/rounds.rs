//! The alternating scheme: fit, assign every epoch jointly, births, deaths and rebirths.

use rayon::prelude::*;

use super::observer::Observer;
use crate::resolve::grow::{self, Scratch};
use crate::resolve::joint;
use crate::resolve::scene::Scene;
use crate::resolve::star::{Cell, Star};
use crate::resolve::work::{self, Desk, Work};

/// Evidence a new track must bring \[nats\].
pub const BIRTH_NATS: f64 = 6.0;
/// Evidence below which a track dies \[nats\].
pub const DEATH_NATS: f64 = 3.0;

/// Refit all stars to their clean detections and predict every epoch afresh.
pub fn refresh(scene: &Scene, work: &mut Work) {
    let desks = &work.desks;
    work.stars.par_iter_mut().enumerate().for_each(|(k, star)| {
        grow::recentre(scene, star);
        let pred = |e: usize| desks[e].preds.get(k).copied();
        work::refit(
            scene,
            star,
            |e| pred(e).map_or(0.0, |p| p.press),
            |e| pred(e).map_or(1.0, |p| p.contrast),
            15,
        );
    });
    let stars = &work.stars;
    let new: Vec<Desk> = (0..scene.sights.len())
        .into_par_iter()
        .map(|e| work::desk(scene, e, stars, Some(&work.desks[e])))
        .collect();
    work.desks = new;
}

/// Joint assignment of every epoch; returns (total gain, capped components, nodes).
pub fn assign(scene: &Scene, work: &mut Work) -> (f64, usize, u64) {
    let all: Vec<joint::Assignment> = (0..scene.sights.len())
        .into_par_iter()
        .map(|e| joint::assign(scene, e, &work.desks[e]))
        .collect();
    let mut sum = (0.0, 0, 0);
    for (e, a) in all.iter().enumerate() {
        for (star, cell) in work.stars.iter_mut().zip(&a.cells) {
            star.cells[e] = *cell;
        }
        sum.0 += a.gain;
        sum.1 += a.capped;
        sum.2 += a.nodes;
    }
    for (e, desk) in work.desks.iter_mut().enumerate() {
        desk.groups = vec![Default::default(); scene.sights[e].len()];
        for (k, star) in work.stars.iter().enumerate() {
            if let Some(d) = star.cells[e].detection() {
                desk.groups[d as usize].push(k as u32);
            }
        }
    }
    sum
}

/// Drop stars without two clean detections, or that `keep` refuses.
pub fn compact(scene: &Scene, work: &mut Work, keep: impl Fn(usize, &Star) -> bool) {
    let mut k = 0;
    work.stars.retain(|s| {
        let ok = keep(k, s)
            && s.cells
                .iter()
                .filter(|c| matches!(c, Cell::Alone(_)))
                .count()
                >= 2;
        k += 1;
        ok
    });
    let stars = &work.stars;
    work.desks = (0..scene.sights.len())
        .into_par_iter()
        .map(|e| work::desk(scene, e, stars, None))
        .collect();
}

/// Births from free detections, brightest first.
pub fn births(scene: &Scene, work: &mut Work) -> usize {
    let mut anchors: Vec<(f64, usize, u32)> = Vec::new();
    for (e, s) in scene.sights.iter().enumerate() {
        if s.sensor.targeted {
            continue;
        }
        for d in 0..s.len() {
            if work.desks[e].groups[d].is_empty() {
                let m = if s.mag[d].is_finite() { s.mag[d] } else { 99.0 };
                anchors.push((m, e, d as u32));
            }
        }
    }
    anchors.sort_by(|a, b| a.0.total_cmp(&b.0).then((a.1, a.2).cmp(&(b.1, b.2))));
    let mut sc = Scratch::default();
    let mut born = 0;
    for (_, e, d) in anchors {
        if !work.desks[e].groups[d as usize].is_empty() {
            continue;
        }
        if let Some(draft) = propose(scene, work, e, d, &mut sc)
            && draft.worth > BIRTH_NATS
        {
            work.add(scene, draft.star);
            born += 1;
        }
    }
    born
}

/// Best growth from an anchor over several partner detections.
fn propose(scene: &Scene, work: &Work, e: usize, d: u32, sc: &mut Scratch) -> Option<grow::Draft> {
    let mut best = grow::grow(scene, work, &[(e, d)], -12.0, sc);
    if best.as_ref().is_some_and(|b| b.worth > 60.0) {
        return best;
    }
    for seed in partners(scene, work, e, d) {
        if let Some(g) = grow::grow(scene, work, &[(e, d), seed], -12.0, sc)
            && best.as_ref().is_none_or(|b| g.worth > b.worth)
        {
            best = Some(g);
        }
    }
    best
}

/// Free detections of like magnitude at other epochs that could be the same star.
fn partners(scene: &Scene, work: &Work, e: usize, d: u32) -> Vec<(usize, u32)> {
    let s = &scene.sights[e];
    let (x, y, m) = (
        s.data.x_mas[d as usize],
        s.data.y_mas[d as usize],
        s.mag[d as usize],
    );
    let at = scene.by_time.iter().position(|&q| q == e).unwrap_or(0);
    let mut hits = Vec::new();
    let mut found: Vec<(f64, usize, u32)> = Vec::new();
    let lo = at.saturating_sub(6);
    let hi = (at + 6).min(scene.by_time.len() - 1);
    for &f in &scene.by_time[lo..=hi] {
        let o = &scene.sights[f];
        let dt = (o.t_yr - s.t_yr).abs();
        if f == e || dt > 4.0 {
            continue;
        }
        let sigma = scene.dynamics.speed_mas_yr(x, y, s.t_yr);
        let top = scene.dynamics.top_speed_mas_yr(x, y, s.t_yr);
        let reach = (3.0 * sigma).min(top) * dt
            + 3.0 * (s.data.cov_mas2[d as usize].max_var() + 4.0).sqrt()
            + 0.1 * s.sensor.fwhm_mas;
        o.tree.within(x, y, reach, &mut hits);
        for h in &hits {
            if !work.desks[f].groups[h.row as usize].is_empty() {
                continue;
            }
            let dm = o.mag[h.row as usize] - m;
            let z2 = if dm.is_finite() {
                dm * dm / (o.mag_var[h.row as usize] + s.mag_var[d as usize])
            } else {
                1.0
            };
            if z2 > 12.0 {
                continue;
            }
            let spread = sigma * sigma * dt * dt + 25.0;
            let score = -0.5 * (h.dist_mas.powi(2) / spread + z2)
                - spread.ln()
                - if dt < 0.3 { 2.0 } else { 0.0 };
            found.push((score, f, h.row));
        }
    }
    found.sort_by(|a, b| b.0.total_cmp(&a.0).then((a.1, a.2).cmp(&(b.1, b.2))));
    found.truncate(4);
    found.into_iter().map(|f| (f.1, f.2)).collect()
}

/// Serial revision: weak stars die or are regrown from their own clean detections.
pub fn revise(scene: &Scene, work: &mut Work) -> (usize, usize) {
    let mut sc = Scratch::default();
    let mut order: Vec<(f64, u32)> = Vec::with_capacity(work.stars.len());
    for k in 0..work.stars.len() as u32 {
        let star = work.stars[k as usize].clone();
        let w = grow::worth(scene, work, &star, Some(k), &mut sc);
        work.stars[k as usize].worth = w;
        order.push((w, k));
    }
    order.sort_by(|a, b| a.0.total_cmp(&b.0).then(a.1.cmp(&b.1)));
    let (mut died, mut regrown) = (0, 0);
    let mut dead = vec![false; work.stars.len()];
    for (_, k) in order {
        let old = work.stars[k as usize].clone();
        let alone: Vec<(usize, u32)> = old
            .cells
            .iter()
            .enumerate()
            .filter_map(|(e, c)| {
                if let Cell::Alone(d) = *c {
                    Some((e, d))
                } else {
                    None
                }
            })
            .collect();
        let holes = old
            .cells
            .iter()
            .filter(|c| matches!(c, Cell::Missed))
            .count();
        let w = grow::worth(scene, work, &old, Some(k), &mut sc);
        if w > 40.0 && holes * 5 < alone.len() {
            continue;
        }
        work.withdraw(k);
        let mut best: Option<(f64, Star)> = None;
        if alone.len() >= 2 {
            let n = alone.len();
            for i in [n / 2, n / 6, n - 1 - n / 6] {
                let j = if i + 1 < n { i + 1 } else { i - 1 };
                if let Some(g) = grow::grow(scene, work, &[alone[i], alone[j]], -25.0, &mut sc)
                    && best.as_ref().is_none_or(|b| g.worth > b.0)
                {
                    best = Some((g.worth, g.star));
                }
            }
        }
        let keep = match best {
            Some((bw, star)) if bw > w + 1.0 && bw > DEATH_NATS => {
                regrown += 1;
                Some(star)
            }
            _ if w > DEATH_NATS && alone.len() >= 2 => Some(old),
            _ => None,
        };
        match keep {
            Some(star) => work.replace(scene, k, star),
            None => {
                dead[k as usize] = true;
                died += 1;
            }
        }
    }
    compact(scene, work, |k, _| !dead[k]);
    (died, regrown)
}

/// Rounds of the scheme.
const ROUNDS: usize = 4;

/// The whole search.
pub fn run(scene: &mut Scene, observer: &dyn Observer) -> Work {
    let mut work = Work::empty(scene);
    observer.stage("first tracks", None);
    births(scene, &mut work);
    for round in 0..ROUNDS {
        observer.stage("assigning", Some((ROUNDS - round) as u64));
        for _ in 0..2 {
            refresh(scene, &mut work);
            assign(scene, &mut work);
        }
        refresh(scene, &mut work);
        observer.stage("revising", None);
        revise(scene, &mut work);
        observer.stage("births", None);
        births(scene, &mut work);
    }
    for _ in 0..2 {
        refresh(scene, &mut work);
        assign(scene, &mut work);
    }
    refresh(scene, &mut work);
    work
}
