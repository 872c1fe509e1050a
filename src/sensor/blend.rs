//! Place and flux of the light of several stars measured as one source.
//!
//! `psf`: fixed point of one-source least squares with the star profile,
//! x = sum w_k p_k / sum w_k, w_k = F_k exp(-|x - p_k|^2 / (4 sigma^2)), flux sum w_k.
//! `centroid`: flux-weighted mean, summed flux (the limit of small separations).

use crate::maths::units::FWHM_PER_SIGMA;
use crate::model::campaign::BlendLaw;

/// Predicted blend.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Blend {
    pub x_mas: f64,
    pub y_mas: f64,
    pub flux: f64,
}

/// Place of the blend of stars at `xy` with fluxes `flux`; `weights` receives each star's share.
pub fn place(
    law: BlendLaw,
    fwhm_mas: f64,
    xy: &[[f64; 2]],
    flux: &[f64],
    weights: &mut [f64],
) -> Blend {
    let total: f64 = flux.iter().sum();
    let (mut x, mut y) = (0.0, 0.0);
    for (p, f) in xy.iter().zip(flux) {
        x += p[0] * f;
        y += p[1] * f;
    }
    x /= total;
    y /= total;
    for (w, f) in weights.iter_mut().zip(flux) {
        *w = f / total;
    }
    if law == BlendLaw::Centroid {
        return Blend {
            x_mas: x,
            y_mas: y,
            flux: total,
        };
    }
    let four_var = 4.0 * (fwhm_mas / FWHM_PER_SIGMA).powi(2);
    let mut sum = total;
    for _ in 0..12 {
        sum = 0.0;
        let (mut nx, mut ny) = (0.0, 0.0);
        for ((p, f), w) in xy.iter().zip(flux).zip(weights.iter_mut()) {
            *w = f * (-((x - p[0]).powi(2) + (y - p[1]).powi(2)) / four_var).exp();
            sum += *w;
            nx += *w * p[0];
            ny += *w * p[1];
        }
        nx /= sum;
        ny /= sum;
        let moved = (nx - x).abs() + (ny - y).abs();
        x = nx;
        y = ny;
        if moved < 1e-4 * fwhm_mas {
            break;
        }
    }
    for w in weights.iter_mut() {
        *w /= sum;
    }
    Blend {
        x_mas: x,
        y_mas: y,
        flux: sum,
    }
}

/// How much of a blend it is, 0 to 1, from its stars' parts of the light: a companion with a few
/// per cent leaves the measurement of the main star as good as it was.
#[must_use]
pub fn mixed(parts: &[f64]) -> f64 {
    let main = parts.iter().copied().fold(0.0, f64::max);
    (3.0 * (1.0 - main)).min(1.0)
}

/// Flux relative to magnitude zero.
#[must_use]
pub fn flux_of(mag: f64) -> f64 {
    (-0.4 * std::f64::consts::LN_10 * mag).exp()
}

/// Magnitude of a flux.
#[must_use]
pub fn mag_of(flux: f64) -> f64 {
    -2.5 * flux.log10()
}
