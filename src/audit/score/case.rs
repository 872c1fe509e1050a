//! Truth and result as whole numbers: detections, stars and tracks counted from zero.

use std::collections::HashMap;

use super::result_tables::GivenMembers;
use super::sparse::{Grouped, counts};
use super::{PRESENT_SHARE, ratio};
use crate::io::truth_csv::{NO_STAR, TrueStars, Truth};
use crate::model::detection::Ids;

/// One result beside its truth. Detections are numbered by epoch, then id, so that their order
/// is the order in time; tracks by name.
#[derive(Clone, Debug)]
pub struct Case {
    /// Epoch of each detection.
    pub epoch_of: Vec<u32>,
    pub track_names: Vec<String>,
    pub stars: TrueStars,
    /// True (detection, star, share), real stars only.
    pub truth: Vec<TrueRow>,
    /// Given memberships: by track, then detection; no repeats, no tracks of one detection.
    pub given: Vec<GivenRow>,
    /// All stars of a detection, traces included.
    pub stars_at: Grouped,
    /// Number of detections in which each star is present.
    pub per_star: Vec<u32>,
    pub single_detection_tracks: u64,
    pub repeated_rows: u64,
    pub unknown_rows: u64,
}

#[derive(Clone, Copy, Debug)]
pub struct TrueRow {
    pub det: u32,
    pub star: u32,
    pub present: bool,
}

#[derive(Clone, Copy, Debug)]
pub struct GivenRow {
    pub track: u32,
    pub det: u32,
    pub probability: f64,
    pub share: f64,
    pub ambiguous: bool,
}

impl Case {
    #[must_use]
    pub fn new(truth: Truth, members: GivenMembers) -> Self {
        let (true_ids, given_ids) = comparable(truth.members.id, members.id);
        let catalogue = Catalogue::new(&truth.members.epoch, &true_ids);

        let rows = (truth.members.epoch.iter().zip(&true_ids))
            .zip(truth.members.star.iter().zip(&truth.members.share));
        let true_rows: Vec<TrueRow> = rows
            .filter(|(_, (star, _))| **star != NO_STAR)
            .map(|((&epoch, &id), (&star, &share))| TrueRow {
                det: catalogue.find(epoch, id).expect("made from these rows"),
                star,
                present: share > PRESENT_SHARE,
            })
            .collect();

        let (track_names, track) = numbered(members.track);
        let mut given = Vec::with_capacity(track.len());
        for k in 0..track.len() {
            if let Some(det) = catalogue.find(members.epoch[k], given_ids[k]) {
                given.push(GivenRow {
                    track: track[k],
                    det,
                    probability: members.probability[k],
                    share: members.share[k],
                    ambiguous: members.ambiguous[k],
                });
            }
        }
        let unknown_rows = (track.len() - given.len()) as u64;
        given.sort_by_key(|g| (g.track, g.det)); // stable: the first of repeated rows stays
        let all = given.len();
        given.dedup_by_key(|g| (g.track, g.det));
        let repeated_rows = (all - given.len()) as u64;
        let size = counts(track_names.len(), given.iter().map(|g| g.track));
        given.retain(|g| size[g.track as usize] >= 2);

        let present = true_rows.iter().filter(|t| t.present);
        Self {
            per_star: counts(truth.stars.label.len(), present.map(|t| t.star)),
            stars_at: Grouped::new(
                catalogue.epoch_of.len(),
                true_rows.iter().map(|t| (t.det, t.star)),
            ),
            epoch_of: catalogue.epoch_of,
            track_names,
            stars: truth.stars,
            truth: true_rows,
            given,
            single_detection_tracks: size.iter().filter(|&&n| n == 1).count() as u64,
            repeated_rows,
            unknown_rows,
        }
    }

    /// True memberships that a result is expected to give: present, of stars present twice or
    /// more.
    pub fn wanted(&self) -> impl Iterator<Item = &TrueRow> + Clone {
        self.truth
            .iter()
            .filter(|t| t.present && self.per_star[t.star as usize] >= 2)
    }

    /// Number of given rows of each track.
    #[must_use]
    pub fn track_size(&self) -> Vec<u32> {
        counts(self.track_names.len(), self.given.iter().map(|g| g.track))
    }

    /// Rows that put a second detection of one epoch into a track.
    #[must_use]
    pub fn two_in_one_epoch(&self) -> u64 {
        let epoch = |g: &GivenRow| self.epoch_of[g.det as usize];
        self.given
            .windows(2)
            .filter(|w| w[0].track == w[1].track && epoch(&w[0]) == epoch(&w[1]))
            .count() as u64
    }

    /// Share of detections of real stars in which two or more are present.
    #[must_use]
    pub fn merged(&self) -> (Vec<u32>, u64, Option<f64>) {
        let present = self.truth.iter().filter(|t| t.present).map(|t| t.det);
        let parts = counts(self.epoch_of.len(), present);
        let merged = parts.iter().filter(|&&n| n >= 2).count() as u64;
        let real = parts.iter().filter(|&&n| n > 0).count() as u64;
        (parts, merged, ratio(merged, real))
    }
}

/// Detections by (epoch, id).
struct Catalogue {
    keys: Vec<(u32, u64)>,
    epoch_of: Vec<u32>,
    /// Keys of epoch e are `first[e]..first[e + 1]`.
    first: Vec<usize>,
}

impl Catalogue {
    fn new(epoch: &[u32], id: &[u64]) -> Self {
        let mut keys: Vec<(u32, u64)> = epoch.iter().copied().zip(id.iter().copied()).collect();
        keys.sort_unstable();
        keys.dedup();
        let epoch_of: Vec<u32> = keys.iter().map(|k| k.0).collect();
        let n_epochs = epoch_of.last().map_or(0, |&e| e as usize + 1);
        let first = (0..=n_epochs)
            .map(|e| epoch_of.partition_point(|&k| (k as usize) < e))
            .collect();
        Self {
            keys,
            epoch_of,
            first,
        }
    }

    fn find(&self, epoch: u32, id: u64) -> Option<u32> {
        let e = epoch as usize;
        let (from, to) = (*self.first.get(e)?, *self.first.get(e + 1)?);
        let at = self.keys[from..to].binary_search(&(epoch, id)).ok()?;
        Some((from + at) as u32)
    }
}

/// Identifiers of both tables as numbers that agree exactly when the identifiers do.
fn comparable(a: Ids, b: Ids) -> (Vec<u64>, Vec<u64>) {
    match (a, b) {
        (Ids::Numbers(a), Ids::Numbers(b)) => (a, b),
        (a, b) => {
            let text = |ids: &Ids| -> Vec<String> { (0..ids.len()).map(|k| ids.text(k)).collect() };
            let (a, b) = (text(&a), text(&b));
            let mut all: Vec<&String> = a.iter().chain(&b).collect();
            all.sort_unstable();
            all.dedup();
            let code = |v: &[String]| -> Vec<u64> {
                v.iter()
                    .map(|t| all.binary_search(&t).expect("is among all") as u64)
                    .collect()
            };
            (code(&a), code(&b))
        }
    }
}

/// Distinct names in order, and the number of each row's name.
fn numbered(rows: Vec<String>) -> (Vec<String>, Vec<u32>) {
    let mut code_of: HashMap<&str, u32> = HashMap::new();
    let mut names: Vec<&str> = Vec::new();
    let codes: Vec<u32> = rows
        .iter()
        .map(|name| {
            *code_of.entry(name).or_insert_with(|| {
                names.push(name);
                names.len() as u32 - 1
            })
        })
        .collect();
    let mut order: Vec<u32> = (0..names.len() as u32).collect();
    order.sort_unstable_by_key(|&k| names[k as usize]);
    let mut rank = vec![0; names.len()];
    for (k, &code) in order.iter().enumerate() {
        rank[code as usize] = k as u32;
    }
    let sorted = order
        .iter()
        .map(|&k| names[k as usize].to_owned())
        .collect();
    (sorted, codes.iter().map(|&c| rank[c as usize]).collect())
}
