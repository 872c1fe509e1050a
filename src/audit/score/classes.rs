//! The main figures for strongly curved stars, for stars with close encounters, and the rest.

use serde::Serialize;

use super::case::Case;
use super::identity::{ByStar, Matched, Verdict};
use super::links::Links;
use super::ratio;
use super::sparse::counts;
use crate::maths::assign::FREE;

/// Figures by class of star; a star may be both strong and in an encounter.
#[derive(Clone, Debug, Serialize)]
pub struct ByClass {
    pub strong: ClassFigures,
    pub encounter: ClassFigures,
    /// Neither of the two.
    pub calm: ClassFigures,
}

#[derive(Clone, Debug, Serialize)]
pub struct ClassFigures {
    pub stars: u64,
    pub identity_recall: Option<f64>,
    pub identity_precision: Option<f64>,
    pub whole_stars: Option<f64>,
    pub link_recall: Option<f64>,
    pub switches_per_star: Option<f64>,
}

#[must_use]
pub fn by_class(
    case: &Case,
    matched: &Matched,
    judged: &[Verdict],
    stars: &ByStar,
    links: &Links,
    switches: &[u32],
) -> ByClass {
    let counted = case.given.iter().zip(judged);
    let counted = counted.filter(|(_, v)| **v != Verdict::Trace);
    let counted = counts(case.track_names.len(), counted.map(|(row, _)| row.track));
    let figures = |chosen: &dyn Fn(usize) -> bool| {
        let of_class: Vec<usize> = (0..case.per_star.len()).filter(|&s| chosen(s)).collect();
        let sum = |f: &dyn Fn(usize) -> u32| of_class.iter().map(|&s| u64::from(f(s))).sum::<u64>();
        let got = sum(&|s| stars.got[s]);
        let n_true = sum(&|s| {
            if case.per_star[s] >= 2 {
                case.per_star[s]
            } else {
                0
            }
        });
        let n_given = sum(&|s| match matched.track_of[s] {
            FREE => 0,
            track => counted[track as usize],
        });
        let n = sum(&|s| u32::from(stars.eligible[s]));
        ClassFigures {
            stars: n,
            identity_recall: ratio(got, n_true),
            identity_precision: ratio(got, n_given),
            whole_stars: ratio(sum(&|s| u32::from(stars.whole[s])), n),
            link_recall: ratio(
                sum(&|s| links.true_of_star[s][0]),
                sum(&|s| links.true_of_star[s][1]),
            ),
            switches_per_star: ratio(sum(&|s| if stars.eligible[s] { switches[s] } else { 0 }), n),
        }
    };
    let (strong, encounter) = (&case.stars.strong, &case.stars.encounter);
    ByClass {
        strong: figures(&|s| strong[s]),
        encounter: figures(&|s| encounter[s]),
        calm: figures(&|s| !strong[s] && !encounter[s]),
    }
}
