//! First alignment: epoch after epoch outward in time from a reference, against a catalogue that
//! learns as it goes.
//!
//! The catalogue starts as the reference list (a `known` epoch, else the richest near the middle
//! of the campaign). The epoch nearest in time to those already done comes next, so that stars
//! have moved little; every placed list adds its detections to the paths of the catalogue's
//! stars. Lists that cannot be placed wait and are tried again at the end. Fails only list by
//! list: a refused list stays out.

use crate::model::campaign::{Campaign, FrameFreedom};
use crate::model::detection::FieldEpoch;
use crate::near::{Hit, Tree};

use super::path::{PathPrior, PathSums, PriorLaw};
use super::place::{Placement, Refusal, Sheet, Sky, mutual_nearest, place};
use super::transform::{Chart, PolyMap};

/// Unmodelled error of a detection's place in units of fwhm.
pub(super) const BLUR_FWHM: f64 = 0.02;
/// Partners are nearer than this many sigma and this part of a fwhm.
const GATE_SIGMA: f64 = 4.0;
const GATE_FWHM: f64 = 0.7;
/// Stars whose predicted place is vaguer than this part of a fwhm guide nobody.
const VAGUE_FWHM: f64 = 0.8;
const MAG_REACH: f64 = 1.0;

/// A star of the catalogue.
#[derive(Clone, Debug)]
pub(super) struct Star {
    pub prior: PathPrior,
    pub sums: PathSums,
    mag_sum: f64,
    mag_n: f64,
    /// (epoch, row), in the order in which they were found.
    pub members: Vec<(u32, u32)>,
}

impl Star {
    pub(super) fn mag(&self) -> f64 {
        self.mag_sum / self.mag_n
    }
}

/// How an epoch came to its map.
#[derive(Clone, Debug)]
pub(super) enum Placed {
    /// The frame is known, or this list defines it.
    Given,
    Found(Box<Placement>),
}

/// State of the first alignment.
pub(super) struct Chain<'a> {
    campaign: &'a Campaign,
    law: PriorLaw,
    lists: &'a [FieldEpoch],
    sigma_mas: Vec<Vec<f64>>,
    /// Zero of time for all paths.
    pub t0_yr: f64,
    pub stars: Vec<Star>,
    pub maps: Vec<Option<PolyMap>>,
    pub placed: Vec<Option<Placed>>,
    pub refused: Vec<Option<Refusal>>,
    /// The epoch that defines the frame when none is known.
    pub reference: usize,
}

impl<'a> Chain<'a> {
    /// Aligns all epochs whose nominal lists are given.
    pub(super) fn run(campaign: &'a Campaign, lists: &'a [FieldEpoch]) -> Option<Self> {
        let reference = reference(campaign, lists)?;
        let n = lists.len();
        let mut chain = Self {
            campaign,
            law: PriorLaw::of(campaign),
            lists,
            sigma_mas: lists.iter().map(sigma_mas).collect(),
            t0_yr: lists[reference].time.yr(),
            stars: Vec::new(),
            maps: vec![None; n],
            placed: vec![None; n],
            refused: vec![None; n],
            reference,
        };
        let mut todo: Vec<usize> = (0..n)
            .filter(|&e| e != reference && !lists[e].is_empty())
            .collect();
        let mut done = vec![chain.t0_yr];
        chain.accept(reference, Placed::Given);
        let mut waiting = Vec::new();
        while let Some(at) = nearest_in_time(lists, &todo, &done) {
            let e = todo.remove(at);
            if chain.attempt(e) {
                done.push(lists[e].time.yr());
            } else {
                waiting.push(e);
            }
        }
        // Once more, with all that has been learned; success of one may help the next.
        for _ in 0..2 {
            waiting.retain(|&e| !chain.attempt(e));
        }
        Some(chain)
    }

    fn attempt(&mut self, e: usize) -> bool {
        let settings = &self.campaign.epochs[e].settings;
        if settings.frame == FrameFreedom::Known {
            self.accept(e, Placed::Given);
            return true;
        }
        let list = &self.lists[e];
        let (sky, _) = self.predict(list.time.yr(), VAGUE_FWHM * list.fwhm_mas);
        let sheet = Sheet {
            u_mas: &list.x_mas,
            v_mas: &list.y_mas,
            sigma_mas: &self.sigma_mas[e],
            mag: &list.mag,
            fwhm_mas: list.fwhm_mas,
        };
        match place(&sheet, &sky, settings.frame) {
            Ok(p) => {
                self.refused[e] = None;
                self.accept(e, Placed::Found(Box::new(p)));
                true
            }
            Err(why) => {
                self.refused[e] = Some(why);
                false
            }
        }
    }

    /// Catalogue at a time, vague stars left out; and the star each entry stands for.
    pub(super) fn predict(&self, t_yr: f64, vague_mas: f64) -> (Sky, Vec<u32>) {
        let mut sky = Sky::default();
        let mut who = Vec::with_capacity(self.stars.len());
        for (k, star) in self.stars.iter().enumerate() {
            let Some(path) = star.sums.solve(&star.prior) else {
                continue;
            };
            let (x, y, var) = path.at(t_yr - self.t0_yr);
            if var.sqrt() <= vague_mas {
                sky.x_mas.push(x);
                sky.y_mas.push(y);
                sky.sigma_mas.push(var.sqrt());
                sky.mag.push(star.mag());
                who.push(k as u32);
            }
        }
        (sky, who)
    }

    fn accept(&mut self, e: usize, how: Placed) {
        let list = &self.lists[e];
        let map = match &how {
            Placed::Given => PolyMap::identity(Chart::of(&list.x_mas, &list.y_mas)),
            Placed::Found(p) => p.fit.map,
        };
        self.maps[e] = Some(map);
        self.placed[e] = Some(how);
        self.take_in(e, true);
    }

    /// Adds an epoch's detections to the paths; unmatched ones found stars if `births`.
    fn take_in(&mut self, e: usize, births: bool) {
        let list = &self.lists[e];
        let Some(map) = self.maps[e] else { return };
        let t = list.time.yr();
        let (sky, who) = self.predict(t, f64::INFINITY);
        let (x, y) = mapped(list, &map);
        let blur2 = (BLUR_FWHM * list.fwhm_mas).powi(2);
        let scale2 = map.scale_ratio().powi(2);
        let var: Vec<f64> = self.sigma_mas[e]
            .iter()
            .map(|s| s * s * scale2 + blur2)
            .collect();
        let gate = GATE_FWHM * list.fwhm_mas;
        let pairs = mutual_nearest(&x, &y, &sky.x_mas, &sky.y_mas, gate);
        let mut dm: Vec<f64> = pairs
            .iter()
            .map(|&(l, s)| list.mag[l as usize] - sky.mag[s as usize])
            .filter(|d| d.is_finite())
            .collect();
        let zero = crate::maths::order::median(&mut dm).unwrap_or(0.0);
        let mut taken = vec![false; list.len()];
        for (l, s) in pairs {
            let (l, s) = (l as usize, s as usize);
            let d2 = (x[l] - sky.x_mas[s]).powi(2) + (y[l] - sky.y_mas[s]).powi(2);
            let sigma2 = var[l] + sky.sigma_mas[s].powi(2);
            let dm = list.mag[l] - zero - sky.mag[s];
            if d2 > GATE_SIGMA * GATE_SIGMA * sigma2 || dm.abs() > MAG_REACH {
                continue;
            }
            taken[l] = true;
            let star = &mut self.stars[who[s] as usize];
            star.sums.add(t - self.t0_yr, x[l], y[l], var[l]);
            star.members.push((e as u32, l as u32));
            if dm.is_finite() {
                star.mag_sum += list.mag[l] - zero;
                star.mag_n += 1.0;
            }
        }
        if !births {
            return;
        }
        let tree = Tree::build(&sky.x_mas, &sky.y_mas);
        let mut hits: Vec<Hit> = Vec::new();
        for l in 0..list.len() {
            if taken[l] || !x[l].is_finite() || !y[l].is_finite() {
                continue;
            }
            tree.nearest_n(x[l], y[l], 1, &mut hits);
            if hits.first().is_some_and(|h| h.dist_mas < gate) {
                continue;
            }
            let mut sums = PathSums::default();
            sums.add(t - self.t0_yr, x[l], y[l], var[l]);
            let known = list.mag[l].is_finite();
            self.stars.push(Star {
                prior: self.law.at(x[l], y[l]),
                sums,
                mag_sum: if known { list.mag[l] - zero } else { 0.0 },
                mag_n: if known { 1.0 } else { 0.0 },
                members: vec![(e as u32, l as u32)],
            });
        }
    }

    /// Matches all placed epochs again, in the order of time, with better maps; paths of stars
    /// stay for the matching and are formed anew from what is matched.
    pub(super) fn rematch(&mut self, maps: &[Option<PolyMap>]) {
        self.maps.clone_from_slice(maps);
        self.resum();
        let old: Vec<Star> = self.stars.clone();
        for star in &mut self.stars {
            star.members.clear();
            star.mag_sum = 0.0;
            star.mag_n = 0.0;
        }
        let mut fresh = std::mem::take(&mut self.stars);
        self.stars = old;
        for e in 0..self.lists.len() {
            let Some(map) = self.maps[e] else { continue };
            let list = &self.lists[e];
            let (sky, who) = self.predict(list.time.yr(), GATE_FWHM * list.fwhm_mas);
            let (x, y) = mapped(list, &map);
            let blur2 = (BLUR_FWHM * list.fwhm_mas).powi(2);
            let scale2 = map.scale_ratio().powi(2);
            let gate = GATE_FWHM * list.fwhm_mas;
            let pairs = mutual_nearest(&x, &y, &sky.x_mas, &sky.y_mas, gate);
            let mut dm: Vec<f64> = pairs
                .iter()
                .map(|&(l, s)| list.mag[l as usize] - sky.mag[s as usize])
                .filter(|d| d.is_finite())
                .collect();
            let zero = crate::maths::order::median(&mut dm).unwrap_or(0.0);
            for (l, s) in pairs {
                let (l, s) = (l as usize, s as usize);
                let d2 = (x[l] - sky.x_mas[s]).powi(2) + (y[l] - sky.y_mas[s]).powi(2);
                let sigma2 =
                    self.sigma_mas[e][l].powi(2) * scale2 + blur2 + sky.sigma_mas[s].powi(2);
                let dm = list.mag[l] - zero - sky.mag[s];
                if d2 > GATE_SIGMA * GATE_SIGMA * sigma2 || dm.abs() > MAG_REACH {
                    continue;
                }
                let star = &mut fresh[who[s] as usize];
                star.members.push((e as u32, l as u32));
                if dm.is_finite() {
                    star.mag_sum += list.mag[l] - zero;
                    star.mag_n += 1.0;
                }
            }
        }
        fresh.retain(|s| !s.members.is_empty());
        self.stars = fresh;
        self.resum();
    }

    /// Forms all paths anew from members and maps.
    fn resum(&mut self) {
        let places: Vec<_> = self
            .lists
            .iter()
            .zip(&self.maps)
            .map(|(list, map)| map.as_ref().map(|m| (mapped(list, m), m.scale_ratio())))
            .collect();
        for star in &mut self.stars {
            star.sums = PathSums::default();
            for &(e, l) in &star.members {
                let (e, l) = (e as usize, l as usize);
                let Some(((x, y), scale)) = &places[e] else {
                    continue;
                };
                let list = &self.lists[e];
                let var =
                    (self.sigma_mas[e][l] * scale).powi(2) + (BLUR_FWHM * list.fwhm_mas).powi(2);
                star.sums.add(list.time.yr() - self.t0_yr, x[l], y[l], var);
            }
        }
    }
}

/// Error per axis of every row.
pub(super) fn sigma_mas(list: &FieldEpoch) -> Vec<f64> {
    list.cov_mas2
        .iter()
        .map(|c| (0.5 * (c.xx + c.yy)).max(0.0).sqrt())
        .collect()
}

/// Places of all rows under a map.
pub(super) fn mapped(list: &FieldEpoch, map: &PolyMap) -> (Vec<f64>, Vec<f64>) {
    list.x_mas
        .iter()
        .zip(&list.y_mas)
        .map(|(&u, &v)| map.apply(u, v))
        .unzip()
}

/// The epoch to start from: the richest known one, else the richest near the middle in time.
fn reference(campaign: &Campaign, lists: &[FieldEpoch]) -> Option<usize> {
    let usable = || (0..lists.len()).filter(|&e| !lists[e].is_empty());
    let known = |e: &usize| campaign.epochs[*e].settings.frame == FrameFreedom::Known;
    let richest = |a: &usize, b: &usize| lists[*a].len().cmp(&lists[*b].len()).then(b.cmp(a));
    if let Some(e) = usable().filter(known).max_by(richest) {
        return Some(e);
    }
    let mut times: Vec<f64> = usable().map(|e| lists[e].time.yr()).collect();
    let middle = crate::maths::order::median(&mut times)?;
    let longest = times
        .iter()
        .map(|t| (t - middle).abs())
        .fold(1e-3, f64::max);
    let worth = |e: &usize| {
        lists[*e].len() as f64 * (1.0 - 0.5 * (lists[*e].time.yr() - middle).abs() / longest)
    };
    usable().max_by(|a, b| crate::maths::order::by(worth(a), worth(b)).then(b.cmp(a)))
}

/// Index into `todo` of the epoch nearest in time to any done one; ties to the earlier epoch.
fn nearest_in_time(lists: &[FieldEpoch], todo: &[usize], done: &[f64]) -> Option<usize> {
    let gap = |e: usize| {
        done.iter()
            .map(|t| (t - lists[e].time.yr()).abs())
            .fold(f64::INFINITY, f64::min)
    };
    (0..todo.len()).min_by(|&a, &b| {
        crate::maths::order::by(gap(todo[a]), gap(todo[b])).then(todo[a].cmp(&todo[b]))
    })
}
