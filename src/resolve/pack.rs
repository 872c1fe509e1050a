//! The best makers of all detections of one epoch when the set of tracks is fixed.
//!
//! A weighted set packing that falls into tiny components (detections tied by common tracks);
//! each is solved by depth-first search. The bound at a node is the gain so far, plus the prices
//! of the cells not yet used, plus the best reduced gain of every detection to come: with good
//! prices hardly anything is searched. Exact unless the node budget ends it.

use super::program::{FALSE, Program};

/// Difference in gain that counts \[nats\].
const EPS: f64 = 1e-9;

/// What a packing found.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Packed {
    pub gain: f64,
    pub nodes: u64,
    /// False when the budget ended the search of a component.
    pub exact: bool,
}

/// What a packing may not do.
#[derive(Clone, Copy, Debug)]
pub struct Rules<'a> {
    /// Which tracks may take part.
    pub exists: &'a [bool],
    /// A source that may not be used, or [`FALSE`].
    pub banned: u32,
}

impl Rules<'_> {
    pub(super) fn open(&self, program: &Program, source: usize) -> bool {
        source != self.banned as usize && program.tracks(source).all(|k| self.exists[k])
    }
}

/// Reusable memory of packings.
#[derive(Clone, Debug, Default)]
pub struct Packer {
    used: Vec<bool>,
    /// Detection that used a cell first, while components are formed.
    owner: Vec<u32>,
    parent: Vec<u32>,
    seen: Vec<bool>,
    search: Search,
}

impl Packer {
    /// Packs one epoch. `exists` says which tracks may take part, `price` (by cell, or empty for
    /// none) guides the search; sources found go to `made_by`. `budget` is in nodes.
    pub fn epoch(
        &mut self,
        program: &Program,
        epoch: usize,
        exists: &[bool],
        price: &[f64],
        budget: u64,
        made_by: &mut [u32],
    ) -> Packed {
        let rules = Rules {
            exists,
            banned: FALSE,
        };
        let detections = program.epoch(epoch);
        let start = detections.start;
        self.used
            .resize(program.n_cells().max(self.used.len()), false);
        self.owner
            .resize(program.n_cells().max(self.owner.len()), FALSE);
        self.parent.clear();
        self.parent.extend(0..detections.len() as u32);
        for d in detections.clone() {
            made_by[d] = FALSE;
            for s in program.sources(d).filter(|&s| rules.open(program, s)) {
                for &c in program.cells(s) {
                    match self.owner[c as usize] {
                        FALSE => self.owner[c as usize] = (d - start) as u32,
                        first => union(&mut self.parent, first, (d - start) as u32),
                    }
                }
            }
        }
        let mut order: Vec<(u32, u32)> = (0..detections.len() as u32)
            .map(|d| (find(&mut self.parent, d), d))
            .collect();
        order.sort_unstable();
        let mut out = Packed {
            exact: true,
            ..Packed::default()
        };
        for component in order.chunk_by(|a, b| a.0 == b.0) {
            let wanted = component.iter().map(|&(_, d)| start + d as usize);
            self.search.load(program, wanted, rules, price);
            let done = self
                .search
                .run(program, &mut self.used, budget.saturating_sub(out.nodes));
            out.gain += done.gain;
            out.nodes += done.nodes;
            out.exact &= done.exact;
            for (d, pick) in self.search.detections.iter().zip(&self.search.best) {
                made_by[*d as usize] = *pick;
            }
        }
        for d in detections {
            for s in program.sources(d) {
                for &c in program.cells(s) {
                    self.owner[c as usize] = FALSE;
                }
            }
        }
        out
    }

    /// Detections of one epoch tied to `seed` by sources that may be used, sorted.
    pub fn tied(
        &mut self,
        program: &Program,
        epoch: usize,
        rules: Rules,
        seeds: &[u32],
    ) -> Vec<u32> {
        self.seen
            .resize(program.n_detections().max(self.seen.len()), false);
        let mut list: Vec<u32> = Vec::with_capacity(seeds.len());
        for &d in seeds {
            if !std::mem::replace(&mut self.seen[d as usize], true) {
                list.push(d);
            }
        }
        let mut next = 0;
        while next < list.len() {
            for s in program
                .sources(list[next] as usize)
                .filter(|&s| rules.open(program, s))
            {
                for &c in program.cells(s) {
                    for &other in program.sources_of_cell(c as usize, epoch) {
                        if !rules.open(program, other as usize) {
                            continue;
                        }
                        let d = program.detection_of(other as usize);
                        if !std::mem::replace(&mut self.seen[d], true) {
                            list.push(d as u32);
                        }
                    }
                }
            }
            next += 1;
        }
        list.iter().for_each(|&d| self.seen[d as usize] = false);
        list.sort_unstable();
        list
    }

    /// Packs some detections of one epoch, which must hold everything tied to them (see
    /// [`Packer::tied`]).
    pub fn some(
        &mut self,
        program: &Program,
        detections: &[u32],
        rules: Rules,
        budget: u64,
        made_by: &mut [u32],
    ) -> Packed {
        self.used
            .resize(program.n_cells().max(self.used.len()), false);
        let wanted = detections.iter().map(|&d| d as usize);
        self.search.load(program, wanted, rules, &[]);
        let done = self.search.run(program, &mut self.used, budget);
        detections.iter().for_each(|&d| made_by[d as usize] = FALSE);
        for (d, pick) in self.search.detections.iter().zip(&self.search.best) {
            made_by[*d as usize] = *pick;
        }
        done
    }
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
    parent[a.max(b) as usize] = a.min(b);
}

/// Depth-first search of one component.
#[derive(Clone, Debug, Default)]
struct Search {
    detections: Vec<u32>,
    /// Open sources of detection k: `first[k]..first[k + 1]` in `sources`, best reduced gain first.
    first: Vec<u32>,
    sources: Vec<u32>,
    /// gain - prices of the cells.
    reduced: Vec<f64>,
    /// Sum of the prices of all cells of the component.
    prices: f64,
    /// Best possible reduced gain of detections k and later.
    rest: Vec<f64>,
    pick: Vec<u32>,
    best: Vec<u32>,
    best_gain: f64,
    nodes: u64,
    budget: u64,
}

impl Search {
    fn load(
        &mut self,
        program: &Program,
        detections: impl Iterator<Item = usize>,
        rules: Rules,
        price: &[f64],
    ) {
        let of_cell = |c: u32| price.get(c as usize).copied().unwrap_or(0.0);
        let reduced =
            |s: usize| program.gain(s) - program.cells(s).iter().map(|&c| of_cell(c)).sum::<f64>();
        let mut ordered: Vec<(f64, usize)> = detections
            .filter_map(|d| {
                let mut open = program.sources(d).filter(|&s| rules.open(program, s));
                open.next().map(|s| (program.gain(s), d))
            })
            .collect();
        // Much to gain first: good packings are found early.
        ordered.sort_by(|a, b| b.0.total_cmp(&a.0).then(a.1.cmp(&b.1)));
        self.detections.clear();
        self.first.clear();
        self.sources.clear();
        self.reduced.clear();
        self.first.push(0);
        let mut cells: Vec<u32> = Vec::new();
        for (_, d) in ordered {
            let start = self.sources.len();
            for s in program.sources(d).filter(|&s| rules.open(program, s)) {
                self.sources.push(s as u32);
                cells.extend_from_slice(program.cells(s));
            }
            self.sources[start..].sort_by(|&a, &b| {
                reduced(b as usize)
                    .total_cmp(&reduced(a as usize))
                    .then(a.cmp(&b))
            });
            self.reduced
                .extend(self.sources[start..].iter().map(|&s| reduced(s as usize)));
            self.detections.push(d as u32);
            self.first.push(self.sources.len() as u32);
        }
        cells.sort_unstable();
        cells.dedup();
        self.prices = cells.iter().map(|&c| of_cell(c)).sum();
        let n = self.detections.len();
        self.rest.clear();
        self.rest.resize(n + 1, 0.0);
        for k in (0..n).rev() {
            self.rest[k] = self.rest[k + 1] + self.reduced[self.first[k] as usize].max(0.0);
        }
        self.pick.clear();
        self.pick.resize(n, FALSE);
        self.best.clear();
        self.best.resize(n, FALSE);
    }

    fn run(&mut self, program: &Program, used: &mut [bool], budget: u64) -> Packed {
        self.best_gain = 0.0;
        self.nodes = 0;
        self.budget = budget;
        self.go(program, used, 0, 0.0, self.prices);
        Packed {
            gain: self.best_gain,
            nodes: self.nodes,
            exact: self.nodes <= budget,
        }
    }

    /// `prices`: of the cells not yet used.
    fn go(&mut self, program: &Program, used: &mut [bool], k: usize, gain: f64, prices: f64) {
        self.nodes += 1;
        if gain > self.best_gain + EPS {
            self.best_gain = gain;
            self.best.copy_from_slice(&self.pick);
        }
        let hopeless = |ahead: f64, best: f64| gain + prices + ahead <= best + EPS;
        if k == self.detections.len()
            || self.nodes > self.budget
            || hopeless(self.rest[k], self.best_gain)
        {
            return;
        }
        for i in self.first[k] as usize..self.first[k + 1] as usize {
            if hopeless(self.reduced[i] + self.rest[k + 1], self.best_gain) {
                break;
            }
            let s = self.sources[i] as usize;
            let cells = program.cells(s);
            if cells.iter().any(|&c| used[c as usize]) {
                continue;
            }
            for &c in cells {
                used[c as usize] = true;
            }
            self.pick[k] = s as u32;
            let own_gain = program.gain(s);
            let own_prices = own_gain - self.reduced[i];
            self.go(program, used, k + 1, gain + own_gain, prices - own_prices);
            self.pick[k] = FALSE;
            for &c in cells {
                used[c as usize] = false;
            }
        }
        if !hopeless(self.rest[k + 1], self.best_gain) {
            self.go(program, used, k + 1, gain, prices);
        }
    }
}
