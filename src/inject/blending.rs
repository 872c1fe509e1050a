//! Which stars an exposure cannot tell apart, and where their common light is measured.
//!
//! Two peaks of equal Gaussian images need a separation of fwhm (0.847 + 0.323 dm^0.63) for a
//! magnitude difference dm (a fit to numerical peaks; for dm = 0 it is the Sparrow limit of two
//! sigma). Fitting a known profile reaches below that, so every instrument has a factor on it.
//! The limit is soft. A one-profile fit to a blend lies where
//! x = sum(w p) / sum(w), w = F exp(-|x - p|^2 / (4 sigma^2)): the derivative of the fitted flux
//! by the position vanishes there.

use rand::{Rng, RngExt};

use super::settings::{BlendSettings, MockBlend, MockInstrument};
use crate::maths::lnprob::logistic;
use crate::maths::units::FWHM_PER_SIGMA;
use crate::near::Tree;

/// Magnitude difference beyond which the limit grows no further.
const LARGEST_DM: f64 = 5.0;

/// Light that an exposure sees as one source.
#[derive(Clone, Debug)]
pub struct Source {
    /// Where it is measured, without noise.
    pub at_mas: [f64; 2],
    /// Flux that is measured, without noise (1 at magnitude 0).
    pub flux: f64,
    /// Contributing stars with their share of the measured flux.
    pub parts: Vec<(u32, f64)>,
    /// The brightest of them.
    pub lead: u32,
}

/// Two stars near each other in one exposure.
#[derive(Clone, Copy, Debug)]
pub struct Approach {
    pub a: u32,
    pub b: u32,
    pub gap_mas: f64,
    /// Separation at which half of such pairs are told apart.
    pub limit_mas: f64,
}

/// Flux of a magnitude, 1 at magnitude 0.
#[must_use]
pub fn flux_of(mag: f64) -> f64 {
    10f64.powf(-0.4 * mag)
}

/// Magnitude of a flux.
#[must_use]
pub fn mag_of(flux: f64) -> f64 {
    -2.5 * flux.log10()
}

/// Separation \[mas\] at which half of the pairs of a magnitude difference are told apart.
#[must_use]
pub fn half_resolved_mas(dm: f64, instrument: &MockInstrument) -> f64 {
    let two_peaks = 0.847 + 0.323 * dm.abs().min(LARGEST_DM).powf(0.63);
    instrument.resolution * instrument.fwhm_mas * two_peaks
}

/// All pairs that may matter: closer than twice their limit.
#[must_use]
pub fn approaches(places_mas: &[[f64; 2]], mags: &[f64], i: &MockInstrument) -> Vec<Approach> {
    let reach = 1.2 * half_resolved_mas(LARGEST_DM, i);
    let (x, y): (Vec<f64>, Vec<f64>) = places_mas.iter().map(|p| (p[0], p[1])).unzip();
    let tree = Tree::build(&x, &y);
    let pairs = tree.close_pairs(reach);
    pairs
        .iter()
        .map(|p| Approach {
            a: p.left,
            b: p.right,
            gap_mas: p.dist_mas,
            limit_mas: half_resolved_mas(mags[p.left as usize] - mags[p.right as usize], i),
        })
        .collect()
}

/// Lets pairs merge by chance and measures what comes of them. Stars are taken from bright to
/// faint: each is a source of its own, or is lost in the nearest brighter source that it is not
/// told apart from. So a faint star between two bright ones does not tie them together.
pub fn sources(
    places_mas: &[[f64; 2]],
    mags: &[f64],
    pairs: &[Approach],
    i: &MockInstrument,
    law: &BlendSettings,
    rng: &mut impl Rng,
) -> Vec<Source> {
    let mut untold: Vec<(u32, u32, f64)> = Vec::new();
    for p in pairs {
        let resolved = logistic((p.gap_mas / p.limit_mas - 1.0) / law.softness);
        if rng.random::<f64>() >= resolved {
            let depth = p.gap_mas / p.limit_mas;
            untold.extend([(p.a, p.b, depth), (p.b, p.a, depth)]);
        }
    }
    untold.sort_unstable_by_key(|u| u.0);
    let mut order: Vec<u32> = (0..mags.len() as u32).collect();
    order.sort_by(|&a, &b| {
        mags[a as usize]
            .total_cmp(&mags[b as usize])
            .then(a.cmp(&b))
    });
    let mut host: Vec<Option<u32>> = vec![None; mags.len()];
    for &star in &order {
        let from = untold.partition_point(|u| u.0 < star);
        let nearest = untold[from..]
            .iter()
            .take_while(|u| u.0 == star)
            .filter(|u| host[u.1 as usize] == Some(u.1))
            .min_by(|a, b| a.2.total_cmp(&b.2).then(a.1.cmp(&b.1)));
        host[star as usize] = Some(nearest.map_or(star, |u| u.1));
    }
    let mut stars: Vec<(Option<u32>, u32)> = host.into_iter().zip(0..).collect();
    stars.sort_unstable();
    stars
        .chunk_by(|a, b| a.0 == b.0)
        .map(|group| {
            let lights: Vec<Light> = group
                .iter()
                .map(|&(_, star)| Light {
                    star,
                    at: places_mas[star as usize],
                    flux: flux_of(mags[star as usize]),
                })
                .collect();
            measured(&lights, i)
        })
        .collect()
}

struct Light {
    star: u32,
    at: [f64; 2],
    flux: f64,
}

fn measured(lights: &[Light], i: &MockInstrument) -> Source {
    let total: f64 = lights.iter().map(|l| l.flux).sum();
    let centroid = [0, 1].map(|a| lights.iter().map(|l| l.flux * l.at[a]).sum::<f64>() / total);
    let lead = lights
        .iter()
        .max_by(|a, b| a.flux.total_cmp(&b.flux))
        .map_or(0, |l| l.star);
    let weight = |l: &Light, x: [f64; 2]| match i.blend {
        MockBlend::Centroid => l.flux,
        MockBlend::Psf => {
            let sigma = i.fwhm_mas / FWHM_PER_SIGMA;
            let d2 = (x[0] - l.at[0]).powi(2) + (x[1] - l.at[1]).powi(2);
            l.flux * (-d2 / (4.0 * sigma * sigma)).exp()
        }
    };
    let mut x = centroid;
    if lights.len() > 1 && i.blend == MockBlend::Psf {
        // Each step raises the fitted flux (a mean shift), so this ends on a peak.
        for _ in 0..200 {
            let sum: f64 = lights.iter().map(|l| weight(l, x)).sum();
            let next =
                [0, 1].map(|a| lights.iter().map(|l| weight(l, x) * l.at[a]).sum::<f64>() / sum);
            let step = (next[0] - x[0]).hypot(next[1] - x[1]);
            x = next;
            if step < 1e-7 * i.fwhm_mas {
                break;
            }
        }
    }
    let flux: f64 = lights.iter().map(|l| weight(l, x)).sum();
    Source {
        at_mas: x,
        flux,
        parts: lights
            .iter()
            .map(|l| (l.star, weight(l, x) / flux))
            .collect(),
        lead,
    }
}

/// What neighbours that are told apart do to a source.
#[derive(Clone, Copy, Debug, Default)]
pub struct Disturbance {
    pub pull_mas: [f64; 2],
    /// Factor on the error, less one.
    pub blur: f64,
    /// Chance to stand out from the light of brighter neighbours.
    pub stands_out: f64,
}

/// Reach of a bright star's light, in fwhm.
const HALO_REACH_FWHM: f64 = 6.0;
/// Only stars brighter by this much hide others in their light.
const HALO_LEAST_MAG: f64 = 1.0;

/// Pulls, growth of errors and losses near brighter neighbours.
#[must_use]
pub fn disturbances(
    sources: &[Source],
    i: &MockInstrument,
    law: &BlendSettings,
) -> Vec<Disturbance> {
    let (x, y): (Vec<f64>, Vec<f64>) = sources.iter().map(|s| (s.at_mas[0], s.at_mas[1])).unzip();
    let pairs = Tree::build(&x, &y).close_pairs(HALO_REACH_FWHM * i.fwhm_mas);
    let mut out = vec![
        Disturbance {
            stands_out: 1.0,
            ..Disturbance::default()
        };
        sources.len()
    ];
    for p in &pairs {
        for (me, other) in [(p.left, p.right), (p.right, p.left)] {
            let (a, b) = (&sources[me as usize], &sources[other as usize]);
            let fainter_by = mag_of(a.flux) - mag_of(b.flux);
            let beyond = (p.dist_mas - half_resolved_mas(fainter_by, i)) / i.fwhm_mas;
            let near = (-beyond.max(0.0) / law.pull_range_fwhm).exp();
            let weight = near * b.flux / (a.flux + b.flux);
            let d = &mut out[me as usize];
            if p.dist_mas > 0.0 {
                let size = law.pull_fwhm * i.fwhm_mas * weight;
                for axis in [0, 1] {
                    d.pull_mas[axis] += size * (b.at_mas[axis] - a.at_mas[axis]) / p.dist_mas;
                }
            }
            d.blur = d.blur.max(law.blur * weight);
            if fainter_by > HALO_LEAST_MAG {
                let u = (p.dist_mas / i.fwhm_mas).max(0.3);
                let shown = law.halo_mag + law.halo_slope_mag * u.log10();
                d.stands_out *= logistic((shown - fainter_by) / law.halo_softness_mag);
            }
        }
    }
    out
}

#[cfg(test)]
mod tests {
    use super::*;

    fn pair(gap: f64, dm: f64, blend: MockBlend) -> Source {
        let i = MockInstrument {
            blend,
            ..MockInstrument::default()
        };
        let lights = [(0.0, 0.0), (gap * i.fwhm_mas, dm)].map(|(x, mag)| Light {
            star: u32::from(mag > 0.0),
            at: [x, 0.0],
            flux: flux_of(mag),
        });
        measured(&lights, &i)
    }

    /// Shift over flux-weighted shift for one-profile fits to a pair of Gaussians, by
    /// least squares on noiseless images (our own numerical experiment, two digits).
    #[test]
    fn a_fitted_blend_lies_nearer_to_the_brighter_star() {
        for (gap, dm, ratio) in [(0.3, 1.0, 0.96), (0.5, 1.0, 0.88), (0.5, 2.0, 0.79)] {
            let fit = pair(gap, dm, MockBlend::Psf).at_mas[0];
            let centroid = pair(gap, dm, MockBlend::Centroid).at_mas[0];
            assert!(
                (fit / centroid - ratio).abs() < 0.006,
                "gap {gap}, dm {dm}: {}",
                fit / centroid
            );
        }
    }

    #[test]
    fn shares_add_up_and_the_fitted_flux_falls_short() {
        let s = pair(0.4, 0.0, MockBlend::Psf);
        assert!((s.parts.iter().map(|p| p.1).sum::<f64>() - 1.0).abs() < 1e-12);
        // 0.06 to 0.09 mag at 0.4 to 0.5 fwhm for an equal pair (same experiment).
        let short = mag_of(s.flux) - mag_of(2.0);
        assert!((0.04..0.09).contains(&short), "{short}");
    }
}
