//! How sure each membership is, given which tracks exist: the weights of all explanations of
//! one epoch's component, summed.
//!
//! Components are tiny (a handful of detections), so their explanations are enumerated by
//! depth-first search, leaving out branches that cannot come within [`REACH_NATS`] of the
//! best. Where the leaf budget ends the enumeration the sums are those of the explanations
//! seen, which start with the best ones; the component is reported as capped.

use super::joint::{Choices, Option_};

/// Explanations further than this below the best are left out \[nats\].
pub const REACH_NATS: f64 = 14.0;
/// Most explanations counted per component.
pub const LEAF_BUDGET: u64 = 20_000;

/// Probability that a star is in a detection.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Belief {
    pub detection: u32,
    pub star: u32,
    pub probability: f64,
}

/// Beliefs of one epoch, sorted by detection and star.
#[derive(Clone, Debug, Default)]
pub struct Beliefs {
    pub list: Vec<Belief>,
    /// Probability that each detection belongs to no track.
    pub nobody: Vec<f64>,
    pub capped: usize,
}

impl Beliefs {
    /// Probability that `star` is in `detection`.
    #[must_use]
    pub fn of(&self, detection: u32, star: u32) -> f64 {
        self.list
            .binary_search_by(|b| (b.detection, b.star).cmp(&(detection, star)))
            .map_or(0.0, |i| self.list[i].probability)
    }
}

struct Sum<'a> {
    dets: &'a [u32],
    opts: &'a [Vec<Option_>],
    rest: Vec<f64>,
    taken: &'a mut [bool],
    pick: Vec<Option<usize>>,
    /// Weight by (position of the detection, option); the last entry is "nobody".
    weight: Vec<Vec<f64>>,
    total: f64,
    best: f64,
    leaves: u64,
}

impl Sum<'_> {
    fn go(&mut self, k: usize, gain: f64) {
        if self.leaves > LEAF_BUDGET || gain + self.rest[k] < self.best - REACH_NATS {
            return;
        }
        if k == self.dets.len() {
            self.leaves += 1;
            // Weights are kept relative to the best gain found so far.
            if gain > self.best {
                let shrink = (self.best - gain).exp();
                self.total *= shrink;
                for w in self.weight.iter_mut().flatten() {
                    *w *= shrink;
                }
                self.best = gain;
            }
            let w = (gain - self.best).exp();
            self.total += w;
            for (k, p) in self.pick.iter().enumerate() {
                let i = p.unwrap_or(self.weight[k].len() - 1);
                self.weight[k][i] += w;
            }
            return;
        }
        let d = self.dets[k] as usize;
        for (i, o) in self.opts[d].iter().enumerate() {
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

/// Beliefs of one epoch; all gains are divided by `temperature` (above one it widens).
#[must_use]
pub fn beliefs(choices: &Choices, n_stars: usize, temperature: f64) -> Beliefs {
    let mut out = Beliefs {
        nobody: vec![1.0; choices.options.len()],
        ..Beliefs::default()
    };
    let mut taken = vec![false; n_stars];
    let scaled: Vec<Vec<Option_>> = choices
        .options
        .iter()
        .map(|v| {
            v.iter()
                .map(|o| Option_ {
                    gain: o.gain / temperature,
                    stars: o.stars,
                })
                .collect()
        })
        .collect();
    for dets in &choices.components {
        let n = dets.len();
        let mut rest = vec![0.0; n + 1];
        for k in (0..n).rev() {
            rest[k] = rest[k + 1] + scaled[dets[k] as usize][0].gain;
        }
        let mut s = Sum {
            dets,
            opts: &scaled,
            rest,
            taken: &mut taken,
            pick: vec![None; n],
            weight: dets
                .iter()
                .map(|&d| vec![0.0; scaled[d as usize].len() + 1])
                .collect(),
            total: 0.0,
            best: f64::NEG_INFINITY,
            leaves: 0,
        };
        s.go(0, 0.0);
        out.capped += usize::from(s.leaves > LEAF_BUDGET);
        for (k, &d) in dets.iter().enumerate() {
            let (nobody, by_option) = s.weight[k].split_last().unwrap_or((&0.0, &[]));
            out.nobody[d as usize] = nobody / s.total;
            let first = out.list.len();
            for (w, o) in by_option.iter().zip(&scaled[d as usize]) {
                for &m in o.stars.members() {
                    match out.list[first..].iter_mut().find(|b| b.star == m) {
                        Some(b) => b.probability += w / s.total,
                        None => out.list.push(Belief {
                            detection: d,
                            star: m,
                            probability: w / s.total,
                        }),
                    }
                }
            }
        }
    }
    out.list.sort_by_key(|b| (b.detection, b.star));
    out
}
