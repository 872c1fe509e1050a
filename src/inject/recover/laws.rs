//! Resolution and depth of every epoch, fitted to what the run's own tracks met.

use std::collections::BTreeMap;

use super::Linked;
use crate::model::campaign::{BlendLaw, CentralMass, Selection};
use crate::model::motion::{Motion, MotionKind};
use crate::motion::kepler::propagate;
use crate::motion::linear::predict;
use crate::near::Tree;
use crate::sensor::depth::{self, Depth, Event};
use crate::sensor::pairs::{self, PairEvent, PairLaw};

/// Fewest members of a track that teaches anything.
const LEAST_MEMBERS: usize = 5;

/// What decides the fate of a star in one epoch.
#[derive(Clone, Debug)]
pub struct EpochLaw {
    pub depth: Depth,
    pub pairs: PairLaw,
    pub blend: BlendLaw,
    /// Factor on stated errors and floor that the run found.
    pub error_factor: f64,
    pub error_floor_mas: f64,
    /// Nothing but chosen stars is listed: a made-up one never is.
    pub targeted: bool,
}

/// A track's place at a time; `None` for an orbit without a mass.
fn place(motion: &Motion, central: Option<&CentralMass>, t_yr: f64) -> Option<[f64; 2]> {
    if motion.kind != MotionKind::Keplerian {
        let p = predict(motion, t_yr);
        return Some([p.x_mas, p.y_mas]);
    }
    let c = central?;
    let p = &motion.p;
    let r = [p[0] - c.x_mas, p[1] - c.y_mas, p[2]];
    let v = [p[3] - c.vx_mas_yr, p[4] - c.vy_mas_yr, p[5]];
    let dt = t_yr - motion.t_ref_yr;
    let (r, _) = propagate(c.gm_mas3_yr2, r, v, dt);
    Some([
        c.x_mas + c.vx_mas_yr * dt + r[0],
        c.y_mas + c.vy_mas_yr * dt + r[1],
    ])
}

/// One law per epoch.
#[must_use]
pub fn fitted(run: Linked<'_>) -> Vec<EpochLaw> {
    let mut row_of: BTreeMap<(usize, usize), usize> = BTreeMap::new();
    for m in &run.solution.members {
        row_of.insert((m.epoch, m.track), m.row);
    }
    let mut of_instrument: Vec<Vec<PairEvent>> = vec![Vec::new(); run.campaign.instruments.len()];
    let mut depths = Vec::with_capacity(run.epochs.len());
    for (e, epoch) in run.epochs.iter().enumerate() {
        let tracks: Vec<(usize, [f64; 2], f64)> = (run.solution.tracks.iter().enumerate())
            .filter(|(_, t)| t.n_members >= LEAST_MEMBERS)
            .filter_map(|(k, t)| {
                let p = place(&t.motion, run.campaign.central.as_ref(), epoch.time.yr())?;
                Some((k, p, t.mag?))
            })
            .filter(|(_, p, _)| epoch.region.contains(p[0], p[1]))
            .collect();
        let (x, y): (Vec<f64>, Vec<f64>) = tracks.iter().map(|t| (t.1[0], t.1[1])).unzip();
        let reach = PairLaw::start().reach_fwhm() * epoch.fwhm_mas;
        let mut alone = vec![true; tracks.len()];
        for pair in Tree::build(&x, &y).close_pairs(reach) {
            let (a, b) = (pair.left as usize, pair.right as usize);
            alone[a] = false;
            alone[b] = false;
            let rows = [a, b].map(|k| row_of.get(&(e, tracks[k].0)));
            if let [Some(ra), Some(rb)] = rows {
                of_instrument[epoch.instrument].push(PairEvent {
                    sigma_fwhm: 0.0,
                    sep_fwhm: pair.dist_mas / epoch.fwhm_mas,
                    dmag: tracks[a].2 - tracks[b].2,
                    merged: ra == rb,
                    weight: 1.0,
                });
            }
        }
        let events: Vec<Event> = (tracks.iter().zip(&alone))
            .filter(|(_, alone)| **alone)
            .map(|(t, _)| Event {
                mag: t.2,
                seen: row_of.contains_key(&(e, t.0)),
            })
            .collect();
        depths.push(depth::refit(Depth::from_list(&epoch.mag), &events));
    }
    let resolved: Vec<PairLaw> = (of_instrument.iter())
        .map(|events| pairs::refit(PairLaw::start(), events))
        .collect();
    (run.epochs.iter().enumerate())
        .map(|(e, epoch)| {
            let settings = &run.campaign.epochs[e].settings;
            let report = run.solution.epochs.get(e);
            let factor = report.map_or(1.0, |r| r.error_factor);
            EpochLaw {
                depth: depths[e],
                pairs: resolved[epoch.instrument],
                blend: settings.blend.unwrap_or(BlendLaw::Psf),
                error_factor: if factor > 0.0 { factor } else { 1.0 },
                error_floor_mas: report.map_or(0.0, |r| r.error_floor_mas),
                targeted: settings.selection == Selection::Targeted,
            }
        })
        .collect()
}
