//! Puts made-up stars into one epoch: lost in a listed star's light, listed, or not seen.

use rand::{Rng, RngExt};

use super::laws::EpochLaw;
use crate::inject::stars::normal;
use crate::maths::cov2::Cov2;
use crate::model::detection::FieldEpoch;
use crate::near::{Hit, Tree};
use crate::sensor::blend::{flux_of, mag_of, place};
use crate::sensor::depth::Depth;

/// Reach of the light of brighter neighbours, in fwhm.
const WING_REACH_FWHM: f64 = 4.0;
/// Only neighbours brighter by this much hide a star in their wings.
const WING_LEAST_MAG: f64 = 1.0;
/// A new detection takes the stated errors of one of so many listed ones of like magnitude.
const ALIKE: usize = 7;
/// A share of the light below this leaves no mark.
const TRACE_SHARE: f64 = 0.001;

/// A detection in which a made-up star gives some light.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Presence {
    pub epoch: u32,
    pub row: u32,
    pub share: f64,
}

/// Changes the lists of an epoch as `stars` (place, magnitude) would have done, and records
/// where each of them went.
pub fn insert(
    number: u32,
    epoch: &mut FieldEpoch,
    law: &EpochLaw,
    stars: &[([f64; 2], f64)],
    fates: &mut [Vec<Presence>],
    rng: &mut impl Rng,
) {
    if law.targeted {
        return;
    }
    let tree = Tree::build(&epoch.x_mas, &epoch.y_mas);
    let n_listed = epoch.len();
    let mut by_mag: Vec<u32> = (0..n_listed as u32)
        .filter(|&k| epoch.mag[k as usize].is_finite())
        .collect();
    by_mag.sort_by(|&a, &b| {
        let mag = |k: u32| epoch.mag[k as usize];
        mag(a).total_cmp(&mag(b)).then(a.cmp(&b))
    });
    if by_mag.is_empty() {
        return; // without magnitudes nothing says how bright a star has to be
    }
    let mut hits: Vec<Hit> = Vec::new();
    for (k, &(at, mag)) in stars.iter().enumerate() {
        // As many draws for every star, whatever becomes of it.
        let noise: [f64; 3] = std::array::from_fn(|_| normal(rng));
        let chance: [f64; 2] = std::array::from_fn(|_| rng.random());
        if !epoch.region.contains(at[0], at[1]) {
            continue;
        }
        let reach = law.pairs.reach_fwhm().max(WING_REACH_FWHM) * epoch.fwhm_mas;
        tree.within(at[0], at[1], reach, &mut hits);
        let mut near: Vec<u32> = hits.iter().map(|h| h.row).collect();
        near.extend(n_listed as u32..epoch.len() as u32); // those added before
        if let Some(host) = host(epoch, law, at, mag, &near, chance[0]) {
            let share = blend_into(epoch, law, host as usize, at, mag);
            for before in fates[..k].iter_mut() {
                for p in before
                    .iter_mut()
                    .filter(|p| p.epoch == number && p.row == host)
                {
                    p.share *= 1.0 - share;
                }
            }
            if share > TRACE_SHARE {
                fates[k].push(Presence {
                    epoch: number,
                    row: host,
                    share,
                });
            }
            continue;
        }
        let flux = flux_of(mag);
        let wings: f64 = (near.iter().map(|&row| row as usize))
            .filter(|&row| epoch.mag[row] < mag - WING_LEAST_MAG)
            .map(|row| {
                let gap = (epoch.x_mas[row] - at[0]).hypot(epoch.y_mas[row] - at[1]);
                law.depth
                    .wing(flux_of(epoch.mag[row]), gap / epoch.fwhm_mas)
            })
            .sum();
        let seen = law.depth.alone(mag) * Depth::contrast(flux, wings);
        if chance[1] < seen {
            let middle = by_mag.partition_point(|&r| epoch.mag[r as usize] < mag);
            let from = middle
                .saturating_sub(ALIKE / 2)
                .min(by_mag.len().saturating_sub(ALIKE));
            let to = (from + ALIKE).min(by_mag.len());
            let like = by_mag[rng.random_range(from..to)] as usize;
            let row = list(epoch, law, at, mag, like, noise);
            fates[k].push(Presence {
                epoch: number,
                row,
                share: 1.0,
            });
        }
    }
}

/// The listed detection that a star is lost in, if any. One chance decides over all of them: the
/// star is told apart from all with the product of the single chances.
fn host(
    epoch: &FieldEpoch,
    law: &EpochLaw,
    at: [f64; 2],
    mag: f64,
    near: &[u32],
    chance: f64,
) -> Option<u32> {
    let mut apart = 1.0;
    let mut closest: Option<(f64, u32)> = None;
    for &row in near {
        let k = row as usize;
        let gap = (epoch.x_mas[k] - at[0]).hypot(epoch.y_mas[k] - at[1]) / epoch.fwhm_mas;
        if !epoch.mag[k].is_finite() || gap > law.pairs.reach_fwhm() {
            continue;
        }
        let merged = law.pairs.merged(gap, epoch.mag[k] - mag);
        apart *= 1.0 - merged;
        if closest.is_none_or(|(best, _)| merged > best) {
            closest = Some((merged, row));
        }
    }
    closest.filter(|_| chance >= apart).map(|(_, row)| row)
}

/// Moves and brightens a detection by a star's light; returns the star's share.
fn blend_into(epoch: &mut FieldEpoch, law: &EpochLaw, row: usize, at: [f64; 2], mag: f64) -> f64 {
    let places = [[epoch.x_mas[row], epoch.y_mas[row]], at];
    let fluxes = [flux_of(epoch.mag[row]), flux_of(mag)];
    let mut shares = [0.0; 2];
    let blend = place(law.blend, epoch.fwhm_mas, &places, &fluxes, &mut shares);
    epoch.x_mas[row] = blend.x_mas;
    epoch.y_mas[row] = blend.y_mas;
    epoch.mag[row] = mag_of(blend.flux);
    shares[1]
}

/// Adds a detection with the stated errors of a listed one and the true errors that go with them.
fn list(
    epoch: &mut FieldEpoch,
    law: &EpochLaw,
    at: [f64; 2],
    mag: f64,
    like: usize,
    noise: [f64; 3],
) -> u32 {
    let stated = epoch.cov_mas2[like];
    let floor = law.error_floor_mas * law.error_floor_mas;
    let cov = stated.scaled(law.error_factor * law.error_factor) + Cov2::round(floor);
    // Cholesky factor of the true covariance.
    let a = cov.xx.sqrt();
    let b = cov.xy / a;
    let c = (cov.yy - b * b).max(0.0).sqrt();
    let mag_err = epoch.mag_err[like];
    let mag_sigma = if mag_err.is_finite() { mag_err } else { 0.1 };
    epoch.x_mas.push(at[0] + a * noise[0]);
    epoch.y_mas.push(at[1] + b * noise[0] + c * noise[1]);
    epoch.cov_mas2.push(stated);
    epoch.mag.push(mag + mag_sigma * noise[2]);
    epoch.mag_err.push(mag_err);
    for column in [&mut epoch.rv_km_s, &mut epoch.rv_err_km_s] {
        if !column.is_empty() {
            column.push(f64::NAN);
        }
    }
    if !epoch.quality.is_empty() {
        epoch.quality.push(1.0);
    }
    (epoch.x_mas.len() - 1) as u32
}

#[cfg(test)]
mod tests {
    use rand::SeedableRng;

    use super::*;
    use crate::model::campaign::BlendLaw;
    use crate::model::region::Region;
    use crate::model::time::JulianYear;
    use crate::sensor::pairs::PairLaw;

    fn epoch() -> FieldEpoch {
        let n = 40;
        FieldEpoch {
            time: JulianYear(2005.0),
            instrument: 0,
            fwhm_mas: 50.0,
            x_mas: (0..n).map(|k| 400.0 * f64::from(k % 8)).collect(),
            y_mas: (0..n).map(|k| 400.0 * f64::from(k / 8)).collect(),
            cov_mas2: vec![Cov2::round(1.0); n as usize],
            mag: (0..n).map(|k| 12.0 + 0.1 * f64::from(k)).collect(),
            mag_err: vec![0.02; n as usize],
            rv_km_s: Vec::new(),
            rv_err_km_s: Vec::new(),
            quality: Vec::new(),
            region: Region::default(),
        }
    }

    fn law() -> EpochLaw {
        EpochLaw {
            depth: Depth {
                m50: 16.0,
                width_mag: 0.2,
                top: 1.0,
                halo: 0.04,
            },
            pairs: PairLaw::start(),
            blend: BlendLaw::Centroid,
            error_factor: 1.0,
            error_floor_mas: 0.0,
            targeted: false,
        }
    }

    #[test]
    fn a_star_is_lost_listed_or_not_seen() {
        let mut e = epoch();
        // On the star of row 0, on free sky, and far below the depth.
        let stars = [
            ([3.0, 0.0], 12.0),
            ([200.0, 200.0], 13.0),
            ([600.0, 200.0], 19.0),
        ];
        let mut fates = vec![Vec::new(); 3];
        let mut rng = rand_chacha::ChaCha8Rng::seed_from_u64(1);
        insert(7, &mut e, &law(), &stars, &mut fates, &mut rng);
        assert_eq!((fates[0][0].row, fates[1][0].row), (0, 40));
        assert!((fates[0][0].share - 0.5).abs() < 1e-9 && fates[2].is_empty());
        // Two equal stars: half way, and 2.5 log10(2) = 0.753 mag brighter.
        assert!((e.x_mas[0] - 1.5).abs() < 1e-9 && (e.mag[0] - (12.0 - 0.752_575)).abs() < 1e-5);
        assert!((e.x_mas[40] - 200.0).abs() < 5.0 && e.len() == 41);
    }
}
