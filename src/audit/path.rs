//! One star's path through claimed positions.
//!
//! Under "one star" (1) each position is the star's own (core: its believed error), or a blend
//! in which it gives part of the light (displaced by a fraction of the resolution), or, rarely,
//! not the star's at all. Under "not one star" (0) the positions are whatever was listed near
//! some path that nobody follows: scattered about it by a fraction of the resolution. Both paths
//! obey the field's law of motion and have the same prior; parameters are integrated out by
//! Laplace's method, so that a path which bends to fit three points pays for it.
//!
//! Magnitudes: the star's own detections agree with each other, blends are brighter.
//!
//! Starts: orbits through triples of positions on several time scales, or straight lines
//! through pairs in a field without a mass; then fits with a shrinking scale, so that blends
//! among the triple do no harm. It fails where fewer than about four positions are the star's own.

use crate::maths::cov2::Cov2;
use crate::maths::lnprob::{ln_add, ln_normal};
use crate::maths::order;
use crate::motion::state::{Dynamics, P6};
use crate::motion::state_fit::{self, Fit, Obs};
use crate::motion::three_points::{SkyPoint, orbits_through};

/// One position.
#[derive(Clone, Copy, Debug)]
pub struct Point {
    pub t_yr: f64,
    pub x_mas: f64,
    pub y_mas: f64,
    pub cov: Cov2,
    pub fwhm_mas: f64,
    /// `NaN` = not measured.
    pub mag: f64,
    pub mag_var: f64,
}

/// Chances of core, blend and stranger for a position of one star.
const CORE: f64 = 0.55;
const BLEND: f64 = 0.42;
const STRANGER: f64 = 0.03;
/// Displacement of blends, and of strangers, per axis \[fwhm\]; the less of the light a star
/// gives, the farther from it a blend lies.
const BLEND_FWHM: f64 = 0.20;
const BLEND_LEAST_FWHM: f64 = 0.06;
const BLEND_GROWTH_FWHM: f64 = 0.26;
const STRANGER_FWHM: f64 = 1.5;
/// Scatter about a path that nobody follows, per axis \[fwhm\].
const STRAY_FWHM: f64 = 0.38;
/// Spread of the magnitudes of unrelated detections, and range above the star of its blends.
const MAG_SPREAD: f64 = 1.0;
const BLEND_MAGS: f64 = 2.5;
/// Magnitudes of a star scatter by so much more than believed (variables, crowding).
const MAG_EXTRA: f64 = 0.10;

/// What a position is on a path.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Part {
    Core,
    Blend,
    Stranger,
}

/// A path through positions.
#[derive(Clone, Debug)]
pub struct Path {
    pub fit: Fit,
    pub mag: f64,
    pub mag_var: f64,
    /// ln odds of one star against a path that nobody follows \[nats\].
    pub ln_odds: f64,
    /// By position: its contribution \[nats\], and the chances of core and blend.
    pub nats: Vec<f64>,
    pub core: Vec<f64>,
    pub blend: Vec<f64>,
}

impl Path {
    /// The likeliest part of a position.
    #[must_use]
    pub fn part(&self, k: usize) -> Part {
        let (c, b) = (self.core[k], self.blend[k]);
        if c >= b && c >= 0.5 * (1.0 - b) {
            Part::Core
        } else if b >= 0.5 {
            Part::Blend
        } else {
            Part::Stranger
        }
    }

    #[must_use]
    pub fn count(&self, part: Part) -> usize {
        (0..self.core.len())
            .filter(|&k| self.part(k) == part)
            .count()
    }
}

/// How thoroughly to look.
#[derive(Clone, Copy, Debug)]
pub struct Effort {
    /// Anchors along the arc at which triples are made, for each time scale.
    pub anchors: usize,
    /// Starts that are fitted.
    pub refined: usize,
}

/// Time scales of triples \[yr, from the first to the last\].
const SPANS_YR: [f64; 4] = [1.5, 3.0, 6.0, 12.0];
/// Least time between two positions of a triple \[yr\].
const SHORTEST_YR: f64 = 0.1;
/// Up to so many positions all triples are tried.
const FEW_POINTS: usize = 12;
/// Whole revolutions between two positions of a triple.
const MOST_TURNS: u32 = 1;
/// Scales added to errors \[fwhm\] while a start is refined, with the steps taken at each.
const SCALES: [(f64, usize); 4] = [(0.15, 6), (0.04, 6), (0.01, 8), (0.0, 12)];
/// Depths of slow starts, over the distance from the mass on the sky.
const SLOW_DEPTHS: [f64; 3] = [0.5, 1.5, 4.0];
/// Starts that stay within so many fwhm of each other are one.
const SAME_FWHM: f64 = 0.15;

/// The best path through positions in order of time; `None` for fewer than three.
#[must_use]
pub fn best(
    dynamics: &Dynamics,
    points: &[Point],
    hints: &[(f64, P6)],
    effort: Effort,
) -> Option<Path> {
    if points.len() < 3 {
        return None;
    }
    let mut raw: Vec<(f64, P6)> = Vec::new();
    for &(t0, p) in hints {
        raw.push((t0, p));
        raw.extend(astray(dynamics, points, t0, &p).map(|fit| (t0, fit.p)));
    }
    raw.extend(starts_of(dynamics, points, effort));
    raw.extend(slow_starts(dynamics, points));
    let mut starts: Vec<(f64, f64, P6)> = raw
        .into_iter()
        .map(|(t0, p)| (rough(dynamics, points, t0, &p), t0, p))
        .collect();
    starts.sort_by(|a, b| b.0.total_cmp(&a.0));
    let mut best: Option<Path> = None;
    let mut tried: Vec<[[f64; 2]; 3]> = Vec::new();
    let some = [0, points.len() / 2, points.len() - 1];
    for &(_, t0, p) in &starts {
        let at = some.map(|k| {
            let (x, y) = dynamics.position(&p, t0, points[k].t_yr);
            [x, y]
        });
        let same = |other: &[[f64; 2]; 3]| {
            at.iter()
                .zip(other)
                .all(|(a, b)| (a[0] - b[0]).hypot(a[1] - b[1]) < SAME_FWHM * points[0].fwhm_mas)
        };
        if tried.iter().any(same) {
            continue;
        }
        if let Some(path) = refine(dynamics, points, t0, &p)
            && best.as_ref().is_none_or(|b| path.ln_odds > b.ln_odds)
        {
            best = Some(path);
        }
        tried.push(at);
        if tried.len() >= effort.refined + hints.len() {
            break;
        }
    }
    best
}

/// Starts from the positions themselves.
fn starts_of(dynamics: &Dynamics, points: &[Point], effort: Effort) -> Vec<(f64, P6)> {
    let n = points.len();
    let nearest = |t: f64| {
        (0..n)
            .min_by(|&a, &b| {
                let gap = |k: usize| (points[k].t_yr - t).abs();
                gap(a).total_cmp(&gap(b)).then(a.cmp(&b))
            })
            .unwrap_or(0)
    };
    let mut triples: Vec<[usize; 3]> = Vec::new();
    let far = |a: usize, b: usize| points[b].t_yr - points[a].t_yr > SHORTEST_YR;
    if n <= FEW_POINTS {
        // Few positions: every triple may matter, the shortest in time first.
        for i in 0..n {
            for j in i + 1..n {
                triples.extend((j + 1..n).map(|k| [i, j, k]));
            }
        }
        triples.retain(|t| far(t[0], t[1]) && far(t[1], t[2]));
        triples.sort_by(|a, b| {
            let span = |t: &[usize; 3]| points[t[2]].t_yr - points[t[0]].t_yr;
            span(a).total_cmp(&span(b)).then(a.cmp(b))
        });
        let most = 2 * SPANS_YR.len() * effort.anchors;
        let step = triples.len().div_ceil(most).max(1);
        triples = triples.into_iter().step_by(step).collect();
    } else {
        for span in SPANS_YR {
            for a in 0..effort.anchors {
                let j = ((a * n + n / 2) / effort.anchors).min(n - 1);
                let t = points[j].t_yr;
                let triple = [nearest(t - 0.5 * span), j, nearest(t + 0.5 * span)];
                if far(triple[0], triple[1])
                    && far(triple[1], triple[2])
                    && !triples.contains(&triple)
                {
                    triples.push(triple);
                }
            }
        }
    }
    let mut out = Vec::new();
    let mut states = Vec::new();
    for [i, j, k] in triples {
        let t0 = points[j].t_yr;
        match *dynamics {
            Dynamics::Central { gm_mas3_yr2, .. } => {
                let sky = [i, j, k].map(|q| {
                    let p = &points[q];
                    let (cx, cy) = dynamics.centre_at(p.t_yr);
                    SkyPoint {
                        t_yr: p.t_yr,
                        x_mas: p.x_mas - cx,
                        y_mas: p.y_mas - cy,
                    }
                });
                states.clear();
                orbits_through(gm_mas3_yr2, &sky, MOST_TURNS, &mut states);
                out.extend(
                    states
                        .iter()
                        .map(|s| (t0, P6::from_iterator(s.iter().copied()))),
                );
            }
            Dynamics::Free { .. } => {
                let (a, b) = (&points[i], &points[k]);
                let dt = b.t_yr - a.t_yr;
                let v = [(b.x_mas - a.x_mas) / dt, (b.y_mas - a.y_mas) / dt];
                let to = t0 - a.t_yr;
                let at = [a.x_mas + v[0] * to, a.y_mas + v[1] * to];
                out.push((t0, P6::new(at[0], at[1], v[0], v[1], 0.0, 0.0)));
            }
        }
    }
    out
}

/// Starts that need no orbit through a triple: the mean place and velocity of all positions, at a
/// few depths, drawn to them as a path that nobody follows.
fn slow_starts(dynamics: &Dynamics, points: &[Point]) -> Vec<(f64, P6)> {
    let n = points.len() as f64;
    let mean = |f: &dyn Fn(&Point) -> f64| points.iter().map(f).sum::<f64>() / n;
    let (t0, x, y) = (mean(&|o| o.t_yr), mean(&|o| o.x_mas), mean(&|o| o.y_mas));
    let spread = mean(&|o| (o.t_yr - t0).powi(2)).max(1e-6);
    let vx = mean(&|o| (o.t_yr - t0) * (o.x_mas - x)) / spread;
    let vy = mean(&|o| (o.t_yr - t0) * (o.y_mas - y)) / spread;
    let (cx, cy) = dynamics.centre_at(t0);
    let depth = (x - cx).hypot(y - cy).max(20.0);
    let guesses: Vec<P6> = if dynamics.is_central() {
        SLOW_DEPTHS
            .iter()
            .map(|z| P6::new(x - cx, y - cy, z * depth, vx, vy, 0.0))
            .collect()
    } else {
        vec![P6::new(x, y, vx, vy, 0.0, 0.0)]
    };
    guesses
        .iter()
        .filter_map(|p| Some((t0, astray(dynamics, points, t0, p)?.p)))
        .collect()
}

/// Quick rank of a start.
fn rough(dynamics: &Dynamics, points: &[Point], t0: f64, p: &P6) -> f64 {
    points
        .iter()
        .map(|o| {
            let (x, y) = dynamics.position(p, t0, o.t_yr);
            let r2 = ((o.x_mas - x).powi(2) + (o.y_mas - y).powi(2)) / o.fwhm_mas.powi(2);
            let near = (-0.5 * r2 / 0.0064).exp() / 0.0064;
            let far = 0.3 * (-0.5 * r2 / 0.09).exp() / 0.09;
            (near + far + 0.01).ln()
        })
        .sum()
}

/// Fits with a shrinking scale and weighs the result.
fn refine(dynamics: &Dynamics, points: &[Point], t0: f64, start: &P6) -> Option<Path> {
    let mut p = *start;
    let mut fit: Option<Fit> = None;
    let mut obs: Vec<Obs> = Vec::with_capacity(points.len());
    for (scale, steps) in SCALES {
        // Strangers are left out, unless hardly anything would remain.
        for limit in [16.0, f64::INFINITY] {
            obs.clear();
            for o in points {
                let (x, y) = dynamics.position(&p, t0, o.t_yr);
                let (dx, dy) = (o.x_mas - x, o.y_mas - y);
                let core = o.cov + Cov2::round((scale * o.fwhm_mas).powi(2));
                let blend = core + Cov2::round((BLEND_FWHM * o.fwhm_mas).powi(2));
                let is_core =
                    CORE.ln() + core.ln_normal(dx, dy) > BLEND.ln() + blend.ln_normal(dx, dy);
                if is_core || blend.chi2(dx, dy) < limit {
                    obs.push(Obs {
                        t_yr: o.t_yr,
                        x_mas: o.x_mas,
                        y_mas: o.y_mas,
                        cov: if is_core { core } else { blend },
                    });
                }
            }
            if obs.len() >= 3.max(points.len() / 2) {
                break;
            }
        }
        let f = state_fit::fit(dynamics, &obs, t0, &p, steps)?;
        p = f.p;
        fit = Some(f);
    }
    weigh(dynamics, points, fit?)
}

fn stray_cov(o: &Point) -> Cov2 {
    o.cov + Cov2::round((STRAY_FWHM * o.fwhm_mas).powi(2))
}

/// The path that nobody follows: every position is scattered about it.
fn astray(dynamics: &Dynamics, points: &[Point], t0: f64, start: &P6) -> Option<Fit> {
    let obs: Vec<Obs> = points
        .iter()
        .map(|o| Obs {
            t_yr: o.t_yr,
            x_mas: o.x_mas,
            y_mas: o.y_mas,
            cov: stray_cov(o),
        })
        .collect();
    state_fit::fit(dynamics, &obs, t0, start, 12)
}

fn weigh(dynamics: &Dynamics, points: &[Point], fit: Fit) -> Option<Path> {
    let n = points.len();
    let offsets: Vec<[f64; 2]> = points
        .iter()
        .map(|o| {
            let (x, y) = dynamics.position(&fit.p, fit.t0_yr, o.t_yr);
            [o.x_mas - x, o.y_mas - y]
        })
        .collect();
    let like = |k: usize| {
        let o = &points[k];
        let [dx, dy] = offsets[k];
        let wide = |s: f64| (o.cov + Cov2::round((s * o.fwhm_mas).powi(2))).ln_normal(dx, dy);
        [
            CORE.ln() + o.cov.ln_normal(dx, dy),
            BLEND.ln() + wide(BLEND_FWHM),
            STRANGER.ln() + wide(STRANGER_FWHM),
        ]
    };
    // The star's magnitude: the median of what are its own detections by their places.
    let mut mags: Vec<f64> = (0..n)
        .filter(|&k| {
            let l = like(k);
            points[k].mag.is_finite() && l[0] > l[1].max(l[2])
        })
        .map(|k| points[k].mag)
        .collect();
    let n_mags = mags.len() as f64;
    let mut all: Vec<f64> = points
        .iter()
        .map(|o| o.mag)
        .filter(|m| m.is_finite())
        .collect();
    let mag = order::median(&mut mags).or_else(|| order::quantile(&mut all, 0.8));
    let (mut nats, mut core, mut blend) = (Vec::new(), Vec::new(), Vec::new());
    let mut sum = 0.0;
    for (k, o) in points.iter().enumerate() {
        let mut l = like(k);
        if let Some(mag) = mag.filter(|_| o.mag.is_finite()) {
            let share = (0.4 * std::f64::consts::LN_10 * (o.mag - mag))
                .exp()
                .min(1.0);
            let far = (BLEND_LEAST_FWHM + BLEND_GROWTH_FWHM * (1.0 - share)) * o.fwhm_mas;
            let [dx, dy] = offsets[k];
            l[1] = BLEND.ln() + (o.cov + Cov2::round(far * far)).ln_normal(dx, dy);
            // Relative to the spread of unrelated detections.
            let d = o.mag - mag;
            let var = o.mag_var + MAG_EXTRA * MAG_EXTRA;
            let any = ln_normal(0.0, MAG_SPREAD * MAG_SPREAD) - 0.3;
            let own = ln_add(
                0.9_f64.ln() + ln_normal(d, var),
                0.1_f64.ln() + ln_normal(d, 9.0 * var),
            );
            let brighter = if d > 0.0 {
                -0.5 * d * d / var - BLEND_MAGS.ln()
            } else if d > -BLEND_MAGS {
                -BLEND_MAGS.ln()
            } else {
                -BLEND_MAGS.ln() - (-d - BLEND_MAGS) / 0.3
            };
            l[0] += own - any;
            l[1] += brighter - any;
        }
        let total = ln_add(ln_add(l[0], l[1]), l[2]);
        core.push((l[0] - total).exp());
        blend.push((l[1] - total).exp());
        nats.push(total);
        sum += total;
    }
    // Prior and volume of the parameters, from the fit to the same classes.
    let occam = fit.ln_evidence - fit.ln_like;
    let none = astray(dynamics, points, fit.t0_yr, &fit.p)?;
    for (nats, o) in nats.iter_mut().zip(points) {
        let (x, y) = dynamics.position(&none.p, none.t0_yr, o.t_yr);
        let (dx, dy) = (o.x_mas - x, o.y_mas - y);
        let cov = stray_cov(o);
        *nats -= state_fit::core_wing(cov.chi2(dx, dy), cov.det().ln()).0;
    }
    let ln_odds = sum + occam - none.ln_evidence;
    ln_odds.is_finite().then_some(Path {
        fit,
        mag: mag.unwrap_or(f64::NAN),
        mag_var: (0.04 / n_mags.max(1.0)) + 4e-4,
        ln_odds,
        nats,
        core,
        blend,
    })
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::maths::units::gm_mas3_yr2;
    use crate::motion::kepler;

    const EFFORT: Effort = Effort {
        anchors: 6,
        refined: 5,
    };

    fn dynamics() -> Dynamics {
        Dynamics::Central {
            gm_mas3_yr2: gm_mas3_yr2(2.6e6, 7100.0),
            x_mas: 0.0,
            y_mas: 0.0,
            vx_mas_yr: 0.0,
            vy_mas_yr: 0.0,
            t_yr: 2000.0,
        }
    }

    /// Offsets of a fixed pattern, uniform in (-1, 1) (golden-ratio sequences).
    fn spread(k: usize) -> [f64; 2] {
        let u = |c: f64| 2.0 * ((k as f64 + 1.0) * c).fract() - 1.0;
        [u(0.754_877_67), u(0.569_840_29)]
    }

    /// Places of a star on an orbit; `astray(k)`: displacement \[mas\] of the k-th.
    fn points(astray: impl Fn(usize) -> f64) -> Vec<Point> {
        let gm = gm_mas3_yr2(2.6e6, 7100.0);
        (0..20)
            .map(|k| {
                let t = 1995.0 + 0.8 * k as f64;
                let (r, _) =
                    kepler::propagate(gm, [90.0, 40.0, 60.0], [-20.0, 35.0, 5.0], t - 2002.0);
                let [dx, dy] = spread(k);
                let s = astray(k);
                Point {
                    t_yr: t,
                    x_mas: r[0] + s * dx,
                    y_mas: r[1] + s * dy,
                    cov: Cov2::round(1.0),
                    fwhm_mas: 50.0,
                    mag: if s > 2.0 { 14.6 } else { 15.0 + 0.05 * dx },
                    mag_var: 0.01,
                }
            })
            .collect()
    }

    #[test]
    fn a_star_with_a_third_of_blends_is_one_star() {
        let p = points(|k| if k % 3 == 0 { 15.0 } else { 1.0 });
        let path = best(&dynamics(), &p, &[], EFFORT).expect("a path");
        assert!(path.ln_odds > 20.0, "{}", path.ln_odds);
        assert!(path.count(Part::Core) >= 12);
        assert!((path.mag - 15.0).abs() < 0.1);
    }

    #[test]
    fn detections_near_a_path_are_not_one_star() {
        let p = points(|_| 35.0);
        let path = best(&dynamics(), &p, &[], EFFORT).expect("a path");
        assert!(path.ln_odds < 0.0, "{}", path.ln_odds);
    }

    #[test]
    fn two_positions_have_no_path() {
        assert!(best(&dynamics(), &points(|_| 1.0)[..2], &[], EFFORT).is_none());
    }
}
