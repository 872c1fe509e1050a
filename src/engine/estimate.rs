//! Estimates the observing laws from the tracks of the moment.
//!
//! Every estimate is a robust statistic of residuals predicted without the detection itself,
//! shrunk towards the wide defaults: with few tracks or epochs the defaults stay.

use rayon::prelude::*;

use crate::maths::cov2::Cov2;
use crate::maths::order;
use crate::model::campaign::BlendLaw;
use crate::motion::state_fit::core_wing;
use crate::resolve::cost;
use crate::resolve::scene::{Scene, Sight};
use crate::resolve::star::{Cell, Pred};
use crate::resolve::work::{Desk, Work};
use crate::sensor::blend::{self, flux_of, mag_of};
use crate::sensor::depth::{self, Depth, Event};
use crate::sensor::errors::ErrorLaw;
use crate::sensor::falses::FalseLaw;
use crate::sensor::pairs::{self, PairEvent, PairLaw};

use super::prepare::apply_laws;

/// Weight of a default, in residuals.
const DEFAULT_WEIGHT: f64 = 60.0;
/// Median of a chi-square with two degrees of freedom, 2 ln 2.
const MEDIAN_CHI2_2: f64 = 1.386_294_361_119_891;

/// ln(1 - chance of being listed) below which a star is missed so rarely that not to be listed
/// apart speaks of a merger (one in ten).
const SURE_TO_BE_SEEN: f64 = -2.3;

/// A clean detection of a well-known star.
struct Clean {
    /// Chi-square of the position over believed errors and prediction.
    chi2: f64,
    /// Share of the stated error in the believed variance.
    stated: f64,
    bright: bool,
    press: f64,
    dmag: f64,
    mag_var: f64,
}

/// A blend of known stars.
struct Mixed {
    chi2: f64,
    dmag: f64,
    var: f64,
}

#[derive(Default)]
struct Harvest {
    clean: Vec<Clean>,
    mixed: Vec<Mixed>,
    pairs: Vec<((u32, u32), PairEvent)>,
    depth: Vec<Event>,
    /// By how much each telling blend is likelier as a centroid than as a profile fit \[nats\].
    centroid: Vec<((u32, u32), f64)>,
    free: usize,
    total: usize,
}

/// Re-estimate all laws and recompute what depends on them.
pub fn laws(scene: &mut Scene, work: &Work) {
    let harvests: Vec<Harvest> = (0..scene.sights.len())
        .into_par_iter()
        .map(|e| harvest(scene, work, e))
        .collect();
    let n_instr = scene
        .sights
        .iter()
        .map(|s| s.data.instrument + 1)
        .max()
        .unwrap_or(0);
    for i in 0..n_instr {
        let of: Vec<usize> = (0..scene.sights.len())
            .filter(|&e| scene.sights[e].data.instrument == i)
            .collect();
        if of.is_empty() {
            continue;
        }
        let all = |f: &dyn Fn(&Harvest) -> Vec<f64>| -> Vec<f64> {
            of.iter().flat_map(|&e| f(&harvests[e])).collect()
        };
        let errors = error_law(
            &scene.sights[of[0]].sensor.errors,
            scene.sights[of[0]].sensor.fwhm_mas,
            &all,
        );
        let events = weighted(
            of.iter()
                .flat_map(|&e| harvests[e].pairs.iter().copied())
                .collect(),
        );
        let law = pairs::refit(PairLaw::start(), &events);
        let free: usize = of.iter().map(|&e| harvests[e].free).sum();
        let total: usize = of.iter().map(|&e| harvests[e].total).sum();
        // Three parts default, one part leftovers: many of these are stars not yet found.
        let start = FalseLaw::start().share;
        let share = (0.75 * start + 0.25 * free as f64 / total.max(1) as f64)
            .clamp(0.5 * start, 1.5 * start);
        let blend = blend_law(of.iter().flat_map(|&e| &harvests[e].centroid));
        for &e in &of {
            let s = &mut scene.sights[e];
            if let Some(law) = blend.filter(|_| !s.sensor.blend_stated) {
                s.sensor.blend = law;
            }
            s.sensor.errors = errors;
            s.sensor.pairs = law;
            s.sensor.falses.share = share;
        }
    }
    scene
        .sights
        .par_iter_mut()
        .zip(&harvests)
        .for_each(|(s, h)| {
            let start = Depth {
                halo: s.sensor.depth.halo,
                ..Depth::from_list(&s.mag)
            };
            s.sensor.depth = depth::refit(start, &h.depth);
            let mut d: Vec<f64> = h
                .clean
                .iter()
                .filter(|c| c.press < 0.1 && c.dmag.is_finite())
                .map(|c| c.dmag)
                .collect();
            if let Some(m) = order::median(&mut d) {
                let n = d.len() as f64;
                s.sensor.zero_point_mag -= m * n / (n + 20.0);
            }
            apply_laws(s);
        });
}

fn harvest(scene: &Scene, work: &Work, e: usize) -> Harvest {
    let s = &scene.sights[e];
    let desk = &work.desks[e];
    let f = s.sensor.fwhm_mas;
    let mut h = Harvest {
        total: s.len(),
        ..Harvest::default()
    };
    h.free = s.len() - desk.holders.held().count();
    let mut near = Vec::new();
    for (k, p) in desk.preds.iter().enumerate() {
        if !p.active || p.cov.max_var().sqrt() > 0.12 * f || p.mag_var > 0.05 {
            continue;
        }
        let cell = work.stars[k].cells[e];
        if p.press < 0.15 && p.contrast > 0.9 {
            match cell {
                Cell::Alone(_) => h.depth.push(Event {
                    mag: p.mag,
                    seen: true,
                }),
                Cell::Missed => h.depth.push(Event {
                    mag: p.mag,
                    seen: false,
                }),
                _ => {}
            }
        }
        if let Cell::Alone(d) = cell {
            let d = d as usize;
            let r = s.sensor.errors.position(s.data.cov_mas2[d], p.press, f);
            let cov = p.cov + r;
            let stated = s.data.cov_mas2[d].scaled(s.sensor.errors.factor.powi(2));
            h.clean.push(Clean {
                chi2: cov.chi2(s.data.x_mas[d] - p.x, s.data.y_mas[d] - p.y),
                stated: (stated.xx + stated.yy) / (cov.xx + cov.yy),
                bright: p.mag < s.sensor.depth.m50 - 2.5,
                press: p.press,
                dmag: s.mag[d] - p.mag,
                mag_var: s.mag_var[d] + p.mag_var,
            });
        }
        desk.grid.within(&desk.preds, p.x, p.y, 1.8 * f, &mut near);
        for &q in near.iter().filter(|&&q| q as usize > k) {
            let o = &desk.preds[q as usize];
            if o.cov.max_var().sqrt() > 0.12 * f || o.mag_var > 0.05 {
                continue;
            }
            if !lonely_pair(desk, k as u32, q, 1.8 * f) {
                continue;
            }
            let merged = match (cell, work.stars[q as usize].cells[e]) {
                (Cell::Shared(a), Cell::Shared(b)) if a == b => true,
                (a, b) if a.detection().is_some() && b.detection().is_some() => false,
                _ => continue,
            };
            let dmag = p.mag - o.mag;
            // Only the light of like stars tells whether they are one: a merger of others is
            // believed because the law says so, and must not teach the law.
            if dmag.abs() < 1.2 && p.ln_miss.max(o.ln_miss) < SURE_TO_BE_SEEN {
                let event = PairEvent {
                    sep_fwhm: (p.x - o.x).hypot(p.y - o.y) / f,
                    dmag,
                    sigma_fwhm: (0.5 * (p.cov.xx + p.cov.yy + o.cov.xx + o.cov.yy)).sqrt() / f,
                    merged,
                    weight: 1.0,
                };
                h.pairs.push(((k as u32, q), event));
            }
        }
    }
    for (d, g) in desk.holders.held().filter(|(_, g)| g.len() >= 2) {
        let preds: Vec<_> = g
            .members()
            .iter()
            .map(|&k| &desk.preds[k as usize])
            .collect();
        if preds.iter().any(|p| p.cov.max_var().sqrt() > 0.12 * f) {
            continue;
        }
        if let &[a, b] = g.members()
            && let Some(nats) = centroid_nats(s, d, preds[0], preds[1])
        {
            h.centroid.push(((a, b), nats));
        }
        let xy: Vec<[f64; 2]> = preds.iter().map(|p| [p.x, p.y]).collect();
        let flux: Vec<f64> = preds.iter().map(|p| flux_of(p.mag)).collect();
        let mut w = vec![0.0; preds.len()];
        let b = blend::place(s.sensor.blend, f, &xy, &flux, &mut w);
        let mut cov = s.sensor.errors.position(s.data.cov_mas2[d], 0.0, f);
        for (p, w) in preds.iter().zip(&w) {
            cov += p.cov.scaled(w * w);
        }
        let extra = (s.sensor.errors.blend_fwhm * f).powi(2);
        cov += Cov2::round(extra);
        h.mixed.push(Mixed {
            chi2: cov.chi2(s.data.x_mas[d] - b.x_mas, s.data.y_mas[d] - b.y_mas),
            dmag: s.mag[d] - mag_of(b.flux),
            var: s.mag_var[d],
        });
    }
    h
}

/// Evidence that a blend of two lies at the centroid of its light and has all of it, against a
/// profile fit \[nats\], limited so that no single one decides; `None` where the two laws agree.
fn centroid_nats(s: &Sight, d: usize, a: &Pred, b: &Pred) -> Option<f64> {
    let f = s.sensor.fwhm_mas;
    let flux = [flux_of(a.mag), flux_of(b.mag)];
    let minor = flux[0].min(flux[1]) / (flux[0] + flux[1]);
    if (a.x - b.x).hypot(a.y - b.y) < 0.25 * f || minor < 0.1 || !s.mag[d].is_finite() {
        return None;
    }
    let ln = |law: BlendLaw| {
        let mut w = [0.0; 2];
        let p = blend::place(law, f, &[[a.x, a.y], [b.x, b.y]], &flux, &mut w);
        let mut cov = s.sensor.errors.position(s.data.cov_mas2[d], 0.0, f);
        cov += a.cov.scaled(w[0] * w[0]) + b.cov.scaled(w[1] * w[1]);
        cov += Cov2::round((0.02 * f).powi(2));
        let var = s.mag_var[d] + w[0] * w[0] * a.mag_var + w[1] * w[1] * b.mag_var + 0.0025;
        core_wing(
            cov.chi2(s.data.x_mas[d] - p.x_mas, s.data.y_mas[d] - p.y_mas),
            cov.det().ln(),
        )
        .0 + cost::ln_mag(s.mag[d] - mag_of(p.flux), var)
    };
    Some((ln(BlendLaw::Centroid) - ln(BlendLaw::Psf)).clamp(-2.0, 2.0))
}

/// Total evidence from which a law of blends is believed \[nats\].
const LAW_NATS: f64 = 6.0;

/// The law that the blends of an instrument follow, where they tell; each pair of stars has the
/// weight of at most [`PAIR_WEIGHT`] blends.
fn blend_law<'a>(told: impl Iterator<Item = &'a ((u32, u32), f64)>) -> Option<BlendLaw> {
    let mut told: Vec<((u32, u32), f64)> = told.copied().collect();
    told.sort_by_key(|t| t.0);
    let sum: f64 = (told.chunk_by(|a, b| a.0 == b.0))
        .map(|pair| pair.iter().map(|t| t.1).sum::<f64>() * weight_of_each(pair.len()))
        .sum();
    (sum.abs() > LAW_NATS).then_some(if sum > 0.0 {
        BlendLaw::Centroid
    } else {
        BlendLaw::Psf
    })
}

/// Most weight that one pair of stars may have.
const PAIR_WEIGHT: f64 = 4.0;

/// Weight of each of the `n` events of one pair of stars.
fn weight_of_each(n: usize) -> f64 {
    (PAIR_WEIGHT / n as f64).min(1.0)
}

/// The events of an instrument, those of each pair sharing at most [`PAIR_WEIGHT`].
fn weighted(mut events: Vec<((u32, u32), PairEvent)>) -> Vec<PairEvent> {
    events.sort_by_key(|e| e.0);
    for of_pair in events.chunk_by_mut(|a, b| a.0 == b.0) {
        let weight = weight_of_each(of_pair.len());
        for (_, e) in of_pair {
            e.weight = weight;
        }
    }
    events.into_iter().map(|e| e.1).collect()
}

/// No third star near that could join the two: in a chain the ends are one detection at any
/// separation, which says nothing of a pair.
fn lonely_pair(desk: &Desk, k: u32, q: u32, reach_mas: f64) -> bool {
    let (a, b) = (&desk.preds[k as usize], &desk.preds[q as usize]);
    let faintest = a.mag.max(b.mag) + 2.5;
    let mut near = Vec::new();
    [a, b].iter().all(|p| {
        desk.grid
            .within(&desk.preds, p.x, p.y, reach_mas, &mut near);
        near.iter()
            .all(|&o| o == k || o == q || desk.preds[o as usize].mag > faintest)
    })
}

/// Ratio by which a variance must change so that the median chi-square is right, shrunk to one.
fn variance_ratio(chi2: &mut [f64]) -> f64 {
    let n = chi2.len() as f64;
    let Some(m) = order::median(chi2) else {
        return 1.0;
    };
    ((m / MEDIAN_CHI2_2).ln() * n / (n + DEFAULT_WEIGHT)).exp()
}

/// Collects one number list from every harvest of an instrument.
type Gather<'a> = &'a dyn Fn(&dyn Fn(&Harvest) -> Vec<f64>) -> Vec<f64>;

fn error_law(old: &ErrorLaw, fwhm: f64, all: Gather<'_>) -> ErrorLaw {
    let wide = ErrorLaw::wide(fwhm);
    let mut law = *old;
    // Where the stated error dominates it sets the factor; where it does not, the floor.
    let mut by_stated = all(&|h| {
        h.clean
            .iter()
            .filter(|c| c.press < 0.1 && c.stated > 0.5)
            .map(|c| c.chi2)
            .collect()
    });
    law.factor = (old.factor * variance_ratio(&mut by_stated).sqrt()).clamp(0.8, 3.0);
    let mut by_floor = all(&|h| {
        h.clean
            .iter()
            .filter(|c| c.press < 0.1 && c.bright && c.stated <= 0.5)
            .map(|c| c.chi2)
            .collect()
    });
    law.floor_mas =
        (old.floor_mas * variance_ratio(&mut by_floor).sqrt()).clamp(0.004 * fwhm, 0.1 * fwhm);
    let mut pressed = all(&|h| {
        h.clean
            .iter()
            .filter(|c| c.press > 0.3)
            .map(|c| c.chi2)
            .collect()
    });
    law.press_fwhm = (old.press_fwhm * variance_ratio(&mut pressed).sqrt()).clamp(0.01, 0.2);
    let mut mixed = all(&|h| h.mixed.iter().map(|c| c.chi2).collect());
    law.blend_fwhm = (old.blend_fwhm * variance_ratio(&mut mixed).sqrt()).clamp(0.005, 0.15);
    // Magnitudes: floor from bright ones, factor kept.
    let mut dm = all(&|h| {
        h.clean
            .iter()
            .filter(|c| c.press < 0.1 && c.dmag.is_finite())
            .map(|c| c.dmag * c.dmag / c.mag_var)
            .collect()
    });
    let n = dm.len() as f64;
    if let Some(m) = order::median(&mut dm) {
        // Median of a chi-square with one degree of freedom: 0.4549.
        let ratio = ((m / 0.454_9).ln() * n / (n + DEFAULT_WEIGHT)).exp();
        law.mag_floor = (old.mag_floor * ratio.sqrt()).clamp(0.03, 0.4);
    }
    let mut bm = all(&|h| {
        h.mixed
            .iter()
            .filter(|c| c.dmag.is_finite())
            .map(|c| c.dmag.abs())
            .collect()
    });
    let n = bm.len() as f64;
    if let Some(m) = order::median(&mut bm) {
        let mut own = all(&|h| h.mixed.iter().map(|c| c.var).collect());
        let own = order::median(&mut own).unwrap_or(0.0);
        let extra = ((m / 0.674_5).powi(2) - own).max(1e-4).sqrt();
        law.blend_mag =
            ((extra * n + wide.blend_mag * DEFAULT_WEIGHT) / (n + DEFAULT_WEIGHT)).clamp(0.01, 0.5);
    }
    law
}
