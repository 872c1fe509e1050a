//! Rival explanations of a tangle, in the words of the table.
//!
//! The min-marginals of [`crate::resolve::rivals`] around the final state: what one change would
//! cost, everything tied to it packed again. Only tracks of the final state take part, so a rival
//! never brings a new star.

use std::collections::BTreeSet;

use crate::model::campaign::Campaign;
use crate::model::change::{Change, DetectionName};
use crate::resolve::program::{Explanation, Program};
use crate::resolve::rivals::{Reach, Step, near};

/// Rivals further behind than this are not listed \[nats\].
pub const LISTED_NATS: f64 = 7.0;
/// Most rivals listed for a tangle, beside one per track.
const MOST: usize = 10;

/// A rival in the search's own numbering of stars.
#[derive(Clone, Debug, PartialEq)]
pub struct Rivalry {
    pub ln_odds: f64,
    pub steps: Vec<StarStep>,
}

/// One difference: stars by their number in the search, detections by epoch and row.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub enum StarStep {
    Vanishes {
        star: u32,
    },
    Takes {
        star: u32,
        at: (u32, u32),
        from: Option<u32>,
    },
    Shares {
        star: u32,
        at: (u32, u32),
    },
    Drops {
        star: u32,
        at: (u32, u32),
    },
}

/// The nearest rivals of a tangle, best first; `stars[k]` is track k of the program.
#[must_use]
pub fn find(program: &Program, best: &Explanation, stars: &[u32]) -> Vec<Rivalry> {
    let reach = Reach {
        within_nats: LISTED_NATS,
        ..Reach::default()
    };
    let mut found: Vec<Rivalry> = near(program, best, &reach)
        .into_iter()
        .filter_map(|rival| {
            let steps: Option<Vec<StarStep>> = rival
                .steps
                .iter()
                .map(|s| star_step(program, stars, *s))
                .collect();
            Some(Rivalry {
                ln_odds: rival.ln_odds,
                steps: steps?,
            })
        })
        .collect();
    found.truncate(MOST + stars.len());
    found
}

fn star_step(program: &Program, stars: &[u32], step: Step) -> Option<StarStep> {
    let star = |track: u32| stars[track as usize];
    let at = |detection: u32| program.detection(detection as usize);
    Some(match step {
        Step::Vanishes { track } => StarStep::Vanishes { star: star(track) },
        Step::Appears { .. } => return None,
        Step::Takes {
            track,
            detection,
            from,
        } => StarStep::Takes {
            star: star(track),
            at: at(detection),
            from: from.map(star),
        },
        Step::Shares { track, detection } => StarStep::Shares {
            star: star(track),
            at: at(detection),
        },
        Step::Drops { track, detection } => StarStep::Drops {
            star: star(track),
            at: at(detection),
        },
    })
}

/// The sentence of a rival; `name` gives the name of a star that has become a track. A detection
/// is named by its row until [`crate::model::change::rows_to_ids`] has seen it. `None` when the
/// rival speaks of a star that is no track.
#[must_use]
pub fn sentence(
    rivalry: &Rivalry,
    campaign: &Campaign,
    name: impl Fn(u32) -> Option<String>,
) -> Option<String> {
    let detection = |(epoch, row): (u32, u32)| DetectionName {
        epoch_name: campaign.epochs[epoch as usize].name.clone(),
        id: row.to_string(),
    };
    let gone: BTreeSet<u32> = rivalry
        .steps
        .iter()
        .filter_map(|s| match s {
            StarStep::Vanishes { star } => Some(*star),
            _ => None,
        })
        .collect();
    let mut changes = Vec::with_capacity(rivalry.steps.len());
    for step in &rivalry.steps {
        changes.push(match *step {
            StarStep::Vanishes { star } => Change::Vanishes { track: name(star)? },
            StarStep::Takes { star, at, from } => Change::Takes {
                track: name(star)?,
                detection: detection(at),
                from: match from.filter(|f| !gone.contains(f)) {
                    Some(from) => Some(name(from)?),
                    None => None,
                },
            },
            StarStep::Shares { star, at } => Change::Shares {
                track: name(star)?,
                detection: detection(at),
            },
            StarStep::Drops { star, at } => Change::Drops {
                track: name(star)?,
                detection: detection(at),
            },
        });
    }
    Some(Change::sentence(&changes))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::resolve::program::Builder;

    /// Star 7 holds the detection in row 2 of epoch 3, star 9 could have it at a loss of one nat;
    /// stars die at a loss beyond what is listed.
    #[test]
    fn a_lost_detection_is_told_in_the_numbers_of_the_search() {
        let mut b = Builder::default();
        let (p, q) = (b.track(20.0), b.track(20.0));
        b.source(3, 2, &[p], 5.0);
        b.source(3, 2, &[q], 4.0);
        let program = b.finish();
        let best = Explanation {
            exists: vec![true, true],
            made_by: vec![0],
        };
        let found = find(&program, &best, &[7, 9]);
        assert_eq!(found.len(), 1);
        assert!((found[0].ln_odds + 1.0).abs() < 1e-12);
        let taken = StarStep::Takes {
            star: 9,
            at: (3, 2),
            from: Some(7),
        };
        assert_eq!(found[0].steps, [taken]);
    }
}
