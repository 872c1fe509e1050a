//! First tracks of a campaign of two or three epochs: pairs, chosen all together.

use rayon::prelude::*;

use super::prepare::apply_laws;
use super::seeds::Seeds;
use crate::maths::assign::{Edges, Solver};
use crate::maths::order;
use crate::resolve::grow::{self, Scratch};
use crate::resolve::scene::Scene;
use crate::resolve::star::Cell;
use crate::resolve::work::Work;

/// Campaigns of so few epochs begin with an assignment of pairs.
pub const FEW_EPOCHS: usize = 3;

/// Least evidence of a pair in so short a campaign: more likely than not.
const PAIR_NATS: f64 = 0.0;
/// Evidence from which a pair may teach the difference of the magnitude scales.
const SECURE_NATS: f64 = 8.0;
/// Scatter of the colours of stars between two instruments whose bands are not known to be the
/// same (common practice, no source).
const COLOUR_MAG: f64 = 0.2;

/// First tracks of a campaign of two or three epochs: between its first two epochs the set of
/// pairs with the largest total evidence (an assignment). With so little to hold a track
/// together, taking the best pair first would let one star rob the next of its partner.
pub fn births(scene: &mut Scene, seeds: &Seeds, work: &mut Work) {
    let &[first, second, ..] = scene.by_time.as_slice() else {
        return;
    };
    if scene.sights[first].data.instrument != scene.sights[second].data.instrument {
        for s in &mut scene.sights {
            s.sensor.errors.mag_floor = s.sensor.errors.mag_floor.max(COLOUR_MAG);
            apply_laws(s);
        }
    }
    let mut steps: Vec<f64> = pairs(scene, seeds, work, first, second)
        .iter()
        .filter_map(|row| {
            row.iter()
                .max_by(|a, b| a.draft.worth.total_cmp(&b.draft.worth))
        })
        .filter(|p| p.draft.worth > SECURE_NATS && p.step_mag.is_finite())
        .map(|p| p.step_mag)
        .collect();
    if steps.len() >= 2
        && let Some(step) = order::median(&mut steps)
    {
        scene.sights[second].sensor.zero_point_mag -= step;
        apply_laws(&mut scene.sights[second]);
    }
    let drafts = pairs(scene, seeds, work, first, second);
    let mut starts = vec![0u32];
    let (mut to, mut cost) = (Vec::new(), Vec::new());
    for row in &drafts {
        to.extend(row.iter().map(|p| p.row));
        cost.extend(row.iter().map(|p| p.draft.worth));
        starts.push(to.len() as u32);
    }
    let mut solver = Solver::default();
    solver.max_weight(Edges {
        n_right: scene.sights[second].len(),
        first: &starts,
        to: &to,
        cost: &cost,
    });
    for (row, &mate) in drafts.iter().zip(solver.right_of_left()) {
        if let Some(p) = row.iter().find(|p| p.row == mate) {
            work.add(scene, p.draft.star.clone());
        }
    }
}

/// A detection of the second epoch that could be the same star.
struct Pair {
    row: u32,
    draft: grow::Draft,
    /// Magnitude there minus here.
    step_mag: f64,
}

fn pairs(scene: &Scene, seeds: &Seeds, work: &Work, first: usize, second: usize) -> Vec<Vec<Pair>> {
    (0..scene.sights[first].len() as u32)
        .into_par_iter()
        .map_init(Scratch::default, |sc, d| {
            seeds
                .partners(scene, work, (first, d), 8)
                .into_iter()
                .filter(|&(e, _)| e == second)
                .filter_map(|(e, q)| {
                    let draft = grow::grow(scene, work, &[(first, d), (e, q)], -25.0, None, sc)?;
                    let step_mag =
                        scene.sights[e].mag[q as usize] - scene.sights[first].mag[d as usize];
                    (draft.worth > PAIR_NATS && draft.star.cells[e] == Cell::Alone(q)).then_some(
                        Pair {
                            row: q,
                            draft,
                            step_mag,
                        },
                    )
                })
                .collect()
        })
        .collect()
}
