//! Completeness: the chance that a star or blend of a given magnitude is listed at all.
//!
//! P_D(m) = top / (1 + exp((m - m50) / width)), times the chance of standing out from the light
//! of brighter neighbours, 1 / (1 + (H / F)^2) with H the wing light at the place. The wing is
//! followed as halo x (s / fwhm)^-3 of the neighbour's flux. Starting value of m50: a
//! tenth of a magnitude beyond the 90th percentile of a list (stated limits describe a whole field, crowded centre included);
//! refined by logistic regression on hits and misses of tracks, shrunk towards the start.

use crate::maths::lnprob::logistic;
use crate::maths::order;

#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Depth {
    pub m50: f64,
    pub width_mag: f64,
    pub top: f64,
    /// Wing light of a neighbour at one fwhm, as a fraction of its flux.
    pub halo: f64,
}

/// Range in which a completeness is kept, so that no single event is impossible.
const FLOOR: f64 = 1e-4;

impl Depth {
    /// Start from the magnitudes of a list; a list without magnitudes is complete.
    #[must_use]
    pub fn from_list(mags: &[f64]) -> Self {
        let mut m: Vec<f64> = mags.iter().copied().filter(|m| m.is_finite()).collect();
        let m50 = order::quantile(&mut m, 0.90).map_or(f64::INFINITY, |q| q + 0.1);
        Self {
            m50,
            width_mag: 0.3,
            top: 0.97,
            halo: 0.04,
        }
    }

    /// Chance of being listed, for an isolated source of magnitude `mag`.
    #[must_use]
    pub fn alone(&self, mag: f64) -> f64 {
        if !self.m50.is_finite() {
            return self.top;
        }
        (self.top * logistic((self.m50 - mag) / self.width_mag)).max(FLOOR)
    }

    /// Chance of standing out from wing light `halo_flux` for a source of flux `flux`.
    #[must_use]
    pub fn contrast(flux: f64, halo_flux: f64) -> f64 {
        let q = halo_flux / flux;
        1.0 / (1.0 + q * q)
    }

    /// Wing light of a neighbour of flux `flux` at a separation in fwhm.
    #[must_use]
    pub fn wing(&self, flux: f64, sep_fwhm: f64) -> f64 {
        self.halo * flux * sep_fwhm.max(0.6).powi(-3)
    }
}

/// One event for the regression: predicted magnitude and whether it was listed.
#[derive(Clone, Copy, Debug)]
pub struct Event {
    pub mag: f64,
    pub seen: bool,
}

/// Refit m50, width and top to events, shrunk towards `start` by a Gaussian prior.
///
/// Coordinate search on a fixed grid: robust, deterministic, a few hundred evaluations.
#[must_use]
pub fn refit(start: Depth, events: &[Event]) -> Depth {
    if events.len() < 8 || !start.m50.is_finite() {
        return start;
    }
    let score = |d: &Depth| -> f64 {
        let ln: f64 = events
            .iter()
            .map(|e| {
                let p = d.alone(e.mag).clamp(0.005, 0.995);
                if e.seen { p.ln() } else { (1.0 - p).ln() }
            })
            .sum();
        let a = (d.m50 - start.m50) / 0.5;
        let b = (d.width_mag / 0.25).ln() / 0.5;
        let c = (d.top - 0.97) / 0.04;
        ln - 0.5 * (a * a + b * b + c * c)
    };
    let mut best = (score(&start), start);
    let mut step = (0.4, 0.4, 0.03);
    for _ in 0..5 {
        for _ in 0..2 {
            let around = best.1;
            for k in -2i32..=2 {
                let d = Depth {
                    m50: around.m50 + step.0 * f64::from(k) * 0.5,
                    ..best.1
                };
                let s = score(&d);
                if s > best.0 {
                    best = (s, d);
                }
            }
            let around = best.1;
            for k in -2i32..=2 {
                let w = (around.width_mag * (step.1 * f64::from(k) * 0.5).exp()).clamp(0.05, 1.2);
                let d = Depth {
                    width_mag: w,
                    ..best.1
                };
                let s = score(&d);
                if s > best.0 {
                    best = (s, d);
                }
            }
            let around = best.1;
            for k in -2i32..=2 {
                let t = (around.top + step.2 * f64::from(k) * 0.5).clamp(0.5, 0.995);
                let d = Depth { top: t, ..best.1 };
                let s = score(&d);
                if s > best.0 {
                    best = (s, d);
                }
            }
        }
        step = (step.0 * 0.5, step.1 * 0.5, step.2 * 0.5);
    }
    best.1
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn regression_recovers_a_known_depth() {
        let truth = Depth {
            m50: 16.4,
            width_mag: 0.2,
            top: 0.95,
            halo: 0.0,
        };
        let start = Depth {
            m50: 16.0,
            width_mag: 0.3,
            top: 0.97,
            halo: 0.0,
        };
        // Deterministic draws: the golden-ratio sequence is uniform on (0, 1).
        let events: Vec<Event> = (0..4000)
            .map(|k| {
                let mag = 13.0 + 5.0 * ((k as f64 * 0.754_877_67) % 1.0);
                let u = (k as f64 * 0.618_033_99) % 1.0;
                Event {
                    mag,
                    seen: u < truth.alone(mag),
                }
            })
            .collect();
        let d = refit(start, &events);
        assert!((d.m50 - 16.4).abs() < 0.05, "{d:?}");
        assert!((d.top - 0.95).abs() < 0.02, "{d:?}");
    }
}
