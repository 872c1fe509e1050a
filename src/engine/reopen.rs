//! A finished result back into the state of the search, ready to be changed and weighed again;
//! and independent pieces of work in parallel.

use rayon::prelude::*;

use super::pipeline::EngineError;
use super::{estimate, prepare, rounds};
use crate::model::campaign::Campaign;
use crate::model::detection::FieldEpoch;
use crate::model::motion::MotionKind;
use crate::model::result::{Solution, Track};
use crate::motion::state::P6;
use crate::resolve::grow;
use crate::resolve::scene::Scene;
use crate::resolve::star::{Cell, Star};
use crate::resolve::work::{self, Desk, Work};

/// A result as the search held it.
#[derive(Debug)]
pub struct Reopened<'a> {
    pub scene: Scene<'a>,
    pub work: Work,
    /// Number in the result of each star of `work`.
    pub track_of: Vec<usize>,
}

/// Puts the tracks of a result back to work: their detections are taken as they are, motions,
/// magnitudes and the observing laws are fitted again to them.
///
/// A track without two detections of its own cannot be fitted and is left out.
#[must_use]
pub fn reopen<'a>(
    campaign: &Campaign,
    epochs: &'a [FieldEpoch],
    solution: &Solution,
) -> Reopened<'a> {
    let mut scene = prepare::scene(campaign, epochs);
    for (s, report) in scene.sights.iter_mut().zip(&solution.epochs) {
        s.sensor.zero_point_mag = report.zero_point_mag.unwrap_or(0.0);
        prepare::apply_laws(s);
    }
    let cells = cells(&scene, solution);
    let stars: Vec<Option<Star>> = solution
        .tracks
        .par_iter()
        .zip(cells)
        .map(|(track, cells)| star(&scene, track, cells))
        .collect();
    let mut track_of = Vec::new();
    let mut work = Work::empty(&scene);
    for (k, star) in stars.into_iter().enumerate() {
        if let Some(star) = star {
            work.stars.push(star);
            track_of.push(k);
        }
    }
    for _ in 0..2 {
        let desks: Vec<Desk> = (0..scene.sights.len())
            .into_par_iter()
            .map(|e| work::desk(&scene, e, &work.stars, None))
            .collect();
        work.desks = desks;
        estimate::laws(&mut scene, &work);
        rounds::refresh(&scene, &mut work);
    }
    Reopened {
        scene,
        work,
        track_of,
    }
}

/// What each track is at each epoch.
fn cells(scene: &Scene, solution: &Solution) -> Vec<Vec<Cell>> {
    let mut holders: Vec<Vec<u32>> = scene.sights.iter().map(|s| vec![0; s.len()]).collect();
    for m in &solution.members {
        holders[m.epoch][m.row] += 1;
    }
    let mut cells = vec![vec![Cell::Missed; scene.sights.len()]; solution.tracks.len()];
    for m in &solution.members {
        let d = m.row as u32;
        cells[m.track][m.epoch] = if holders[m.epoch][m.row] > 1 {
            Cell::Shared(d)
        } else {
            Cell::Alone(d)
        };
    }
    cells
}

fn star(scene: &Scene, track: &Track, cells: Vec<Cell>) -> Option<Star> {
    let mut obs = Vec::new();
    work::clean_obs(scene, &cells, |_| 0.0, &mut obs);
    if obs.len() < 2 {
        return None;
    }
    let motion = &track.motion;
    let t_ref = motion.t_ref_yr;
    let (cx, cy) = scene.dynamics.centre_at(t_ref);
    let (ux, uy) = scene.dynamics.centre_velocity();
    let p = &motion.p;
    // Starts from the motion as tabulated, and from the place at the mean epoch.
    let mean = track.mean_epoch_yr;
    let (mx, my) = scene.dynamics.centre_at(mean);
    let radius = (track.x_mean_mas - mx).hypot(track.y_mean_mas - my);
    let near = match (scene.dynamics.is_central(), motion.kind) {
        (true, MotionKind::Keplerian) => {
            let start = P6::new(p[0] - cx, p[1] - cy, p[2], p[3] - ux, p[4] - uy, p[5]);
            (t_ref, start, false)
        }
        (true, _) => {
            let start = P6::new(
                track.x_mean_mas - mx,
                track.y_mean_mas - my,
                radius,
                track.vx_mean_mas_yr - ux,
                track.vy_mean_mas_yr - uy,
                0.0,
            );
            (mean, start, true)
        }
        (false, _) => (t_ref, P6::new(p[0], p[1], p[2], p[3], p[4], p[5]), false),
    };
    let (t0, start, wide) = near;
    let fit = grow::best_fit(&scene.dynamics, &obs, t0, &start, wide)?;
    let mut star = Star {
        fit,
        mag: track.mag.unwrap_or(0.0),
        mag_var: 0.05,
        cells,
        worth: 0.0,
        blends: Vec::new(),
        ln_extra: 0.0,
    };
    if let Some((mag, var, _)) = work::magnitude(scene, &star.cells, |_| 1.0) {
        (star.mag, star.mag_var) = (mag, var);
    }
    for (e, cell) in star.cells.iter_mut().enumerate() {
        let s = &scene.sights[e];
        let ((x, y), _) = star.fit.predict(&scene.dynamics, s.t_yr);
        if *cell == Cell::Missed && !s.data.region.contains(x, y) {
            *cell = Cell::Out;
        }
    }
    Some(star)
}

/// `each(k)` for every k below `n`, in order, on so many threads (0 = one per processor).
///
/// # Errors
/// No threads can be started.
pub fn in_parallel<T: Send>(
    threads: usize,
    n: usize,
    each: impl Fn(usize) -> T + Send + Sync,
) -> Result<Vec<T>, EngineError> {
    let pool = rayon::ThreadPoolBuilder::new()
        .num_threads(threads)
        .build()?;
    Ok(pool.install(|| (0..n).into_par_iter().map(each).collect()))
}
