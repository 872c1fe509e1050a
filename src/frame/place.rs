//! Placing one list on the predicted stars of its time, or refusing to.
//!
//! A guess (`pattern`) is polished by matching and refitting with shrinking reach: bright stars
//! with a similarity, then all stars with the freedom that the instrument allows. The polished
//! map is judged by log-odds as in Lang et al. (2010, AJ 139, 1782): each bright detection that
//! falls where stars are predicted adds
//! ln[ f + (1 - f) N(r; sigma) / rho ], with rho the local density of predicted stars of like
//! brightness (so that a cluster laid on itself the wrong way gains nothing) and f the share of
//! detections without a partner; a predicted star serves once. From the sum goes the logarithm of
//! the number of places, turns, scales and handednesses that could have been told apart. What
//! remains must exceed 20 nats; otherwise the list is refused, never placed at the best of bad
//! guesses.

use crate::maths::order;
use crate::model::campaign::FrameFreedom;
use crate::near::{Hit, Tree};

use super::pattern::{self, SCALE_RANGE, Similarity, Stars};
use super::solve::{Fit, Match, fit, fit_supported};
use super::transform::{Chart, PolyMap};

/// Log-odds that a placement must exceed, after the trials.
pub const ACCEPT_NATS: f64 = 20.0;
/// Share of bright detections that may lack a predicted partner.
const LONE: f64 = 0.35;
/// Bright stars that make guesses, and that judge them.
const GUESSING: usize = 60;
const JUDGING: usize = 120;
/// Depths of the predicted stars, relative to the list's bright stars at equal density.
const DEPTHS: [f64; 3] = [1.3, 0.7, 2.5];
/// Unmodelled place errors in units of fwhm: blends, distortion.
const BLUR_FWHM: f64 = 0.08;
/// Magnitudes of partners agree within this after the zero point.
const MAG_REACH: f64 = 1.2;
/// Turn \[rad\] and scale that a nominal start is trusted to.
const NOMINAL_TURN: f64 = 0.12;
const NOMINAL_SCALE: f64 = 0.03;

/// One list in its nominal plane.
#[derive(Clone, Copy, Debug)]
pub struct Sheet<'a> {
    pub u_mas: &'a [f64],
    pub v_mas: &'a [f64],
    /// Error per axis.
    pub sigma_mas: &'a [f64],
    /// `NaN` = not measured.
    pub mag: &'a [f64],
    pub fwhm_mas: f64,
}

/// Stars predicted for the time of a list.
#[derive(Clone, Debug, Default)]
pub struct Sky {
    pub x_mas: Vec<f64>,
    pub y_mas: Vec<f64>,
    pub sigma_mas: Vec<f64>,
    pub mag: Vec<f64>,
}

/// How the map was found.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Start {
    Nominal,
    Pattern,
}

/// An accepted placement.
#[derive(Clone, Debug)]
pub struct Placement {
    pub fit: Fit,
    pub start: Start,
    /// Log-odds after the trials factor.
    pub ln_odds: f64,
}

/// Why a list was refused.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Refusal {
    /// Log-odds of the best guess after the trials factor; `None` when no guess held together.
    pub best_ln_odds: Option<f64>,
    pub n_list: usize,
    pub n_sky: usize,
}

/// Places a list, or says why not.
///
/// # Errors
/// When no guess reaches [`ACCEPT_NATS`].
pub fn place(sheet: &Sheet, sky: &Sky, allowed: FrameFreedom) -> Result<Placement, Refusal> {
    let placer = Placer::new(sheet, sky, allowed);
    let mut best: Option<Placement> = None;
    let mut consider = |found: Option<Placement>| {
        if let Some(p) = found
            && best.as_ref().is_none_or(|b| p.ln_odds > b.ln_odds)
        {
            best = Some(p);
        }
        best.as_ref().is_some_and(|b| b.ln_odds > ACCEPT_NATS)
    };
    let list = placer.bright_list(GUESSING);
    'search: for start in [Start::Nominal, Start::Pattern] {
        if start == Start::Pattern && allowed == FrameFreedom::Shift {
            break;
        }
        for depth in DEPTHS {
            let bright_sky = placer.bright_sky(list.len(), depth);
            let guesses = match start {
                Start::Nominal => pattern::by_shift(&list, &bright_sky, sheet.fwhm_mas),
                Start::Pattern => {
                    pattern::by_triangles(&list, &bright_sky, placer.reach(&bright_sky))
                }
            };
            let mut done = false;
            for guess in guesses {
                done |= consider(placer.polish(&guess, &bright_sky, start));
            }
            if done {
                break 'search;
            }
        }
    }
    let refusal = Refusal {
        best_ln_odds: best.as_ref().map(|b| b.ln_odds),
        n_list: sheet.u_mas.len(),
        n_sky: sky.x_mas.len(),
    };
    best.filter(|b| b.ln_odds > ACCEPT_NATS).ok_or(refusal)
}

/// Rows from the brightest to the faintest; unmeasured magnitudes last, ties by row.
#[must_use]
pub fn by_brightness(mag: &[f64]) -> Vec<u32> {
    let mut rows: Vec<u32> = (0..mag.len() as u32).collect();
    let key = |row: u32| {
        let m = mag[row as usize];
        if m.is_nan() { f64::INFINITY } else { m }
    };
    rows.sort_by(|&a, &b| order::by(key(a), key(b)).then(a.cmp(&b)));
    rows
}

struct Placer<'a> {
    sheet: &'a Sheet<'a>,
    sky: &'a Sky,
    allowed: FrameFreedom,
    chart: Chart,
    list_rows: Vec<u32>,
    sky_rows: Vec<u32>,
    sky_chart: Chart,
}

impl<'a> Placer<'a> {
    fn new(sheet: &'a Sheet<'a>, sky: &'a Sky, allowed: FrameFreedom) -> Self {
        Self {
            sheet,
            sky,
            allowed,
            chart: Chart::of(sheet.u_mas, sheet.v_mas),
            list_rows: by_brightness(sheet.mag),
            sky_rows: by_brightness(&sky.mag),
            sky_chart: Chart::of(&sky.x_mas, &sky.y_mas),
        }
    }

    fn bright_list(&self, n: usize) -> Stars {
        let rows = &self.list_rows[..n.min(self.list_rows.len())];
        Stars {
            x_mas: rows.iter().map(|&r| self.sheet.u_mas[r as usize]).collect(),
            y_mas: rows.iter().map(|&r| self.sheet.v_mas[r as usize]).collect(),
        }
    }

    /// Predicted stars down to the depth at which they are `depth` times as dense as `n` stars
    /// spread over the list.
    fn bright_sky(&self, n: usize, depth: f64) -> Stars {
        let areas = (self.sky_chart.half_mas / self.chart.half_mas).powi(2);
        let m = (depth * n as f64 * areas.max(1.0)).round() as usize;
        let rows = &self.sky_rows[..m.clamp(1, 2000).min(self.sky_rows.len())];
        Stars {
            x_mas: rows.iter().map(|&r| self.sky.x_mas[r as usize]).collect(),
            y_mas: rows.iter().map(|&r| self.sky.y_mas[r as usize]).collect(),
        }
    }

    /// How far a bright star may be from its predicted place while the map is rough.
    fn reach(&self, bright_sky: &Stars) -> f64 {
        let area = 4.0 * self.sky_chart.half_mas.powi(2);
        let spacing = (area / bright_sky.len().max(1) as f64).sqrt();
        (1.2 * self.sheet.fwhm_mas).min(0.3 * spacing)
    }

    /// Mutually nearest pairs (list row, sky row) among the first rows of each side.
    fn pairs(
        &self,
        map: &PolyMap,
        n_list: usize,
        n_sky: usize,
        reach_mas: f64,
        zero_point: Option<f64>,
    ) -> Vec<(u32, u32)> {
        let list = &self.list_rows[..n_list.min(self.list_rows.len())];
        let sky = &self.sky_rows[..n_sky.min(self.sky_rows.len())];
        let (mut x, mut y) = (
            Vec::with_capacity(list.len()),
            Vec::with_capacity(list.len()),
        );
        for &r in list {
            let p = map.apply(self.sheet.u_mas[r as usize], self.sheet.v_mas[r as usize]);
            x.push(p.0);
            y.push(p.1);
        }
        let sx: Vec<f64> = sky.iter().map(|&r| self.sky.x_mas[r as usize]).collect();
        let sy: Vec<f64> = sky.iter().map(|&r| self.sky.y_mas[r as usize]).collect();
        mutual_nearest(&x, &y, &sx, &sy, reach_mas)
            .into_iter()
            .map(|(a, b)| (list[a as usize], sky[b as usize]))
            .filter(|&(l, s)| {
                zero_point.is_none_or(|zp| {
                    let dm = self.sheet.mag[l as usize] - self.sky.mag[s as usize] - zp;
                    dm.is_nan() || dm.abs() < MAG_REACH
                })
            })
            .collect()
    }

    fn matches(&self, pairs: &[(u32, u32)]) -> Vec<Match> {
        let blur = BLUR_FWHM * self.sheet.fwhm_mas;
        pairs
            .iter()
            .map(|&(l, s)| {
                let (l, s) = (l as usize, s as usize);
                Match {
                    u_mas: self.sheet.u_mas[l],
                    v_mas: self.sheet.v_mas[l],
                    x_mas: self.sky.x_mas[s],
                    y_mas: self.sky.y_mas[s],
                    var_mas2: self.sheet.sigma_mas[l].powi(2)
                        + self.sky.sigma_mas[s].powi(2)
                        + blur * blur,
                }
            })
            .collect()
    }

    fn zero_point(&self, pairs: &[(u32, u32)]) -> Option<f64> {
        let mut dm: Vec<f64> = pairs
            .iter()
            .map(|&(l, s)| self.sheet.mag[l as usize] - self.sky.mag[s as usize])
            .filter(|d| d.is_finite())
            .collect();
        order::median(&mut dm)
    }

    fn polish(&self, guess: &Similarity, bright_sky: &Stars, start: Start) -> Option<Placement> {
        let fwhm = self.sheet.fwhm_mas;
        let rough = match start {
            Start::Nominal => 2.0 * self.reach(bright_sky),
            Start::Pattern => 1.5 * self.reach(bright_sky),
        };
        let mut map = guess.on(self.chart);
        let bright_freedom = self.allowed.min(FrameFreedom::Similarity);
        let mut zero_point = None;
        let (n_list, n_sky) = (GUESSING, bright_sky.len());
        for k in 0..6 {
            let reach = (rough * 0.7_f64.powi(k)).max(0.5 * fwhm.min(rough));
            let pairs = self.pairs(&map, n_list, n_sky, reach, None);
            let stars = self.matches(&pairs);
            if stars.len() < 5 {
                return None;
            }
            map = fit(self.chart, bright_freedom, guess.mirrored, &stars)?.map;
            zero_point = self.zero_point(&pairs);
        }
        let all = usize::MAX;
        let mut last = None;
        for reach in [0.7, 0.5, 0.4, 0.35] {
            let pairs = self.pairs(&map, all, all, reach * fwhm, zero_point);
            let stars = self.matches(&pairs);
            let freedom = if reach > 0.45 {
                self.allowed.min(FrameFreedom::Affine)
            } else {
                self.allowed
            };
            let fit = fit_supported(self.chart, freedom, guess.mirrored, &stars)?;
            map = fit.map;
            last = Some(fit);
        }
        let fit = last?;
        let scale = fit.map.scale_ratio();
        if fit.map.is_mirrored() != guess.mirrored || (scale - 1.0).abs() > SCALE_RANGE + 0.03 {
            return None;
        }
        let nominal = !guess.mirrored
            && (scale - 1.0).abs() < NOMINAL_SCALE
            && fit.map.turn_deg().to_radians().abs() < NOMINAL_TURN;
        let ln_odds = self.ln_odds(&fit.map) - self.ln_trials(nominal && start == Start::Nominal);
        Some(Placement {
            fit,
            start,
            ln_odds,
        })
    }

    /// Log-odds of the bright detections against chance (see the head of the module).
    fn ln_odds(&self, map: &PolyMap) -> f64 {
        let n = JUDGING.min(self.list_rows.len());
        let all = Tree::build(&self.sky.x_mas, &self.sky.y_mas);
        let mut hits: Vec<Hit> = Vec::new();
        let spacing = self.sky_chart.half_mas * 2.0 / (self.sky.x_mas.len().max(1) as f64).sqrt();
        // Detections that fall where stars are predicted at all.
        let mut inside: Vec<(u32, f64, f64)> = Vec::with_capacity(n);
        for &r in &self.list_rows[..n] {
            let (x, y) = map.apply(self.sheet.u_mas[r as usize], self.sheet.v_mas[r as usize]);
            all.nearest_n(x, y, 3, &mut hits);
            if hits.last().is_some_and(|h| h.dist_mas < 3.0 * spacing) {
                inside.push((r, x, y));
            }
        }
        // Predicted stars inside the list's outline, to a like depth.
        let wanted = (1.4 * inside.len() as f64).ceil() as usize;
        let mut sky: Vec<u32> = Vec::with_capacity(wanted);
        for &r in &self.sky_rows {
            let (x, y) = (self.sky.x_mas[r as usize], self.sky.y_mas[r as usize]);
            let Some((u, v)) = map.inverse(x, y) else {
                continue;
            };
            let (s, t) = self.chart.scaled(u, v);
            if s.abs() < 1.03 && t.abs() < 1.03 {
                sky.push(r);
                if sky.len() == wanted {
                    break;
                }
            }
        }
        if sky.len() < 8 {
            return f64::NEG_INFINITY;
        }
        let sx: Vec<f64> = sky.iter().map(|&r| self.sky.x_mas[r as usize]).collect();
        let sy: Vec<f64> = sky.iter().map(|&r| self.sky.y_mas[r as usize]).collect();
        let tree = Tree::build(&sx, &sy);
        let blur = BLUR_FWHM * self.sheet.fwhm_mas;
        let mut used = vec![false; sky.len()];
        let mut sum = 0.0;
        for (r, x, y) in inside {
            tree.nearest_n(x, y, 7, &mut hits);
            let far = hits.last().map_or(1.0, |h| h.dist_mas.max(1e-3));
            let rho = hits.len() as f64 / (std::f64::consts::PI * far * far);
            let free = hits.iter().find(|h| !used[h.row as usize]);
            let mut ratio = 0.0;
            if let Some(h) = free {
                let star = sky[h.row as usize] as usize;
                let var = self.sheet.sigma_mas[r as usize].powi(2)
                    + self.sky.sigma_mas[star].powi(2)
                    + blur * blur;
                let chi2 = h.dist_mas * h.dist_mas / var;
                ratio = (-0.5 * chi2).exp() / (2.0 * std::f64::consts::PI * var * rho);
                if chi2 < 9.0 {
                    used[h.row as usize] = true;
                }
            }
            sum += (LONE + (1.0 - LONE) * ratio).ln();
        }
        sum
    }

    /// Logarithm of the number of placements that could be told apart.
    fn ln_trials(&self, nominal: bool) -> f64 {
        let sigma = (2.0 * BLUR_FWHM * self.sheet.fwhm_mas).max(1e-3);
        let half = self.chart.half_mas;
        let side = 2.0 * (half + self.sky_chart.half_mas);
        let places = (side * side / (2.0 * std::f64::consts::PI * sigma * sigma)).max(1.0);
        let (turn, scale, hands) = if nominal {
            (2.0 * NOMINAL_TURN, 2.0 * NOMINAL_SCALE, 1.0)
        } else {
            (2.0 * std::f64::consts::PI, 2.0 * SCALE_RANGE, 2.0)
        };
        let turns = (turn * half / sigma).max(1.0);
        let scales = (scale * half / sigma).max(1.0);
        if self.allowed == FrameFreedom::Shift {
            return places.ln();
        }
        (places * turns * scales * hands).ln()
    }
}

/// Pairs of points that are each other's nearest and at most `reach_mas` apart, by left index.
#[must_use]
pub fn mutual_nearest(
    x_mas: &[f64],
    y_mas: &[f64],
    sx_mas: &[f64],
    sy_mas: &[f64],
    reach_mas: f64,
) -> Vec<(u32, u32)> {
    let left = Tree::build(x_mas, y_mas);
    let right = Tree::build(sx_mas, sy_mas);
    let mut hits: Vec<Hit> = Vec::new();
    let mut out = Vec::new();
    for k in 0..x_mas.len() {
        right.nearest_n(x_mas[k], y_mas[k], 1, &mut hits);
        let Some(hit) = hits.first().copied().filter(|h| h.dist_mas <= reach_mas) else {
            continue;
        };
        left.nearest_n(hit.x_mas, hit.y_mas, 1, &mut hits);
        if hits.first().is_some_and(|h| h.row == k as u32) {
            out.push((k as u32, hit.row));
        }
    }
    out
}
