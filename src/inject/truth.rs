//! Classes of the true stars, from where they were and whom they met.

use std::collections::BTreeMap;

use super::blending::Approach;
use super::stars::Sky;

/// A star that leaves its best straight line by this much is strongly curved: about a mass, and
/// in a field without one.
const STRONG_MAS: (f64, f64) = (40.0, 25.0);
/// Only neighbours this close in magnitude count as an encounter.
const ALIKE_MAG: f64 = 2.0;

/// Collects which pairs were within the resolution at some exposures and apart at others.
#[derive(Clone, Debug, Default)]
pub struct Encounters {
    /// Exposures in which a pair was within the limit.
    within: BTreeMap<(u32, u32), u32>,
    exposures: u32,
}

impl Encounters {
    pub fn add(&mut self, approaches: &[Approach], mags: &[f64]) {
        self.exposures += 1;
        for p in approaches {
            let alike = (mags[p.a as usize] - mags[p.b as usize]).abs() < ALIKE_MAG;
            if alike && p.gap_mas < p.limit_mas {
                *self.within.entry((p.a, p.b)).or_default() += 1;
            }
        }
    }

    /// Stars that met a neighbour and were apart from it at another time.
    #[must_use]
    pub fn stars(&self, n_stars: usize) -> Vec<bool> {
        let mut out = vec![false; n_stars];
        for (&(a, b), &n) in &self.within {
            if n < self.exposures {
                out[a as usize] = true;
                out[b as usize] = true;
            }
        }
        out
    }
}

/// Is a star strongly curved on the sky?
#[must_use]
pub fn is_strong(sky: &Sky, departure_mas: f64) -> bool {
    let limit = if sky.gm_mas3_yr2 > 0.0 {
        STRONG_MAS.0
    } else {
        STRONG_MAS.1
    };
    departure_mas > limit
}
