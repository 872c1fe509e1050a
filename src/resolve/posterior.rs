//! Probabilities of every membership when the set of tracks is fixed.
//!
//! With the tracks fixed the epochs are independent, and an epoch falls into components
//! (detections tied by common tracks). The weight of an assignment is exp(total gain); the sum
//! over all assignments of a component is done exactly, detection by detection: a state is the
//! set of tracks already used that a later detection could still ask for, so the work grows with
//! the width of a component and not with the number of its assignments (sum-product over
//! states: the forward-backward recursion, Baum et al. 1970, Ann. Math. Stat. 41, 164).
//!
//! These are probabilities given the tracks: that a track is wrong or missing they cannot see.
//! [`mixture`] adds that where rival sets of tracks are at hand. Components wider than
//! [`MAX_STATES`] keep their heaviest states and say so.

use super::pack::{Packer, Rules};
use super::program::{FALSE, Program};
use crate::maths::lnprob::ln_add;

/// States kept at one detection.
pub const MAX_STATES: usize = 4096;

/// Probabilities of one epoch.
#[derive(Clone, Debug, PartialEq)]
pub struct EpochMarginals {
    /// Number of the first source of the epoch.
    pub first_source: usize,
    /// Probability of each source of the epoch, in order.
    pub probability: Vec<f64>,
    /// False when states had to be dropped.
    pub exact: bool,
}

/// One possible membership.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Chance {
    pub track: u32,
    /// Detection number of the program.
    pub detection: u32,
    pub probability: f64,
}

impl EpochMarginals {
    /// Probability of each track being a member of each detection, by track and detection; tracks
    /// sharing a detection each count in full.
    #[must_use]
    pub fn memberships(&self, program: &Program) -> Vec<Chance> {
        let mut all: Vec<Chance> = Vec::new();
        for (at, &probability) in self.probability.iter().enumerate() {
            let s = self.first_source + at;
            let detection = program.detection_of(s) as u32;
            all.extend(program.tracks(s).map(|k| Chance {
                track: k as u32,
                detection,
                probability,
            }));
        }
        all.sort_by_key(|c| (c.track, c.detection));
        all.dedup_by(|next, kept| {
            let same = (next.track, next.detection) == (kept.track, kept.detection);
            if same {
                kept.probability += next.probability;
            }
            same
        });
        all
    }

    /// Probability that a detection of the epoch is false.
    #[must_use]
    pub fn p_false(&self, program: &Program, detection: usize) -> f64 {
        let made: f64 = program
            .sources(detection)
            .map(|s| self.probability[s - self.first_source])
            .sum();
        (1.0 - made).clamp(0.0, 1.0)
    }
}

/// Probabilities of all sources of the k-th epoch; `exists` says which tracks there are. Gains
/// are divided by `temperature` (1: taken at their word; above 1: softer).
#[must_use]
pub fn of_epoch(
    program: &Program,
    epoch: usize,
    exists: &[bool],
    temperature: f64,
    packer: &mut Packer,
) -> EpochMarginals {
    let detections = program.epoch(epoch);
    let first_source = program.sources(detections.start).start;
    let n_sources = program.sources(detections.end - 1).end - first_source;
    let mut out = EpochMarginals {
        first_source,
        probability: vec![0.0; n_sources],
        exact: true,
    };
    let rules = Rules {
        exists,
        banned: FALSE,
    };
    let mut done = vec![false; detections.len()];
    for d in detections.clone() {
        if !done[d - detections.start] {
            let component = packer.tied(program, epoch, rules, &[d as u32]);
            component
                .iter()
                .for_each(|&d| done[d as usize - detections.start] = true);
            sum_component(program, &component, rules, temperature, &mut out);
        }
    }
    out
}

/// A set of used cells and the ln of its weight.
type State = (u128, f64);

/// One detection of a component: its open sources as (number, cells, ln weight).
struct Step {
    sources: Vec<(usize, u128, f64)>,
    /// Cells a later detection may still ask for.
    needed: u128,
}

fn sum_component(
    program: &Program,
    component: &[u32],
    rules: Rules,
    temperature: f64,
    out: &mut EpochMarginals,
) {
    let Some(steps) = steps_of(program, component, rules, temperature) else {
        out.exact = false;
        return;
    };
    let mut forward: Vec<Vec<State>> = vec![vec![(0, 0.0)]];
    for step in &steps {
        let mut next = Vec::new();
        for &(used, weight) in forward.last().into_iter().flatten() {
            next.push((used & step.needed, weight));
            for &(_, cells, gain) in &step.sources {
                if used & cells == 0 {
                    next.push(((used | cells) & step.needed, weight + gain));
                }
            }
        }
        out.exact &= merge(&mut next);
        forward.push(next);
    }
    // ln of the weight of everything from a state onward.
    let mut after: Vec<State> = vec![(0, 0.0)];
    let total = forward.last().map_or(0.0, |last| {
        last.iter().fold(f64::NEG_INFINITY, |t, s| ln_add(t, s.1))
    });
    for (step, states) in steps.iter().zip(&forward).rev() {
        let onward = |used: u128| {
            after
                .binary_search_by_key(&(used & step.needed), |s| s.0)
                .ok()
                .map(|at| after[at].1)
        };
        let mut before = Vec::with_capacity(states.len());
        for &(used, weight) in states {
            let mut sum = onward(used).unwrap_or(f64::NEG_INFINITY);
            for &(s, cells, gain) in &step.sources {
                if used & cells != 0 {
                    continue;
                }
                if let Some(rest) = onward(used | cells) {
                    sum = ln_add(sum, gain + rest);
                    out.probability[s - out.first_source] += (weight + gain + rest - total).exp();
                }
            }
            before.push((used, sum));
        }
        after = before;
    }
}

/// `None` when a component has more cells than a state can hold.
fn steps_of(
    program: &Program,
    component: &[u32],
    rules: Rules,
    temperature: f64,
) -> Option<Vec<Step>> {
    let open = |d: u32| {
        program
            .sources(d as usize)
            .filter(|&s| rules.open(program, s))
    };
    let mut cells: Vec<u32> = component
        .iter()
        .flat_map(|&d| open(d))
        .flat_map(|s| program.cells(s))
        .copied()
        .collect();
    cells.sort_unstable();
    cells.dedup();
    if cells.len() > u128::BITS as usize {
        return None;
    }
    let mask = |s: usize| {
        let bit = |c: &u32| 1u128 << cells.partition_point(|x| x < c);
        program.cells(s).iter().fold(0, |m, c| m | bit(c))
    };
    let mut steps: Vec<Step> = component
        .iter()
        .map(|&d| Step {
            sources: open(d)
                .map(|s| (s, mask(s), program.gain(s) / temperature))
                .collect(),
            needed: 0,
        })
        .collect();
    let mut needed = 0;
    for step in steps.iter_mut().rev() {
        step.needed = needed;
        needed |= step.sources.iter().fold(0, |m, s| m | s.1);
    }
    Some(steps)
}

/// Sorts states, adds up equal ones and drops the lightest beyond the limit; false if it did.
fn merge(states: &mut Vec<State>) -> bool {
    states.sort_by(|a, b| a.0.cmp(&b.0).then(a.1.total_cmp(&b.1)));
    states.dedup_by(|next, kept| {
        let same = next.0 == kept.0;
        if same {
            kept.1 = ln_add(kept.1, next.1);
        }
        same
    });
    if states.len() <= MAX_STATES {
        return true;
    }
    states.sort_by(|a, b| b.1.total_cmp(&a.1).then(a.0.cmp(&b.0)));
    states.truncate(MAX_STATES);
    states.sort_by_key(|s| s.0);
    false
}

/// Probabilities over several sets of tracks: each set has the ln of its weight. The sets of
/// marginals must be of the same epoch.
#[must_use]
pub fn mixture(parts: &[(f64, EpochMarginals)]) -> Option<EpochMarginals> {
    let total = parts.iter().fold(f64::NEG_INFINITY, |t, p| ln_add(t, p.0));
    let mut out = parts.first()?.1.clone();
    out.probability.fill(0.0);
    for (ln_weight, part) in parts {
        let share = (ln_weight - total).exp();
        for (sum, p) in out.probability.iter_mut().zip(&part.probability) {
            *sum += share * p;
        }
        out.exact &= part.exact;
    }
    Some(out)
}
