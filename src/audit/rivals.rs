//! What else could have made a claim's positions: known stars, alone or as blends, an artefact
//! that keeps to a bright star, false detections, or a mixture of these.
//!
//! The claimed star is taken out of the run and every claimed epoch is assigned again, so that
//! the known stars take what they can explain; all gains are nats over "false detection".

use super::claims::Case;
use crate::maths::order;
use crate::resolve::cost;
use crate::resolve::joint::{self, Option_};
use crate::resolve::scene::Scene;
use crate::resolve::star::{Cell, MAX_GROUP, Pred};
use crate::resolve::work::{Desk, Work};

/// A host of artefacts is brighter than they are by so much, and within so many fwhm
/// (common practice, no source).
const HOST_MAG: f64 = 2.0;
const HOST_FWHM: f64 = 4.5;
/// A blend lies within so many fwhm of its known star, and a false detection is not brighter
/// than the depth of its list by so much.
const BLEND_FWHM: f64 = 0.7;
const BRIGHT_MAG: f64 = 2.5;
/// An artefact keeps its offset from the host within so many fwhm, per axis.
const KEEPS_FWHM: f64 = 0.35;

/// What explains one claimed place without the claimed star.
#[derive(Clone, Debug, Default)]
pub struct Without {
    /// Known stars that make the detection, by the best assignment of the whole epoch.
    pub holders: Vec<u32>,
    /// Their flux shares.
    pub shares: Vec<f64>,
    /// Gain of that \[nats\]; 0 when nobody does.
    pub gain: f64,
    /// Best single known star and its gain.
    pub single: Option<(u32, f64)>,
    /// Gain of the best blend of known stars.
    pub blend: Option<f64>,
    /// Brightest star nearby and the offset from it \[fwhm\].
    pub host: Option<(u32, [f64; 2])>,
    /// Nearest known star and its distance \[fwhm\].
    pub nearest: Option<(u32, f64)>,
    /// Far brighter than the faintest detections of its list.
    pub is_bright: bool,
}

impl Without {
    /// No known star makes it, but it is light: so close to a known star that it can be a blend
    /// with something unknown, or too bright to be false.
    fn is_unknown_blend(&self) -> bool {
        self.holders.is_empty()
            && (self.is_bright || self.nearest.is_some_and(|n| n.1 < BLEND_FWHM))
    }
}

/// All places of a claim without the claimed star.
#[derive(Clone, Debug, Default)]
pub struct Rivals {
    /// By claimed place.
    pub places: Vec<Without>,
    /// Share of the claim's detections made by one known star alone; by blends of known stars, or
    /// of one with something the run does not know; by nothing that shines (probably false).
    pub single: f64,
    pub blend: f64,
    pub free: f64,
    /// The known star that makes most of them alone, and what share.
    pub main: Option<(u32, f64)>,
    /// The bright star near most of the unexplained ones, with how well they keep to it
    /// \[fwhm per axis\].
    pub host: Option<(u32, f64)>,
    /// Known stars involved, most often first.
    pub stars: Vec<u32>,
}

impl Rivals {
    /// The unexplained detections keep to a bright star.
    #[must_use]
    pub fn is_artefact(&self) -> bool {
        self.host.is_some_and(|(_, scatter)| scatter < KEEPS_FWHM)
    }
}

/// Takes `own` out and explains every claimed place by what is left.
#[must_use]
pub fn without(scene: &Scene, work: &Work, case: &Case, own: Option<u32>) -> Rivals {
    let mut near = Vec::new();
    let mut options = Vec::new();
    let places: Vec<Without> = case
        .places
        .iter()
        .map(|p| match (p.epoch, p.row) {
            (Some(e), Some(d)) => {
                let desk = less(&work.desks[e], own);
                place(scene, e, &desk, d, &mut near, &mut options)
            }
            _ => Without::default(),
        })
        .collect();
    summary(case, places)
}

/// A desk without one star.
fn less(desk: &Desk, own: Option<u32>) -> Desk {
    let mut desk = desk.clone();
    if let Some(k) = own {
        let p = desk.preds[k as usize];
        if p.active {
            desk.grid.remove(k, p.x, p.y);
            desk.preds[k as usize].active = false;
        }
    }
    desk
}

fn place(
    scene: &Scene,
    e: usize,
    desk: &Desk,
    d: u32,
    near: &mut Vec<u32>,
    options: &mut Vec<Option_>,
) -> Without {
    let s = &scene.sights[e];
    let row = d as usize;
    let assigned = joint::assign(scene, e, desk);
    let mut out = Without::default();
    for (k, cell) in assigned.cells.iter().enumerate() {
        if matches!(cell, Cell::Alone(q) | Cell::Shared(q) if *q == d) {
            out.holders.push(k as u32);
        }
    }
    let none = Pred::NONE;
    let mut preds: [&Pred; MAX_GROUP] = [&none; MAX_GROUP];
    let n = out.holders.len().min(MAX_GROUP);
    for (p, &k) in preds.iter_mut().zip(&out.holders) {
        *p = &desk.preds[k as usize];
    }
    match n {
        0 => {}
        1 => {
            out.gain = cost::alone(s, row, preds[0]);
            out.shares = vec![1.0];
        }
        _ => {
            let fit = cost::shared(s, row, &preds[..n]);
            out.gain = fit.gain;
            out.shares = fit.share[..n].to_vec();
        }
    }
    joint::options(scene, e, desk, row, near, options);
    for o in options.iter() {
        if let [k] = *o.stars.members() {
            if out.single.is_none_or(|s| o.gain > s.1) {
                out.single = Some((k, o.gain));
            }
        } else if out.blend.is_none_or(|g| o.gain > g) {
            out.blend = Some(o.gain);
        }
    }
    out.is_bright = s.mag[row] < s.sensor.depth.m50 - BRIGHT_MAG;
    let (x, y) = (s.data.x_mas[row], s.data.y_mas[row]);
    desk.grid
        .within(&desk.preds, x, y, HOST_FWHM * s.sensor.fwhm_mas, near);
    out.host = near
        .iter()
        .map(|&k| (k, &desk.preds[k as usize]))
        .filter(|(_, p)| !s.mag[row].is_finite() || p.mag < s.mag[row] - HOST_MAG)
        .min_by(|a, b| a.1.mag.total_cmp(&b.1.mag).then(a.0.cmp(&b.0)))
        .map(|(k, p)| {
            let f = s.sensor.fwhm_mas;
            (k, [(x - p.x) / f, (y - p.y) / f])
        });
    out.nearest = near
        .iter()
        .map(|&k| {
            let p = &desk.preds[k as usize];
            (k, (x - p.x).hypot(y - p.y) / s.sensor.fwhm_mas)
        })
        .min_by(|a, b| a.1.total_cmp(&b.1).then(a.0.cmp(&b.0)));
    out
}

fn summary(case: &Case, places: Vec<Without>) -> Rivals {
    let listed: Vec<&Without> = case
        .places
        .iter()
        .zip(&places)
        .filter(|(p, _)| p.row.is_some())
        .map(|(_, w)| w)
        .collect();
    let n = listed.len().max(1) as f64;
    let share =
        |test: &dyn Fn(&Without) -> bool| listed.iter().filter(|w| test(w)).count() as f64 / n;
    let stars = most_often(listed.iter().flat_map(|w| w.holders.iter().copied()));
    let alone = most_often(listed.iter().filter_map(|w| match *w.holders {
        [k] => Some(k),
        _ => None,
    }));
    let hosts = most_often(
        listed
            .iter()
            .filter(|w| w.holders.is_empty())
            .filter_map(|w| Some(w.host?.0)),
    );
    let host = hosts.first().and_then(|&(k, _)| {
        let offsets: Vec<[f64; 2]> = listed
            .iter()
            .filter(|w| w.holders.is_empty())
            .filter_map(|w| w.host.filter(|h| h.0 == k).map(|h| h.1))
            .collect();
        Some((k, scatter(&offsets)?))
    });
    Rivals {
        single: share(&|w| w.holders.len() == 1),
        blend: share(&|w| w.holders.len() > 1 || w.is_unknown_blend()),
        free: share(&|w| w.holders.is_empty() && !w.is_unknown_blend()),
        main: alone.first().map(|&(k, count)| (k, count as f64 / n)),
        host,
        stars: stars.into_iter().map(|s| s.0).collect(),
        places,
    }
}

/// Numbers with how often they occur, most often first.
#[must_use]
pub fn most_often(numbers: impl Iterator<Item = u32>) -> Vec<(u32, usize)> {
    let mut sorted: Vec<u32> = numbers.collect();
    sorted.sort_unstable();
    let mut out: Vec<(u32, usize)> = sorted
        .chunk_by(|a, b| a == b)
        .map(|c| (c[0], c.len()))
        .collect();
    out.sort_by(|a, b| b.1.cmp(&a.1).then(a.0.cmp(&b.0)));
    out
}

/// Robust scatter of points per axis: 1.4826 times the median distance from the median, the
/// larger axis; `None` for fewer than three.
fn scatter(points: &[[f64; 2]]) -> Option<f64> {
    if points.len() < 3 {
        return None;
    }
    let mut worst = 0.0_f64;
    for axis in 0..2 {
        let mut v: Vec<f64> = points.iter().map(|p| p[axis]).collect();
        let middle = order::median(&mut v)?;
        let mut gaps: Vec<f64> = points.iter().map(|p| (p[axis] - middle).abs()).collect();
        worst = worst.max(1.4826 * order::median(&mut gaps)?);
    }
    Some(worst)
}
