//! One total order of floats for every sort whose result must repeat.

use std::cmp::Ordering;

/// Total order of two floats (IEEE 754 totalOrder).
#[must_use]
pub fn by(a: f64, b: f64) -> Ordering {
    a.total_cmp(&b)
}

/// Median of a slice (mean of the middle two for an even count); `None` when empty.
#[must_use]
pub fn median(values: &mut [f64]) -> Option<f64> {
    if values.is_empty() {
        return None;
    }
    let n = values.len();
    let (_, hi, _) = values.select_nth_unstable_by(n / 2, f64::total_cmp);
    let hi = *hi;
    if n % 2 == 1 {
        return Some(hi);
    }
    let (_, lo, _) = values.select_nth_unstable_by(n / 2 - 1, f64::total_cmp);
    Some(0.5 * (*lo + hi))
}

/// Value below which a share `q` of the slice lies (nearest rank); `None` when empty.
#[must_use]
pub fn quantile(values: &mut [f64], q: f64) -> Option<f64> {
    if values.is_empty() {
        return None;
    }
    let k = ((values.len() - 1) as f64 * q.clamp(0.0, 1.0)).round() as usize;
    let (_, v, _) = values.select_nth_unstable_by(k, f64::total_cmp);
    Some(*v)
}
