//! The best explanation of a tangle, and what is proven about it.
//!
//! Up to [`SMALL`] tracks: every set of tracks is tried and every epoch packed exactly. Beyond
//! that: an upper bound by prices ([`super::bound`]), tracks fixed where the bound without (or
//! with) them falls below what is reached, the rest split into parts that no longer touch, each
//! part closed by branch and bound over its tracks (Land & Doig 1960, Econometrica 28, 497). With
//! the set of tracks decided the epochs are independent and packed exactly ([`super::pack`]).
//!
//! Budgets are counts, so a result repeats. When one ends the search, what is left is stated as
//! a gap: the best gain of any explanation is at most `bound`.

use petgraph::unionfind::UnionFind;

use super::bound::{Dual, Fate, Prices};
use super::pack::Packer;
use super::program::{Builder, Explanation, FALSE, Program};
use crate::model::result::Certificate;

/// Tangles of up to so many tracks are searched exhaustively.
pub const SMALL: usize = 4;

/// Gains closer than this count as equal \[nats\].
pub const TOLERANCE_NATS: f64 = 1e-6;

/// Rounds of fixing at one node.
const FIXING_PASSES: usize = 6;

/// How much work a tangle may take, in counts.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Budget {
    /// Steps of the smoothed descent at the root.
    pub smooth_steps: usize,
    /// Subgradient steps at the root.
    pub polish_steps: usize,
    /// Subgradient steps at a node of the search.
    pub node_steps: usize,
    /// Sets of tracks looked at, over the whole tangle.
    pub nodes: u64,
    /// Nodes of the packing of one epoch.
    pub pack_nodes: u64,
}

impl Default for Budget {
    fn default() -> Self {
        Self {
            smooth_steps: 400,
            polish_steps: 600,
            node_steps: 60,
            nodes: 4000,
            pack_nodes: 200_000,
        }
    }
}

/// The best explanation found and the proof that comes with it.
#[derive(Clone, Debug)]
pub struct Proof {
    pub best: Explanation,
    /// Total gain of `best`.
    pub gain: f64,
    /// By how much `best` beats the explanation that was handed in.
    pub improved_nats: f64,
    /// No explanation gains more than this.
    pub bound: f64,
    /// What is proven about `best`.
    pub certificate: Certificate,
    /// Sets of tracks looked at.
    pub nodes: u64,
    /// Passes of the bound over the program, packing nodes included.
    pub work: u64,
}

impl Proof {
    /// What is proven about the explanation that was handed in, if it is kept in place of `best`.
    #[must_use]
    pub fn of_incumbent(&self) -> Certificate {
        let gap_nats = self.bound - (self.gain - self.improved_nats);
        match self.certificate {
            Certificate::All | Certificate::Pool if gap_nats <= TOLERANCE_NATS => self.certificate,
            _ => Certificate::Bounded { gap_nats },
        }
    }
}

/// The explanation handed in breaks a rule of the program.
#[derive(Clone, Copy, Debug, PartialEq, Eq, thiserror::Error)]
#[error("the explanation to be certified breaks a rule of its own program")]
pub struct NotAnExplanation;

/// Improves an explanation as far as the budget reaches and proves what can be proven.
///
/// # Errors
/// When `incumbent` is not an explanation of the program (see [`Program::value`]).
pub fn certify(
    program: &Program,
    incumbent: &Explanation,
    budget: &Budget,
) -> Result<Proof, NotAnExplanation> {
    let given = program.value(incumbent).ok_or(NotAnExplanation)?;
    let mut best = Best {
        explanation: incumbent.clone(),
        gain: given,
    };
    let mut work = Work {
        budget: *budget,
        ..Work::default()
    };
    let (bound, full) = if program.n_tracks() <= SMALL {
        (exhaust(program, &mut best, &mut work), Certificate::All)
    } else {
        (search(program, &mut best, &mut work), Certificate::Pool)
    };
    let gap_nats = (bound - best.gain).max(0.0);
    let certificate = if gap_nats <= TOLERANCE_NATS {
        full
    } else {
        Certificate::Bounded { gap_nats }
    };
    Ok(Proof {
        improved_nats: best.gain - given,
        bound: best.gain + gap_nats,
        gain: best.gain,
        best: best.explanation,
        certificate,
        nodes: work.nodes,
        work: work.steps + work.pack_nodes,
    })
}

#[derive(Clone, Debug)]
struct Best {
    explanation: Explanation,
    gain: f64,
}

#[derive(Debug, Default)]
struct Work {
    budget: Budget,
    packer: Packer,
    nodes: u64,
    steps: u64,
    pack_nodes: u64,
    made_by: Vec<u32>,
}

impl Work {
    /// The best explanation with exactly these tracks; false when it is not proven to be that.
    fn evaluate(
        &mut self,
        program: &Program,
        exists: &[bool],
        price: &[f64],
        best: &mut Best,
    ) -> bool {
        let mut gain: f64 = (0..exists.len())
            .filter(|&k| exists[k])
            .map(|k| program.base(k))
            .sum();
        let mut exact = true;
        self.made_by.clear();
        self.made_by.resize(program.n_detections(), FALSE);
        for e in 0..program.n_epochs() {
            let packed = self.packer.epoch(
                program,
                e,
                exists,
                price,
                self.budget.pack_nodes,
                &mut self.made_by,
            );
            gain += packed.gain;
            self.pack_nodes += packed.nodes;
            exact &= packed.exact;
        }
        self.nodes += 1;
        if gain > best.gain + 1e-9 {
            best.gain = gain;
            best.explanation.exists.copy_from_slice(exists);
            best.explanation.made_by.copy_from_slice(&self.made_by);
        }
        exact
    }

    fn spent(&self) -> bool {
        self.nodes >= self.budget.nodes
    }
}

/// Tries every set of tracks; returns the bound.
fn exhaust(program: &Program, best: &mut Best, work: &mut Work) -> f64 {
    let n = program.n_tracks();
    let mut exact = true;
    for mask in 0..1u32 << n {
        let exists: Vec<bool> = (0..n).map(|k| mask >> k & 1 == 1).collect();
        let lacks = (0..n).any(|k| program.is_forced(k) && !exists[k]);
        let twice = |f: &Vec<u32>| f.iter().filter(|&&k| exists[k as usize]).count() > 1;
        if !lacks && !program.families().iter().any(twice) {
            exact &= work.evaluate(program, &exists, &[], best);
        }
    }
    if exact {
        best.gain
    } else {
        bound_at_root(program, best, work).1.bound
    }
}

fn bound_at_root<'a>(program: &'a Program, best: &Best, work: &mut Work) -> (Dual<'a>, Prices) {
    let mut dual = Dual::new(program);
    let start = dual.first_guess();
    let smooth = dual.smooth(start, work.budget.smooth_steps);
    let prices = dual.polish(smooth, best.gain, TOLERANCE_NATS, work.budget.polish_steps);
    work.steps += std::mem::take(&mut dual.steps);
    (dual, prices)
}

/// Bound, fixing, splitting, branching; returns the bound.
fn search(program: &Program, best: &mut Best, work: &mut Work) -> f64 {
    let exists = best.explanation.exists.clone();
    work.evaluate(program, &exists, &[], best);
    let (mut dual, mut prices) = bound_at_root(program, best, work);
    try_rounding(program, &dual, &prices, best, work);
    let root = prices.bound;
    if root <= best.gain + TOLERANCE_NATS {
        return root;
    }
    prices = fix_and_polish(&mut dual, prices, best.gain, work);
    if prices.bound <= best.gain + TOLERANCE_NATS {
        // Everything that differs from a fixed track gains less than what is reached.
        return best.gain;
    }
    let parts = split(program, &dual);
    let mut exists: Vec<bool> = dual.fates().iter().map(|&f| f == Fate::In).collect();
    let mut open_nats = 0.0;
    for part in &parts {
        let start = part.narrow(&best.explanation);
        let mut found = match part.program.value(&start) {
            Some(gain) => Best {
                explanation: start,
                gain,
            },
            None => Best {
                explanation: part.program.empty(),
                gain: f64::NEG_INFINITY,
            },
        };
        let empty = part.program.empty();
        work.evaluate(&part.program, &empty.exists, &[], &mut found);
        let bound = branch_part(&part.program, &mut found, work);
        open_nats += (bound - found.gain).max(0.0);
        for (local, &k) in part.tracks.iter().enumerate() {
            exists[k as usize] |= found.explanation.exists[local];
        }
    }
    let exact = work.evaluate(program, &exists, &[], best);
    if !exact {
        return prices.bound.max(best.gain);
    }
    // The parts add up: what is open in each is open in the whole, and a fixed track that is
    // decided otherwise gains less than what was reached before.
    (best.gain + open_nats).min(prices.bound.max(best.gain))
}

/// The set of tracks that the prices favour.
fn try_rounding(program: &Program, dual: &Dual, prices: &Prices, best: &mut Best, work: &mut Work) {
    let mut exists = vec![false; program.n_tracks()];
    for family in program.families() {
        let worth = |k: u32| dual.worth(&prices.of_cell, k as usize);
        let fate = |k: u32| dual.fate(k as usize);
        let forced = family.iter().copied().find(|&k| fate(k) == Fate::In);
        let best_free = || {
            let free = family
                .iter()
                .copied()
                .filter(|&k| fate(k) == Fate::Free && worth(k) > 0.0);
            free.max_by(|&a, &b| worth(a).total_cmp(&worth(b)).then(b.cmp(&a)))
        };
        if let Some(k) = forced.or_else(best_free) {
            exists[k as usize] = true;
        }
    }
    work.evaluate(program, &exists, &prices.of_cell, best);
}

/// What is fixed changes the bound, and a better bound fixes more.
fn fix_and_polish(dual: &mut Dual, mut prices: Prices, reached: f64, work: &mut Work) -> Prices {
    for _ in 0..FIXING_PASSES {
        if !fix(dual, &mut prices, reached) {
            break;
        }
        prices = dual.polish(prices, reached, TOLERANCE_NATS, work.budget.node_steps);
        work.steps += std::mem::take(&mut dual.steps);
    }
    prices
}

/// Decides every free track one of whose fates cannot beat `reached`; true when any was.
fn fix(dual: &mut Dual, prices: &mut Prices, reached: f64) -> bool {
    let mut any = false;
    for k in 0..dual.fates().len() {
        if dual.fate(k) != Fate::Free {
            continue;
        }
        let (if_out, if_in) = dual.if_decided(prices, k);
        if if_in <= reached + TOLERANCE_NATS {
            dual.decide(k, Fate::Out);
        } else if if_out <= reached + TOLERANCE_NATS {
            dual.decide(k, Fate::In);
        } else {
            continue;
        }
        any = true;
    }
    // Deciding can only lower the bound: until here the old one was a valid, laxer one.
    prices.bound = dual.bound(&prices.of_cell);
    any
}

/// A part of a program that shares nothing undecided with the rest.
#[derive(Debug)]
struct Part {
    program: Program,
    /// Track numbers in the whole program, ascending.
    tracks: Vec<u32>,
    /// (detection, its open sources) in the whole program, in the order of the part.
    detections: Vec<(u32, Vec<u32>)>,
}

impl Part {
    /// An explanation of the whole, seen from the part.
    fn narrow(&self, whole: &Explanation) -> Explanation {
        let exists: Vec<bool> = (0..self.tracks.len())
            .map(|k| self.program.is_forced(k) || whole.exists[self.tracks[k] as usize])
            .collect();
        let made_by = self
            .detections
            .iter()
            .enumerate()
            .map(|(d, (old, sources))| {
                let at = sources
                    .iter()
                    .position(|&s| s == whole.made_by[*old as usize]);
                at.map_or(FALSE, |at| (self.program.sources(d).start + at) as u32)
            });
        Explanation {
            made_by: made_by.collect(),
            exists,
        }
    }
}

/// Parts tied by tracks that are still free: components of each epoch under open sources that
/// hold a free track, joined when they hold the same one or an alternative of it.
fn split(program: &Program, dual: &Dual) -> Vec<Part> {
    let n = program.n_tracks();
    let is_open = |s: usize| program.tracks(s).all(|k| dual.fate(k) != Fate::Out);
    // Nodes: free tracks, then detections; a decided track ties detections of its epoch only.
    let mut sets = UnionFind::<u32>::new(n + program.n_detections());
    for family in program.families() {
        let mut free = family
            .iter()
            .filter(|&&k| dual.fate(k as usize) == Fate::Free);
        if let Some(&first) = free.next() {
            free.for_each(|&k| {
                sets.union(first, k);
            });
        }
    }
    for e in 0..program.n_epochs() {
        let mut holder = std::collections::BTreeMap::new();
        for d in program.epoch(e) {
            let node = (n + d) as u32;
            for s in program.sources(d).filter(|&s| is_open(s)) {
                for k in program.tracks(s) {
                    if dual.fate(k) == Fate::Free {
                        sets.union(node, k as u32);
                    } else if let Some(first) = holder.insert(k, node) {
                        sets.union(node, first);
                    }
                }
            }
        }
    }
    let mut by_root: std::collections::BTreeMap<u32, (Vec<u32>, Vec<u32>)> = Default::default();
    for k in (0..n).filter(|&k| dual.fate(k) == Fate::Free) {
        by_root
            .entry(sets.find_mut(k as u32))
            .or_default()
            .0
            .push(k as u32);
    }
    for d in 0..program.n_detections() {
        if let Some(part) = by_root.get_mut(&sets.find_mut((n + d) as u32)) {
            part.1.push(d as u32);
        }
    }
    let mut parts: Vec<_> = by_root.into_values().collect();
    parts.sort();
    parts
        .into_iter()
        .map(|(free, detections)| part(program, dual, &free, &detections))
        .collect()
}

fn part(program: &Program, dual: &Dual, free: &[u32], detections: &[u32]) -> Part {
    let is_open = |s: usize| program.tracks(s).all(|k| dual.fate(k) != Fate::Out);
    let open: Vec<(u32, Vec<u32>)> = detections
        .iter()
        .map(|&d| {
            let sources = program.sources(d as usize).filter(|&s| is_open(s));
            (d, sources.map(|s| s as u32).collect::<Vec<_>>())
        })
        .filter(|(_, sources)| !sources.is_empty())
        .collect();
    let mut tracks = free.to_vec();
    for (_, sources) in &open {
        tracks.extend(
            sources
                .iter()
                .flat_map(|&s| program.tracks(s as usize))
                .map(|k| k as u32),
        );
    }
    tracks.sort_unstable();
    tracks.dedup();
    let local = |k: usize| tracks.partition_point(|&t| (t as usize) < k) as u32;
    let mut b = Builder::default();
    for &k in &tracks {
        let decided = dual.fate(k as usize) == Fate::In;
        let at = b.track(if decided {
            0.0
        } else {
            program.base(k as usize)
        });
        if decided {
            b.force(at);
        }
    }
    for &k in free {
        for &other in program.family_of(k as usize) {
            if other > k && dual.fate(other as usize) == Fate::Free {
                b.alternatives(local(k as usize), local(other as usize));
            }
        }
    }
    let mut members = Vec::new();
    for (d, sources) in &open {
        let (epoch, detection) = program.detection(*d as usize);
        for &s in sources {
            members.clear();
            members.extend(program.tracks(s as usize).map(local));
            b.source(epoch, detection, &members, program.gain(s as usize));
        }
    }
    Part {
        program: b.finish(),
        tracks,
        detections: open,
    }
}

/// Branch and bound over the free tracks of one part; returns its bound.
fn branch_part(program: &Program, best: &mut Best, work: &mut Work) -> f64 {
    let (mut dual, prices) = bound_at_root(program, best, work);
    let mut open = f64::NEG_INFINITY;
    branch(program, &mut dual, prices, best, work, &mut open);
    open.max(best.gain)
}

/// Closes a node or adds its bound to `open`.
fn branch(
    program: &Program,
    dual: &mut Dual,
    mut prices: Prices,
    best: &mut Best,
    work: &mut Work,
    open: &mut f64,
) {
    if prices.bound <= best.gain + TOLERANCE_NATS {
        return;
    }
    if work.spent() {
        *open = open.max(prices.bound);
        return;
    }
    try_rounding(program, dual, &prices, best, work);
    let before = dual.fates().to_vec();
    prices = fix_and_polish(dual, prices, best.gain, work);
    if prices.bound > best.gain + TOLERANCE_NATS {
        match choose(dual, &prices) {
            None => {
                let exists: Vec<bool> = dual.fates().iter().map(|&f| f == Fate::In).collect();
                if !work.evaluate(program, &exists, &prices.of_cell, best) {
                    *open = open.max(prices.bound);
                }
            }
            Some((k, sides)) => {
                let here = dual.fates().to_vec();
                for side in sides {
                    dual.decide(k, side);
                    let bound = dual.bound(&prices.of_cell);
                    let start = Prices {
                        of_cell: prices.of_cell.clone(),
                        bound,
                    };
                    let next =
                        dual.polish(start, best.gain, TOLERANCE_NATS, work.budget.node_steps);
                    work.steps += std::mem::take(&mut dual.steps);
                    branch(program, dual, next, best, work, open);
                    dual.restore(&here);
                }
            }
        }
    }
    dual.restore(&before);
}

/// The free track whose decision lowers the bound most on its milder side, the better side first.
fn choose(dual: &Dual, prices: &Prices) -> Option<(usize, [Fate; 2])> {
    let mut best: Option<(f64, usize, [Fate; 2])> = None;
    for k in 0..dual.fates().len() {
        if dual.fate(k) != Fate::Free {
            continue;
        }
        let (if_out, if_in) = dual.if_decided(prices, k);
        let drop = prices.bound - if_out.max(if_in);
        if best.is_none_or(|(most, _, _)| drop > most) {
            let sides = if if_in >= if_out {
                [Fate::In, Fate::Out]
            } else {
                [Fate::Out, Fate::In]
            };
            best = Some((drop, k, sides));
        }
    }
    best.map(|(_, k, sides)| (k, sides))
}
