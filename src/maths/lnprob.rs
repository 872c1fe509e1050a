//! Stable arithmetic on natural logarithms of probabilities.

/// ln(exp(a) + exp(b)).
#[must_use]
pub fn ln_add(a: f64, b: f64) -> f64 {
    let (hi, lo) = if a >= b { (a, b) } else { (b, a) };
    if lo == f64::NEG_INFINITY {
        hi
    } else {
        hi + (lo - hi).exp().ln_1p()
    }
}

/// ln of the sum of exp over a slice; minus infinity for an empty one.
#[must_use]
pub fn ln_sum(values: &[f64]) -> f64 {
    let top = values.iter().copied().fold(f64::NEG_INFINITY, f64::max);
    if top == f64::NEG_INFINITY {
        return top;
    }
    top + values.iter().map(|v| (v - top).exp()).sum::<f64>().ln()
}

/// 1 / (1 + exp(-x)).
#[must_use]
pub fn logistic(x: f64) -> f64 {
    if x >= 0.0 {
        1.0 / (1.0 + (-x).exp())
    } else {
        let e = x.exp();
        e / (1.0 + e)
    }
}

/// Logarithm of the normal density.
#[must_use]
pub fn ln_normal(d: f64, var: f64) -> f64 {
    -0.5 * (d * d / var + var.ln() + (2.0 * std::f64::consts::PI).ln())
}
