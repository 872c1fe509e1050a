//! Other explanations of a tangle that come near the best one.
//!
//! One change at a time, everything else re-packed around it: a track goes, a track that was
//! turned down comes (its alternatives go), or a detection may not be made by what the best
//! explanation says. These are min-marginals: the difference in gain is the ln odds of the change.
//! Only the epochs and the components that a change touches are packed again. Two changes that pay
//! only together are not found.

use super::pack::{Packer, Rules};
use super::program::{Explanation, FALSE, Program};

/// How far to look.
#[derive(Clone, Copy, Debug)]
pub struct Reach {
    /// Rivals further behind the best than this are not kept.
    pub within_nats: f64,
    /// Packing nodes a component may take.
    pub pack_nodes: u64,
}

impl Default for Reach {
    fn default() -> Self {
        Self {
            within_nats: 12.0,
            pack_nodes: 20_000,
        }
    }
}

/// What was changed to find a rival.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub enum Cause {
    /// A track does not exist.
    Without { track: u32 },
    /// A track exists that was turned down.
    With { track: u32 },
    /// A detection was not made by what the best explanation says.
    Otherwise { detection: u32 },
}

/// One difference, in numbers of the program.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub enum Step {
    Vanishes {
        track: u32,
    },
    Appears {
        track: u32,
    },
    /// `from` held it alone and holds it no longer; `None`: it was false.
    Takes {
        track: u32,
        detection: u32,
        from: Option<u32>,
    },
    /// Joins tracks that keep it.
    Shares {
        track: u32,
        detection: u32,
    },
    Drops {
        track: u32,
        detection: u32,
    },
}

/// A near rival of the best explanation.
#[derive(Clone, Debug, PartialEq)]
pub struct Near {
    /// Gain minus the gain of the best: negative.
    pub ln_odds: f64,
    pub cause: Cause,
    pub steps: Vec<Step>,
}

/// All single changes within reach, best first. `best` must be an explanation of the program
/// whose epochs are packed as well as they can be.
#[must_use]
pub fn near(program: &Program, best: &Explanation, reach: &Reach) -> Vec<Near> {
    let mut finder = Finder {
        program,
        best,
        reach: *reach,
        packer: Packer::default(),
        made_by: best.made_by.clone(),
        found: Vec::new(),
    };
    for k in 0..program.n_tracks() {
        if best.exists[k] && !program.is_forced(k) {
            finder.toggle(k, Cause::Without { track: k as u32 });
        } else if !best.exists[k]
            && !program
                .family_of(k)
                .iter()
                .any(|&f| program.is_forced(f as usize))
        {
            finder.toggle(k, Cause::With { track: k as u32 });
        }
    }
    for e in 0..program.n_epochs() {
        for d in program.epoch(e) {
            if best.made_by[d] != FALSE {
                finder.ban(e, d);
            }
        }
    }
    let mut found = finder.found;
    found.sort_by(|a, b| b.ln_odds.total_cmp(&a.ln_odds).then(a.cause.cmp(&b.cause)));
    // The same change met from several sides.
    let mut seen = std::collections::BTreeSet::new();
    found.retain(|near| seen.insert(near.steps.clone()));
    found
}

struct Finder<'a> {
    program: &'a Program,
    best: &'a Explanation,
    reach: Reach,
    packer: Packer,
    /// Equal to the best explanation between calls.
    made_by: Vec<u32>,
    found: Vec<Near>,
}

impl Finder<'_> {
    /// The track is in if it was out, or out if it was in.
    fn toggle(&mut self, track: usize, cause: Cause) {
        let p = self.program;
        let mut exists = self.best.exists.clone();
        let mut changed = vec![track];
        if matches!(cause, Cause::With { .. }) {
            changed.extend(
                p.family_of(track)
                    .iter()
                    .map(|&k| k as usize)
                    .filter(|&k| exists[k]),
            );
            changed.iter().for_each(|&k| exists[k] = k == track);
        } else {
            exists[track] = false;
        }
        let mut odds: f64 = changed
            .iter()
            .map(|&k| if exists[k] { p.base(k) } else { -p.base(k) })
            .sum();
        let mut touched: Vec<u32> = changed
            .iter()
            .flat_map(|&k| p.sources_of_track(k))
            .map(|&s| p.detection_of(s as usize) as u32)
            .collect();
        touched.sort_unstable();
        touched.dedup();
        let mut moved = Vec::new();
        for e in 0..p.n_epochs() {
            let range = p.epoch(e);
            let from = touched.partition_point(|&d| (d as usize) < range.start);
            let to = touched.partition_point(|&d| (d as usize) < range.end);
            if from < to {
                let rules = Rules {
                    exists: &exists,
                    banned: FALSE,
                };
                odds += self.repack(e, &touched[from..to], rules, &mut moved);
            }
        }
        self.keep(odds, cause, &exists, &moved);
    }

    /// Detection `d` of the k-th epoch is made by something else, or false.
    fn ban(&mut self, epoch: usize, d: usize) {
        let best = self.best;
        let rules = Rules {
            exists: &best.exists,
            banned: best.made_by[d],
        };
        let mut moved = Vec::new();
        let odds = self.repack(epoch, &[d as u32], rules, &mut moved);
        self.keep(
            odds,
            Cause::Otherwise {
                detection: d as u32,
            },
            &best.exists,
            &moved,
        );
    }

    /// Packs what is tied to these detections; returns the change of gain and adds the
    /// detections whose makers may have changed.
    fn repack(&mut self, epoch: usize, seeds: &[u32], rules: Rules, moved: &mut Vec<u32>) -> f64 {
        let p = self.program;
        // The banned source or a track that left still ties its detections to others.
        let mut wide: Vec<u32> = seeds.to_vec();
        for &d in seeds {
            for &c in self.cells_of_best(d) {
                wide.extend(
                    p.sources_of_cell(c as usize, epoch)
                        .iter()
                        .map(|&s| p.detection_of(s as usize) as u32),
                );
            }
        }
        let all = self.packer.tied(p, epoch, rules, &wide);
        let before = self.gain_of(&all);
        self.packer
            .some(p, &all, rules, self.reach.pack_nodes, &mut self.made_by);
        let after = self.gain_of(&all);
        moved.extend_from_slice(&all);
        after - before
    }

    fn cells_of_best(&self, d: u32) -> &[u32] {
        match self.best.made_by[d as usize] {
            FALSE => &[],
            s => self.program.cells(s as usize),
        }
    }

    fn gain_of(&self, detections: &[u32]) -> f64 {
        let made = detections.iter().map(|&d| self.made_by[d as usize]);
        made.filter(|&s| s != FALSE)
            .map(|s| self.program.gain(s as usize))
            .sum()
    }

    /// Keeps a rival within reach and puts `made_by` back.
    fn keep(&mut self, ln_odds: f64, cause: Cause, exists: &[bool], moved: &[u32]) {
        if ln_odds >= -self.reach.within_nats {
            let steps = self.steps(exists, moved);
            if !steps.is_empty() {
                self.found.push(Near {
                    ln_odds,
                    cause,
                    steps,
                });
            }
        }
        for &d in moved {
            self.made_by[d as usize] = self.best.made_by[d as usize];
        }
    }

    fn steps(&self, exists: &[bool], moved: &[u32]) -> Vec<Step> {
        let p = self.program;
        let mut steps = Vec::new();
        for (track, (&was, &is)) in (0..).zip(self.best.exists.iter().zip(exists)) {
            match (was, is) {
                (true, false) => steps.push(Step::Vanishes { track }),
                (false, true) => steps.push(Step::Appears { track }),
                _ => {}
            }
        }
        let tracks = |s: u32| -> Vec<u32> {
            if s == FALSE {
                Vec::new()
            } else {
                p.tracks(s as usize).map(|k| k as u32).collect()
            }
        };
        for &detection in moved {
            let (was, is) = (
                self.best.made_by[detection as usize],
                self.made_by[detection as usize],
            );
            if was == is {
                continue;
            }
            let (was, is) = (tracks(was), tracks(is));
            let kept = was.iter().any(|k| is.contains(k));
            let lost: Vec<u32> = was.iter().copied().filter(|k| !is.contains(k)).collect();
            let mut from = lost.iter().copied();
            for &track in is.iter().filter(|k| !was.contains(k)) {
                if kept {
                    steps.push(Step::Shares { track, detection });
                } else {
                    steps.push(Step::Takes {
                        track,
                        detection,
                        from: from.next(),
                    });
                }
            }
            for track in from {
                if exists[track as usize] {
                    steps.push(Step::Drops { track, detection });
                }
            }
        }
        steps
    }
}
