//! Which star a track is, and which memberships are right.

use super::case::Case;
use super::matching::{Overlap, best_matching};
use super::sparse::{Grouped, counts};
use super::{Figures, JUDGED_DETECTIONS, WHOLE, ratio};
use crate::maths::assign::FREE;

/// The matching of tracks and stars.
#[derive(Clone, Debug)]
pub struct Matched {
    /// Sorted by track, then star; wanted memberships only.
    pub overlaps: Vec<Overlap>,
    pub star_of: Vec<u32>,
    pub track_of: Vec<u32>,
    /// The matched star, or for an unmatched track the star it shares most detections with.
    pub home: Vec<u32>,
    /// Largest overlap of each track.
    pub most: Vec<u32>,
    /// Wanted stars of every detection.
    pub wanted_at: Grouped,
}

impl Matched {
    /// Names of matched tracks and stars.
    #[must_use]
    pub fn named_pairs(&self, case: &Case) -> Vec<(String, String)> {
        let matched = self.star_of.iter().zip(&case.track_names);
        matched
            .filter(|(star, _)| **star != FREE)
            .map(|(&star, name)| (name.clone(), case.stars.label[star as usize].clone()))
            .collect()
    }

    /// Detections that a track and a star share (0 when they never meet).
    #[must_use]
    pub fn overlap(&self, track: u32, star: u32) -> u32 {
        self.overlaps
            .binary_search_by_key(&(track, star), |o| (o.track, o.star))
            .map_or(0, |k| self.overlaps[k].n)
    }
}

/// Counts shared detections and matches tracks with stars.
#[must_use]
pub fn match_tracks(case: &Case) -> Matched {
    let wanted = case.wanted().map(|t| (t.det, t.star));
    let wanted_at = Grouped::new(case.epoch_of.len(), wanted);
    let mut overlaps: Vec<Overlap> = Vec::new();
    let mut met: Vec<u32> = Vec::new();
    for rows in case.given.chunk_by(|a, b| a.track == b.track) {
        met.clear();
        for row in rows {
            met.extend_from_slice(wanted_at.of(row.det));
        }
        met.sort_unstable();
        overlaps.extend(met.chunk_by(|a, b| a == b).map(|same| Overlap {
            track: rows[0].track,
            star: same[0],
            n: same.len() as u32,
        }));
    }
    let n_tracks = case.track_names.len();
    let (star_of, track_of) = best_matching(&overlaps, n_tracks, case.per_star.len());
    let mut home = vec![FREE; n_tracks];
    let mut most = vec![0; n_tracks];
    for o in &overlaps {
        let track = o.track as usize;
        if o.n >= most[track] {
            (most[track], home[track]) = (o.n, o.star);
        }
    }
    for (home, &star) in home.iter_mut().zip(&star_of) {
        if star != FREE {
            *home = star;
        }
    }
    Matched {
        overlaps,
        star_of,
        track_of,
        home,
        most,
        wanted_at,
    }
}

/// What a given membership is.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Verdict {
    Right,
    Wrong,
    /// The star is there, but with too small a share to count.
    Trace,
}

/// Verdict on every row of `case.given`.
#[must_use]
pub fn judge(case: &Case, matched: &Matched) -> Vec<Verdict> {
    case.given
        .iter()
        .map(|row| {
            let star = matched.home[row.track as usize];
            if star == FREE {
                Verdict::Wrong
            } else if matched.wanted_at.holds(row.det, star) {
                Verdict::Right
            } else if case.stars_at.holds(row.det, star) {
                Verdict::Trace
            } else {
                Verdict::Wrong
            }
        })
        .collect()
}

/// Counts by star.
#[derive(Clone, Debug)]
pub struct ByStar {
    /// Right memberships in the star's own track.
    pub got: Vec<u32>,
    /// Present in enough detections to be judged.
    pub eligible: Vec<bool>,
    pub whole: Vec<bool>,
}

#[must_use]
pub fn by_star(case: &Case, matched: &Matched, judged: &[Verdict]) -> ByStar {
    let rows = || case.given.iter().zip(judged);
    let hits = rows()
        .filter(|(row, v)| **v == Verdict::Right && matched.star_of[row.track as usize] != FREE);
    let got = counts(
        case.per_star.len(),
        hits.map(|(row, _)| matched.home[row.track as usize]),
    );
    let wrong = rows().filter(|(_, v)| **v == Verdict::Wrong);
    let foreign = counts(case.track_names.len(), wrong.map(|(row, _)| row.track));
    let eligible: Vec<bool> = (case.per_star.iter())
        .map(|&n| n >= JUDGED_DETECTIONS)
        .collect();
    let whole = (0..got.len())
        .map(|star| {
            let track = matched.track_of[star];
            eligible[star]
                && track != FREE
                && f64::from(got[star]) >= WHOLE * f64::from(case.per_star[star])
                && foreign[track as usize] == 0
        })
        .collect();
    ByStar {
        got,
        eligible,
        whole,
    }
}

/// Identity figures, whole stars, spurious and fragment tracks.
pub fn fill(case: &Case, matched: &Matched, judged: &[Verdict], stars: &ByStar, out: &mut Figures) {
    let hits: u64 = stars.got.iter().map(|&n| u64::from(n)).sum();
    out.memberships = judged.iter().filter(|v| **v != Verdict::Trace).count() as u64;
    out.true_memberships = case.wanted().count() as u64;
    out.identity_precision = ratio(hits, out.memberships);
    out.identity_recall = ratio(hits, out.true_memberships);
    out.identity_f1 = ratio(2 * hits, out.memberships + out.true_memberships);

    let count = |flags: &[bool]| flags.iter().filter(|f| **f).count() as u64;
    out.eligible_stars = count(&stars.eligible);
    out.whole_stars = ratio(count(&stars.whole), out.eligible_stars);

    let size = case.track_size();
    let counted = case.given.iter().zip(judged);
    let counted = counted.filter(|(_, v)| **v != Verdict::Trace);
    let counted = counts(size.len(), counted.map(|(row, _)| row.track));
    let (mut live, mut spurious, mut fragments) = (0, 0, 0);
    for track in (0..size.len()).filter(|&t| size[t] >= 2) {
        live += 1;
        if counted[track] > 0 && 2 * matched.most[track] < counted[track] {
            spurious += 1;
        } else if matched.star_of[track] == FREE {
            fragments += 1;
        }
    }
    out.tracks = live;
    out.spurious_tracks = ratio(spurious, live);
    out.fragment_tracks = ratio(fragments, live);
}
