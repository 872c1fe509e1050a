//! The alternating scheme: fit, assign every epoch jointly, births, deaths and rebirths.

use rayon::prelude::*;

use super::estimate;
use super::observer::Observer;
use super::pairs::{self, FEW_EPOCHS};
use super::revolving;
use super::seeds::Seeds;
use crate::resolve::grow::{self, Scratch};
use crate::resolve::holders::Holders;
use crate::resolve::joint;
use crate::resolve::scene::Scene;
use crate::resolve::star::{Cell, Star};
use crate::resolve::work::{self, Desk, Work};

/// Evidence a new track must bring \[nats\]: it is more likely than not. (Stars have their prior
/// density and chance detections theirs, so nothing else is asked.)
pub const BIRTH_NATS: f64 = 0.0;
/// Evidence below which a track dies \[nats\].
pub const DEATH_NATS: f64 = 0.0;

/// Refit all stars to what they hold.
pub fn refit(scene: &Scene, work: &mut Work) {
    let desks = &work.desks;
    work.stars.par_iter_mut().enumerate().for_each(|(k, star)| {
        grow::recentre(scene, star);
        let pred = |e: usize| desks[e].preds.get(k).copied();
        work::refit(
            scene,
            star,
            |e| pred(e).map_or(0.0, |p| p.press),
            |e| pred(e).map_or(1.0, |p| p.contrast),
            (desks, Some(k as u32)),
            15,
        );
    });
}

/// Refit all stars and predict every epoch afresh.
pub fn refresh(scene: &Scene, work: &mut Work) {
    refit(scene, work);
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
        desk.holders = Holders::all(scene.sights[e].len());
        for (k, star) in work.stars.iter().enumerate() {
            if let Some(d) = star.cells[e].detection() {
                desk.holders.push(d, k as u32);
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

/// How often each detection has been an anchor: after two failures it is left alone.
#[derive(Debug)]
pub struct Tried(Vec<Vec<u8>>);

impl Tried {
    #[must_use]
    pub fn new(scene: &Scene) -> Self {
        Self(scene.sights.iter().map(|s| vec![0; s.len()]).collect())
    }
    fn of(&self, e: usize, d: usize) -> u8 {
        self.0[e][d]
    }
    fn add(&mut self, e: usize, d: usize) {
        self.0[e][d] = self.0[e][d].saturating_add(1);
    }
}

/// Births from free detections, brightest first.
pub fn births(scene: &Scene, seeds: &Seeds, work: &mut Work, tried: &mut Tried) {
    let mut anchors: Vec<(f64, usize, u32)> = Vec::new();
    for (e, s) in scene.sights.iter().enumerate() {
        if s.sensor.targeted {
            continue;
        }
        for d in 0..s.len() {
            if work.desks[e].holders.of(d).is_empty() && tried.of(e, d) < 2 {
                let m = if s.mag[d].is_finite() { s.mag[d] } else { 99.0 };
                anchors.push((m, e, d as u32));
            }
        }
    }
    anchors.sort_by(|a, b| a.0.total_cmp(&b.0).then((a.1, a.2).cmp(&(b.1, b.2))));
    let mut queue: std::collections::VecDeque<(usize, u32)> =
        anchors.into_iter().map(|a| (a.1, a.2)).collect();
    while !queue.is_empty() {
        let batch = next_batch(scene, work, &mut queue);
        let frozen = &*work;
        let drafts: Vec<Option<grow::Draft>> = batch
            .par_iter()
            .map_init(Scratch::default, |sc, &(e, d)| {
                propose(scene, seeds, frozen, e, d, sc)
            })
            .collect();
        let before = work.stars.len();
        for (draft, &(e, d)) in drafts.into_iter().zip(&batch) {
            tried.add(e, d as usize);
            let Some(draft) = draft.filter(|d| d.worth > BIRTH_NATS) else {
                continue;
            };
            let clash = work.stars[before..].iter().any(|s| {
                s.cells
                    .iter()
                    .zip(&draft.star.cells)
                    .any(|(a, b)| a.detection().is_some() && a.detection() == b.detection())
            });
            if clash {
                // Another birth of this batch took what it wanted: try again with that known.
                queue.push_front((e, d));
                continue;
            }
            work.add(scene, draft.star);
        }
    }
}

/// Anchors of one batch.
const BATCH: usize = 48;
/// How far down the queue a batch may look.
const LOOK: usize = 1500;

/// The next anchors, far enough apart not to be the same star; taken from the queue.
fn next_batch(
    scene: &Scene,
    work: &Work,
    queue: &mut std::collections::VecDeque<(usize, u32)>,
) -> Vec<(usize, u32)> {
    let mut batch: Vec<(usize, u32)> = Vec::with_capacity(BATCH);
    let mut later = Vec::new();
    let mut looked = 0;
    while let Some((e, d)) = queue.pop_front() {
        if !work.desks[e].holders.of(d as usize).is_empty() {
            continue;
        }
        looked += 1;
        let s = &scene.sights[e];
        let (x, y) = (s.data.x_mas[d as usize], s.data.y_mas[d as usize]);
        let apart = batch.iter().all(|&(f, q)| {
            let o = &scene.sights[f];
            let reach = 4.0 * s.sensor.fwhm_mas
                + 2.0 * scene.dynamics.speed_mas_yr(x, y, s.t_yr) * (s.t_yr - o.t_yr).abs();
            (o.data.x_mas[q as usize] - x).hypot(o.data.y_mas[q as usize] - y) > reach
        });
        if apart {
            batch.push((e, d));
        } else {
            later.push((e, d));
        }
        if batch.len() == BATCH || looked == LOOK {
            break;
        }
    }
    for a in later.into_iter().rev() {
        queue.push_front(a);
    }
    batch
}

/// Partners from which a growth is tried; more where each epoch is one of few.
const PARTNERS: usize = 4;
const PARTNERS_SHORT: usize = 8;
const SHORT_CAMPAIGN: usize = 12;

/// Best growth from an anchor over several partner detections.
fn propose(
    scene: &Scene,
    seeds: &Seeds,
    work: &Work,
    e: usize,
    d: u32,
    sc: &mut Scratch,
) -> Option<grow::Draft> {
    let mut best = grow::grow(scene, work, &[(e, d)], -12.0, None, sc);
    if best.as_ref().is_some_and(|b| b.worth > 60.0) {
        return best;
    }
    let most = if scene.sights.len() <= SHORT_CAMPAIGN {
        PARTNERS_SHORT
    } else {
        PARTNERS
    };
    for seed in seeds.partners(scene, work, (e, d), most) {
        if let Some(g) = grow::grow(scene, work, &[(e, d), seed], -12.0, None, sc)
            && best.as_ref().is_none_or(|b| g.worth > b.worth)
        {
            best = Some(g);
        }
    }
    best
}

/// What became of a weak star when it was looked at again.
enum Verdict {
    Kept,
    Regrown(Box<Star>),
    Dead,
}

/// Revision: weak stars die or are regrown from their own clean detections. Stars are judged
/// in batches of such as lie far apart, so that no verdict rests on a neighbour judged at the
/// same time (two copies of a doubled star must not both die).
pub fn revise(scene: &Scene, work: &mut Work) {
    let worths: Vec<f64> = {
        let frozen = &*work;
        (0..work.stars.len() as u32)
            .into_par_iter()
            .map(|k| death_worth(scene, frozen, k))
            .collect()
    };
    let mut order: Vec<u32> = (0..work.stars.len() as u32).collect();
    order.sort_by(|&a, &b| {
        worths[a as usize]
            .total_cmp(&worths[b as usize])
            .then(a.cmp(&b))
    });
    let mut queue: std::collections::VecDeque<u32> = order.into();
    let mut dead = vec![false; work.stars.len()];
    while !queue.is_empty() {
        let batch = far_apart(scene, work, &mut queue);
        let frozen = &*work;
        let verdicts: Vec<Verdict> = batch
            .par_iter()
            .map_init(Scratch::default, |sc, &k| judge(scene, frozen, k, sc))
            .collect();
        for (verdict, &k) in verdicts.into_iter().zip(&batch) {
            match verdict {
                Verdict::Kept => {}
                Verdict::Regrown(star) => {
                    work.withdraw(k);
                    work.replace(scene, k, *star);
                }
                Verdict::Dead => {
                    dead[k as usize] = true;
                    work.withdraw(k);
                }
            }
        }
    }
    compact(scene, work, |k, _| !dead[k]);
}

fn death_worth(scene: &Scene, work: &Work, k: u32) -> f64 {
    grow::worth(scene, work, &work.stars[k as usize], Some(k)).hopeful(8.0)
}

fn judge(scene: &Scene, work: &Work, k: u32, sc: &mut Scratch) -> Verdict {
    let old = &work.stars[k as usize];
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
    let w = death_worth(scene, work, k);
    if w > 40.0 && holes * 5 < alone.len() {
        return Verdict::Kept;
    }
    let mut best: Option<(f64, Star)> = None;
    if alone.len() >= 2 {
        let n = alone.len();
        for i in [n / 2, n / 6, n - 1 - n / 6] {
            let j = if i + 1 < n { i + 1 } else { i - 1 };
            if let Some(g) = grow::grow(scene, work, &[alone[i], alone[j]], -25.0, Some(k), sc)
                && best.as_ref().is_none_or(|b| g.worth > b.0)
            {
                best = Some((g.worth, g.star));
            }
        }
    }
    match best {
        Some((bw, star)) if bw > w + 1.0 && bw > DEATH_NATS => Verdict::Regrown(Box::new(star)),
        _ if w > DEATH_NATS && alone.len() >= 2 => Verdict::Kept,
        _ => Verdict::Dead,
    }
}

/// The next stars, no two of which come near each other at any epoch.
fn far_apart(scene: &Scene, work: &Work, queue: &mut std::collections::VecDeque<u32>) -> Vec<u32> {
    let mut batch: Vec<u32> = Vec::with_capacity(BATCH);
    let mut later = Vec::new();
    let mut looked = 0;
    while let Some(k) = queue.pop_front() {
        looked += 1;
        let free = batch.iter().all(|&q| {
            work.desks.iter().zip(&scene.sights).all(|(desk, s)| {
                let (a, b) = (&desk.preds[k as usize], &desk.preds[q as usize]);
                !a.active || !b.active || (a.x - b.x).hypot(a.y - b.y) > 4.0 * s.sensor.fwhm_mas
            })
        });
        if free {
            batch.push(k);
        } else {
            later.push(k);
        }
        if batch.len() == BATCH || looked == LOOK {
            break;
        }
    }
    for k in later.into_iter().rev() {
        queue.push_front(k);
    }
    batch
}

/// Rounds of the scheme.
const ROUNDS: usize = 3;

/// The whole search.
pub fn run(scene: &mut Scene, seeds: &Seeds, observer: &dyn Observer) -> Work {
    let mut work = Work::empty(scene);
    let mut tried = Tried::new(scene);
    if scene.sights.len() <= FEW_EPOCHS {
        pairs::births(scene, seeds, &mut work);
    }
    observer.stage("first tracks", None);
    births(scene, seeds, &mut work, &mut tried);
    for round in 0..ROUNDS {
        observer.stage("assigning", Some((ROUNDS - round) as u64));
        for _ in 0..2 {
            refresh(scene, &mut work);
            assign(scene, &mut work);
        }
        refresh(scene, &mut work);
        estimate::laws(scene, &work);
        assign(scene, &mut work);
        observer.stage("revising", None);
        revise(scene, &mut work);
        observer.stage("births", None);
        births(scene, seeds, &mut work, &mut tried);
        revolving::births(scene, &mut work);
    }
    // Ends with an assignment: what is listed is the best that the predictions allow.
    for _ in 0..3 {
        refresh(scene, &mut work);
        assign(scene, &mut work);
    }
    work
}
