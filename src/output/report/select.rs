//! What of a run goes into a report.
//!
//! A whole run of ordinary size goes in completely. A part (tracks, a tangle, a region) takes
//! along every detection near it and the tracks these belong to, because a star is judged by
//! its neighbours. A run too large for one page keeps the detections of its confused and flagged
//! tracks first, then of the brightest; the rest is listed with its numbers only. What was left
//! out is said in words in the report.

use std::collections::{BTreeMap, BTreeSet};

use super::ReportInput;
use crate::model::flag::Flags;

/// The part of a run that is wanted.
#[derive(Clone, Debug, PartialEq)]
pub enum Scope {
    Whole,
    /// Indices into `Solution::tracks`.
    Tracks(Vec<usize>),
    /// Index into `Solution::tangles`.
    Tangle(usize),
    /// Corners x0, y0, x1, y1 \[mas\] in any order.
    Region([f64; 4]),
}

/// How much a page may hold. Counts, so that the same run always gives the same page.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Budget {
    /// Detections with all their numbers.
    pub detections: usize,
    /// Tracks, with or without their detections.
    pub tracks: usize,
}

impl Default for Budget {
    /// Keeps a page below 15 MB (about 23 bytes for a detection in a track, 150 for a track).
    fn default() -> Self {
        Self {
            detections: 400_000,
            tracks: 25_000,
        }
    }
}

/// Neighbours are looked for within so many times the resolution.
const NEAR_FWHM: f64 = 3.0;

/// What was chosen; everything in ascending order.
#[derive(Clone, Debug, Default)]
pub(super) struct Selection {
    /// Indices into `Solution::tracks`.
    pub tracks: Vec<usize>,
    /// For each of `tracks`: are its detections in?
    pub detailed: Vec<bool>,
    /// Rows of each epoch.
    pub rows: Vec<Vec<usize>>,
    /// What was left out, in words.
    pub notes: Vec<String>,
}

/// Chooses what goes in.
pub(super) fn select(input: &ReportInput, scope: &Scope, budget: Budget) -> Selection {
    match scope {
        Scope::Whole => whole(input, budget),
        Scope::Tracks(wanted) => {
            let mut s = around(input, wanted, None);
            s.notes.push(format!(
                "This page shows {} of {} tracks, with their neighbours.",
                wanted.len(),
                input.solution.tracks.len()
            ));
            s
        }
        Scope::Tangle(tangle) => {
            let wanted = input
                .solution
                .tangles
                .get(*tangle)
                .map_or(&[][..], |t| &t.tracks[..]);
            let mut s = around(input, wanted, None);
            s.notes.push(format!(
                "This page shows tangle {tangle} ({} tracks), with its neighbours.",
                wanted.len()
            ));
            s
        }
        Scope::Region([x0, y0, x1, y1]) => {
            let corners = [x0.min(*x1), y0.min(*y1), x0.max(*x1), y0.max(*y1)];
            let wanted: Vec<usize> = (0..input.solution.tracks.len())
                .filter(|&k| {
                    let t = &input.solution.tracks[k];
                    in_box(&corners, t.x_mean_mas, t.y_mean_mas)
                })
                .collect();
            let mut s = around(input, &wanted, Some(corners));
            s.notes.push(format!(
                "This page shows x from {} to {} mas and y from {} to {} mas: {} of {} tracks.",
                corners[0],
                corners[2],
                corners[1],
                corners[3],
                wanted.len(),
                input.solution.tracks.len()
            ));
            s
        }
    }
}

fn in_box(corners: &[f64; 4], x: f64, y: f64) -> bool {
    (corners[0]..=corners[2]).contains(&x) && (corners[1]..=corners[3]).contains(&y)
}

/// First and last + 1 of each track's rows in `Solution::members` (sorted by track).
pub(super) fn member_ranges(input: &ReportInput) -> Vec<std::ops::Range<usize>> {
    let members = &input.solution.members;
    let mut out = Vec::with_capacity(input.solution.tracks.len());
    let mut k = 0;
    for track in 0..input.solution.tracks.len() {
        let first = k;
        while k < members.len() && members[k].track == track {
            k += 1;
        }
        out.push(first..k);
    }
    out
}

fn whole(input: &ReportInput, budget: Budget) -> Selection {
    let n_tracks = input.solution.tracks.len();
    let n_detections: usize = input.epochs.iter().map(|e| e.len()).sum();
    if n_tracks <= budget.tracks && n_detections <= budget.detections {
        return Selection {
            tracks: (0..n_tracks).collect(),
            detailed: vec![true; n_tracks],
            rows: input
                .epochs
                .iter()
                .map(|e| (0..e.len()).collect())
                .collect(),
            notes: Vec::new(),
        };
    }
    thinned(input, budget, n_detections)
}

/// Confused and flagged tracks first, then in the order of names (brightest first).
fn thinned(input: &ReportInput, budget: Budget, n_detections: usize) -> Selection {
    let solution = input.solution;
    let quiet = Flags::default();
    let mut order: Vec<usize> = (0..solution.tracks.len()).collect();
    order.sort_by_key(|&k| {
        let t = &solution.tracks[k];
        (t.tangle.is_none() && t.flags == quiet, k)
    });
    let ranges = member_ranges(input);
    let mut tracks: Vec<usize> = order.iter().copied().take(budget.tracks).collect();
    // A quarter of the room is kept for detections that no track holds.
    let for_members = budget.detections - budget.detections / 4;
    let mut rows = vec![BTreeSet::new(); input.epochs.len()];
    let mut n_rows = 0;
    let mut with_detail = BTreeSet::new();
    for &k in &tracks {
        let range = ranges[k].clone();
        if n_rows + range.len() > for_members {
            break;
        }
        for m in &solution.members[range] {
            if let Some(set) = rows.get_mut(m.epoch) {
                n_rows += usize::from(set.insert(m.row));
            }
        }
        with_detail.insert(k);
    }
    let mut free: Vec<&_> = solution.leftovers.iter().collect();
    free.sort_by(|a, b| {
        let distance = |l: &&crate::model::result::Leftover| l.nearest.map_or(f64::MAX, |n| n.1);
        distance(a)
            .total_cmp(&distance(b))
            .then((a.epoch, a.row).cmp(&(b.epoch, b.row)))
    });
    let n_free = free.len().min(budget.detections.saturating_sub(n_rows));
    for l in &free[..n_free] {
        if let Some(set) = rows.get_mut(l.epoch) {
            n_rows += usize::from(set.insert(l.row));
        }
    }
    tracks.sort_unstable();
    let mut notes = vec![format!(
        "This field is too large for one page. Detections are shown for {} of {} tracks (confused \
         and flagged ones first, then the brightest): {n_rows} of {n_detections} detections. \
         The counts on this page are those of the whole run.",
        with_detail.len(),
        solution.tracks.len(),
    )];
    if tracks.len() < solution.tracks.len() {
        notes.push(format!(
            "{} further tracks stand in the tables only.",
            solution.tracks.len() - tracks.len()
        ));
    }
    notes.push(
        "A page with everything for a part of the field: asterskein report RUN --region \
         x0,y0,x1,y1"
            .to_owned(),
    );
    Selection {
        detailed: tracks.iter().map(|k| with_detail.contains(k)).collect(),
        tracks,
        rows: rows
            .into_iter()
            .map(|set| set.into_iter().collect())
            .collect(),
        notes,
    }
}

/// The wanted tracks, all detections near theirs (or inside the box), and the tracks of those.
fn around(input: &ReportInput, wanted: &[usize], corners: Option<[f64; 4]>) -> Selection {
    let solution = input.solution;
    let ranges = member_ranges(input);
    let mut near: Vec<BTreeSet<usize>> = vec![BTreeSet::new(); input.epochs.len()];
    let mut own: BTreeMap<usize, Vec<usize>> = BTreeMap::new();
    for &track in wanted {
        for m in &solution.members[ranges.get(track).cloned().unwrap_or(0..0)] {
            own.entry(m.epoch).or_default().push(m.row);
        }
    }
    for (e, epoch) in input.epochs.iter().enumerate() {
        let reach2_mas2 = (NEAR_FWHM * epoch.fwhm_mas).powi(2);
        let places = own.get(&e).map_or(&[][..], |rows| &rows[..]);
        for row in 0..epoch.len() {
            let (x, y) = (epoch.x_mas[row], epoch.y_mas[row]);
            let inside = corners.as_ref().is_some_and(|c| in_box(c, x, y));
            if inside
                || places.iter().any(|&p| {
                    let (dx, dy) = (epoch.x_mas[p] - x, epoch.y_mas[p] - y);
                    dx * dx + dy * dy <= reach2_mas2
                })
            {
                near[e].insert(row);
            }
        }
    }
    let mut tracks: BTreeSet<usize> = wanted.iter().copied().collect();
    for m in &solution.members {
        if near.get(m.epoch).is_some_and(|set| set.contains(&m.row)) {
            tracks.insert(m.track);
        }
    }
    // Neighbours come along with all their detections: half a track would mislead.
    for &track in &tracks {
        for m in &solution.members[ranges.get(track).cloned().unwrap_or(0..0)] {
            if let Some(set) = near.get_mut(m.epoch) {
                set.insert(m.row);
            }
        }
    }
    let tracks: Vec<usize> = tracks
        .into_iter()
        .filter(|&k| k < solution.tracks.len())
        .collect();
    Selection {
        detailed: vec![true; tracks.len()],
        tracks,
        rows: near
            .into_iter()
            .map(|set| set.into_iter().collect())
            .collect(),
        notes: Vec::new(),
    }
}
