//! The choice of tracks and members of one tangle as a 0/1 program.
//!
//! Given a pool of tracks with known motions, the best explanation is the set of tracks and the
//! makers of every detection with the largest total gain:
//!
//!   max  sum_k base_k x_k + sum_s gain_s y_s
//!   s.t. every detection has at most one source                    (else it is false)
//!        a track takes part in at most one source an epoch         (else it was missed)
//!        only tracks that exist take part, and of a family of alternatives at most one exists
//!
//! A source is a set of tracks that may have made one detection: one track alone, or a group
//! whose light is merged. Its gain is relative to "the detection is false and its tracks were
//! missed"; `base` is what a track is worth when it exists and is missed everywhere. All in nats.
//! This is the packing of tracks of Morefield (1977, IEEE Trans. Autom. Control 22, 302) with
//! merged detections.
//!
//! Detections, (track, epoch) cells and sources are numbered; their lists are flat.

use std::ops::Range;

/// No source: the detection is false.
pub const FALSE: u32 = u32::MAX;

/// A program under construction.
#[derive(Clone, Debug, Default)]
pub struct Builder {
    keep_above: f64,
    base: Vec<f64>,
    forced: Vec<bool>,
    family: Vec<u32>,
    sources: Vec<Draft>,
    members: Vec<u32>,
}

#[derive(Clone, Debug)]
struct Draft {
    epoch: u32,
    detection: u32,
    gain: f64,
    members: Range<usize>,
}

impl Builder {
    /// Keeps sources whose gain exceeds this; by default those that gain anything. Probabilities
    /// need the losing ones as well, the best choice does not.
    #[must_use]
    pub fn keeping(gain_above: f64) -> Self {
        Self {
            keep_above: gain_above,
            ..Self::default()
        }
    }

    /// Adds a track that may exist; returns its number.
    pub fn track(&mut self, base: f64) -> u32 {
        let k = self.base.len() as u32;
        self.base.push(base);
        self.forced.push(false);
        self.family.push(k);
        k
    }

    /// The track must exist.
    pub fn force(&mut self, track: u32) {
        self.forced[track as usize] = true;
    }

    /// Of these two (and whatever each was tied to before) at most one may exist.
    pub fn alternatives(&mut self, a: u32, b: u32) {
        let (fa, fb) = (self.family[a as usize], self.family[b as usize]);
        let low = fa.min(fb);
        for f in &mut self.family {
            if *f == fa || *f == fb {
                *f = low;
            }
        }
    }

    /// Adds a set of tracks that may have made a detection. One that gains too little is left out
    /// (see [`Builder::keeping`]): its tracks could as well have been missed.
    pub fn source(&mut self, epoch: u32, detection: u32, tracks: &[u32], gain: f64) {
        if gain > self.keep_above && !tracks.is_empty() {
            let start = self.members.len();
            self.members.extend_from_slice(tracks);
            self.members[start..].sort_unstable();
            self.sources.push(Draft {
                epoch,
                detection,
                gain,
                members: start..self.members.len(),
            });
        }
    }

    /// Numbers everything. The result does not depend on the order of calls to `source`.
    #[must_use]
    pub fn finish(mut self) -> Program {
        let members = &self.members;
        self.sources.sort_by(|a, b| {
            (a.epoch, a.detection)
                .cmp(&(b.epoch, b.detection))
                .then(b.gain.total_cmp(&a.gain))
                .then_with(|| members[a.members.clone()].cmp(&members[b.members.clone()]))
        });
        let mut cells: Vec<(u32, u32)> = self
            .sources
            .iter()
            .flat_map(|s| members[s.members.clone()].iter().map(|&k| (k, s.epoch)))
            .collect();
        cells.sort_unstable();
        cells.dedup();
        let mut p = Program {
            families: families(&self.family),
            base: self.base,
            forced: self.forced,
            cell_track: cells.iter().map(|c| c.0).collect(),
            cells_of_track: Vec::new(),
            detections: Vec::new(),
            sources_of: vec![0],
            epochs: vec![0],
            gain: Vec::with_capacity(self.sources.len()),
            cells_of: vec![0],
            cells: Vec::with_capacity(members.len()),
            family_of: Vec::new(),
            sources_of_track: Vec::new(),
            track_sources: Vec::new(),
        };
        p.cells_of_track = (0..=p.base.len())
            .map(|k| cells.partition_point(|c| (c.0 as usize) < k) as u32)
            .collect();
        for s in &self.sources {
            let here = (s.epoch, s.detection);
            match p.detections.last() {
                Some(&last) if last == here => {}
                last => {
                    if last.is_some_and(|l| l.0 != s.epoch) {
                        p.epochs.push(p.detections.len() as u32);
                    }
                    if last.is_some() {
                        p.sources_of.push(p.gain.len() as u32);
                    }
                    p.detections.push(here);
                }
            }
            p.gain.push(s.gain);
            for &k in &members[s.members.clone()] {
                let cell = cells.partition_point(|&c| c < (k, s.epoch)) as u32;
                p.cells.push(cell);
            }
            p.cells_of.push(p.cells.len() as u32);
        }
        if !p.detections.is_empty() {
            p.sources_of.push(p.gain.len() as u32);
            p.epochs.push(p.detections.len() as u32);
        }
        p.index_tracks();
        p
    }
}

/// Groups of track numbers with the same mark, in order of their first member.
fn families(mark: &[u32]) -> Vec<Vec<u32>> {
    let mut by_mark: Vec<(u32, u32)> = mark.iter().copied().zip(0..).collect();
    by_mark.sort_unstable();
    let mut out: Vec<Vec<u32>> = Vec::new();
    let mut last = None;
    for (m, k) in by_mark {
        if last != Some(m) {
            out.push(Vec::new());
            last = Some(m);
        }
        if let Some(family) = out.last_mut() {
            family.push(k);
        }
    }
    out
}

/// A finished program.
#[derive(Clone, Debug)]
pub struct Program {
    base: Vec<f64>,
    forced: Vec<bool>,
    families: Vec<Vec<u32>>,
    cell_track: Vec<u32>,
    cells_of_track: Vec<u32>,
    /// (epoch, detection) as told to the builder.
    detections: Vec<(u32, u32)>,
    sources_of: Vec<u32>,
    /// Detections of each epoch that has any.
    epochs: Vec<u32>,
    gain: Vec<f64>,
    cells_of: Vec<u32>,
    cells: Vec<u32>,
    family_of: Vec<u32>,
    sources_of_track: Vec<u32>,
    track_sources: Vec<u32>,
}

impl Program {
    fn index_tracks(&mut self) {
        self.family_of = vec![0; self.n_tracks()];
        for (f, family) in self.families.iter().enumerate() {
            for &k in family {
                self.family_of[k as usize] = f as u32;
            }
        }
        let mut of_track: Vec<(u32, u32)> = Vec::with_capacity(self.cells.len());
        for s in 0..self.n_sources() {
            of_track.extend(self.tracks(s).map(|k| (k as u32, s as u32)));
        }
        of_track.sort_unstable();
        self.sources_of_track = (0..=self.n_tracks())
            .map(|k| of_track.partition_point(|t| (t.0 as usize) < k) as u32)
            .collect();
        self.track_sources = of_track.iter().map(|t| t.1).collect();
    }

    #[must_use]
    pub fn n_tracks(&self) -> usize {
        self.base.len()
    }
    #[must_use]
    pub fn n_cells(&self) -> usize {
        self.cell_track.len()
    }
    #[must_use]
    pub fn n_detections(&self) -> usize {
        self.detections.len()
    }
    #[must_use]
    pub fn n_sources(&self) -> usize {
        self.gain.len()
    }
    #[must_use]
    pub fn n_epochs(&self) -> usize {
        self.epochs.len() - 1
    }
    #[must_use]
    pub fn base(&self, track: usize) -> f64 {
        self.base[track]
    }
    #[must_use]
    pub fn is_forced(&self, track: usize) -> bool {
        self.forced[track]
    }
    /// Sets of tracks of which at most one exists; every track is in exactly one.
    #[must_use]
    pub fn families(&self) -> &[Vec<u32>] {
        &self.families
    }
    /// Alternatives of a track, itself included.
    #[must_use]
    pub fn family_of(&self, track: usize) -> &[u32] {
        &self.families[self.family_of[track] as usize]
    }
    /// Sources a track takes part in, in order; sources of one detection stand together.
    #[must_use]
    pub fn sources_of_track(&self, track: usize) -> &[u32] {
        let range =
            self.sources_of_track[track] as usize..self.sources_of_track[track + 1] as usize;
        &self.track_sources[range]
    }
    /// Sources that use a cell of the k-th epoch, in order.
    #[must_use]
    pub fn sources_of_cell(&self, cell: usize, epoch: usize) -> &[u32] {
        let of_track = self.sources_of_track(self.track_of(cell));
        let detections = self.epoch(epoch);
        let (lo, hi) = (
            self.sources_of[detections.start],
            self.sources_of[detections.end],
        );
        let from = of_track.partition_point(|&s| s < lo);
        &of_track[from..of_track.partition_point(|&s| s < hi)]
    }
    /// Detection a source belongs to.
    #[must_use]
    pub fn detection_of(&self, source: usize) -> usize {
        self.sources_of
            .partition_point(|&first| first as usize <= source)
            - 1
    }
    /// (epoch, detection) of a detection number.
    #[must_use]
    pub fn detection(&self, d: usize) -> (u32, u32) {
        self.detections[d]
    }
    /// Detections of the k-th epoch that has any.
    #[must_use]
    pub fn epoch(&self, k: usize) -> Range<usize> {
        self.epochs[k] as usize..self.epochs[k + 1] as usize
    }
    /// Sources of a detection, best first.
    #[must_use]
    pub fn sources(&self, d: usize) -> Range<usize> {
        self.sources_of[d] as usize..self.sources_of[d + 1] as usize
    }
    #[must_use]
    pub fn gain(&self, source: usize) -> f64 {
        self.gain[source]
    }
    /// (track, epoch) cells a source uses.
    #[must_use]
    pub fn cells(&self, source: usize) -> &[u32] {
        &self.cells[self.cells_of[source] as usize..self.cells_of[source + 1] as usize]
    }
    /// Tracks of a source.
    pub fn tracks(&self, source: usize) -> impl Iterator<Item = usize> + '_ {
        self.cells(source)
            .iter()
            .map(|&c| self.track_of(c as usize))
    }
    #[must_use]
    pub fn track_of(&self, cell: usize) -> usize {
        self.cell_track[cell] as usize
    }
    #[must_use]
    pub fn cells_of_track(&self, track: usize) -> Range<usize> {
        self.cells_of_track[track] as usize..self.cells_of_track[track + 1] as usize
    }

    /// The explanation in which everything is false and only forced tracks exist.
    #[must_use]
    pub fn empty(&self) -> Explanation {
        Explanation {
            exists: self.forced.clone(),
            made_by: vec![FALSE; self.n_detections()],
        }
    }

    /// The source of a detection with exactly these tracks (in any order).
    #[must_use]
    pub fn find(&self, epoch: u32, detection: u32, tracks: &[u32]) -> Option<(usize, usize)> {
        let d = self.detections.binary_search(&(epoch, detection)).ok()?;
        let mut sorted = tracks.to_vec();
        sorted.sort_unstable();
        self.sources(d)
            .find(|&s| self.tracks(s).eq(sorted.iter().map(|&k| k as usize)))
            .map(|s| (d, s))
    }

    /// Total gain of an explanation; `None` if it breaks a rule of the program.
    #[must_use]
    pub fn value(&self, e: &Explanation) -> Option<f64> {
        if e.exists.len() != self.n_tracks() || e.made_by.len() != self.n_detections() {
            return None;
        }
        let mut sum = 0.0;
        for (k, &exists) in e.exists.iter().enumerate() {
            if exists {
                sum += self.base[k];
            } else if self.forced[k] {
                return None;
            }
        }
        let crowded = |f: &Vec<u32>| f.iter().filter(|&&k| e.exists[k as usize]).count() > 1;
        if self.families.iter().any(crowded) {
            return None;
        }
        let mut used = vec![false; self.n_cells()];
        for (d, &s) in e.made_by.iter().enumerate() {
            if s == FALSE {
                continue;
            }
            if !self.sources(d).contains(&(s as usize)) {
                return None;
            }
            for &c in self.cells(s as usize) {
                if !e.exists[self.track_of(c as usize)] || used[c as usize] {
                    return None;
                }
                used[c as usize] = true;
            }
            sum += self.gain[s as usize];
        }
        Some(sum)
    }
}

/// Which tracks exist and what made every detection of a [`Program`].
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Explanation {
    pub exists: Vec<bool>,
    /// Source of each detection, or [`FALSE`].
    pub made_by: Vec<u32>,
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn numbering_does_not_depend_on_the_order_of_sources() {
        let build = |flip: bool| {
            let mut b = Builder::default();
            let (p, q) = (b.track(-3.0), b.track(-2.0));
            let mut list = vec![
                (4, 1, vec![q], 5.0),
                (2, 0, vec![p, q], 7.0),
                (2, 0, vec![p], 6.0),
                (2, 3, vec![q], 1.0),
                (2, 3, vec![p], -1.0),
            ];
            if flip {
                list.reverse();
            }
            for (e, d, t, g) in list {
                b.source(e, d, &t, g);
            }
            b.finish()
        };
        let (a, b) = (build(false), build(true));
        assert_eq!(format!("{a:?}"), format!("{b:?}"));
        assert_eq!(
            (a.n_detections(), a.n_sources(), a.n_cells(), a.n_epochs()),
            (3, 4, 3, 2)
        );
        assert_eq!((a.epoch(0), a.epoch(1)), (0..2, 2..3));
        assert_eq!(a.tracks(0).collect::<Vec<_>>(), [0, 1]);
        assert_eq!(a.find(2, 0, &[1, 0]), Some((0, 0)));
    }

    #[test]
    fn rules_are_checked() {
        let mut b = Builder::default();
        let (p, q) = (b.track(-3.0), b.track(-2.0));
        b.source(0, 0, &[p], 4.0);
        b.source(0, 1, &[p, q], 5.0);
        let program = b.finish();
        let made = |exists: [bool; 2], made_by: [u32; 2]| Explanation {
            exists: exists.to_vec(),
            made_by: made_by.to_vec(),
        };
        assert_eq!(program.value(&made([true, true], [FALSE, 1])), Some(0.0));
        assert_eq!(
            program.value(&made([true, true], [0, 1])),
            None,
            "used twice in an epoch"
        );
        assert_eq!(
            program.value(&made([true, false], [FALSE, 1])),
            None,
            "does not exist"
        );
        assert_eq!(program.value(&made([true, false], [0, FALSE])), Some(1.0));
        assert_eq!(
            program.value(&made([true, false], [1, FALSE])),
            None,
            "another's source"
        );
    }

    #[test]
    fn families_join() {
        let mut b = Builder::default();
        for _ in 0..5 {
            b.track(0.0);
        }
        b.alternatives(3, 1);
        b.alternatives(4, 3);
        assert_eq!(b.finish().families(), [vec![0], vec![1, 3, 4], vec![2]]);
    }
}
