//! When a track or membership carries which flag.

use crate::maths::lnprob::ln_normal;
use crate::model::flag::Flags;
use crate::resolve::scene::Scene;
use crate::resolve::star::{Cell, Star};
use crate::resolve::work::Work;

/// Detections of its own below which a track is thin.
const FEW: usize = 5;
/// Gap \[yr\] and predicted growth that make a passage unsafe.
const GAP_YR: f64 = 2.0;

/// Flags of a whole track (memberships are flagged apart).
#[must_use]
pub fn of_track(scene: &Scene, work: &Work, k: usize, mag_scatter: Option<f64>) -> Flags {
    let star = &work.stars[k];
    let mut f = Flags::default();
    let clean = star
        .cells
        .iter()
        .filter(|c| matches!(c, Cell::Alone(_)))
        .count();
    if clean < FEW {
        f.set(Flags::FEW_EPOCHS);
    }
    if star.cells.iter().any(|c| matches!(c, Cell::Shared(_))) {
        f.set(Flags::MERGED);
    }
    if season_gap(scene, work, k, star) {
        f.set(Flags::SEASON_GAP);
    }
    let (mut edge, mut run, mut longest, mut last) = (false, 0i32, 0i32, 0i32);
    let mut crossing = false;
    let mut excess = 0.0;
    let mut n_clean = 0.0;
    for &e in &scene.by_time {
        let p = &work.desks[e].preds[k];
        let s = &scene.sights[e];
        if !p.active {
            continue;
        }
        edge |= s.data.region.edge_distance_mas(p.x, p.y) < s.sensor.fwhm_mas;
        crossing |= nearest(work, e, k) < s.sensor.fwhm_mas;
        if let Cell::Alone(d) = star.cells[e] {
            let d = d as usize;
            let (dx, dy) = (s.data.x_mas[d] - p.x, s.data.y_mas[d] - p.y);
            let cov = p.cov
                + s.sensor
                    .errors
                    .position(s.data.cov_mas2[d], p.press, s.sensor.fwhm_mas);
            excess += cov.chi2(dx, dy).min(40.0);
            n_clean += 2.0;
            let sign = if dx > 0.0 { 1 } else { -1 };
            run = if sign == last { run + 1 } else { 1 };
            last = sign;
            longest = longest.max(run);
        }
    }
    if edge {
        f.set(Flags::FIELD_EDGE);
    }
    if crossing {
        f.set(Flags::CROSSING);
    }
    if n_clean >= 8.0 && excess > 2.0 * n_clean {
        f.set(Flags::OFF_MODEL);
    }
    if longest >= 12 && f64::from(longest) > 0.3 * n_clean {
        f.set(Flags::OFF_MODEL);
    }
    if let Some(scatter) = mag_scatter
        && variable(scene, star, scatter)
    {
        f.set(Flags::VARIABLE);
    }
    if companion(scene, work, k) {
        f.set(Flags::COMPANION_ARTEFACT);
    }
    f
}

/// Distance of the nearest other predicted star \[mas\].
#[must_use]
pub fn nearest(work: &Work, e: usize, k: usize) -> f64 {
    let desk = &work.desks[e];
    let p = &desk.preds[k];
    let mut near = Vec::new();
    desk.grid.within(&desk.preds, p.x, p.y, 150.0, &mut near);
    near.iter()
        .filter(|&&q| q as usize != k)
        .map(|&q| (desk.preds[q as usize].x - p.x).hypot(desk.preds[q as usize].y - p.y))
        .fold(f64::INFINITY, f64::min)
}

/// A gap between detections after which the place could not be told to a resolution element.
fn season_gap(scene: &Scene, work: &Work, k: usize, star: &Star) -> bool {
    let mut last: Option<f64> = None;
    for &e in &scene.by_time {
        if star.cells[e].detection().is_none() {
            continue;
        }
        let s = &scene.sights[e];
        if let Some(t) = last
            && s.t_yr - t > GAP_YR
            && work.desks[e].preds[k].cov.max_var().sqrt() > 0.5 * s.sensor.fwhm_mas
        {
            return true;
        }
        last = Some(s.t_yr);
    }
    false
}

/// Scatter well above the believed errors.
fn variable(scene: &Scene, star: &Star, scatter: f64) -> bool {
    let mut var: Vec<f64> = Vec::new();
    for (e, c) in star.cells.iter().enumerate() {
        if let Cell::Alone(d) = *c {
            var.push(scene.sights[e].mag_var[d as usize]);
        }
    }
    let n = var.len();
    let expected = crate::maths::order::median(&mut var).unwrap_or(1.0).sqrt();
    n >= 6 && scatter > 2.0 * expected
}

/// Does the track stay within a few fwhm of a star at least three magnitudes brighter, at an
/// offset that wanders less than the two would on their own?
fn companion(scene: &Scene, work: &Work, k: usize) -> bool {
    let mut host: Option<u32> = None;
    let mut near = Vec::new();
    let (mut n, mut n_seen) = (0usize, 0usize);
    let (mut sum, mut sum2) = ([0.0; 2], [0.0; 2]);
    for &e in &scene.by_time {
        let desk = &work.desks[e];
        let p = &desk.preds[k];
        let Cell::Alone(d) = work.stars[k].cells[e] else {
            continue;
        };
        let s = &scene.sights[e];
        n_seen += 1;
        desk.grid
            .within(&desk.preds, p.x, p.y, 5.0 * s.sensor.fwhm_mas, &mut near);
        let bright = near
            .iter()
            .copied()
            .filter(|&q| q as usize != k && desk.preds[q as usize].mag < p.mag - 3.5)
            .min_by(|&a, &b| {
                desk.preds[a as usize]
                    .mag
                    .total_cmp(&desk.preds[b as usize].mag)
            });
        let Some(q) = bright else { continue };
        if host.is_some_and(|h| h != q) {
            continue;
        }
        host = Some(q);
        let h = &desk.preds[q as usize];
        let off = [
            s.data.x_mas[d as usize] - h.x,
            s.data.y_mas[d as usize] - h.y,
        ];
        for i in 0..2 {
            sum[i] += off[i];
            sum2[i] += off[i] * off[i];
        }
        n += 1;
    }
    if n < 4 || n * 10 < n_seen * 8 {
        return false;
    }
    let m = n as f64;
    let spread = (0..2)
        .map(|i| sum2[i] / m - (sum[i] / m).powi(2))
        .sum::<f64>()
        .max(0.0)
        .sqrt();
    spread < 0.6 * scene.sights[0].sensor.fwhm_mas
}

/// Is a member's brightness out of line with its track?
#[must_use]
pub fn flux_jump(dmag: f64, var: f64) -> bool {
    dmag.is_finite() && ln_normal(dmag, var) - ln_normal(0.0, var) < -8.0
}
