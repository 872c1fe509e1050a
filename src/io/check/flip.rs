//! Does one of two lists lie mirrored against the other?
//!
//! The brightest stars of two lists close in time vote for the offset between the lists, once as
//! stated and once with the second list mirrored. True pairs pile up in one cell of offsets, chance
//! pairs spread over all of them (the classic voting of pattern matching by shift). The guess is
//! wrong for symmetric or regular fields, and silent where neither way of laying them agrees.

use std::collections::BTreeMap;

use super::Placed;
use crate::maths::order::median;
use crate::model::campaign::Campaign;
use crate::model::note::Note;

/// Brightest stars that vote.
const VOTERS: usize = 150;
/// Fewer stars than this cannot be judged.
const FEWEST: usize = 8;
/// Votes a mirrored pile must have beyond the chance level, in its standard deviations, and in
/// units of the pile of the lists as stated.
const CLEAR: f64 = 8.0;
const RATIO: f64 = 1.5;

/// One note for each pair of instruments (or of epochs of one) that match only when mirrored.
pub(super) fn find(campaign: &Campaign, lists: &[Placed]) -> Vec<Note> {
    let mut order: Vec<&Placed> = lists.iter().collect();
    order.sort_by(|a, b| {
        let t = |p: &Placed| campaign.epochs[p.epoch].time.yr();
        t(a).total_cmp(&t(b)).then(a.epoch.cmp(&b.epoch))
    });
    // (instrument, instrument) -> epochs of the mirrored pairs.
    let mut mirrored: BTreeMap<(String, String), Vec<(usize, usize)>> = BTreeMap::new();
    for pair in order.windows(2) {
        let (a, b) = (pair[0], pair[1]);
        let fwhm = |p: &Placed| campaign.epochs[p.epoch].settings.fwhm_mas;
        if is_mirrored(a, b, fwhm(a).max(fwhm(b))) {
            let name = |p: &Placed| campaign.epochs[p.epoch].settings.name.clone();
            let mut names = [name(a), name(b)];
            names.sort();
            let [first, second] = names;
            mirrored
                .entry((first, second))
                .or_default()
                .push((a.epoch, b.epoch));
        }
    }
    mirrored
        .into_iter()
        .map(|((first, second), pairs)| {
            let (a, b) = pairs[0];
            let (a, b) = (&campaign.epochs[a].name, &campaign.epochs[b].name);
            let who = if first == second {
                format!("instrument {first}")
            } else {
                format!("instruments {first} and {second}")
            };
            Note {
                what: "flipped_axis",
                place: who,
                text: format!(
                    "{} pair(s) of epochs, first `{a}` and `{b}`, match only when one is mirrored: \
                     is `handedness` right (\"east_left\" for an ordinary direct image)?",
                    pairs.len()
                ),
            }
        })
        .collect()
}

fn is_mirrored(a: &Placed, b: &Placed, fwhm_mas: f64) -> bool {
    let (a, b) = (brightest(a), brightest(b));
    if a.len() < FEWEST || b.len() < FEWEST {
        return false;
    }
    let cell = cell_size(&a, fwhm_mas);
    let as_stated = pile(&a, &b, cell);
    let flipped: Vec<[f64; 2]> = b.iter().map(|&[x, y]| [-x, y]).collect();
    let as_flipped = pile(&a, &flipped, cell);
    as_flipped.clear > CLEAR && as_flipped.votes > RATIO * as_stated.votes
}

/// Offsets differ by motions and by the nominal scale being a little off.
fn cell_size(stars: &[[f64; 2]], fwhm_mas: f64) -> f64 {
    let mut x: Vec<f64> = stars.iter().map(|p| p[0]).collect();
    let middle = median(&mut x).unwrap_or(0.0);
    let mut far: Vec<f64> = x.iter().map(|v| (v - middle).abs()).collect();
    (2.0 * fwhm_mas).max(0.02 * median(&mut far).unwrap_or(0.0))
}

struct Pile {
    votes: f64,
    /// Height above chance in standard deviations of chance.
    clear: f64,
}

fn pile(a: &[[f64; 2]], b: &[[f64; 2]], cell: f64) -> Pile {
    let mut votes: BTreeMap<(i64, i64), u32> = BTreeMap::new();
    for p in a {
        for q in b {
            let at = |d: f64| (d / cell).floor() as i64;
            *votes.entry((at(p[0] - q[0]), at(p[1] - q[1]))).or_default() += 1;
        }
    }
    let sum_around = |&(i, j): &(i64, i64)| -> u32 {
        let near = |di: i64, dj: i64| votes.get(&(i + di, j + dj)).copied().unwrap_or(0);
        near(0, 0) + near(1, 0) + near(0, 1) + near(1, 1)
    };
    // Squares of four cells, so that a pile on an edge is not cut.
    let mut sums: Vec<f64> = votes.keys().map(|k| f64::from(sum_around(k))).collect();
    let top = sums.iter().copied().fold(0.0, f64::max);
    let chance = median(&mut sums).unwrap_or(0.0).max(1.0);
    Pile {
        votes: top,
        clear: (top - chance) / chance.sqrt(),
    }
}

/// Places of the brightest stars (or of the first, without magnitudes).
fn brightest(placed: &Placed) -> Vec<[f64; 2]> {
    let mut rows: Vec<usize> = (0..placed.list.len())
        .filter(|&k| placed.x_mas[k].abs() < f64::MAX)
        .collect();
    rows.sort_by(|&a, &b| placed.list.mag[a].total_cmp(&placed.list.mag[b]));
    rows.truncate(VOTERS);
    rows.iter()
        .map(|&k| [placed.x_mas[k], placed.y_mas[k]])
        .collect()
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::model::detection::{Ids, RawList};

    /// Stars strewn without symmetry (additive recurrence), mirrored or not, a little displaced.
    fn field(sign: f64, jitter: f64) -> Placed {
        let n = 120;
        let (mut x, mut y) = (Vec::new(), Vec::new());
        for k in 0..n {
            let t = f64::from(k);
            let wobble = jitter * (t * 0.73).sin();
            x.push(sign * 4000.0 * (t * 0.754_877_666).fract() + wobble + 900.0);
            y.push(4000.0 * (t * 0.569_840_290).fract() - wobble);
        }
        Placed {
            epoch: 0,
            list: RawList {
                ids: Ids::Numbers((0..n as u64).collect()),
                mag: (0..n).map(|k| 12.0 + 0.03 * f64::from(k)).collect(),
                x: x.clone(),
                y: y.clone(),
                ..RawList::default()
            },
            x_mas: x,
            y_mas: y,
            error_mas: 1.0,
        }
    }

    #[test]
    fn a_mirrored_field_is_noticed_and_a_shifted_one_is_not() {
        assert!(is_mirrored(&field(1.0, 20.0), &field(-1.0, -20.0), 50.0));
        assert!(!is_mirrored(&field(1.0, 20.0), &field(1.0, -20.0), 50.0));
    }
}
