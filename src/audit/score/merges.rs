//! Detections that hold two or more stars: are they recognised, and as whose?

use super::case::Case;
use super::identity::{Matched, Verdict};
use super::sparse::counts;
use super::{Figures, PRESENT_SHARE, ratio};
use crate::maths::assign::FREE;

pub fn fill(case: &Case, matched: &Matched, judged: &[Verdict], out: &mut Figures) {
    let n_det = case.epoch_of.len();
    let (parts, merged, merged_fraction) = case.merged();
    // A share that is not given counts as present.
    let strong = |share: f64| share.is_nan() || share > PRESENT_SHARE;
    let present = case.given.iter().filter(|g| strong(g.share));
    let given = counts(n_det, present.map(|g| g.det));

    let alone = case
        .truth
        .iter()
        .filter(|t| t.present && parts[t.det as usize] == 1);
    let alone = counts(case.per_star.len(), alone.map(|t| t.star));
    let known = case
        .truth
        .iter()
        .filter(|t| t.present && alone[t.star as usize] >= 2);
    let known = counts(n_det, known.map(|t| t.det));

    let right = case.given.iter().zip(judged);
    let right = right
        .filter(|(row, v)| **v == Verdict::Right && matched.star_of[row.track as usize] != FREE);
    let right = counts(n_det, right.map(|(row, _)| row.det));

    let count = |test: &dyn Fn(usize) -> bool| (0..n_det).filter(|&d| test(d)).count() as u64;
    let is_given = |d: usize| given[d] >= 2;
    let is_true = |d: usize| parts[d] >= 2;
    let separable = |d: usize| is_true(d) && known[d] == parts[d];
    let both = count(&|d| is_true(d) && is_given(d));
    out.merge_precision = ratio(both, count(&is_given));
    out.merge_recall = ratio(both, merged);
    out.merge_recall_separable = ratio(count(&|d| separable(d) && is_given(d)), count(&separable));
    out.merge_all_right = ratio(count(&|d| is_true(d) && right[d] >= parts[d]), merged);
    out.merged_detections = merged;
    out.merged_fraction = merged_fraction;
}
