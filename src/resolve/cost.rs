//! The one cost, in nats: how much better it is that given stars made a detection than that
//! the detection is false and the stars were missed.

use super::scene::Sight;
use super::star::{MAX_GROUP, Pred};
use crate::maths::cov2::Cov2;
use crate::maths::lnprob::ln_normal;
use crate::motion::state_fit::core_wing;
use crate::sensor::blend::{self, mag_of};
use crate::sensor::depth::Depth;

/// Chi-square beyond which a position is not considered at all.
pub const GATE_CHI2: f64 = 45.0;
/// Gain of an option that cannot be.
pub const NEVER: f64 = f64::NEG_INFINITY;

/// ln density of a magnitude residual: a core and a wing three times as wide.
#[must_use]
pub fn ln_mag(d: f64, var: f64) -> f64 {
    let core = 0.9 * ln_normal(d, var).exp();
    let wing = 0.1 * ln_normal(d, 9.0 * var).exp();
    (core + wing).max(1e-30).ln()
}

/// Gain of a single star alone in a detection.
#[must_use]
pub fn alone(s: &Sight, d: usize, p: &Pred) -> f64 {
    if !p.active {
        return NEVER;
    }
    let e = &s.data;
    let cov = p.cov
        + s.sensor
            .errors
            .position(e.cov_mas2[d], p.press, s.sensor.fwhm_mas);
    let chi2 = cov.chi2(e.x_mas[d] - p.x, e.y_mas[d] - p.y);
    if chi2 > GATE_CHI2 {
        return NEVER;
    }
    let mut g = core_wing(chi2, cov.det().ln()).0 - s.ln_false[d] - p.ln_miss;
    if s.mag[d].is_finite() {
        g += ln_mag(s.mag[d] - p.mag, s.mag_var[d] + p.mag_var);
        g += (s.sensor.depth.alone(s.mag[d]) * p.contrast).max(1e-4).ln();
    } else {
        g += (s.sensor.depth.alone(p.mag) * p.contrast).max(1e-4).ln();
    }
    g
}

/// A group as it would be measured.
#[derive(Clone, Copy, Debug)]
pub struct GroupFit {
    pub gain: f64,
    pub x: f64,
    pub y: f64,
    pub share: [f64; MAX_GROUP],
}

/// Gain of a group of two or more stars sharing a detection, relative to all of them missed
/// and apart and the detection false.
#[must_use]
pub fn shared(s: &Sight, d: usize, preds: &[&Pred]) -> GroupFit {
    let n = preds.len();
    let mut out = GroupFit {
        gain: NEVER,
        x: 0.0,
        y: 0.0,
        share: [0.0; MAX_GROUP],
    };
    if n > MAX_GROUP || preds.iter().any(|p| !p.active) {
        return out;
    }
    let sn = &s.sensor;
    let e = &s.data;
    let mut xy = [[0.0; 2]; MAX_GROUP];
    let mut flux = [0.0; MAX_GROUP];
    for (k, p) in preds.iter().enumerate() {
        xy[k] = [p.x, p.y];
        flux[k] = p.flux;
    }
    let b = blend::place(
        sn.blend,
        sn.fwhm_mas,
        &xy[..n],
        &flux[..n],
        &mut out.share[..n],
    );
    out.x = b.x_mas;
    out.y = b.y_mas;
    let mut cov = sn.errors.position(e.cov_mas2[d], 0.0, sn.fwhm_mas);
    let mut mag_var = 0.0;
    let mut spread2: f64 = 0.0;
    for (p, w) in preds.iter().zip(&out.share[..n]) {
        cov += p.cov.scaled(w * w);
        mag_var += w * w * p.mag_var;
        spread2 += w * ((p.x - b.x_mas).powi(2) + (p.y - b.y_mas).powi(2));
    }
    // The blend's place and light are uncertain as far as it is a blend at all.
    let mixed = blend::mixed(&out.share[..n]);
    let model = sn.blend_error_mas(mixed, spread2);
    cov += Cov2::round(model * model);
    let chi2 = cov.chi2(e.x_mas[d] - b.x_mas, e.y_mas[d] - b.y_mas);
    if chi2 > GATE_CHI2 {
        return out;
    }
    let mut g = core_wing(chi2, cov.det().ln()).0 - s.ln_false[d];
    let mag = mag_of(b.flux);
    let contrast = preds.iter().map(|p| p.contrast).fold(0.0, f64::max);
    if s.mag[d].is_finite() {
        let var = s.mag_var[d] + mag_var + (mixed * sn.errors.blend_mag).powi(2);
        g += ln_mag(s.mag[d] - mag, var);
        g += (sn.depth.alone(s.mag[d]) * contrast).max(1e-4).ln();
    } else {
        g += (sn.depth.alone(mag) * contrast).max(1e-4).ln();
    }
    g += merge_bonus(s, preds);
    for p in preds {
        g -= p.ln_miss;
    }
    out.gain = g;
    out
}

/// ln P(the pair merges), softened by how well the separation is known.
fn pair_chance(s: &Sight, a: &Pred, b: &Pred) -> f64 {
    let f = s.sensor.fwhm_mas;
    let sep = (a.x - b.x).hypot(a.y - b.y) / f;
    let var = 0.5 * (a.cov.xx + a.cov.yy + b.cov.xx + b.cov.yy) / (f * f);
    let law = s.sensor.pairs.blurred(var.sqrt());
    law.merged(sep, a.mag - b.mag)
}

/// ln(1 - P(merged)) of a pair that is apart.
#[must_use]
pub fn ln_apart(s: &Sight, a: &Pred, b: &Pred) -> f64 {
    (1.0 - pair_chance(s, a, b)).ln()
}

/// ln P(the group is connected) - sum over its pairs of ln(1 - P(pair)).
fn merge_bonus(s: &Sight, preds: &[&Pred]) -> f64 {
    let n = preds.len();
    let mut p = [[0.0; MAX_GROUP]; MAX_GROUP];
    let mut apart = 0.0;
    for i in 0..n {
        for j in 0..i {
            let c = pair_chance(s, preds[i], preds[j]);
            p[i][j] = c;
            p[j][i] = c;
            apart += (1.0 - c).ln();
        }
    }
    let ln_conn = match n {
        2 => p[0][1].ln(),
        3 => {
            let (a, b, c) = (p[0][1], p[0][2], p[1][2]);
            (a * b + a * c + b * c - 2.0 * a * b * c).max(1e-12).ln()
        }
        // The strongest spanning tree (Prim): the other links can only help.
        _ => {
            let mut inside = [false; MAX_GROUP];
            inside[0] = true;
            let mut ln = 0.0;
            for _ in 1..n {
                let (mut best, mut at) = (0.0, 0);
                for i in (0..n).filter(|&i| inside[i]) {
                    for j in (0..n).filter(|&j| !inside[j]) {
                        if p[i][j] > best {
                            best = p[i][j];
                            at = j;
                        }
                    }
                }
                inside[at] = true;
                ln += best.max(1e-12).ln();
            }
            ln
        }
    };
    ln_conn - apart
}

/// Gain of any set of stars sharing (or alone in) a detection.
#[must_use]
pub fn gain(s: &Sight, d: usize, preds: &[&Pred]) -> f64 {
    match preds {
        [] => 0.0,
        [p] => alone(s, d, p),
        _ => shared(s, d, preds).gain,
    }
}

/// Fill the parts of a prediction that depend on neighbours; `near` lists them.
pub fn settle(s: &Sight, p: &mut Pred, near: &mut dyn Iterator<Item = Pred>) {
    let f = s.sensor.fwhm_mas;
    let mut wings = 0.0;
    let mut press: f64 = 0.0;
    let mut apart = 0.0;
    let reach = s.sensor.pairs.reach_fwhm();
    for q in near {
        let sep = (p.x - q.x).hypot(p.y - q.y) / f;
        if sep < 4.0 && q.mag < p.mag - 1.0 {
            wings += s.sensor.depth.wing(q.flux, sep);
        }
        if sep < reach {
            apart += ln_apart(s, p, &q);
        }
        if sep < 1.8 {
            press = press.max((q.flux / p.flux).min(1.0) * ((1.8 - sep) / 0.9).clamp(0.0, 1.0));
        }
    }
    p.press = press;
    p.ln_apart = apart;
    p.contrast = Depth::contrast(p.flux, wings);
    let mut seen = 0.0;
    // The magnitude is uncertain: average the chance over three points of its distribution.
    let sd = (p.mag_var + 0.01).sqrt();
    for (q, w) in [(-1.2, 0.3), (0.0, 0.4), (1.2, 0.3)] {
        seen += w * s.sensor.depth.alone(p.mag + q * sd);
    }
    p.ln_miss = if s.sensor.targeted {
        0.0
    } else {
        (1.0 - seen * p.contrast).max(1e-3).ln()
    };
}
