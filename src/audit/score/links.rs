//! Steps from one detection to the next: links given, links true, changes of track.

use super::case::Case;
use super::identity::Matched;
use super::sparse::Grouped;
use super::{Figures, ratio};

/// Counts of links.
#[derive(Clone, Debug)]
pub struct Links {
    given: u64,
    given_good: u64,
    /// True links of each star, and those found.
    pub true_of_star: Vec<[u32; 2]>,
}

/// Wanted (star, detection) rows by star, then detection.
fn paths(case: &Case) -> Vec<(u32, u32)> {
    let mut rows: Vec<(u32, u32)> = case.wanted().map(|t| (t.star, t.det)).collect();
    rows.sort_unstable();
    rows
}

/// Tracks of every detection, in the order of their names.
fn tracks_at(case: &Case) -> Grouped {
    let rows = case.given.iter().map(|g| (g.det, g.track));
    Grouped::new(case.epoch_of.len(), rows)
}

/// Judges the links between successive detections of tracks and of stars.
#[must_use]
pub fn links(case: &Case, matched: &Matched) -> Links {
    let mut given: Vec<(u32, u32)> = case
        .given
        .windows(2)
        .filter(|w| w[0].track == w[1].track)
        .map(|w| (w[0].det, w[1].det))
        .collect();
    given.sort_unstable();
    given.dedup();
    let good = given
        .iter()
        .filter(|(a, b)| case.stars_at.share_any(*a, *b));

    let tracks = tracks_at(case);
    let mut true_of_star = vec![[0; 2]; matched.track_of.len()];
    for w in paths(case).windows(2).filter(|w| w[0].0 == w[1].0) {
        let [found, all] = &mut true_of_star[w[0].0 as usize];
        *all += 1;
        *found += u32::from(tracks.share_any(w[0].1, w[1].1));
    }
    Links {
        given_good: good.count() as u64,
        given: given.len() as u64,
        true_of_star,
    }
}

/// Changes of track along each star's detections. A detection in several tracks is read as the
/// one that shares most detections with the star.
#[must_use]
pub fn switches(case: &Case, matched: &Matched) -> Vec<u32> {
    let tracks = tracks_at(case);
    let mut out = vec![0; matched.track_of.len()];
    let mut last: Option<(u32, u32)> = None;
    for (star, det) in paths(case) {
        let read = tracks.of(det).iter();
        // The last of equals, as `max_by_key` gives it.
        let Some(&track) = read.max_by_key(|&&t| matched.overlap(t, star)) else {
            continue;
        };
        if last.is_some_and(|(s, t)| s == star && t != track) {
            out[star as usize] += 1;
        }
        last = Some((star, track));
    }
    out
}

pub fn fill(links: &Links, out: &mut Figures) {
    let sum = |k: usize| links.true_of_star.iter().map(|n| u64::from(n[k])).sum();
    out.link_precision = ratio(links.given_good, links.given);
    out.link_recall = ratio(sum(0), sum(1));
}
