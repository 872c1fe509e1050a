//! Which pairs of stars become one detection.
//!
//! P(merged | s, dm) = top / (1 + exp((s / fwhm - limit - slope min(|dm|, 6)) / width)): half of the
//! pairs merge at limit + slope |dm|. (For equal Gaussian profiles two peaks need
//! s > 0.85 fwhm; fitting with a known profile goes lower, plain peak finding does not.)
//! Limit and width are estimated per instrument from pairs of like tracks seen merged and apart,
//! the limit only near its start; the slope is fixed.

use crate::maths::lnprob::logistic;

#[derive(Clone, Copy, Debug, PartialEq)]
pub struct PairLaw {
    /// Half-merge separation of equal stars \[fwhm\].
    pub limit_fwhm: f64,
    /// Its growth per magnitude of difference \[fwhm/mag\].
    pub slope_fwhm: f64,
    pub width_fwhm: f64,
}

/// Highest and lowest chance: no outcome is impossible.
const TOP: f64 = 0.985;
const BOTTOM: f64 = 1e-5;
/// The same for companions four or more magnitudes fainter: they may be lost in the glare
/// without being part of what is measured.
const TOP_FAINT: f64 = 0.75;

impl PairLaw {
    /// Start, before anything is known of an instrument.
    #[must_use]
    pub fn start() -> Self {
        Self {
            limit_fwhm: 0.65,
            slope_fwhm: 0.10,
            width_fwhm: 0.08,
        }
    }

    /// Chance that a pair at a separation \[fwhm\] with a magnitude difference is one detection.
    #[must_use]
    pub fn merged(&self, sep_fwhm: f64, dmag: f64) -> f64 {
        let limit = self.limit_fwhm + self.slope_fwhm * dmag.abs().min(6.0);
        let top = TOP - (TOP - TOP_FAINT) * ((dmag.abs() - 1.5) / 2.5).clamp(0.0, 1.0);
        (top * logistic((limit - sep_fwhm) / self.width_fwhm)).max(BOTTOM)
    }

    /// The law for a separation that is known with an error only. (A logistic step of width w
    /// averaged over a Gaussian of width s is close to one of width sqrt(w^2 + (0.6 s)^2).)
    #[must_use]
    pub fn blurred(mut self, sigma_fwhm: f64) -> Self {
        self.width_fwhm = self.width_fwhm.hypot(0.6 * sigma_fwhm.min(1.0));
        self
    }

    /// Separation \[fwhm\] beyond which merging can be ignored.
    #[must_use]
    pub fn reach_fwhm(&self) -> f64 {
        self.limit_fwhm + 6.0 * self.slope_fwhm + 6.0 * self.width_fwhm
    }
}

/// A pair of tracks at an epoch: predicted separation and what happened.
#[derive(Clone, Copy, Debug)]
pub struct PairEvent {
    pub sep_fwhm: f64,
    pub dmag: f64,
    /// Error of the separation along the line that joins the two.
    pub sigma_fwhm: f64,
    pub merged: bool,
    /// Weight of the event, at most one: a pair that is seen again and again in the same state is
    /// not many witnesses.
    pub weight: f64,
}

/// Share of pairs whose fate is misjudged: a star that is not known joins two that are apart,
/// or stands in for one of them.
const MISJUDGED: f64 = 0.06;

/// Refit to events, shrunk towards the start (one pseudo-observation per parameter).
#[must_use]
pub fn refit(start: PairLaw, events: &[PairEvent]) -> PairLaw {
    let score = |l: &PairLaw| -> f64 {
        let ln: f64 = events
            .iter()
            .map(|e| {
                let p = l.blurred(e.sigma_fwhm).merged(e.sep_fwhm, e.dmag);
                let p = MISJUDGED + (1.0 - 2.0 * MISJUDGED) * p;
                e.weight * if e.merged { p.ln() } else { (1.0 - p).ln() }
            })
            .sum();
        let a = (l.limit_fwhm - start.limit_fwhm) / 0.12;
        let c = (l.width_fwhm / start.width_fwhm).ln() / 0.5;
        ln - 0.5 * (a * a + c * c)
    };
    let mut best = (score(&start), start);
    let mut step = 1.0;
    for _ in 0..6 {
        for _ in 0..2 {
            let o = best.1;
            for k in -3i32..=3 {
                let t = PairLaw {
                    limit_fwhm: (o.limit_fwhm + 0.1 * step * f64::from(k))
                        .clamp(start.limit_fwhm - 0.25, start.limit_fwhm + 0.25),
                    ..best.1
                };
                let s = score(&t);
                if s > best.0 {
                    best = (s, t);
                }
            }
            let o = best.1;
            for k in -3i32..=3 {
                let t = PairLaw {
                    width_fwhm: (o.width_fwhm * (0.3 * step * f64::from(k)).exp()).clamp(0.02, 0.3),
                    ..best.1
                };
                let s = score(&t);
                if s > best.0 {
                    best = (s, t);
                }
            }
        }
        step *= 0.55;
    }
    best.1
}
