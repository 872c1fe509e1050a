//! The best explanation of one epoch by a fixed set of tracks, merged detections included.
//!
//! Every detection is false or made by a set of up to five stars; every star is in one
//! detection at most. Gains are additive over detections ([`cost`]), so this is a set packing;
//! it falls apart into tiny components, each solved exactly by depth-first search with the
//! bound "best remaining gain of every detection". A component that exceeds the node budget
//! keeps the best packing found and is reported as capped.

use super::cost;
use super::scene::Scene;
use super::star::{Cell, Group, MAX_GROUP, Pred};
use super::work::Desk;

/// Search nodes a component may take.
pub const NODE_BUDGET: u64 = 200_000;
/// Stars considered for one detection.
const MAX_NEAR: usize = 7;

/// One way to make a detection.
#[derive(Clone, Copy, Debug)]
pub struct Option_ {
    pub gain: f64,
    pub stars: Group,
}

/// Result for one epoch.
#[derive(Clone, Debug, Default)]
pub struct Assignment {
    /// What each star is.
    pub cells: Vec<Cell>,
    /// Components that exceeded the budget.
    pub capped: usize,
    pub nodes: u64,
    /// Sum of gains.
    pub gain: f64,
}

/// All worthwhile options of a detection, best first.
pub fn options(
    scene: &Scene,
    e: usize,
    desk: &Desk,
    d: usize,
    near: &mut Vec<u32>,
    out: &mut Vec<Option_>,
) {
    let s = &scene.sights[e];
    out.clear();
    let (x, y) = (s.data.x_mas[d], s.data.y_mas[d]);
    let f = s.sensor.fwhm_mas;
    let reach = (1.3 * f).max(60.0_f64.min(3.0 * f)) + 4.0 * s.data.cov_mas2[d].max_var().sqrt();
    desk.grid
        .within(&desk.preds, x, y, reach.max(2.0 * f), near);
    let preds = &desk.preds;
    if near.len() > MAX_NEAR {
        // Keep the nearest in units of the fwhm and of their own uncertainty.
        near.sort_by(|&a, &b| {
            let key = |k: u32| {
                let p = &preds[k as usize];
                ((p.x - x).powi(2) + (p.y - y).powi(2)) / (0.25 * f * f + p.cov.max_var())
            };
            key(a).total_cmp(&key(b)).then(a.cmp(&b))
        });
        near.truncate(MAX_NEAR);
        near.sort_unstable();
    }
    let mut single = [f64::NEG_INFINITY; MAX_NEAR];
    for (i, &k) in near.iter().enumerate() {
        let g = cost::alone(s, d, &preds[k as usize]);
        single[i] = g;
        if g > 0.0 {
            out.push(Option_ {
                gain: g,
                stars: Group::of(&[k]),
            });
        }
    }
    // Sets upward; a set must beat every smaller set inside it that is already an option.
    let n = near.len();
    let limit = s.sensor.pairs.reach_fwhm().min(2.0) * f;
    let linked = |i: usize, j: usize| {
        let (a, b) = (&preds[near[i] as usize], &preds[near[j] as usize]);
        (a.x - b.x).hypot(a.y - b.y) < limit + 2.0 * (a.cov.max_var() + b.cov.max_var()).sqrt()
    };
    for mask in 1u32..(1 << n) {
        let size = mask.count_ones() as usize;
        if !(2..=4.min(MAX_GROUP)).contains(&size) {
            continue;
        }
        let mut idx = [0usize; MAX_GROUP];
        let mut m = 0;
        for i in 0..n {
            if mask >> i & 1 == 1 {
                idx[m] = i;
                m += 1;
            }
        }
        // Connected by possible merges: every star has a link inside the set.
        if !(0..size).all(|a| (0..size).any(|b| a != b && linked(idx[a], idx[b]))) {
            continue;
        }
        let none = Pred::NONE;
        let mut ps: [&Pred; MAX_GROUP] = [&none; MAX_GROUP];
        for a in 0..size {
            ps[a] = &preds[near[idx[a]] as usize];
        }
        let g = cost::shared(s, d, &ps[..size]).gain;
        if g > 0.0 {
            let mut stars = Group::default();
            for a in 0..size {
                stars.push(near[idx[a]]);
            }
            out.push(Option_ { gain: g, stars });
        }
    }
    out.sort_by(|a, b| {
        b.gain
            .total_cmp(&a.gain)
            .then_with(|| a.stars.members().cmp(b.stars.members()))
    });
    // Dominated: a subset with at least the same gain exists.
    let mut k = 0;
    while k < out.len() {
        let covers = |small: &Group, big: &Group| small.members().iter().all(|m| big.has(*m));
        if out[..k].iter().any(|o| covers(&o.stars, &out[k].stars)) {
            out.remove(k);
        } else {
            k += 1;
        }
    }
    out.truncate(40);
}

/// Options of every detection of an epoch, and the components they fall into.
#[derive(Clone, Debug, Default)]
pub struct Choices {
    /// By detection, best first.
    pub options: Vec<Vec<Option_>>,
    /// Detections of each component, sorted; detections without options are in none.
    pub components: Vec<Vec<u32>>,
}

/// All options of an epoch.
#[must_use]
pub fn choices(scene: &Scene, e: usize, desk: &Desk) -> Choices {
    let n_det = scene.sights[e].len();
    let mut near = Vec::new();
    let mut opts: Vec<Vec<Option_>> = Vec::with_capacity(n_det);
    let mut buf = Vec::new();
    for d in 0..n_det {
        options(scene, e, desk, d, &mut near, &mut buf);
        opts.push(buf.clone());
    }
    let components = components(&opts, desk.preds.len());
    Choices {
        options: opts,
        components,
    }
}

/// Best packing of an epoch.
#[must_use]
pub fn assign(scene: &Scene, e: usize, desk: &Desk) -> Assignment {
    let mut result = Assignment {
        cells: desk
            .preds
            .iter()
            .map(|p| if p.active { Cell::Missed } else { Cell::Out })
            .collect(),
        ..Assignment::default()
    };
    let c = choices(scene, e, desk);
    let mut taken = vec![false; desk.preds.len()];
    for dets in &c.components {
        solve(dets, &c.options, &mut taken, &mut result);
    }
    result
}

/// Detections tied by a common star, component by component.
pub(super) fn components(options: &[Vec<Option_>], n_stars: usize) -> Vec<Vec<u32>> {
    let mut parent: Vec<u32> = (0..options.len() as u32).collect();
    let mut first = vec![u32::MAX; n_stars];
    for (d, of_d) in options.iter().enumerate() {
        for &k in of_d.iter().flat_map(|o| o.stars.members()) {
            let f = first[k as usize];
            if f == u32::MAX {
                first[k as usize] = d as u32;
            } else {
                union(&mut parent, f, d as u32);
            }
        }
    }
    let mut roots: Vec<(u32, u32)> = (0..options.len() as u32)
        .filter(|&d| !options[d as usize].is_empty())
        .map(|d| (find(&mut parent, d), d))
        .collect();
    roots.sort_unstable();
    roots
        .chunk_by(|a, b| a.0 == b.0)
        .map(|c| c.iter().map(|q| q.1).collect())
        .collect()
}

fn find(parent: &mut [u32], mut k: u32) -> u32 {
    while parent[k as usize] != k {
        parent[k as usize] = parent[parent[k as usize] as usize];
        k = parent[k as usize];
    }
    k
}

fn union(parent: &mut [u32], a: u32, b: u32) {
    let (a, b) = (find(parent, a), find(parent, b));
    if a != b {
        let (lo, hi) = (a.min(b), a.max(b));
        parent[hi as usize] = lo;
    }
}

struct Search<'a> {
    order: Vec<u32>,
    opts: &'a [Vec<Option_>],
    /// Best possible gain of detections from position k on.
    rest: Vec<f64>,
    taken: &'a mut [bool],
    pick: Vec<Option<usize>>,
    best: Vec<Option<usize>>,
    best_gain: f64,
    nodes: u64,
    budget: u64,
}

impl Search<'_> {
    fn go(&mut self, k: usize, gain: f64) {
        self.nodes += 1;
        if gain > self.best_gain + 1e-12 {
            self.best_gain = gain;
            self.best.copy_from_slice(&self.pick);
        }
        if k == self.order.len()
            || self.nodes > self.budget
            || gain + self.rest[k] <= self.best_gain + 1e-12
        {
            return;
        }
        let d = self.order[k] as usize;
        for (i, o) in self.opts[d].iter().enumerate() {
            if gain + o.gain + self.rest[k + 1] <= self.best_gain + 1e-12 {
                break;
            }
            if o.stars.touches(self.taken) {
                continue;
            }
            o.stars.mark(self.taken, true);
            self.pick[k] = Some(i);
            self.go(k + 1, gain + o.gain);
            self.pick[k] = None;
            o.stars.mark(self.taken, false);
        }
        self.go(k + 1, gain);
    }
}

pub(super) fn solve(
    dets: &[u32],
    opts: &[Vec<Option_>],
    taken: &mut [bool],
    result: &mut Assignment,
) {
    let mut order = dets.to_vec();
    // Detections with the most to gain first: good incumbents early.
    order.sort_by(|&a, &b| {
        opts[b as usize][0]
            .gain
            .total_cmp(&opts[a as usize][0].gain)
            .then(a.cmp(&b))
    });
    let n = order.len();
    let mut rest = vec![0.0; n + 1];
    for k in (0..n).rev() {
        rest[k] = rest[k + 1] + opts[order[k] as usize][0].gain.max(0.0);
    }
    let mut s = Search {
        order,
        opts,
        rest,
        taken,
        pick: vec![None; n],
        best: vec![None; n],
        best_gain: 0.0,
        nodes: 0,
        budget: NODE_BUDGET,
    };
    s.go(0, 0.0);
    result.nodes += s.nodes;
    result.gain += s.best_gain;
    if s.nodes > s.budget {
        result.capped += 1;
    }
    for (k, pick) in s.best.iter().enumerate() {
        if let Some(i) = *pick {
            let d = s.order[k];
            let stars = &opts[d as usize][i].stars;
            for &m in stars.members() {
                result.cells[m as usize] = if stars.len() == 1 {
                    Cell::Alone(d)
                } else {
                    Cell::Shared(d)
                };
            }
        }
    }
}
