//! Where births start: the partners of a detection at other epochs, from the candidate graph.
//!
//! The graph is built once on all detections, with the gates that the motion prior of the field
//! gives; a birth takes the best of the links whose other end is free at that moment. Links that
//! the graph's cap removed cannot start a track: [`Seeds::report`] says how many detections lost
//! some, and flags the tracks that may have been affected.
//!
//! Fails where a star moves farther between neighbouring epochs than the gates reach: such a
//! star is found only if a third epoch lies closer in time.

use rayon::prelude::*;

use crate::link::candidates::{CandidateGraph, Crowd, EpochLinks, Listed, links_from};
use crate::link::gate::{Centre, Gates};
use crate::model::flag::Flags;
use crate::model::note::Note;
use crate::model::result::Solution;
use crate::motion::state::{CUSP_GAMMA, Dynamics};
use crate::resolve::scene::Scene;
use crate::resolve::work::Work;

/// Later epochs in which partners are looked for.
const NEXT_EPOCHS: usize = 6;
/// Longest time between partners \[yr\], where epochs are many.
const WINDOW_YR: f64 = 6.0;
/// Campaigns of so few epochs are searched from end to end.
const ALL_EPOCHS: usize = 12;
/// Partners kept towards one other epoch.
const CAP: usize = 24;
/// Epochs closer in time say little of the motion \[yr\].
const SHORT_YR: f64 = 0.3;
/// Chi-square of two magnitudes beyond which a pair is no start.
const MOST_MAG_CHI2: f64 = 60.0;
/// Stated position errors are too small: floor of a gate \[fwhm\].
const FLOOR_FWHM: f64 = 0.03;
/// Radius within which the pull of a mass counts as at this one \[mas\].
const SOFTENING_MAS: f64 = 10.0;

/// Possible partners of every detection.
#[derive(Debug)]
pub struct Seeds {
    graph: CandidateGraph,
}

impl Seeds {
    /// Links all detections of a scene, epochs in parallel.
    #[must_use]
    pub fn of(scene: &Scene) -> Self {
        let crowds: Vec<Crowd> = scene
            .sights
            .par_iter()
            .map(|s| Crowd::of(s.data, &s.tree))
            .collect();
        let epochs: Vec<Listed> = scene
            .sights
            .iter()
            .zip(&crowds)
            .map(|(s, crowd)| Listed {
                list: s.data,
                tree: &s.tree,
                crowd,
            })
            .collect();
        let mut parts: Vec<(usize, EpochLinks)> = (0..scene.by_time.len())
            .into_par_iter()
            .map(|place| {
                let e = scene.by_time[place];
                (
                    e,
                    links_from(place, &scene.by_time, &epochs, &gates(scene, e)),
                )
            })
            .collect();
        parts.sort_by_key(|p| p.0);
        let parts: Vec<EpochLinks> = parts.into_iter().map(|p| p.1).collect();
        Self {
            graph: CandidateGraph::join(&parts),
        }
    }

    /// The best `most` free detections of other epochs that may be the same star.
    #[must_use]
    pub fn partners(
        &self,
        scene: &Scene,
        work: &Work,
        (e, d): (usize, u32),
        most: usize,
    ) -> Vec<(usize, u32)> {
        let here = self.graph.number(e, d as usize);
        let mut found: Vec<(f64, usize, u32)> = self
            .graph
            .later(here)
            .chain(self.graph.earlier(here))
            .map(|(there, ..)| self.graph.place(there))
            .filter(|&(f, row)| work.desks[f].holders.of(row).is_empty())
            .filter_map(|(f, row)| {
                let rank = rank(scene, (e, d as usize), (f, row))?;
                Some((rank, f, row as u32))
            })
            .collect();
        found.sort_by(|a, b| b.0.total_cmp(&a.0).then((a.1, a.2).cmp(&(b.1, b.2))));
        found.truncate(most);
        found.into_iter().map(|f| (f.1, f.2)).collect()
    }
}

/// How good a start a pair is: likelihood of its motion and brightness, each with a wide foot,
/// and less when the two epochs lie so close that the motion stays unknown. (The ln odds of the
/// graph, which know the local density too, found no more stars on made fields and fewer where
/// the epochs are few.)
fn rank(scene: &Scene, (e, d): (usize, usize), (f, row): (usize, usize)) -> Option<f64> {
    let (s, o) = (&scene.sights[e], &scene.sights[f]);
    let dm = o.mag[row] - s.mag[d];
    let z2 = if dm.is_finite() {
        dm * dm / (o.mag_var[row] + s.mag_var[d])
    } else {
        1.0
    };
    if z2 > MOST_MAG_CHI2 {
        return None;
    }
    let (x, y) = (s.data.x_mas[d], s.data.y_mas[d]);
    let dt_yr = (o.t_yr - s.t_yr).abs();
    let moved = scene.dynamics.speed_mas_yr(x, y, s.t_yr) * dt_yr;
    let spread = moved * moved + 25.0;
    let (dx, dy) = (o.data.x_mas[row] - x, o.data.y_mas[row] - y);
    let q2 = (dx * dx + dy * dy) / spread;
    let close = if dt_yr < SHORT_YR { 2.0 } else { 0.0 };
    let feet = q2.min(8.0 + 0.05 * q2) + z2.min(6.0 + 0.15 * z2);
    Some(-0.5 * feet - spread.ln() - close)
}

/// Gates of the links that leave an epoch.
fn gates(scene: &Scene, e: usize) -> Gates {
    let s = &scene.sights[e];
    let base = match scene.dynamics {
        Dynamics::Central { gm_mas3_yr2, .. } => {
            let (x_mas, y_mas) = scene.dynamics.centre_at(s.t_yr);
            let centre = Centre {
                gm_mas3_yr2,
                x_mas,
                y_mas,
                softening_mas: SOFTENING_MAS,
            };
            Gates::new(0.0, Some(centre))
        }
        Dynamics::Free {
            speed_mas_yr, wide, ..
        } => Gates {
            tail: Some(wide),
            ..Gates::new(speed_mas_yr, None)
        },
    };
    Gates {
        density_slope: CUSP_GAMMA,
        floor_mas: FLOOR_FWHM * s.sensor.fwhm_mas,
        mag_floor: s.sensor.errors.mag_floor,
        next_epochs: NEXT_EPOCHS,
        window_yr: if scene.by_time.len() > ALL_EPOCHS {
            WINDOW_YR
        } else {
            f64::INFINITY
        },
        cap: CAP,
        ..base
    }
}

impl Seeds {
    /// What the cap did: a note, and the flag on tracks most of whose detections lost links.
    pub fn report(&self, solution: &mut Solution) {
        let n = self.graph.cut.iter().filter(|c| **c).count();
        if n == 0 {
            return;
        }
        let mut balance = vec![0i64; solution.tracks.len()];
        for m in &solution.members {
            let lost = self.graph.cut[self.graph.number(m.epoch, m.row)];
            balance[m.track] += if lost { 1 } else { -1 };
        }
        let mut flagged = 0;
        for (track, balance) in solution.tracks.iter_mut().zip(&balance) {
            if *balance >= 0 {
                track.flags.set(Flags::CAPPED);
                flagged += 1;
            }
        }
        solution.notes.push(Note {
            what: "links_capped",
            place: "linking".to_owned(),
            text: format!(
                "{n} of {} detections had more than {CAP} possible partners in one other epoch, \
                 of which the best {CAP} were kept; {flagged} tracks with at least half of their \
                 detections among them are flagged",
                self.graph.cut.len()
            ),
        });
    }
}
