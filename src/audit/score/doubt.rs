//! Are probabilities honest, and is doubt placed where the mistakes are?

use serde::Serialize;

use super::case::Case;
use super::identity::Verdict;
use super::{DOUBT_PROBABILITY, Figures, ratio};

const BINS: usize = 10;

/// Memberships whose probability lies in one tenth of 0..1.
#[derive(Clone, Debug, Serialize)]
pub struct CalibrationBin {
    pub bin: String,
    pub n: u64,
    pub mean_probability: f64,
    pub fraction_right: f64,
}

/// The figures about doubt (all others left at their defaults), and the calibration table.
#[must_use]
pub fn doubt(case: &Case, judged: &[Verdict]) -> (Figures, Vec<CalibrationBin>) {
    let (mut all, mut wrong, mut doubted, mut doubted_wrong) = (0, 0, 0, 0);
    let mut given: Vec<(f64, bool)> = Vec::new();
    for (row, verdict) in case.given.iter().zip(judged) {
        if *verdict == Verdict::Trace {
            continue;
        }
        let is_wrong = *verdict == Verdict::Wrong;
        let is_doubted = row.ambiguous || row.probability < DOUBT_PROBABILITY;
        all += 1;
        wrong += u64::from(is_wrong);
        doubted += u64::from(is_doubted);
        doubted_wrong += u64::from(is_doubted && is_wrong);
        if row.probability.is_finite() {
            given.push((row.probability.clamp(0.0, 1.0), !is_wrong));
        }
    }
    let table = calibration(&given);
    let n = given.len() as f64;
    let some = !given.is_empty();
    let rate = given.iter().filter(|(_, right)| *right).count() as f64 / n;
    let square = |(p, right): &(f64, bool)| (p - f64::from(u8::from(*right))).powi(2);
    let error =
        |bin: &CalibrationBin| bin.n as f64 / n * (bin.mean_probability - bin.fraction_right).abs();
    let figures = Figures {
        wrong_memberships: ratio(wrong, all),
        doubt_recall: ratio(doubted_wrong, wrong),
        doubt_cost: ratio(doubted, all),
        doubt_precision: ratio(doubted_wrong, doubted),
        brier: some.then(|| given.iter().map(square).sum::<f64>() / n),
        brier_constant: some.then_some(rate * (1.0 - rate)),
        calibration_error: some.then(|| table.iter().map(error).sum()),
        ..Figures::default()
    };
    (figures, table)
}

fn calibration(given: &[(f64, bool)]) -> Vec<CalibrationBin> {
    let mut sums = [(0u64, 0.0, 0u64); BINS];
    for &(p, right) in given {
        let (n, sum, n_right) = &mut sums[((p * BINS as f64) as usize).min(BINS - 1)];
        *n += 1;
        *sum += p;
        *n_right += u64::from(right);
    }
    let edge = |k: usize| k as f64 / BINS as f64;
    (sums.iter().enumerate())
        .filter(|(_, (n, _, _))| *n > 0)
        .map(|(k, &(n, sum, n_right))| CalibrationBin {
            bin: format!("{:.1}-{:.1}", edge(k), edge(k + 1)),
            n,
            mean_probability: sum / n as f64,
            fraction_right: n_right as f64 / n as f64,
        })
        .collect()
}
