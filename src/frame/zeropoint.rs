//! Photometric zero point per epoch from reference stars.
//!
//! Model m_ek + z_e = M_k: star magnitudes and zero points are found in turn as Student-t means
//! (4 degrees of freedom, scale from the median deviation), so that variable stars and blends do
//! not steer them. z is to be added to the listed magnitudes; the reference epoch has z = 0. With
//! different bands z holds the mean colour. Fails quietly where an epoch shares fewer than
//! [`MIN_STARS`] stars: it gets no zero point.

use crate::maths::order;

/// Fewest stars for a zero point.
pub const MIN_STARS: usize = 5;
const ROUNDS: usize = 8;
/// Least scatter of a magnitude difference.
const FLOOR_MAG: f64 = 0.01;

/// A magnitude of a reference star.
#[derive(Clone, Copy, Debug)]
pub struct Magnitude {
    pub epoch: u32,
    pub star: u32,
    pub mag: f64,
}

/// Zero point and error per epoch \[mag\].
#[must_use]
pub fn zero_points(
    seen: &[Magnitude],
    n_epochs: usize,
    n_stars: usize,
    reference: usize,
) -> Vec<Option<(f64, f64)>> {
    let mut by_epoch: Vec<Vec<usize>> = vec![Vec::new(); n_epochs];
    let mut by_star: Vec<Vec<usize>> = vec![Vec::new(); n_stars];
    for (k, m) in seen.iter().enumerate() {
        if m.mag.is_finite() {
            by_epoch[m.epoch as usize].push(k);
            by_star[m.star as usize].push(k);
        }
    }
    let mut zero = vec![0.0; n_epochs];
    let mut found: Vec<Option<(f64, f64)>> = vec![None; n_epochs];
    let mut star_mag = vec![f64::NAN; n_stars];
    let mut scratch = Vec::new();
    for _ in 0..ROUNDS {
        for (star, rows) in by_star.iter().enumerate() {
            scratch.clear();
            scratch.extend(
                rows.iter()
                    .map(|&k| seen[k].mag + zero[seen[k].epoch as usize]),
            );
            if let Some((mean, _)) = t_mean(&mut scratch) {
                star_mag[star] = mean;
            }
        }
        for (epoch, rows) in by_epoch.iter().enumerate() {
            scratch.clear();
            // A star seen only here says nothing.
            scratch.extend(
                rows.iter()
                    .filter(|&&k| by_star[seen[k].star as usize].len() > 1)
                    .map(|&k| star_mag[seen[k].star as usize] - seen[k].mag),
            );
            if scratch.len() < MIN_STARS {
                continue;
            }
            if let Some(z) = t_mean(&mut scratch) {
                zero[epoch] = z.0;
                found[epoch] = Some(z);
            }
        }
    }
    let offset = zero.get(reference).copied().unwrap_or(0.0);
    for z in found.iter_mut().flatten() {
        z.0 -= offset;
    }
    found
}

/// Student-t mean and its error; `None` for no values.
fn t_mean(values: &mut [f64]) -> Option<(f64, f64)> {
    let mut centre = order::median(values)?;
    let mut away: Vec<f64> = values.iter().map(|v| (v - centre).abs()).collect();
    let scale = (1.4826 * order::median(&mut away)?).max(FLOOR_MAG);
    let mut sum_w = 0.0;
    for _ in 0..5 {
        let mut sum = 0.0;
        sum_w = 0.0;
        for v in values.iter() {
            let w = 5.0 / (4.0 + ((v - centre) / scale).powi(2));
            sum += w * v;
            sum_w += w;
        }
        centre = sum / sum_w;
    }
    Some((centre, scale / sum_w.sqrt()))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn an_offset_epoch_is_found_despite_a_variable_star() {
        let mut seen = Vec::new();
        for epoch in 0..4 {
            for star in 0..12 {
                let mut mag = 12.0 + 0.3 * f64::from(star);
                if epoch == 2 {
                    mag += 0.25;
                }
                if star == 3 {
                    mag += f64::from(epoch);
                }
                seen.push(Magnitude { epoch, star, mag });
            }
        }
        let z = zero_points(&seen, 4, 12, 0);
        assert!((z[2].unwrap().0 + 0.25).abs() < 0.01, "{z:?}");
        assert!(z[1].unwrap().0.abs() < 0.01 && z[0].unwrap().0 == 0.0);
    }
}
