//! Births of stars that go round the mass between one epoch and the next.
//!
//! Problem: growth follows a track from epoch to epoch, so it needs to know about where on its
//! orbit a star will be. Close to the mass a star makes a good part of a revolution, or several,
//! in a gap, and the path between two detections says nothing of it.
//!
//! Method: where the period of a circular orbit at the projected radius is shorter than the gaps,
//! a free detection is joined with one of an earlier and one of a later epoch, and every orbit
//! about the known mass through the three ([`orbits_through`]) is grown as usual. Of the many
//! orbits the later detections allow only one; the evidence of the whole track decides.
//!
//! Fails when fewer than about six detections of the star are free, or when so many stars share
//! the inner region that most triples mix them: the number of triples per anchor is bounded.

use rayon::prelude::*;

use super::rounds::BIRTH_NATS;
use crate::motion::state::{Dynamics, P6};
use crate::motion::three_points::{SkyPoint, orbits_through};
use crate::resolve::grow::{self, Draft, Scratch};
use crate::resolve::scene::Scene;
use crate::resolve::work::Work;

/// Epochs looked at on either side of the anchor.
const EPOCHS: usize = 3;
/// Detections taken from either side; their products are the triples of an anchor.
const PER_SIDE: usize = 3;
/// Whole turns looked for in a gap.
const MOST_TURNS: u32 = 12;
/// A period is short when it is less than this many gaps.
const SHORT_GAPS: f64 = 2.0;
/// Partners lie within so many projected radii of the mass: an orbit of eccentricity e reaches
/// out to (1 + e) / (1 - e) times its pericentre.
const REACH: f64 = 4.0;
/// Largest difference of magnitudes \[standard deviations\].
const MAG_SIGMAS: f64 = 4.0;
/// Anchors that may fail before the search ends.
const FAILURES: usize = 12;
/// Triples tried at the same time.
const TOGETHER: usize = 4;
/// Evidence that needs no other triple.
const CERTAIN_NATS: f64 = 60.0;
/// Evidence at which a growing track is given up.
const FLOOR_NATS: f64 = -12.0;

/// Adds every star found.
pub fn births(scene: &Scene, work: &mut Work) {
    let Dynamics::Central { gm_mas3_yr2, .. } = scene.dynamics else {
        return;
    };
    let mut failures = 0;
    for anchor in anchors(scene, work, gm_mas3_yr2) {
        if failures == FAILURES {
            return;
        }
        if !work.desks[anchor.epoch]
            .holders
            .of(anchor.row as usize)
            .is_empty()
        {
            continue;
        }
        match best_orbit(scene, work, gm_mas3_yr2, &anchor) {
            Some(draft) if draft.worth > BIRTH_NATS => {
                work.add(scene, draft.star);
            }
            _ => failures += 1,
        }
    }
}

/// A free detection near the mass.
#[derive(Clone, Copy, Debug)]
struct Anchor {
    /// Place of its epoch in the order of time.
    place: usize,
    epoch: usize,
    row: u32,
    radius_mas: f64,
    mag: f64,
}

/// Free detections with epochs on both sides where a circular orbit is short, brightest first,
/// the middle of the campaign before its ends.
fn anchors(scene: &Scene, work: &Work, gm: f64) -> Vec<Anchor> {
    let n = scene.by_time.len();
    let mut out = Vec::new();
    for place in 1..n.saturating_sub(1) {
        let epoch = scene.by_time[place];
        let t = |k: usize| scene.sights[scene.by_time[k]].t_yr;
        let gap = (t(place) - t(place - 1)).max(t(place + 1) - t(place));
        let s = &scene.sights[epoch];
        if s.sensor.targeted {
            continue;
        }
        let most = (gm * (SHORT_GAPS * gap / std::f64::consts::TAU).powi(2)).cbrt();
        let (x, y) = scene.dynamics.centre_at(s.t_yr);
        for row in free_near(scene, work, epoch, (x, y), most) {
            out.push(Anchor {
                place,
                epoch,
                row,
                radius_mas: (s.data.x_mas[row as usize] - x).hypot(s.data.y_mas[row as usize] - y),
                mag: s.mag[row as usize],
            });
        }
    }
    // Magnitudes to half a magnitude: within that, where the track is longest on both sides.
    out.sort_by_key(|a| {
        let half_mags = if a.mag.is_finite() {
            (2.0 * a.mag).round() as i64
        } else {
            i64::MAX
        };
        (half_mags, a.place.abs_diff(n / 2), a.place, a.row)
    });
    out
}

/// Free detections within a radius of the mass, by row.
fn free_near(
    scene: &Scene,
    work: &Work,
    epoch: usize,
    (x, y): (f64, f64),
    radius_mas: f64,
) -> Vec<u32> {
    let mut hits = Vec::new();
    scene.sights[epoch].tree.within(x, y, radius_mas, &mut hits);
    let mut rows: Vec<u32> = hits
        .iter()
        .map(|h| h.row)
        .filter(|&row| work.desks[epoch].holders.of(row as usize).is_empty())
        .collect();
    rows.sort_unstable();
    rows
}

/// The best track through the anchor.
fn best_orbit(scene: &Scene, work: &Work, gm: f64, anchor: &Anchor) -> Option<Draft> {
    let n = scene.by_time.len();
    let before = (anchor.place.saturating_sub(EPOCHS)..anchor.place).rev();
    let after = anchor.place + 1..(anchor.place + 1 + EPOCHS).min(n);
    let before = partners(scene, work, anchor, before);
    let after = partners(scene, work, anchor, after);
    let triples: Vec<[(usize, u32); 3]> = before
        .iter()
        .flat_map(|&a| {
            after
                .iter()
                .map(move |&b| [(anchor.epoch, anchor.row), a, b])
        })
        .collect();
    let mut best: Option<Draft> = None;
    for few in triples.chunks(TOGETHER) {
        let drafts: Vec<Option<Draft>> = few
            .par_iter()
            .map_init(Scratch::default, |sc, triple| {
                best_of_triple(scene, work, gm, anchor.radius_mas, triple, sc)
            })
            .collect();
        best = drafts.into_iter().flatten().chain(best).reduce(better);
        if best.as_ref().is_some_and(|b| b.worth > CERTAIN_NATS) {
            break;
        }
    }
    best
}

/// The draft with more evidence, the second when equal.
fn better(a: Draft, b: Draft) -> Draft {
    if a.worth > b.worth { a } else { b }
}

/// Detections of other epochs that may be the same star, nearest in time first.
fn partners(
    scene: &Scene,
    work: &Work,
    anchor: &Anchor,
    places: impl Iterator<Item = usize>,
) -> Vec<(usize, u32)> {
    let var = scene.sights[anchor.epoch].mag_var[anchor.row as usize];
    let mut out = Vec::new();
    for epoch in places.map(|p| scene.by_time[p]) {
        let s = &scene.sights[epoch];
        let centre = scene.dynamics.centre_at(s.t_yr);
        for row in free_near(scene, work, epoch, centre, REACH * anchor.radius_mas) {
            let dm = s.mag[row as usize] - anchor.mag;
            let far = dm.powi(2) > MAG_SIGMAS.powi(2) * (s.mag_var[row as usize] + var);
            if !far && out.len() < PER_SIDE {
                out.push((epoch, row));
            }
        }
    }
    out
}

/// The best track on any orbit through a triple: (anchor, earlier, later).
fn best_of_triple(
    scene: &Scene,
    work: &Work,
    gm: f64,
    radius_mas: f64,
    triple: &[(usize, u32); 3],
    sc: &mut Scratch,
) -> Option<Draft> {
    let point = |&(e, d): &(usize, u32)| {
        let s = &scene.sights[e];
        let (x, y) = scene.dynamics.centre_at(s.t_yr);
        SkyPoint {
            t_yr: s.t_yr,
            x_mas: s.data.x_mas[d as usize] - x,
            y_mas: s.data.y_mas[d as usize] - y,
        }
    };
    let [middle, first, last] = triple;
    let points = [point(first), point(middle), point(last)];
    let gap = (points[1].t_yr - points[0].t_yr).max(points[2].t_yr - points[1].t_yr);
    // The semi-major axis is at least half the distance from the mass.
    let shortest = std::f64::consts::TAU * ((0.5 * radius_mas).powi(3) / gm).sqrt();
    let turns = ((gap / shortest) as u32).min(MOST_TURNS);
    let mut states = Vec::new();
    orbits_through(gm, &points, turns, &mut states);
    let mut best: Option<Draft> = None;
    for s in &states {
        let start = P6::from_column_slice(s.as_slice());
        let draft = grow::grow_from(scene, work, triple, &start, FLOOR_NATS, sc);
        best = draft.into_iter().chain(best).reduce(better);
        if best.as_ref().is_some_and(|b| b.worth > CERTAIN_NATS) {
            break;
        }
    }
    best
}
