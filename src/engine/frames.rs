//! From raw lists to a result: the common frame, linking, and the frame once more with what
//! linking has learned, until the maps no longer move.

use super::observer::Observer;
use super::pipeline::{EngineError, link};
use super::settings::Settings;
use crate::frame::{self, Anchor, Registered, SolveEnd};
use crate::model::campaign::Campaign;
use crate::model::detection::{FieldEpoch, RawList};
use crate::model::flag::Flags;
use crate::model::motion::MotionKind;
use crate::model::note::Note;
use crate::model::result::Solution;

/// Most times the frames are solved again after linking.
const ROUNDS: usize = 2;
/// Maps that move by less than this part of their errors are settled.
const SETTLED: f64 = 0.5;
/// Anchors come from tracks with at least this many detections and this probability.
const FEWEST_MEMBERS: usize = 5;
const SECURE: f64 = 0.9;

/// A run's lists in the common frame, and what linking made of them.
#[derive(Clone, Debug)]
pub struct Linked {
    /// An epoch that could not be placed has no rows.
    pub epochs: Vec<FieldEpoch>,
    pub solution: Solution,
}

/// Brings raw lists into one frame and links them.
///
/// # Errors
/// When a list has no nominal frame, when an epoch cannot be placed and the settings do not
/// allow to go on without it, or when no threads can be started.
pub fn link_lists(
    campaign: &Campaign,
    lists: &[RawList],
    settings: &Settings,
    observer: &dyn Observer,
) -> Result<Linked, EngineError> {
    if campaign.epochs.len() != lists.len() {
        return Err(EngineError::Mismatch {
            campaign: campaign.epochs.len(),
            lists: lists.len(),
        });
    }
    observer.stage("placing in the frame", None);
    let mut registered = frame::register(campaign, lists)?;
    if !settings.allow_unplaced {
        refuse_unplaced(campaign, &registered)?;
    }
    let mut solution = link(campaign, &registered.epochs, settings, observer)?;
    if registered.any_solved() {
        let (mut moved, mut rounds) = (f64::INFINITY, 0);
        while moved > SETTLED && rounds < ROUNDS {
            observer.stage("settling the frames", None);
            let (next, by) = frame::refine(campaign, lists, &registered, &anchors(&solution))?;
            // A frame that was found is not given up because its secure tracks are few.
            if next.unplaced().len() > registered.unplaced().len() {
                break;
            }
            (moved, rounds) = (by, rounds + 1);
            registered = next;
            solution = link(campaign, &registered.epochs, settings, observer)?;
        }
        registered.notes.push(Note {
            what: "frame_rounds",
            place: "common frame".to_owned(),
            text: if rounds == 0 {
                "not solved again after linking: too few secure tracks in some epoch".to_owned()
            } else {
                format!(
                    "solved {rounds} times after linking; the last time the maps moved by at most {moved:.2} of their errors ({})",
                    if moved <= SETTLED { "settled" } else { "stopped" }
                )
            },
        });
    }
    report(&registered, lists, &mut solution);
    Ok(Linked {
        epochs: registered.epochs,
        solution,
    })
}

fn refuse_unplaced(campaign: &Campaign, registered: &Registered) -> Result<(), EngineError> {
    let out: Vec<String> = registered
        .unplaced()
        .into_iter()
        .map(|e| {
            let why = match &registered.solutions[e].end {
                SolveEnd::Failed(why) => why.as_str(),
                _ => "",
            };
            format!("`{}`: {why}", campaign.epochs[e].name)
        })
        .collect();
    if out.is_empty() {
        return Ok(());
    }
    Err(EngineError::Unplaced(out.join("; ")))
}

/// Detections of secure, calm stars that they do not share.
fn anchors(solution: &Solution) -> Vec<Vec<Anchor>> {
    let doubtful = |f: Flags| {
        f.has(Flags::AMBIGUOUS) || f.has(Flags::OFF_MODEL) || f.has(Flags::COMPANION_ARTEFACT)
    };
    let good: Vec<bool> = solution
        .tracks
        .iter()
        .map(|t| {
            t.motion.kind != MotionKind::Keplerian
                && t.n_members >= FEWEST_MEMBERS
                && t.probability >= SECURE
                && !doubtful(t.flags)
        })
        .collect();
    let mut out = vec![Vec::new(); solution.epochs.len()];
    for m in &solution.members {
        if good[m.track] && m.probability >= SECURE && !m.flags.has(Flags::MERGED) {
            out[m.epoch].push(Anchor {
                row: m.row as u32,
                track: m.track as u32,
            });
        }
    }
    out
}

/// Writes what is known of the frames into the result.
fn report(registered: &Registered, lists: &[RawList], solution: &mut Solution) {
    for (e, (s, r)) in registered
        .solutions
        .iter()
        .zip(&mut solution.epochs)
        .enumerate()
    {
        r.coef = s.list_coef;
        r.coef_err = s.list_coef_err;
        if let SolveEnd::Failed(why) = &s.end {
            r.n_list = lists[e].len();
            r.n_unmatched = lists[e].len();
            r.failed = Some(why.clone());
        }
        if s.end == SolveEnd::Solved {
            r.n_anchors = s.n_anchors;
            r.rms_mas = s.rms_mas;
        }
        if let Some((zero, err)) = s.zero_point_mag {
            r.zero_point_mag = Some(zero);
            r.zero_point_err_mag = Some(err);
        }
        if s.weak {
            r.flags.set(Flags::WEAK_FRAME);
        }
    }
    for m in &mut solution.members {
        if registered.solutions[m.epoch].weak {
            m.flags.set(Flags::WEAK_FRAME);
        }
    }
    solution.notes.extend(registered.notes.iter().cloned());
}
