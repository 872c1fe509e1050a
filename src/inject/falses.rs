//! Detections that are no stars: noise peaks, specks around bright stars, and artefacts that
//! keep a bright star company for years while the image turns under them.

use rand::{Rng, RngExt};
use rand_distr::{Distribution, Poisson};

use super::exposure::Instant;
use super::settings::{MockInstrument, MockSettings};
use super::stars::{Sky, normal};

/// An artefact tied to a bright star and an instrument.
#[derive(Clone, Debug)]
pub struct Companion {
    star: u32,
    instrument: usize,
    distance_fwhm: f64,
    angle_rad: f64,
    turn_rad_yr: f64,
    fainter_mag: f64,
}

/// Wander of a companion from its slowly turning place, in fwhm.
const WANDER_FWHM: f64 = 0.25;
/// Chance that a companion belongs to an instrument at all.
const ARTEFACT_MAGS: (f64, f64) = (4.0, 5.5);

/// Which bright stars have such a companion, with which instrument.
pub fn companions(settings: &MockSettings, sky: &Sky, rng: &mut impl Rng) -> Vec<Companion> {
    let mut out = Vec::new();
    for (k, instrument) in settings.instrument.iter().enumerate() {
        for (star, s) in sky.stars.iter().enumerate() {
            let draw: [f64; 5] = std::array::from_fn(|_| rng.random());
            let bright = s.mag < instrument.limit_mag - settings.falses.bright_mag;
            if bright && draw[0] < settings.falses.companion_fraction {
                out.push(Companion {
                    star: star as u32,
                    instrument: k,
                    distance_fwhm: 2.5 + 1.5 * draw[1],
                    angle_rad: std::f64::consts::TAU * draw[2],
                    turn_rad_yr: 0.1 * (2.0 * draw[3] - 1.0),
                    fainter_mag: ARTEFACT_MAGS.0 + (ARTEFACT_MAGS.1 - ARTEFACT_MAGS.0) * draw[4],
                });
            }
        }
    }
    out
}

/// Places and magnitudes of false detections of one exposure with `n_listed` real ones.
pub fn draw(
    settings: &MockSettings,
    instrument: &MockInstrument,
    now: Instant<'_>,
    companions: &[Companion],
    n_listed: usize,
    half_width_mas: f64,
    rng: &mut impl Rng,
) -> Vec<([f64; 2], f64)> {
    let law = &settings.falses;
    let mut out = Vec::new();
    for _ in 0..poisson(law.uniform_fraction * n_listed as f64, rng) {
        let at = [0, 1].map(|_| half_width_mas * (2.0 * rng.random::<f64>() - 1.0));
        // Noise peaks crowd at the limit: their number grows tenfold in 1.25 mag.
        let mag = instrument.limit_mag + 0.3 + rng.random::<f64>().log10() / 0.8;
        out.push((at, mag));
    }
    for (star, &mag) in now.mags.iter().enumerate() {
        if mag > instrument.limit_mag - law.bright_mag {
            continue;
        }
        for _ in 0..poisson(law.ring, rng) {
            let distance = instrument.fwhm_mas * (1.4 + 2.6 * rng.random::<f64>());
            let angle = std::f64::consts::TAU * rng.random::<f64>();
            let faint = mag + 3.5 + 2.0 * rng.random::<f64>();
            let at = around(now.places_mas[star], distance, angle);
            out.push((at, faint.min(instrument.limit_mag + 0.2)));
        }
    }
    for c in companions {
        let (seen, wander) = (rng.random::<f64>(), [normal(rng), normal(rng)]);
        let same = settings.instrument[c.instrument].name == instrument.name;
        if !same || seen >= law.companion_seen {
            continue;
        }
        let star = c.star as usize;
        let distance = instrument.fwhm_mas * (c.distance_fwhm + WANDER_FWHM * wander[0]);
        let drift = WANDER_FWHM * wander[1] / c.distance_fwhm;
        let angle = c.angle_rad + c.turn_rad_yr * now.time_yr + drift;
        let mag = (now.mags[star] + c.fainter_mag).min(instrument.limit_mag + 0.2);
        out.push((around(now.places_mas[star], distance, angle), mag));
    }
    out
}

fn around(p: [f64; 2], distance_mas: f64, angle_rad: f64) -> [f64; 2] {
    let (sin, cos) = angle_rad.sin_cos();
    [p[0] + distance_mas * sin, p[1] + distance_mas * cos]
}

/// A Poisson number; 0 for a mean that is not positive.
fn poisson(mean: f64, rng: &mut impl Rng) -> usize {
    Poisson::new(mean).map_or(0, |p| p.sample(rng) as usize)
}
