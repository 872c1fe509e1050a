//! How well a result gives detections to stars, measured against the truth of its campaign.
//!
//! A star is *present* in a detection when its flux share is above [`PRESENT_SHARE`].
//! Memberships with a smaller true share count neither as right nor as wrong. Stars present
//! fewer than twice and tracks with a single detection make no identity claim and are left out.
//! Tracks and stars are matched one to one so that they share as many detections as possible;
//! precision, recall and F1 of memberships under that matching are the identity figures of
//! Ristani et al. 2016 (arXiv:1609.01775), with a merged detection counted once per star.
//! Calibration follows the binned error of Guo et al. 2017 (arXiv:1706.04599) and the score of
//! Brier 1950 (Mon. Weather Rev. 78, 1).
//!
//! When several matchings are equally good, figures that look at single memberships (doubt,
//! calibration, classes) depend slightly on which is taken; [`Score::pairs`] names the one used.

mod case;
mod classes;
mod doubt;
mod identity;
mod links;
mod matching;
mod merges;
mod pulls;
mod result_tables;
mod show;
mod sparse;

use std::path::Path;

use serde::Serialize;

pub use case::Case;
pub use classes::{ByClass, ClassFigures};
pub use doubt::CalibrationBin;
pub use pulls::Pulls;
pub use result_tables::{GivenMembers, GivenTracks, read_members, read_tracks};

use crate::io::text_table::TextTableError;
use crate::io::truth_csv::{Truth, read_truth};

/// A star is present in a detection above this flux share.
pub const PRESENT_SHARE: f64 = 0.05;
/// A star is whole when at least this fraction of its detections is in its track.
const WHOLE: f64 = 0.95;
/// Fewest detections of a star whose wholeness is judged, and of a track whose errors are.
const JUDGED_DETECTIONS: u32 = 5;
/// A membership is marked as doubtful below this probability.
const DOUBT_PROBABILITY: f64 = 0.9;

/// All figures of one result.
#[derive(Clone, Debug, Serialize)]
pub struct Score {
    pub figures: Figures,
    pub pulls: Pulls,
    pub by_class: ByClass,
    pub calibration: Vec<CalibrationBin>,
    /// Matched (track, star) names, by track.
    #[serde(skip)]
    pub pairs: Vec<(String, String)>,
}

/// The main figures; `None` where the denominator is empty.
#[derive(Clone, Debug, Default, Serialize)]
pub struct Figures {
    /// Memberships that agree under the matching / all given.
    pub identity_precision: Option<f64>,
    /// Memberships that agree under the matching / all true.
    pub identity_recall: Option<f64>,
    pub identity_f1: Option<f64>,
    /// Of stars present at least five times: 95 % of them in the track and nothing foreign there.
    pub whole_stars: Option<f64>,
    pub eligible_stars: u64,
    pub tracks: u64,
    /// Tracks in which no star has at least half of the members.
    pub spurious_tracks: Option<f64>,
    /// Tracks of a star that is matched to another track.
    pub fragment_tracks: Option<f64>,
    pub memberships: u64,
    pub true_memberships: u64,
    /// Links between successive members whose two ends hold a common star.
    pub link_precision: Option<f64>,
    /// Links between successive detections of a star whose two ends lie in a common track.
    pub link_recall: Option<f64>,
    /// Changes of track along the detections of the stars.
    pub identity_switches: u64,
    pub switches_per_star: Option<f64>,
    pub two_in_one_epoch: u64,
    pub single_detection_tracks: u64,
    pub repeated_rows: u64,
    pub unknown_rows: u64,
    /// Detections given to two or more tracks / those with two or more stars present.
    pub merge_precision: Option<f64>,
    pub merge_recall: Option<f64>,
    /// Recall where every contributor is alone in at least two other detections.
    pub merge_recall_separable: Option<f64>,
    /// Merged detections whose every contributor is in its own track.
    pub merge_all_right: Option<f64>,
    pub merged_detections: u64,
    pub merged_fraction: Option<f64>,
    pub wrong_memberships: Option<f64>,
    /// Wrong memberships marked as doubtful / all wrong.
    pub doubt_recall: Option<f64>,
    /// Memberships marked as doubtful / all.
    pub doubt_cost: Option<f64>,
    /// Wrong memberships among those marked.
    pub doubt_precision: Option<f64>,
    pub brier: Option<f64>,
    /// What one constant probability would get.
    pub brier_constant: Option<f64>,
    pub calibration_error: Option<f64>,
}

/// Scores the result in `result_dir` against `truth_dir`. `loose_frames`: some epochs' frames
/// were solved for, so that a common affine field is taken out of positions and velocities
/// before their errors are judged.
///
/// # Errors
/// When a table cannot be read or contradicts itself.
pub fn score_folders(
    truth_dir: &Path,
    result_dir: &Path,
    loose_frames: bool,
) -> Result<Score, TextTableError> {
    let truth = read_truth(truth_dir)?;
    let members = read_members(result_dir)?;
    let tracks = read_tracks(result_dir)?;
    Ok(score(truth, members, tracks.as_ref(), loose_frames))
}

/// Scores memberships, and where given the tracks' errors, against the truth.
#[must_use]
pub fn score(
    truth: Truth,
    members: GivenMembers,
    tracks: Option<&GivenTracks>,
    loose_frames: bool,
) -> Score {
    let case = Case::new(truth, members);
    let matched = identity::match_tracks(&case);
    let judged = identity::judge(&case, &matched);
    let links = links::links(&case, &matched);
    let switches = links::switches(&case, &matched);
    let (doubt, calibration) = doubt::doubt(&case, &judged);
    let stars = identity::by_star(&case, &matched, &judged);

    let mut figures = Figures {
        two_in_one_epoch: case.two_in_one_epoch(),
        single_detection_tracks: case.single_detection_tracks,
        repeated_rows: case.repeated_rows,
        unknown_rows: case.unknown_rows,
        identity_switches: switches.iter().map(|&n| u64::from(n)).sum(),
        ..doubt
    };
    identity::fill(&case, &matched, &judged, &stars, &mut figures);
    links::fill(&links, &mut figures);
    let eligible_switches = (stars.eligible.iter().zip(&switches))
        .filter(|(e, _)| **e)
        .map(|(_, &n)| u64::from(n))
        .sum();
    figures.switches_per_star = ratio(eligible_switches, figures.eligible_stars);
    merges::fill(&case, &matched, &judged, &mut figures);

    Score {
        pulls: tracks.map_or_else(Pulls::default, |t| {
            pulls::pulls(&case, &matched, &judged, t, loose_frames)
        }),
        by_class: classes::by_class(&case, &matched, &judged, &stars, &links, &switches),
        calibration,
        pairs: matched.named_pairs(&case),
        figures,
    }
}

/// a / b, `None` for an empty denominator.
fn ratio(a: u64, b: u64) -> Option<f64> {
    (b > 0).then(|| a as f64 / b as f64)
}
