//! The state of the search: all tracks, their predictions at every epoch, and who holds what.

use super::cost;
use super::grid::Grid;
use super::holders::Holders;
use super::scene::Scene;
use super::star::{Cell, MAX_GROUP, Pred, Star};
use crate::maths::cov2::Cov2;
use crate::motion::state_fit::{self, Obs, core_wing};
use crate::sensor::blend::{self, flux_of};

/// One epoch's predictions and holders.
#[derive(Clone, Debug, Default)]
pub struct Desk {
    pub preds: Vec<Pred>,
    pub grid: Grid,
    /// Stars that hold each detection.
    pub holders: Holders,
}

/// Tracks and desks (one desk per epoch).
#[derive(Clone, Debug, Default)]
pub struct Work {
    pub stars: Vec<Star>,
    pub desks: Vec<Desk>,
}

impl Work {
    /// No tracks yet.
    #[must_use]
    pub fn empty(scene: &Scene) -> Self {
        let desks = scene
            .sights
            .iter()
            .map(|s| Desk {
                preds: Vec::new(),
                grid: Grid::over(&s.data.x_mas, &s.data.y_mas, 1.5 * s.sensor.fwhm_mas),
                holders: Holders::all(s.len()),
            })
            .collect();
        Self {
            stars: Vec::new(),
            desks,
        }
    }

    /// Adds a finished star and books its detections.
    pub fn add(&mut self, scene: &Scene, star: Star) -> u32 {
        let k = self.stars.len() as u32;
        for (e, cell) in star.cells.iter().enumerate() {
            let desk = &mut self.desks[e];
            if let Some(d) = cell.detection() {
                desk.holders.push(d, k);
            }
            let mut p = predict(scene, e, &star, 0.0);
            if p.active {
                settle(scene, e, desk, &mut p, None);
                desk.preds.push(p);
                desk.grid.insert(k, p.x, p.y);
            } else {
                desk.preds.push(Pred::NONE);
            }
        }
        self.stars.push(star);
        k
    }

    /// Takes a star's bookings away; its slot stays until the next compaction.
    pub fn withdraw(&mut self, k: u32) {
        let star = &self.stars[k as usize];
        for (e, cell) in star.cells.iter().enumerate() {
            let desk = &mut self.desks[e];
            if let Some(d) = cell.detection() {
                desk.holders.remove(d, k);
            }
            let p = desk.preds[k as usize];
            if p.active {
                desk.grid.remove(k, p.x, p.y);
                desk.preds[k as usize].active = false;
            }
        }
    }

    /// Puts a star into an emptied slot.
    pub fn replace(&mut self, scene: &Scene, k: u32, star: Star) {
        for (e, cell) in star.cells.iter().enumerate() {
            let desk = &mut self.desks[e];
            if let Some(d) = cell.detection() {
                desk.holders.push(d, k);
            }
            let mut p = predict(scene, e, &star, 0.0);
            if p.active {
                settle(scene, e, desk, &mut p, Some(k));
                desk.grid.insert(k, p.x, p.y);
            }
            desk.preds[k as usize] = p;
        }
        self.stars[k as usize] = star;
    }
}

/// A fitted place with one of the positions that made it taken out again.
fn without((x, y): (f64, f64), cov: Cov2, own: &Obs) -> ((f64, f64), Cov2) {
    let (dx, dy) = (own.x_mas - x, own.y_mas - y);
    let w = own
        .cov
        .inverse()
        .scaled(core_wing(own.cov.chi2(dx, dy), 0.0).1);
    let full = cov.inverse();
    let less = Cov2 {
        xx: full.xx - w.xx,
        xy: full.xy - w.xy,
        yy: full.yy - w.yy,
    };
    if less.xx <= 0.02 * full.xx || less.yy <= 0.02 * full.yy || less.det() <= 4e-4 * full.det() {
        return ((x, y), cov.scaled(50.0));
    }
    let out = less.inverse();
    let bx = full.xx * x + full.xy * y - w.xx * own.x_mas - w.xy * own.y_mas;
    let by = full.xy * x + full.yy * y - w.xy * own.x_mas - w.yy * own.y_mas;
    ((out.xx * bx + out.xy * by, out.xy * bx + out.yy * by), out)
}

/// Prediction of a star at an epoch, its own detection there left out.
#[must_use]
pub fn predict(scene: &Scene, e: usize, star: &Star, press: f64) -> Pred {
    let s = &scene.sights[e];
    let ((mut x, mut y), mut cov) = star.fit.predict(&scene.dynamics, s.t_yr);
    if !(x.is_finite() && y.is_finite() && cov.xx.is_finite() && s.data.region.contains(x, y)) {
        return Pred::NONE;
    }
    let (mut mag, mut mag_var) = (star.mag, star.mag_var);
    if let Ok(i) = star.blends.binary_search_by_key(&(e as u32), |b| b.0) {
        ((x, y), cov) = without((x, y), cov, &star.blends[i].1);
    } else if let Cell::Alone(d) = star.cells[e] {
        let d = d as usize;
        ((x, y), cov) = without((x, y), cov, &observation(scene, e, d, press));
        if s.mag[d].is_finite() {
            let wm = 1.0 / s.mag_var[d];
            let full = 1.0 / mag_var;
            if full - wm > 0.1 * full {
                mag = (full * mag - wm * s.mag[d]) / (full - wm);
                mag_var = 1.0 / (full - wm);
            } else {
                mag_var = (mag_var * 10.0).max(0.05);
            }
        }
    }
    Pred {
        active: true,
        x,
        y,
        cov,
        mag,
        mag_var,
        flux: flux_of(mag),
        contrast: 1.0,
        press,
        ln_miss: 0.0,
        ln_apart: 0.0,
    }
}

/// Neighbour-dependent parts of a prediction.
pub fn settle(scene: &Scene, e: usize, desk: &Desk, p: &mut Pred, own: Option<u32>) {
    let s = &scene.sights[e];
    let mut near = Vec::with_capacity(16);
    desk.grid
        .within(&desk.preds, p.x, p.y, 4.0 * s.sensor.fwhm_mas, &mut near);
    let preds = &desk.preds;
    let mut it = near
        .iter()
        .filter(|&&q| Some(q) != own)
        .map(|&q| preds[q as usize]);
    cost::settle(s, p, &mut it);
}

/// Predict all stars at an epoch afresh.
#[must_use]
pub fn desk(scene: &Scene, e: usize, stars: &[Star], old: Option<&Desk>) -> Desk {
    let s = &scene.sights[e];
    let mut preds: Vec<Pred> = stars
        .iter()
        .enumerate()
        .map(|(k, star)| {
            let press = old.and_then(|o| o.preds.get(k)).map_or(0.0, |p| p.press);
            predict(scene, e, star, press)
        })
        .collect();
    let grid = Grid::build(&preds, 1.5 * s.sensor.fwhm_mas);
    let mut near = Vec::with_capacity(32);
    for k in 0..preds.len() {
        if !preds[k].active {
            continue;
        }
        grid.within(
            &preds,
            preds[k].x,
            preds[k].y,
            4.0 * s.sensor.fwhm_mas,
            &mut near,
        );
        let mut p = preds[k];
        cost::settle(
            s,
            &mut p,
            &mut near
                .iter()
                .filter(|&&q| q as usize != k)
                .map(|&q| preds[q as usize]),
        );
        preds[k] = p;
    }
    let mut holders = Holders::all(s.len());
    for (k, star) in stars.iter().enumerate() {
        if let Some(d) = star.cells[e].detection() {
            holders.push(d, k as u32);
        }
    }
    Desk {
        preds,
        grid,
        holders,
    }
}

/// Clean positions of a star, for its fit.
pub fn clean_obs(scene: &Scene, cells: &[Cell], press: impl Fn(usize) -> f64, out: &mut Vec<Obs>) {
    out.clear();
    for (e, cell) in cells.iter().enumerate() {
        if let Cell::Alone(d) = *cell {
            out.push(observation(scene, e, d as usize, press(e)));
        }
    }
}

/// One detection as a position with believed errors.
#[must_use]
pub fn observation(scene: &Scene, e: usize, d: usize, press: f64) -> Obs {
    let s = &scene.sights[e];
    Obs {
        t_yr: s.t_yr,
        x_mas: s.data.x_mas[d],
        y_mas: s.data.y_mas[d],
        cov: s
            .sensor
            .errors
            .position(s.data.cov_mas2[d], press, s.sensor.fwhm_mas),
    }
}

/// Least share of a blend's light from which a star's own place is worked out.
const LEAST_PART: f64 = 0.06;

/// Places of a star worked out from the blends it is part of: what is left of a blend's place
/// once the other members' parts are taken away (Cov grows as the inverse square of the share).
pub fn blend_places(
    scene: &Scene,
    desks: &[Desk],
    star: &Star,
    own: Option<u32>,
    out: &mut Vec<(u32, Obs)>,
) {
    out.clear();
    for (e, cell) in star.cells.iter().enumerate() {
        if let Cell::Shared(d) = *cell
            && let Some(o) = blend_place(scene, e, d as usize, &desks[e], star, own)
        {
            out.push((e as u32, o));
        }
    }
}

fn blend_place(
    scene: &Scene,
    e: usize,
    d: usize,
    desk: &Desk,
    star: &Star,
    own: Option<u32>,
) -> Option<Obs> {
    let s = &scene.sights[e];
    let sn = &s.sensor;
    let mut xy = [[0.0; 2]; MAX_GROUP];
    let mut flux = [0.0; MAX_GROUP];
    let mut part = [0.0; MAX_GROUP];
    let mut others = [0u32; MAX_GROUP];
    let ((x, y), _) = star.fit.predict(&scene.dynamics, s.t_yr);
    xy[0] = [x, y];
    flux[0] = flux_of(star.mag);
    let mut n = 1;
    for &k in desk.holders.of(d).members() {
        if Some(k) == own || n == MAX_GROUP {
            continue;
        }
        let p = &desk.preds[k as usize];
        if !p.active {
            return None;
        }
        xy[n] = [p.x, p.y];
        flux[n] = p.flux;
        others[n] = k;
        n += 1;
    }
    if n < 2 {
        return None;
    }
    let b = blend::place(sn.blend, sn.fwhm_mas, &xy[..n], &flux[..n], &mut part[..n]);
    let w = part[0];
    if w < LEAST_PART {
        return None;
    }
    let (mut px, mut py) = (s.data.x_mas[d], s.data.y_mas[d]);
    let mut cov = sn.errors.position(s.data.cov_mas2[d], 0.0, sn.fwhm_mas);
    let mut spread2 = 0.0;
    let mut light = 0.0;
    for i in 0..n {
        spread2 += part[i] * ((xy[i][0] - b.x_mas).powi(2) + (xy[i][1] - b.y_mas).powi(2));
        if i > 0 {
            let p = &desk.preds[others[i] as usize];
            px -= part[i] * xy[i][0];
            py -= part[i] * xy[i][1];
            cov += p.cov.scaled(part[i] * part[i]);
            // A magnitude error of the pair moves the shares.
            let dm2 = p.mag_var + star.mag_var + sn.errors.blend_mag.powi(2);
            let off2 = (xy[i][0] - x).powi(2) + (xy[i][1] - y).powi(2);
            light += (part[i] * w).powi(2) * 0.85 * dm2 * off2;
        }
    }
    let model = sn.blend_error_mas(blend::mixed(&part[..n]), spread2);
    cov += Cov2::round(model * model + light);
    Some(Obs {
        t_yr: s.t_yr,
        x_mas: px / w,
        y_mas: py / w,
        cov: cov.scaled(1.0 / (w * w)),
    })
}

/// Magnitude of a star from its clean detections and its misses; (mag, variance, ln evidence).
#[must_use]
pub fn magnitude(
    scene: &Scene,
    cells: &[Cell],
    contrast: impl Fn(usize) -> f64,
) -> Option<(f64, f64, f64)> {
    let mut m: Vec<(f64, f64)> = Vec::with_capacity(cells.len());
    let mut missed: Vec<(usize, f64)> = Vec::new();
    for (e, cell) in cells.iter().enumerate() {
        let s = &scene.sights[e];
        match *cell {
            Cell::Alone(d) if s.mag[d as usize].is_finite() => {
                m.push((s.mag[d as usize], s.mag_var[d as usize]))
            }
            Cell::Missed if !s.sensor.targeted => missed.push((e, contrast(e))),
            _ => {}
        }
    }
    if m.is_empty() {
        return None;
    }
    let mut sorted: Vec<f64> = m.iter().map(|q| q.0).collect();
    let mut mean = crate::maths::order::median(&mut sorted)?;
    let mut var = 1.0;
    for _ in 0..6 {
        let (mut sw, mut swm) = (0.0, 0.0);
        for &(x, v) in &m {
            let c2 = (x - mean).powi(2) / v;
            // Responsibility of the core against a wing three times as wide with weight 0.1.
            let core = 0.9 * (-0.5 * c2).exp();
            let wing = 0.1 / 3.0 * (-0.5 * c2 / 9.0).exp();
            let w = (core + wing / 9.0) / (core + wing) / v;
            sw += w;
            swm += w * x;
        }
        mean = swm / sw;
        var = 1.0 / sw;
    }
    if !missed.is_empty() {
        // A star often missed is fainter than its hits say: move along the joint likelihood.
        let at = |mm: f64| -> f64 {
            let miss: f64 = missed
                .iter()
                .map(|&(e, c)| {
                    (1.0 - scene.sights[e].sensor.depth.alone(mm) * c)
                        .max(1e-3)
                        .ln()
                })
                .sum();
            miss - 0.5 * (mm - mean).powi(2) / var
        };
        let sd = var.sqrt();
        let mut best = (at(mean), mean);
        for k in 1..=12 {
            let mm = mean + 0.25 * f64::from(k) * sd;
            let v = at(mm);
            if v > best.0 {
                best = (v, mm);
            }
        }
        mean = best.1;
    }
    let ln: f64 = m.iter().map(|&(x, v)| cost::ln_mag(x - mean, v)).sum();
    Some((
        mean,
        var + 4e-4,
        ln + 0.5 * (2.0 * std::f64::consts::PI * (var + 4e-4)).ln(),
    ))
}

/// Refit a star to its clean detections; false when it has none.
pub fn refit(
    scene: &Scene,
    star: &mut Star,
    press: impl Fn(usize) -> f64,
    contrast: impl Fn(usize) -> f64,
    (desks, own): (&[Desk], Option<u32>),
    steps: usize,
) -> bool {
    let mut obs = Vec::with_capacity(star.cells.len());
    clean_obs(scene, &star.cells, press, &mut obs);
    if obs.is_empty() {
        return false;
    }
    let n_clean = obs.len();
    let mut blends = std::mem::take(&mut star.blends);
    blend_places(scene, desks, star, own, &mut blends);
    star.blends = blends;
    obs.extend(star.blends.iter().map(|b| b.1));
    if let Some(f) = state_fit::fit_with(
        &scene.dynamics,
        &obs,
        n_clean,
        star.fit.t0_yr,
        &star.fit.p,
        steps,
    ) {
        star.fit = f;
    }
    if let Some((m, v, _)) = magnitude(scene, &star.cells, contrast) {
        star.mag = m;
        star.mag_var = v;
    }
    true
}
