//! A whole run: scene, rounds, beliefs, proofs, tables' content.

use rayon::prelude::*;

use super::observer::Observer;
use super::rulings::{self, Broken, Discards};
use super::seeds::Seeds;
use super::settings::Settings;
use super::{orbits, prepare, rounds};
use crate::maths::lnprob::logistic;
use crate::maths::order;
use crate::model::campaign::Campaign;
use crate::model::detection::FieldEpoch;
use crate::model::result::Solution;
use crate::motion::wander::{Course, Wander};
use crate::resolve::belief::{self, Beliefs};
use crate::resolve::grow;
use crate::resolve::joint::{self, Choices};
use crate::resolve::scene::Scene;
use crate::resolve::work::{self, Work};
use crate::track::assemble::{self, Parts};
use crate::track::proof::{self, Proved, Tangle};

/// The run could not be started.
#[derive(Debug, thiserror::Error)]
pub enum EngineError {
    #[error("no worker threads could be started: {0}")]
    Threads(#[from] rayon::ThreadPoolBuildError),
    #[error("the campaign has {campaign} epochs but {lists} lists were handed in")]
    Mismatch { campaign: usize, lists: usize },
    #[error(transparent)]
    Frame(#[from] crate::frame::FrameError),
    #[error(
        "these epochs cannot be placed in the common frame: {0} (--allow-unplaced leaves them out)"
    )]
    Unplaced(String),
    #[error(
        "the search does not follow the ruling `{}` at line {}: its detections are held by {}; \
         only rulings that agree with the search, `discard` and `name` can be carried out so far",
        .0.ruling, .0.line,
        if .0.tracks.is_empty() { "no track".to_owned() } else { .0.tracks.join(", ") }
    )]
    Ruling(Broken),
}

/// Link a campaign whose lists are in the common frame.
///
/// # Errors
/// When lists and epochs do not correspond, no threads can be started, or the result breaks a
/// ruling.
pub fn link(
    campaign: &Campaign,
    epochs: &[FieldEpoch],
    settings: &Settings,
    observer: &dyn Observer,
) -> Result<Solution, EngineError> {
    if campaign.epochs.len() != epochs.len() {
        return Err(EngineError::Mismatch {
            campaign: campaign.epochs.len(),
            lists: epochs.len(),
        });
    }
    let pool = rayon::ThreadPoolBuilder::new()
        .num_threads(settings.threads)
        .build()?;
    let discards = Discards::of(&settings.rulings, epochs.len());
    let epochs = &*discards.without(epochs);
    let mut solution = pool.install(|| {
        let mut scene = prepare::scene(campaign, epochs);
        let seeds = Seeds::of(&scene);
        let work = rounds::run(&mut scene, &seeds, observer);
        let mut solution = conclude(campaign, epochs, &scene, work, observer);
        seeds.report(&mut solution);
        orbits::conclude(campaign, epochs, settings, &mut solution, observer);
        solution
    });
    let names: Vec<&str> = campaign.epochs.iter().map(|e| e.name.as_str()).collect();
    discards.restore(&mut solution, &names);
    rulings::apply(&mut solution, &settings.rulings).map_err(EngineError::Ruling)?;
    Ok(solution)
}

/// Beliefs, proofs and tables of a finished search.
fn conclude(
    campaign: &Campaign,
    epochs: &[FieldEpoch],
    scene: &Scene,
    mut work: Work,
    observer: &dyn Observer,
) -> Solution {
    observer.stage("weighing", None);
    let choices: Vec<Choices> = (0..scene.sights.len())
        .into_par_iter()
        .map(|e| joint::choices(scene, e, &work.desks[e]))
        .collect();
    let n = work.stars.len();
    let beliefs: Vec<Beliefs> = choices
        .par_iter()
        .map(|c| belief::beliefs(c, n, BELIEF_TEMPERATURE))
        .collect();
    let worth: Vec<f64> = (0..n as u32)
        .into_par_iter()
        .map(|k| grow::worth(scene, &work, &work.stars[k as usize], Some(k)).total())
        .collect();
    for (star, w) in work.stars.iter_mut().zip(&worth) {
        star.worth = *w;
    }
    let real: Vec<f64> = worth
        .iter()
        .map(|w| logistic((w - REAL_MIDDLE_NATS) / REAL_WIDTH_NATS))
        .collect();
    observer.stage("proving", None);
    let groups = proof::groups(&choices, n);
    let proved = Proved {
        tangles: groups
            .into_par_iter()
            .filter(|g| g.len() >= 2)
            .map(|g| proof::prove(&work, &choices, &g))
            .collect::<Vec<Tangle>>(),
    };
    observer.stage("tables", None);
    rounds::refit(scene, &mut work);
    let courses = courses(scene, &work);
    let wander = Wander::estimate(&scene.dynamics, &courses, crossing_yr(scene, &courses));
    assemble::assemble(&Parts {
        campaign,
        epochs,
        scene,
        work: &work,
        beliefs: &beliefs,
        real: &real,
        proved: &proved,
        wander: &wander,
    })
}

/// Courses of stars that are alone more often than not: they tell how errors persist.
fn courses(scene: &Scene, work: &Work) -> Vec<Course> {
    (work.stars.iter().enumerate())
        .filter_map(|(k, star)| {
            let mut obs = Vec::new();
            let press = |e: usize| work.desks[e].preds[k].press;
            work::clean_obs(scene, &star.cells, press, &mut obs);
            (obs.len() >= star.blends.len()).then_some(Course {
                fit: star.fit,
                obs,
                mag: star.mag,
            })
        })
        .collect()
}

/// Time in which a faint neighbour crosses the profile of a star, typical of the campaign.
fn crossing_yr(scene: &Scene, courses: &[Course]) -> f64 {
    let mut fwhm: Vec<f64> = scene.sights.iter().map(|s| s.sensor.fwhm_mas).collect();
    let mut speed: Vec<f64> = (courses.iter())
        .filter_map(|c| c.obs.first())
        .map(|o| scene.dynamics.speed_mas_yr(o.x_mas, o.y_mas, o.t_yr))
        .collect();
    match (order::median(&mut fwhm), order::median(&mut speed)) {
        (Some(f), Some(v)) if v > 0.0 => f / (std::f64::consts::SQRT_2 * v),
        _ => 1.0,
    }
}

/// Gains are divided by this before beliefs are formed: models are never quite right.
const BELIEF_TEMPERATURE: f64 = 2.0;
/// P(real) of a track is 1 / (1 + exp(-(worth - middle) / width)).
const REAL_MIDDLE_NATS: f64 = 0.0;
const REAL_WIDTH_NATS: f64 = 3.0;
