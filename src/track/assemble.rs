//! Tracks, memberships, leftovers and tangles of a finished search, in table order.

use crate::model::campaign::{BlendLaw, Campaign};
use crate::model::detection::FieldEpoch;
use crate::model::flag::Flags;
use crate::model::motion::MotionKind;
use crate::model::result::{
    EpochReport, Leftover, Membership, Rival, Solution, TangleReport, Track,
};
use crate::motion::wander::Wander;
use crate::resolve::belief::Beliefs;
use crate::resolve::scene::Scene;
use crate::resolve::star::Cell;
use crate::resolve::work::{self, Work};
use crate::sensor::blend;

use super::proof::Proved;
use super::{flags, rivals, summary};

/// Which members of a blend are listed: where less of a star's light is in the measurement, it
/// has no part in it that could be checked.
struct Listing {
    least_share: f64,
    /// Distance from the blend.
    reach_fwhm: f64,
}

impl Listing {
    /// A centroid takes in the light of every star that is not resolved; a profile fit that of the
    /// stars under the profile.
    fn of(law: BlendLaw) -> Self {
        match law {
            BlendLaw::Centroid => Self {
                least_share: 0.05,
                reach_fwhm: 2.0,
            },
            BlendLaw::Psf => Self {
                least_share: 0.07,
                reach_fwhm: 0.7,
            },
        }
    }
}
/// Least belief in a membership of the best explanation.
const LEAST_BELIEF: f64 = 0.4;
/// Probability below which a membership counts as in doubt.
pub const DOUBT: f64 = 0.9;

/// Everything that assembly needs beside the search's state.
#[derive(Debug)]
pub struct Parts<'a> {
    pub campaign: &'a Campaign,
    pub epochs: &'a [FieldEpoch],
    pub scene: &'a Scene<'a>,
    pub work: &'a Work,
    /// By epoch.
    pub beliefs: &'a [Beliefs],
    /// Probability that each star is one real star.
    pub real: &'a [f64],
    pub proved: &'a Proved,
    /// Errors that persist.
    pub wander: &'a Wander,
}

struct Member {
    star: usize,
    epoch: usize,
    row: usize,
    share: f64,
    probability: f64,
    offset: [f64; 2],
    flags: Flags,
}

/// Build the tables' content.
#[must_use]
pub fn assemble(parts: &Parts) -> Solution {
    let Parts {
        epochs,
        scene,
        work,
        ..
    } = *parts;
    let mut members = memberships(parts);
    let count = count(&members, work.stars.len());
    // A track needs two detections.
    members.retain(|m| count[m.star] >= 2);
    let mut order: Vec<usize> = (0..work.stars.len()).filter(|&k| count[k] >= 2).collect();
    order.sort_by(|&a, &b| {
        let key = |k: usize| {
            (
                work.stars[k].mag,
                work.stars[k].fit.p[0],
                work.stars[k].fit.p[1],
            )
        };
        let (x, y) = (key(a), key(b));
        x.0.total_cmp(&y.0)
            .then(x.1.total_cmp(&y.1))
            .then(x.2.total_cmp(&y.2))
    });
    let mut number = vec![usize::MAX; work.stars.len()];
    for (i, &k) in order.iter().enumerate() {
        number[k] = i;
    }
    members.sort_by_key(|m| (number[m.star], m.epoch, m.row));
    let mut solution = Solution::default();
    let mut from = 0;
    for (i, &k) in order.iter().enumerate() {
        let to = from + members[from..].iter().take_while(|m| m.star == k).count();
        solution.tracks.push(track(parts, i, k, &members[from..to]));
        from = to;
    }
    solution.members = members
        .iter()
        .map(|m| Membership {
            track: number[m.star],
            epoch: m.epoch,
            row: m.row,
            probability: m.probability,
            share: m.share,
            dx_mas: m.offset[0],
            dy_mas: m.offset[1],
            flags: m.flags,
        })
        .collect();
    solution.leftovers = leftovers(parts, &members, &number);
    solution.epochs = epoch_reports(epochs, scene, &solution);
    tangle_tables(parts, &number, &mut solution);
    solution
}

fn count(members: &[Member], n: usize) -> Vec<usize> {
    let mut c = vec![0; n];
    for m in members {
        c[m.star] += 1;
    }
    c
}

fn memberships(parts: &Parts) -> Vec<Member> {
    let Parts {
        scene,
        work,
        beliefs,
        real,
        ..
    } = *parts;
    let mut out = Vec::new();
    for (e, s) in scene.sights.iter().enumerate() {
        let desk = &work.desks[e];
        let listing = Listing::of(s.sensor.blend);
        for (d, g) in desk.holders.held() {
            let stars = g.members();
            let mut xy = [[0.0; 2]; crate::resolve::star::MAX_GROUP];
            let mut flux = [0.0; crate::resolve::star::MAX_GROUP];
            let mut share = [0.0; crate::resolve::star::MAX_GROUP];
            for (i, &k) in stars.iter().enumerate() {
                xy[i] = [desk.preds[k as usize].x, desk.preds[k as usize].y];
                flux[i] = desk.preds[k as usize].flux;
            }
            let n = stars.len();
            let b = blend::place(
                s.sensor.blend,
                s.sensor.fwhm_mas,
                &xy[..n],
                &flux[..n],
                &mut share[..n],
            );
            let total: f64 = flux[..n].iter().sum();
            let listed = (0..n)
                .filter(|&i| flux[i] / total >= listing.least_share)
                .count();
            for (i, &k) in stars.iter().enumerate() {
                let part = flux[i] / total;
                let far = (xy[i][0] - b.x_mas).hypot(xy[i][1] - b.y_mas) / s.sensor.fwhm_mas;
                if n > 1 && (part < listing.least_share || far > listing.reach_fwhm) {
                    continue;
                }
                let k = k as usize;
                let mut f = Flags::default();
                if listed >= 2 {
                    f.set(Flags::MERGED);
                }
                // The best explanation is what is listed; a smaller belief means that the last refit
                // moved the prediction after the choice was made.
                let given = beliefs[e].of(d as u32, k as u32).max(LEAST_BELIEF);
                let mut p = given * real[k];
                if listed >= 2 {
                    // A share of a blend is known only as far as the star's own place is.
                    let sigma = desk.preds[k].cov.max_var().sqrt() / s.sensor.fwhm_mas;
                    p *= 1.0 / (1.0 + (sigma / 0.35).powi(2));
                }
                if s.mag[d].is_finite() {
                    let mag = blend::mag_of(b.flux);
                    let var = s.mag_var[d] + desk.preds[k].mag_var;
                    if flags::flux_jump(s.mag[d] - mag, var) {
                        f.set(Flags::FLUX_JUMP);
                    }
                }
                if p < DOUBT {
                    f.set(Flags::AMBIGUOUS);
                }
                out.push(Member {
                    star: k,
                    epoch: e,
                    row: d,
                    share: if listed == 1 && n == 1 { 1.0 } else { part },
                    probability: p.clamp(0.0, 1.0),
                    offset: [s.data.x_mas[d] - b.x_mas, s.data.y_mas[d] - b.y_mas],
                    flags: f,
                });
            }
        }
    }
    out
}

fn track(parts: &Parts, i: usize, k: usize, members: &[Member]) -> Track {
    let Parts {
        campaign,
        scene,
        work,
        real,
        ..
    } = *parts;
    let star = &work.stars[k];
    let mut obs = Vec::new();
    work::clean_obs(
        scene,
        &star.cells,
        |e| work.desks[e].preds[k].press,
        &mut obs,
    );
    let t_ref = campaign.reference.yr();
    let clean = obs.len();
    obs.extend(star.blends.iter().map(|b| b.1));
    let fit = (parts.wander).restate(&scene.dynamics, &star.fit, &obs, star.mag);
    obs.truncate(clean);
    let sum = summary::summarise(&scene.dynamics, &fit, &obs, t_ref, |line, f| {
        parts.wander.restate(line, f, &obs, star.mag)
    });
    let times: Vec<f64> = members.iter().map(|m| scene.sights[m.epoch].t_yr).collect();
    let first = times.iter().copied().fold(f64::INFINITY, f64::min);
    let last = times.iter().copied().fold(f64::NEG_INFINITY, f64::max);
    // The mean epoch weighs detections by their errors: there the position is best known.
    let (mut sw, mut swt) = (0.0, 0.0);
    for o in &obs {
        let w = 1.0 / (o.cov.xx + o.cov.yy);
        sw += w;
        swt += w * o.t_yr;
    }
    let mean = if sw > 0.0 {
        swt / sw
    } else {
        0.5 * (first + last)
    };
    let at = summary::at_mean(&scene.dynamics, &fit, mean);
    let mags: Vec<f64> = star
        .cells
        .iter()
        .enumerate()
        .filter_map(|(e, c)| match *c {
            Cell::Alone(d) => Some(scene.sights[e].mag[d as usize]).filter(|m| m.is_finite()),
            _ => None,
        })
        .collect();
    let scatter = (mags.len() >= 2).then(|| {
        let m = mags.iter().sum::<f64>() / mags.len() as f64;
        (mags.iter().map(|x| (x - m).powi(2)).sum::<f64>() / (mags.len() - 1) as f64).sqrt()
    });
    let mut f = flags::of_track(scene, work, k, scatter);
    if members.iter().any(|m| m.flags.has(Flags::AMBIGUOUS)) {
        let n = members
            .iter()
            .filter(|m| m.flags.has(Flags::AMBIGUOUS))
            .count();
        if 2 * n > members.len() || real[k] < DOUBT {
            f.set(Flags::AMBIGUOUS);
        }
    }
    let orbit = (sum.motion.kind == MotionKind::Keplerian)
        .then(|| summary::orbit(campaign.central.as_ref(), &scene.dynamics, &sum.motion))
        .flatten();
    Track {
        name: format!("L{:05}", i + 1),
        motion: sum.motion,
        n_members: members.len(),
        first_yr: first,
        last_yr: last,
        mean_epoch_yr: mean,
        x_mean_mas: at[0].0,
        y_mean_mas: at[1].0,
        x_mean_err_mas: at[0].1,
        y_mean_err_mas: at[1].1,
        vx_mean_mas_yr: at[2].0,
        vy_mean_mas_yr: at[3].0,
        vx_mean_err_mas_yr: at[2].1,
        vy_mean_err_mas_yr: at[3].1,
        sky: sum.sky,
        mag: (!mags.is_empty()).then_some(star.mag),
        mag_scatter: scatter,
        chi2: sum.chi2,
        dof: sum.dof,
        ln_evidence: star.worth,
        probability: real[k],
        tangle: None,
        orbit,
        flags: f,
    }
}

fn leftovers(parts: &Parts, members: &[Member], number: &[usize]) -> Vec<Leftover> {
    let Parts {
        scene,
        work,
        beliefs,
        ..
    } = *parts;
    let mut held: Vec<Vec<bool>> = scene.sights.iter().map(|s| vec![false; s.len()]).collect();
    for m in members {
        held[m.epoch][m.row] = true;
    }
    let mut out = Vec::new();
    let mut near = Vec::new();
    for (e, s) in scene.sights.iter().enumerate() {
        let desk = &work.desks[e];
        for (d, _) in held[e].iter().enumerate().filter(|h| !h.1) {
            let (x, y) = (s.data.x_mas[d], s.data.y_mas[d]);
            let mut r = 2.0 * s.sensor.fwhm_mas;
            let mut nearest = None;
            for _ in 0..6 {
                desk.grid.within(&desk.preds, x, y, r, &mut near);
                nearest = near
                    .iter()
                    .filter(|&&k| number[k as usize] != usize::MAX)
                    .map(|&k| {
                        (
                            number[k as usize],
                            (desk.preds[k as usize].x - x).hypot(desk.preds[k as usize].y - y),
                        )
                    })
                    .min_by(|a, b| a.1.total_cmp(&b.1).then(a.0.cmp(&b.0)));
                if nearest.is_some() {
                    break;
                }
                r *= 2.0;
            }
            let mut f = Flags::default();
            // A second detection of a star that is held elsewhere in this epoch.
            if nearest.is_some_and(|(_, r)| r < 0.8 * s.sensor.fwhm_mas) {
                f.set(Flags::TWIN);
            }
            out.push(Leftover {
                epoch: e,
                row: d,
                p_false: beliefs[e].nobody.get(d).copied().unwrap_or(1.0),
                nearest,
                flags: f,
            });
        }
    }
    out
}

fn epoch_reports(epochs: &[FieldEpoch], scene: &Scene, solution: &Solution) -> Vec<EpochReport> {
    let mut reports: Vec<EpochReport> = scene
        .sights
        .iter()
        .enumerate()
        .map(|(e, s)| EpochReport {
            n_list: epochs[e].len(),
            error_factor: s.sensor.errors.factor,
            error_floor_mas: s.sensor.errors.floor_mas,
            limit_mag: s.sensor.depth.m50.is_finite().then_some(s.sensor.depth.m50),
            zero_point_mag: Some(s.sensor.zero_point_mag),
            coef: [
                [0.0, 1.0, 0.0, 0.0, 0.0, 0.0],
                [0.0, 0.0, 1.0, 0.0, 0.0, 0.0],
            ],
            ..EpochReport::default()
        })
        .collect();
    let mut seen: Vec<Vec<bool>> = epochs.iter().map(|e| vec![false; e.len()]).collect();
    let mut sum = vec![(0.0, 0usize); reports.len()];
    for m in &solution.members {
        seen[m.epoch][m.row] = true;
        if !m.flags.has(Flags::MERGED) {
            sum[m.epoch].0 += m.dx_mas * m.dx_mas + m.dy_mas * m.dy_mas;
            sum[m.epoch].1 += 2;
        }
    }
    for (e, r) in reports.iter_mut().enumerate() {
        r.n_matched = seen[e].iter().filter(|h| **h).count();
        r.n_unmatched = r.n_list - r.n_matched;
        r.n_anchors = sum[e].1 / 2;
        r.rms_mas = (sum[e].1 > 0).then(|| (sum[e].0 / sum[e].1 as f64).sqrt());
    }
    reports
}

/// Tangles with their certificates, and each track's and rival's tangle.
fn tangle_tables(parts: &Parts, number: &[usize], solution: &mut Solution) {
    for t in &parts.proved.tangles {
        let tracks: Vec<usize> = {
            let mut v: Vec<usize> = t
                .stars
                .iter()
                .map(|&k| number[k as usize])
                .filter(|&i| i != usize::MAX)
                .collect();
            v.sort_unstable();
            v
        };
        if tracks.len() < 2 {
            continue;
        }
        let id = solution.tangles.len();
        for &i in &tracks {
            solution.tracks[i].tangle = Some(id);
            if t.flags.has(Flags::UNPROVEN) {
                solution.tracks[i].flags.set(Flags::UNPROVEN);
            }
            if t.flags.has(Flags::CAPPED) {
                solution.tracks[i].flags.set(Flags::CAPPED);
            }
        }
        solution.tangles.push(TangleReport {
            tracks,
            n_detections: t.n_detections,
            n_epochs: t.n_epochs,
            certificate: t.certificate,
            work: t.work,
            flags: t.flags,
        });
        let name = |star: u32| {
            solution
                .tracks
                .get(number[star as usize])
                .map(|t| t.name.clone())
        };
        let listed = t
            .rivals
            .iter()
            .filter_map(|r| Some((r.ln_odds, rivals::sentence(r, parts.campaign, name)?)));
        let listed: Vec<(f64, String)> = listed.collect();
        solution.rivals.extend(
            listed
                .into_iter()
                .zip(1..)
                .map(|((ln_odds, change), rank)| Rival {
                    tangle: id,
                    rank,
                    ln_odds,
                    change,
                }),
        );
    }
    // Tangles in the order of their brightest track.
    let mut order: Vec<usize> = (0..solution.tangles.len()).collect();
    order.sort_by_key(|&t| solution.tangles[t].tracks[0]);
    let mut place = vec![0; order.len()];
    for (new, &old) in order.iter().enumerate() {
        place[old] = new;
    }
    solution.tangles.sort_by_key(|t| t.tracks[0]);
    for t in &mut solution.tracks {
        t.tangle = t.tangle.map(|old| place[old]);
    }
    for r in &mut solution.rivals {
        r.tangle = place[r.tangle];
    }
    solution.rivals.sort_by_key(|r| (r.tangle, r.rank));
}
