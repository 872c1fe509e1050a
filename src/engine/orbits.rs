//! The last stage of a run: orbits of finished tracks, and on request the central mass.

use rayon::prelude::*;

use super::observer::Observer;
use super::settings::Settings;
use crate::model::campaign::Campaign;
use crate::model::detection::FieldEpoch;
use crate::model::motion::MotionKind;
use crate::model::note::Note;
use crate::model::result::Solution;
use crate::motion::orbit_fit::{ErrorLaw, FitEnd, OrbitPrior, State};
use crate::motion::refine_mass::{Common, MassProblem, Orbiter, RefinedMass};
use crate::motion::terms::Terms;
use crate::track::orbits::{self, About, OrbitData};

/// Least number of clean positions of an orbit that helps to weigh the mass.
const LEAST_POINTS: usize = 6;
/// Least probability of its track.
const LEAST_PROBABILITY: f64 = 0.9;
/// Chi-square of three numbers beyond which mass and centre disagree with the campaign's (1 %).
const DISAGREES: f64 = 11.34;

/// Enters all minima of all orbits into the solution; refines the mass when asked to.
pub fn conclude(
    campaign: &Campaign,
    epochs: &[FieldEpoch],
    settings: &Settings,
    solution: &mut Solution,
    observer: &dyn Observer,
) {
    let Some(about) = About::of(campaign) else {
        return;
    };
    observer.stage("orbits", None);
    let terms = Terms::of(about.mass).unwrap_or_else(|e| {
        solution.notes.push(Note {
            what: "term_left_out",
            place: "[central_mass]".to_owned(),
            text: format!("{e}; optional terms are left out"),
        });
        Terms::default()
    });
    let tracks = &*solution;
    let data: Vec<Option<OrbitData>> = (0..tracks.tracks.len())
        .into_par_iter()
        .map(|k| {
            (tracks.tracks[k].motion.kind == MotionKind::Keplerian)
                .then(|| orbits::data(&about, epochs, tracks, k))
        })
        .collect();
    let minima = data
        .par_iter()
        .enumerate()
        .map(|(k, d)| {
            d.as_ref().map_or_else(Vec::new, |d| {
                orbits::minima(&about, terms, d, &tracks.tracks[k].motion, k)
            })
        })
        .collect();
    orbits::enter(&about, solution, minima, |k| {
        let has_velocity = data[k].as_ref().is_some_and(|d| !d.velocities.is_empty());
        has_velocity || !terms.are_off()
    });
    if settings.refine_mass {
        let note = refine(&about, solution, &data);
        solution.notes.push(note);
    }
}

/// Solves mass and centre from all good orbits, and says what came out.
fn refine(about: &About<'_>, solution: &Solution, data: &[Option<OrbitData>]) -> Note {
    let gm = about.mass.gm_mas3_yr2;
    let orbiters: Vec<Orbiter> = solution
        .tracks
        .iter()
        .zip(data)
        .filter_map(|(track, d)| {
            let d = d.as_ref()?;
            if d.points.len() < LEAST_POINTS || track.probability < LEAST_PROBABILITY {
                return None;
            }
            let start: State = about.relative(&track.motion);
            let mut prior = OrbitPrior::cusp(gm, start[0].hypot(start[1]).max(1.0));
            // Wide: the prior must not weigh in on the mass.
            prior.z_sigma_mas *= 5.0;
            prior.v_sigma_mas_yr = prior.v_sigma_mas_yr.map(|s| 5.0 * s);
            Some(Orbiter {
                points: d.points.clone(),
                velocities: d.velocities.clone(),
                start,
                prior,
            })
        })
        .collect();
    let m = about.mass;
    let given = Common::from([gm, m.x_mas, m.y_mas, m.vx_mas_yr, m.vy_mas_yr]);
    let problem = MassProblem {
        t_ref_yr: about.t_ref_yr,
        orbiters: &orbiters,
        start: given,
        free: [true, true, true, false, false],
        errors: ErrorLaw::CoreWing {
            wing: 0.1,
            widen: 3.0,
        },
    };
    let place = "[central_mass]".to_owned();
    match problem.solve() {
        Ok(found) => Note {
            what: "refined_mass",
            place,
            text: words(about, &found, &given, orbiters.len()),
        },
        Err(e) => Note {
            what: "mass_not_refined",
            place,
            text: e.to_string(),
        },
    }
}

fn words(about: &About<'_>, found: &RefinedMass, given: &Common, orbits: usize) -> String {
    let m = about.mass;
    let err = |k: usize| found.cov[(k, k)].sqrt();
    let gm_err = m.gm_err_mas3_yr2.unwrap_or(0.0);
    let var = Common::from([
        gm_err.powi(2),
        m.x_err_mas.powi(2),
        m.y_err_mas.powi(2),
        0.0,
        0.0,
    ]);
    let (off, n) = found.disagreement(given, &var);
    let mass = match (m.mass_msun, m.distance_pc) {
        (Some(_), Some(d)) => {
            let per = crate::maths::units::gm_mas3_yr2(1.0, d);
            format!(
                " ({:.4e} +- {:.1e} Msun at {d} pc, distance error not included)",
                found.common[0] / per,
                err(0) / per
            )
        }
        _ => String::new(),
    };
    let caution = match found.end {
        FitEnd::Converged => "",
        FitEnd::StepLimit => " (the solution had not settled at the limit of its steps)",
    };
    format!(
        "{orbits} orbits give GM/D^3 = {:.5e} +- {:.1e} mas^3/yr^2{mass}, given {:.5e}; centre ({:.3} +- {:.3}, {:.3} +- {:.3}) mas, given ({:.3}, {:.3}); chi2 {:.0} for {} degrees of freedom; the difference has chi2 {off:.1} for {n} numbers: {}{caution}",
        found.common[0],
        err(0),
        given[0],
        found.common[1],
        err(1),
        found.common[2],
        err(2),
        given[1],
        given[2],
        found.chi2,
        found.dof,
        if off < DISAGREES {
            "agrees with the campaign"
        } else {
            "disagrees with the campaign"
        }
    )
}
