//! First tracks of a campaign of two or three epochs: pairs between its first two epochs.
//!
//! Problem: with so few epochs nothing but a position, a magnitude and what is usual in the field
//! speaks for a pair, and taking the best pair first would let one star rob the next of its
//! partner.
//!
//! Method: the set of pairs with the largest total evidence (an assignment), found twice. The
//! first set teaches what the second uses:
//! * the step and the scatter between the magnitudes of two different bands;
//! * how many detections of either list stay single, by magnitude. That two detections are no
//!   pair means that both are single: nearly impossible for a bright star in a list that misses
//!   none, usual where one list goes deeper than the other;
//! * for detections so close together that chance does not do it, the two motions are weighed
//!   jointly: companions move along with each other.
//!
//! Fails for a close pair of unlike motion of which one list holds only one, or their common
//! light: nothing here tells which of the two it was.

use rayon::prelude::*;

use super::prepare::apply_laws;
use super::rounds::BIRTH_NATS;
use super::seeds::Seeds;
use crate::maths::assign::{Edges, Solver};
use crate::maths::lnprob::ln_add;
use crate::maths::order;
use crate::near::Hit;
use crate::resolve::cost;
use crate::resolve::grow::{self, Scratch};
use crate::resolve::scene::{Scene, Sight};
use crate::resolve::star::{Cell, Star};
use crate::resolve::work::{self, Work};

/// Campaigns of so few epochs begin with an assignment of pairs.
pub const FEW_EPOCHS: usize = 3;

/// Evidence below which a pair is not even a part of a joint choice.
const HOPELESS_NATS: f64 = -12.0;
/// Evidence from which a pair may teach the difference of the magnitude scales.
const SECURE_NATS: f64 = 8.0;
/// Scatter of the colours of stars between two instruments whose bands are not known to be the
/// same (common practice, no source).
const COLOUR_MAG: f64 = 0.2;
/// Weight of that default against the scatter found \[pairs\].
const COLOUR_WEIGHT: f64 = 10.0;
/// Partners looked at.
const PARTNERS: usize = 8;
/// Detections of like magnitude whose singles are counted: so many, and no farther off.
const LIKE: usize = 16;
const LIKE_MAG: f64 = 1.0;
/// Weight of the law's share of false detections in that count \[detections\].
const SHARE_WEIGHT: f64 = 1.0;
/// Share of stars with a listed companion (common practice, no source).
const COMPANIONS: f64 = 0.05;
/// Neighbours that tell the local density.
const NEIGHBOURS: usize = 12;
/// Motion of companions about each other, as a share of the field's dispersion; a distribution
/// with a wide foot, so the value matters little.
const KIN_SPEED: f64 = 0.1;
/// Separations are looked at as long as a companion there is at least this likely.
const LEAST_KIN: f64 = 0.5;

/// Adds the pairs to an empty search.
pub fn births(scene: &mut Scene, seeds: &Seeds, work: &mut Work) {
    let &[first, second, ..] = scene.by_time.as_slice() else {
        return;
    };
    let bands_differ = scene.sights[first].data.instrument != scene.sights[second].data.instrument;
    if bands_differ {
        for s in &mut scene.sights {
            s.sensor.errors.mag_floor = s.sensor.errors.mag_floor.max(COLOUR_MAG);
            apply_laws(s);
        }
    }
    let drafts = pairs(scene, seeds, work, first, second);
    learn_magnitudes(scene, &drafts, second, bands_differ);
    learn_singles(scene, &drafts, first, second);
    let mut drafts = pairs(scene, seeds, work, first, second);
    favour_kin(scene, &mut drafts, first, second);
    for (row, mate) in choose(scene, &drafts, second) {
        let Some(pair) = drafts[row].iter().find(|p| p.row == mate) else {
            continue;
        };
        let mut star = pair.draft.star.clone();
        star.ln_extra = pair.ln_extra;
        work.add(scene, star);
    }
}

/// A detection of the second epoch that could be the same star.
struct Pair {
    row: u32,
    draft: grow::Draft,
    /// What the general cost does not hold: the colour, and a companion that moves along.
    ln_extra: f64,
    /// Magnitude there minus here.
    step_mag: f64,
}

impl Pair {
    fn worth(&self) -> f64 {
        self.draft.worth + self.ln_extra
    }
}

/// Possible pairs by detection of the first epoch.
fn pairs(scene: &Scene, seeds: &Seeds, work: &Work, first: usize, second: usize) -> Vec<Vec<Pair>> {
    (0..scene.sights[first].len() as u32)
        .into_par_iter()
        .map_init(Scratch::default, |sc, d| {
            seeds
                .partners(scene, work, (first, d), PARTNERS)
                .into_iter()
                .filter(|&(e, _)| e == second)
                .filter_map(|(e, q)| {
                    let draft = grow::grow(scene, work, &[(first, d), (e, q)], -25.0, None, sc)?;
                    let step_mag =
                        scene.sights[e].mag[q as usize] - scene.sights[first].mag[d as usize];
                    let fits = draft.star.cells[e] == Cell::Alone(q);
                    let ln_extra = colour_once(scene, &draft.star, step_mag);
                    (draft.worth > HOPELESS_NATS && fits).then_some(Pair {
                        row: q,
                        draft,
                        ln_extra,
                        step_mag,
                    })
                })
                .collect()
        })
        .collect()
}

/// The cost takes the scatter of each magnitude by itself, each with its wing. Between two bands
/// it is the colour of the star, one number: its wing counts once.
fn colour_once(scene: &Scene, star: &Star, step_mag: f64) -> f64 {
    let clean: Vec<(&Sight, usize)> = scene
        .sights
        .iter()
        .zip(&star.cells)
        .filter_map(|(s, cell)| match *cell {
            Cell::Alone(d) => Some((s, d as usize)),
            _ => None,
        })
        .collect();
    let &[(s, d), (o, q)] = clean.as_slice() else {
        return 0.0;
    };
    if s.data.instrument == o.data.instrument || !step_mag.is_finite() {
        return 0.0;
    }
    let twice = work::magnitude(scene, &star.cells, |_| 1.0).map_or(0.0, |m| m.2);
    cost::ln_mag(step_mag, s.mag_var[d] + o.mag_var[q]) - twice
}

/// The set of pairs with the largest total evidence, each pair more likely than not.
fn choose(scene: &Scene, drafts: &[Vec<Pair>], second: usize) -> Vec<(usize, u32)> {
    let mut starts = vec![0u32];
    let (mut to, mut cost) = (Vec::new(), Vec::new());
    for row in drafts {
        for p in row.iter().filter(|p| p.worth() > BIRTH_NATS) {
            to.push(p.row);
            cost.push(p.worth());
        }
        starts.push(to.len() as u32);
    }
    let mut solver = Solver::default();
    solver.max_weight(Edges {
        n_right: scene.sights[second].len(),
        first: &starts,
        to: &to,
        cost: &cost,
    });
    (0..).zip(solver.right_of_left().iter().copied()).collect()
}

/// The step between the magnitude scales, and between different bands its scatter, from the
/// secure pairs.
fn learn_magnitudes(scene: &mut Scene, drafts: &[Vec<Pair>], second: usize, bands_differ: bool) {
    let mut steps: Vec<f64> = drafts
        .iter()
        .filter_map(|row| {
            row.iter()
                .max_by(|a, b| a.draft.worth.total_cmp(&b.draft.worth))
        })
        .filter(|p| p.draft.worth > SECURE_NATS && p.step_mag.is_finite())
        .map(|p| p.step_mag)
        .collect();
    let n = steps.len() as f64;
    if steps.len() < 2 {
        return;
    }
    let Some(step) = order::median(&mut steps) else {
        return;
    };
    scene.sights[second].sensor.zero_point_mag -= step;
    let mut off: Vec<f64> = steps.iter().map(|s| (s - step).abs()).collect();
    if bands_differ && let Some(mad) = order::median(&mut off) {
        // 1.4826 median absolute deviations are one standard deviation; the two lists share it.
        let found = (1.482_6 * mad).powi(2) / 2.0;
        let var = (n * found + COLOUR_WEIGHT * COLOUR_MAG.powi(2)) / (n + COLOUR_WEIGHT);
        for s in &mut scene.sights {
            s.sensor.errors.mag_floor = var.sqrt();
        }
    }
    for s in &mut scene.sights {
        apply_laws(s);
    }
}

/// The share of singles by magnitude, from the best set of pairs so far.
fn learn_singles(scene: &mut Scene, drafts: &[Vec<Pair>], first: usize, second: usize) {
    let chosen = choose(scene, drafts, second);
    let mut paired = [first, second].map(|e| vec![false; scene.sights[e].len()]);
    for (row, mate) in chosen {
        if let Some(there) = paired[1].get_mut(mate as usize) {
            *there = true;
            paired[0][row] = true;
        }
    }
    for (e, paired) in [first, second].into_iter().zip(&paired) {
        let s = &mut scene.sights[e];
        s.ln_single = ln_singles(s, paired);
        apply_laws(s);
    }
}

/// ln of the share of singles among the detections nearest in magnitude, each one's own fate
/// left out.
fn ln_singles(s: &Sight, paired: &[bool]) -> Vec<f64> {
    let mut by_mag: Vec<usize> = (0..s.len()).filter(|&d| s.mag[d].is_finite()).collect();
    by_mag.sort_by(|&a, &b| s.mag[a].total_cmp(&s.mag[b]).then(a.cmp(&b)));
    let share = s.sensor.falses.share;
    let mut out = vec![share.ln(); s.len()];
    for (i, &d) in by_mag.iter().enumerate() {
        let (mut lo, mut hi) = (i, i);
        let gap = |k: usize| (s.mag[by_mag[k]] - s.mag[d]).abs();
        while hi - lo < LIKE {
            let below = lo.checked_sub(1).map_or(f64::INFINITY, gap);
            let above = if hi + 1 < by_mag.len() {
                gap(hi + 1)
            } else {
                f64::INFINITY
            };
            if below.min(above) > LIKE_MAG {
                break;
            }
            if below <= above {
                lo -= 1;
            } else {
                hi += 1;
            }
        }
        let others = by_mag[lo..=hi].iter().filter(|&&k| k != d);
        let singles = others.filter(|&&k| !paired[k]).count() as f64;
        let n = (hi - lo) as f64;
        out[d] = ((singles + SHARE_WEIGHT * share) / (n + SHARE_WEIGHT)).ln();
    }
    out
}

/// Raises the pairs of companions that do best together.
fn favour_kin(scene: &Scene, drafts: &mut [Vec<Pair>], first: usize, second: usize) {
    let s = &scene.sights[first];
    let dt_yr = scene.sights[second].t_yr - s.t_yr;
    let mut hits = Vec::new();
    for i in 0..s.len() {
        // A companion is as likely as a chance neighbour at this separation.
        let per_mas2 = density_mas2(s, i, &mut hits);
        let far = (COMPANIONS * (1.0 / LEAST_KIN - 1.0) / (std::f64::consts::PI * per_mas2)).sqrt();
        s.tree
            .within(s.data.x_mas[i], s.data.y_mas[i], far, &mut hits);
        for h in &hits {
            let j = h.row as usize;
            // Each two once, seen from the brighter.
            let seen = s.mag[j].total_cmp(&s.mag[i]).then(j.cmp(&i)).is_le();
            if seen {
                continue;
            }
            let chance = std::f64::consts::PI * h.dist_mas.powi(2) * per_mas2;
            let p_kin = COMPANIONS / (COMPANIONS + chance);
            raise_best(scene, drafts, (i, j), dt_yr, p_kin);
        }
    }
}

/// Density of detections around one, from the distance of the twelfth neighbour.
fn density_mas2(s: &Sight, d: usize, hits: &mut Vec<Hit>) -> f64 {
    let (x, y) = (s.data.x_mas[d], s.data.y_mas[d]);
    s.tree.nearest_n(x, y, NEIGHBOURS + 1, hits);
    let far = hits.last().map_or(0.0, |h| h.dist_mas);
    let n = hits.len().saturating_sub(1).max(1) as f64;
    n / (std::f64::consts::PI * far.max(s.sensor.fwhm_mas).powi(2))
}

/// Gives the pairs of two detections that do best together, if they are two pairs, their gain
/// over two motions that know nothing of each other.
fn raise_best(
    scene: &Scene,
    drafts: &mut [Vec<Pair>],
    (i, j): (usize, usize),
    dt_yr: f64,
    p_kin: f64,
) {
    let velocity = |p: &Pair| {
        let fit = &p.draft.star.fit;
        let at = |t: f64| scene.dynamics.position(&fit.p, fit.t0_yr, t);
        let (a, b) = (at(fit.t0_yr), at(fit.t0_yr + dt_yr));
        [(b.0 - a.0) / dt_yr, (b.1 - a.1) / dt_yr]
    };
    let single = |row: &[Pair]| row.iter().map(Pair::worth).fold(BIRTH_NATS, f64::max);
    let mut best = (
        single(&drafts[i]).max(single(&drafts[j])),
        None::<(usize, usize, f64)>,
    );
    for (a, p) in drafts[i].iter().enumerate() {
        for (b, q) in drafts[j].iter().enumerate().filter(|(_, q)| q.row != p.row) {
            let Some(gain) = kin_gain(scene, velocity(p), velocity(q), p_kin) else {
                return;
            };
            let total = p.worth() + q.worth() + gain;
            if total > best.0 {
                best = (total, Some((a, b, gain)));
            }
        }
    }
    if let (_, Some((a, b, gain))) = best {
        drafts[i][a].ln_extra += 0.5 * gain;
        drafts[j][b].ln_extra += 0.5 * gain;
    }
}

/// ln of p(second velocity | first) / p(second velocity); `None` near a mass.
fn kin_gain(scene: &Scene, v: [f64; 2], w: [f64; 2], p_kin: f64) -> Option<f64> {
    let scale = KIN_SPEED * scene.dynamics.speed_mas_yr(0.0, 0.0, 0.0);
    let off2 = ((w[0] - v[0]).powi(2) + (w[1] - v[1]).powi(2)) / (scale * scale);
    // Two-dimensional Student distribution with one degree of freedom.
    let ln_near = -(2.0 * std::f64::consts::PI * scale * scale).ln() - 1.5 * (1.0 + off2).ln();
    let ln_free = scene.dynamics.ln_velocity(w[0], w[1])?;
    let (yes, no) = (p_kin.ln(), (1.0 - p_kin).max(1e-12).ln());
    Some(ln_add(no, yes + ln_near - ln_free))
}
