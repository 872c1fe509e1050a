//! Growing one track outward in time from an anchor detection, everything else held fixed.
//!
//! At each epoch the track is alone in a free detection, joins the stars of a held one (a
//! blend), or is missed, whichever costs least; the motion is updated by a Kalman step and
//! refitted now and then from several starts along the line of sight. A second pass over all
//! epochs revises every choice with the final motion.

use super::cost::{self, NEVER};
use super::scene::Scene;
use super::star::{Cell, Group, MAX_GROUP, Pred, Star};
use super::work::{self, Work};
use crate::maths::cov2::Cov2;
use crate::motion::state::{Dynamics, P6};
use crate::motion::state_fit::{self, Fit, Obs, core_wing};

/// A proposed track with its evidence.
#[derive(Clone, Debug)]
pub struct Draft {
    pub star: Star,
    pub worth: f64,
}

/// Buffers that a sequence of growths shares.
#[derive(Debug, Default)]
pub struct Scratch {
    hits: Vec<crate::near::Hit>,
    obs: Vec<Obs>,
    order: Vec<usize>,
}

/// Number of clean detections at which the motion is refitted from several starts.
const REFIT_AT: [usize; 9] = [3, 4, 6, 8, 11, 15, 21, 30, 42];

/// First guess of the parameters at an anchor, before anything is known of the motion.
#[must_use]
pub fn first_fit(scene: &Scene, obs: &[Obs], t0: f64) -> Option<Fit> {
    let (cx, cy) = scene.dynamics.centre_at(t0);
    let o = obs[0];
    let mut p = P6::zeros();
    p[0] = o.x_mas - cx;
    p[1] = o.y_mas - cy;
    if scene.dynamics.is_central() {
        p[2] = 0.7 * p[0].hypot(p[1]).max(5.0);
    }
    if obs.len() > 1 {
        let q = obs[1];
        let dt = q.t_yr - o.t_yr;
        if dt.abs() > 1e-4 {
            let i = if scene.dynamics.is_central() {
                (3, 4)
            } else {
                (2, 3)
            };
            let speed = scene.dynamics.top_speed_mas_yr(o.x_mas, o.y_mas, t0);
            p[i.0] = ((q.x_mas - o.x_mas) / dt).clamp(-speed, speed);
            p[i.1] = ((q.y_mas - o.y_mas) / dt).clamp(-speed, speed);
        }
    }
    state_fit::fit(&scene.dynamics, obs, t0, &p, 12)
}

/// Best of several starts along the line of sight around a fit.
#[must_use]
pub fn best_fit(dynamics: &Dynamics, obs: &[Obs], t0: f64, around: &P6, wide: bool) -> Option<Fit> {
    let mut best = state_fit::fit(dynamics, obs, t0, around, 20);
    if !dynamics.is_central() || !wide {
        return best;
    }
    let r = around[0].hypot(around[1]).max(5.0);
    let Dynamics::Central { gm_mas3_yr2, .. } = *dynamics else {
        return best;
    };
    for zr in [0.25, 0.8, 2.0] {
        let z = zr * r;
        let rr = r.hypot(z);
        let escape2 = 2.0 * gm_mas3_yr2 / rr;
        let v_xy2 = around[3] * around[3] + around[4] * around[4];
        let v_max = (escape2 - v_xy2).max(0.04 * escape2).sqrt();
        for vr in [-0.6, 0.0, 0.6] {
            let mut p = *around;
            p[2] = z;
            p[5] = vr * v_max;
            if let Some(f) = state_fit::fit(dynamics, obs, t0, &p, 20)
                && best
                    .as_ref()
                    .is_none_or(|b| f.ln_evidence > b.ln_evidence + 0.01)
            {
                best = Some(f);
            }
        }
    }
    best
}

/// Kalman step: take one position into a fit (parameters at the fit's own time).
fn absorb(dynamics: &Dynamics, fit: &mut Fit, o: &Obs) {
    let ((x, y), h) = dynamics.position_with_partials(&fit.p, fit.t0_yr, o.t_yr);
    let hc = h * fit.cov;
    let s = hc * h.transpose();
    let raw = Cov2 {
        xx: s[(0, 0)] + o.cov.xx,
        xy: s[(0, 1)] + o.cov.xy,
        yy: s[(1, 1)] + o.cov.yy,
    };
    let (dx, dy) = (o.x_mas - x, o.y_mas - y);
    // A position in the wing counts less.
    let w = core_wing(raw.chi2(dx, dy), 0.0).1;
    let total = Cov2 {
        xx: s[(0, 0)] + o.cov.xx / w,
        xy: s[(0, 1)] + o.cov.xy / w,
        yy: s[(1, 1)] + o.cov.yy / w,
    };
    let inv = total.inverse();
    let k0 = hc.row(0).transpose() * inv.xx + hc.row(1).transpose() * inv.xy;
    let k1 = hc.row(0).transpose() * inv.xy + hc.row(1).transpose() * inv.yy;
    fit.p += k0 * dx + k1 * dy;
    fit.cov -= k0 * hc.row(0) + k1 * hc.row(1);
    fit.cov = (fit.cov + fit.cov.transpose()) * 0.5;
    fit.n += 1;
}

/// The best choice at one epoch for a star predicted at `p`, everybody else fixed.
///
/// Returns the cell, its gain, and how far the runner-up (another detection) lies behind.
fn choose(
    scene: &Scene,
    work: &Work,
    e: usize,
    p: &Pred,
    own: Option<u32>,
    sc: &mut Scratch,
) -> (Cell, f64, f64) {
    let s = &scene.sights[e];
    let desk = &work.desks[e];
    let f = s.sensor.fwhm_mas;
    let reach = (cost::GATE_CHI2 * (p.cov.max_var() + (0.1 * f).powi(2)))
        .sqrt()
        .clamp(1.3 * f, 12.0 * f);
    s.tree.within(p.x, p.y, reach, &mut sc.hits);
    let (mut best, mut second) = ((Cell::Missed, 0.0), 0.0_f64);
    for h in &sc.hits {
        let d = h.row as usize;
        let g = desk.holders.of(d);
        let (cell, gain) = if g.is_empty() || own.is_some_and(|k| g.len() == 1 && g.has(k)) {
            (Cell::Alone(d as u32), cost::alone(s, d, p))
        } else {
            let mut ps: [&Pred; MAX_GROUP] = [p; MAX_GROUP];
            let mut n = 0;
            for &k in g.members() {
                if Some(k) != own && n < MAX_GROUP - 1 {
                    ps[n] = &desk.preds[k as usize];
                    n += 1;
                }
            }
            if n == MAX_GROUP - 1 || !(0..n).any(|i| (ps[i].x - p.x).hypot(ps[i].y - p.y) < 1.6 * f)
            {
                continue;
            }
            let without = cost::gain(s, d, &ps[..n]);
            let with = cost::shared(s, d, &ps[..=n]).gain;
            if with == NEVER {
                continue;
            }
            (Cell::Shared(d as u32), with - without.max(-30.0))
        };
        if gain > best.1 {
            second = best.1;
            best = (cell, gain);
        } else if gain > second {
            second = gain;
        }
    }
    (best.0, best.1, best.1 - second)
}

/// Prediction of a bare fit at an epoch, neighbours settled.
fn predict(scene: &Scene, work: &Work, e: usize, star: &Star, own: Option<u32>) -> Pred {
    let mut p = work::predict(scene, e, star, 0.0);
    if p.active {
        work::settle(scene, e, &work.desks[e], &mut p, own);
    }
    p
}

/// Grow a track from seed detections (the first is the anchor). `own`: the star being regrown;
/// what it holds counts as free.
#[must_use]
pub fn grow(
    scene: &Scene,
    work: &Work,
    seed: &[(usize, u32)],
    floor: f64,
    own: Option<u32>,
    sc: &mut Scratch,
) -> Option<Draft> {
    let t0 = scene.sights[seed[0].0].t_yr;
    observe(scene, seed, sc);
    let fit = first_fit(scene, &sc.obs, t0)?;
    grow_along(scene, work, seed, fit, floor, own, sc)
}

/// Grow a track from seed detections and a first guess of its motion at the time of the first.
#[must_use]
pub fn grow_from(
    scene: &Scene,
    work: &Work,
    seed: &[(usize, u32)],
    start: &P6,
    floor: f64,
    sc: &mut Scratch,
) -> Option<Draft> {
    let t0 = scene.sights[seed[0].0].t_yr;
    observe(scene, seed, sc);
    let fit = state_fit::fit(&scene.dynamics, &sc.obs, t0, start, 20)?;
    grow_along(scene, work, seed, fit, floor, None, sc)
}

fn observe(scene: &Scene, seed: &[(usize, u32)], sc: &mut Scratch) {
    sc.obs.clear();
    for &(e, d) in seed {
        sc.obs.push(work::observation(scene, e, d as usize, 0.0));
    }
}

fn grow_along(
    scene: &Scene,
    work: &Work,
    seed: &[(usize, u32)],
    fit: Fit,
    floor: f64,
    own: Option<u32>,
    sc: &mut Scratch,
) -> Option<Draft> {
    let (e0, d0) = seed[0];
    let t0 = scene.sights[e0].t_yr;
    let s0 = &scene.sights[e0];
    let n_epoch = scene.sights.len();
    let mag0 = if s0.mag[d0 as usize].is_finite() {
        s0.mag[d0 as usize]
    } else {
        s0.sensor.depth.m50.min(30.0)
    };
    let mut star = Star {
        fit,
        mag: mag0,
        mag_var: s0.mag_var[d0 as usize],
        cells: vec![Cell::Out; n_epoch],
        blends: Vec::new(),
        ln_extra: 0.0,
        worth: 0.0,
    };
    let mut visited = vec![false; n_epoch];
    let mut running = s0.ln_star[d0 as usize] - s0.ln_false[d0 as usize];
    for &(e, d) in seed {
        star.cells[e] = Cell::Alone(d);
        visited[e] = true;
    }
    remag(scene, &mut star);
    sc.order.clear();
    sc.order.extend((0..n_epoch).filter(|&e| !visited[e]));
    let (sights, mid) = (&scene.sights, t0);
    sc.order.sort_by(|&a, &b| {
        (sights[a].t_yr - mid)
            .abs()
            .total_cmp(&(sights[b].t_yr - mid).abs())
            .then(a.cmp(&b))
    });
    let order = std::mem::take(&mut sc.order);
    let mut n_clean = seed.len();
    for &e in &order {
        let p = predict(scene, work, e, &star, own);
        if !p.active {
            continue;
        }
        let (cell, gain, lead) = choose(scene, work, e, &p, own, sc);
        // Not to be seen beside a neighbour that may hide it says nothing yet.
        if p.ln_apart > HIDDEN_NATS || gain > 0.0 {
            running += p.ln_miss + gain;
        }
        if lead < 2.0 && gain > 0.0 && n_clean < 6 {
            // Undecided while little is known: leave this epoch for the second pass.
            continue;
        }
        star.cells[e] = cell;
        if let Cell::Alone(d) = cell {
            let o = work::observation(scene, e, d as usize, p.press);
            absorb(&scene.dynamics, &mut star.fit, &o);
            n_clean += 1;
            if REFIT_AT.contains(&n_clean) {
                work::clean_obs(scene, &star.cells, |_| 0.0, &mut sc.obs);
                let wide = matches!(n_clean, 4 | 8 | 15 | 30);
                if let Some(f) = best_fit(&scene.dynamics, &sc.obs, t0, &star.fit.p, wide) {
                    star.fit = f;
                }
            }
            remag(scene, &mut star);
        }
        if running < floor {
            sc.order = order;
            return None;
        }
    }
    sc.order = order;
    if n_clean < 2 {
        return None;
    }
    finish(scene, work, star, own, sc)
}

/// Magnitude of a growing star.
fn remag(scene: &Scene, star: &mut Star) {
    if let Some((m, v, _)) = work::magnitude(scene, &star.cells, |_| 1.0) {
        star.mag = m;
        star.mag_var = v;
    }
}

/// Revise every epoch with the whole motion, twice, and weigh the result.
#[must_use]
pub fn finish(
    scene: &Scene,
    work: &Work,
    mut star: Star,
    own: Option<u32>,
    sc: &mut Scratch,
) -> Option<Draft> {
    let n_epoch = scene.sights.len();
    let mut preds = vec![Pred::NONE; n_epoch];
    for pass in 0..2 {
        recentre(scene, &mut star);
        work::clean_obs(scene, &star.cells, |e| preds[e].press, &mut sc.obs);
        if sc.obs.is_empty() {
            return None;
        }
        let t0 = star.fit.t0_yr;
        star.blends.clear();
        star.fit = best_fit(&scene.dynamics, &sc.obs, t0, &star.fit.p, pass == 0)?;
        let contrast: Vec<f64> = preds.iter().map(|p| p.contrast).collect();
        let (m, v, _) = work::magnitude(scene, &star.cells, |e| contrast[e]).unwrap_or((
            star.mag,
            star.mag_var,
            0.0,
        ));
        star.mag = m;
        star.mag_var = v;
        for e in 0..n_epoch {
            let p = predict(scene, work, e, &star, own);
            star.cells[e] = if p.active {
                choose(scene, work, e, &p, own, sc).0
            } else {
                Cell::Out
            };
        }
        for (e, p) in preds.iter_mut().enumerate() {
            *p = predict(scene, work, e, &star, own);
        }
    }
    work::clean_obs(scene, &star.cells, |e| preds[e].press, &mut sc.obs);
    if sc.obs.len() < 2 {
        return None;
    }
    let t0 = star.fit.t0_yr;
    let n_alone = sc.obs.len();
    let mut blends = std::mem::take(&mut star.blends);
    work::blend_places(scene, &work.desks, &star, own, &mut blends);
    star.blends = blends;
    sc.obs.extend(star.blends.iter().map(|b| b.1));
    star.fit = state_fit::fit_with(&scene.dynamics, &sc.obs, n_alone, t0, &star.fit.p, 20)?;
    let parts = worth(scene, work, &star, own);
    let worth = parts.hopeful(3.0);
    star.worth = parts.total();
    Some(Draft { star, worth })
}

/// Move the parameters' time to the middle of the clean detections.
pub fn recentre(scene: &Scene, star: &mut Star) {
    let (mut sum, mut n) = (0.0, 0.0);
    for (e, c) in star.cells.iter().enumerate() {
        if matches!(c, Cell::Alone(_)) {
            sum += scene.sights[e].t_yr;
            n += 1.0;
        }
    }
    if n == 0.0 {
        return;
    }
    let t = sum / n;
    let dt = t - star.fit.t0_yr;
    if dt.abs() < 0.5 {
        return;
    }
    let p = &mut star.fit.p;
    match scene.dynamics {
        Dynamics::Central { gm_mas3_yr2, .. } => {
            let (r, v) = crate::motion::kepler::propagate(
                gm_mas3_yr2,
                [p[0], p[1], p[2]],
                [p[3], p[4], p[5]],
                dt,
            );
            *p = P6::new(r[0], r[1], r[2], v[0], v[1], v[2]);
            if p[2] < 0.0 {
                // Only the nearer mirror image is kept: (z, vz) and (-z, -vz) look the same.
                p[2] = -p[2];
                p[5] = -p[5];
            }
        }
        Dynamics::Free { .. } => {
            p[0] += p[2] * dt + 0.5 * p[4] * dt * dt;
            p[1] += p[3] * dt + 0.5 * p[5] * dt * dt;
            p[2] += p[4] * dt;
            p[3] += p[5] * dt;
        }
    }
    star.fit.t0_yr = t;
}

/// Evidence of a star in two parts \[nats\].
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Worth {
    /// From the detections it has alone, and from its misses.
    pub lone: f64,
    /// From being close to others: merged with them, or apart against the odds.
    pub group: f64,
}

impl Worth {
    #[must_use]
    pub fn total(self) -> f64 {
        self.lone + self.group
    }

    /// Total with the loss through others limited: they may have absorbed its light and will
    /// give it up once it exists.
    #[must_use]
    pub fn hopeful(self, most_loss: f64) -> f64 {
        self.lone + self.group.max(-most_loss)
    }
}

/// ln cost of being apart from all neighbours below which a missed star may be hidden.
const HIDDEN_NATS: f64 = -0.35;

/// Evidence of a star with everybody else fixed \[nats\]: how much better the lists are
/// explained with it than without it.
#[must_use]
pub fn worth(scene: &Scene, work: &Work, star: &Star, own: Option<u32>) -> Worth {
    let (mut apart, mut shared, mut hidden) = (0.0, 0.0, 0.0);
    let mut total = star.fit.ln_evidence + star.ln_extra;
    let mut ln_star = 0.0;
    let mut n = 0.0;
    for (e, cell) in star.cells.iter().enumerate() {
        let s = &scene.sights[e];
        let desk = &work.desks[e];
        let p = predict(scene, work, e, star, own);
        if !p.active {
            continue;
        }
        // Being apart from every neighbour: undone inside a group by the merge bonus.
        apart += p.ln_apart;
        total += p.ln_apart;
        total += p.ln_miss;
        if p.ln_apart < HIDDEN_NATS && matches!(cell, Cell::Missed) {
            // Not to be seen where a neighbour may hide it is a matter between the two.
            hidden += p.ln_miss;
        }
        match *cell {
            Cell::Alone(d) => {
                let d = d as usize;
                let m = if s.mag[d].is_finite() {
                    s.mag[d]
                } else {
                    star.mag
                };
                total += (s.sensor.depth.alone(m) * p.contrast).max(1e-4).ln()
                    - s.ln_false[d]
                    - p.ln_miss;
                ln_star += s.ln_star[d];
                n += 1.0;
            }
            Cell::Shared(d) => {
                let mut g: Group = *desk.holders.of(d as usize);
                if let Some(k) = own {
                    g.remove(k);
                }
                let mut ps: [&Pred; MAX_GROUP] = [&p; MAX_GROUP];
                let m = g.len().min(MAX_GROUP - 1);
                for (i, &k) in g.members().iter().take(m).enumerate() {
                    ps[i] = &desk.preds[k as usize];
                }
                let without = cost::gain(s, d as usize, &ps[..m]).max(-30.0);
                let with = cost::gain(s, d as usize, &ps[..=m]).max(-30.0);
                total += with - without;
                shared += with - without;
            }
            Cell::Missed | Cell::Out => {}
        }
    }
    if n > 0.0 {
        total += ln_star / n;
    }
    if let Some((_, _, ln)) = work::magnitude(scene, &star.cells, |_| 1.0) {
        total += ln;
    }
    let group = apart + shared + hidden;
    Worth {
        lone: total - group,
        group,
    }
}
