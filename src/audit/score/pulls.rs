//! Do stated errors of positions and velocities cover the true ones?
//!
//! Judged are matched tracks of at least five members, 80 % of them right. When frames were
//! solved for, positions and velocities are only known up to a common affine field (METHODS of
//! global astrometric solutions: the gauge), which is fitted to the slow stars and taken out.

use nalgebra::{Matrix3, RowVector3, Vector3};
use serde::ser::{Serialize, SerializeMap, Serializer};

use super::JUDGED_DETECTIONS;
use super::case::Case;
use super::identity::{Matched, Verdict};
use super::result_tables::{GivenTracks, Measured};
use super::sparse::counts;
use crate::maths::assign::FREE;
use crate::maths::order;

/// Fewest tracks from which a common field is fitted.
const FIELD_TRACKS: usize = 11;

/// Named figures in a fixed order; those without any track are left out.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Pulls {
    /// Tracks that qualify, before any is dropped for missing values.
    pub tracks: Option<u64>,
    pub figures: Vec<(String, f64)>,
}

impl Serialize for Pulls {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        let mut map = serializer.serialize_map(None)?;
        if let Some(n) = self.tracks {
            map.serialize_entry("pull_tracks", &n)?;
        }
        for (name, value) in &self.figures {
            map.serialize_entry(name, value)?;
        }
        map.end()
    }
}

/// One track with its star.
struct Judged {
    row: usize,
    star: usize,
    strong: bool,
}

#[must_use]
pub fn pulls(
    case: &Case,
    matched: &Matched,
    judged: &[Verdict],
    tracks: &GivenTracks,
    loose_frames: bool,
) -> Pulls {
    let size = case.track_size();
    let right = case.given.iter().zip(judged);
    let right = right.filter(|(_, v)| **v == Verdict::Right);
    let right = counts(size.len(), right.map(|(row, _)| row.track));
    let mut use_rows = Vec::new();
    for (row, name) in tracks.track.iter().enumerate() {
        let Ok(track) = case.track_names.binary_search(name) else {
            continue;
        };
        let star = matched.star_of[track];
        let pure = f64::from(right[track]) >= 0.8 * f64::from(size[track]);
        if star != FREE && size[track] >= JUDGED_DETECTIONS && pure {
            use_rows.push(Judged {
                row,
                star: star as usize,
                strong: case.stars.strong[star as usize],
            });
        }
    }
    let mut out = Pulls {
        tracks: Some(use_rows.len() as u64),
        figures: Vec::new(),
    };
    let spots = &case.stars.position_mas;
    for (what, given, truth) in [
        ("position", &tracks.position, spots),
        ("velocity", &tracks.velocity, &case.stars.velocity_mas_yr),
    ] {
        if given.is_empty() || truth.is_empty() {
            return out;
        }
        judge_pair(
            what,
            given,
            truth,
            &use_rows,
            loose_frames.then_some(spots),
            &mut out,
        );
    }
    out
}

/// Position or velocity: fractions within 1 and 2 sigma per axis, and the median miss.
fn judge_pair(
    what: &str,
    given: &[[Measured; 2]],
    truth: &[[f64; 2]],
    rows: &[Judged],
    field_at: Option<&Vec<[f64; 2]>>,
    out: &mut Pulls,
) {
    let usable = |m: &Measured| m.value.is_finite() && m.error.is_finite() && m.error > 0.0;
    let rows: Vec<&Judged> = (rows.iter())
        .filter(|j| given[j.row].iter().all(usable))
        .collect();
    let mut miss: Vec<[f64; 2]> = (rows.iter())
        .map(|j| [0, 1].map(|k| given[j.row][k].value - truth[j.star][k]))
        .collect();
    if let Some(spots) = field_at.filter(|_| rows.len() >= FIELD_TRACKS) {
        let spot: Vec<[f64; 2]> = rows.iter().map(|j| spots[j.star]).collect();
        let calm: Vec<bool> = rows.iter().map(|j| !j.strong).collect();
        remove_affine_field(&spot, &mut miss, &calm);
    }
    for (label, part) in [("", None), ("_calm", Some(false)), ("_strong", Some(true))] {
        let chosen: Vec<usize> = (0..rows.len())
            .filter(|&k| part.is_none_or(|strong| rows[k].strong == strong))
            .collect();
        if chosen.is_empty() {
            continue;
        }
        let within = |sigmas: f64| {
            let inside = chosen.iter().flat_map(|&k| {
                let errors = &given[rows[k].row];
                [0, 1].map(|a| (miss[k][a] / errors[a].error).abs() < sigmas)
            });
            inside.filter(|i| *i).count() as f64 / (2 * chosen.len()) as f64
        };
        let mut add = |name: &str, value: f64| {
            out.figures.push((format!("{what}_{name}{label}"), value));
        };
        add("within_1_sigma", within(1.0));
        add("within_2_sigma", within(2.0));
        if what == "position" || label.is_empty() {
            let mut lengths: Vec<f64> = chosen
                .iter()
                .map(|&k| miss[k][0].hypot(miss[k][1]))
                .collect();
            add(
                "median_miss",
                order::median(&mut lengths).unwrap_or(f64::NAN),
            );
        }
    }
}

/// Subtracts an affine field in the position, fitted to the rows of `use_row` with clipping at
/// four times the median residual.
fn remove_affine_field(spot_mas: &[[f64; 2]], value: &mut [[f64; 2]], use_row: &[bool]) {
    const ROUNDS: usize = 10;
    const CLIP: f64 = 4.0;
    let terms: Vec<RowVector3<f64>> = (spot_mas.iter())
        .map(|s| RowVector3::new(1.0, s[0] / 1000.0, s[1] / 1000.0))
        .collect();
    let mut keep: Vec<bool> = use_row.to_vec();
    let mut coef = [Vector3::zeros(); 2];
    for _ in 0..ROUNDS {
        let kept: Vec<usize> = (0..keep.len()).filter(|&k| keep[k]).collect();
        if kept.len() < 4 {
            return;
        }
        let normal: Matrix3<f64> = kept.iter().map(|&k| terms[k].transpose() * terms[k]).sum();
        let inverse = normal
            .pseudo_inverse(1e-14 * normal.norm())
            .unwrap_or_else(|_| Matrix3::zeros());
        for (axis, c) in coef.iter_mut().enumerate() {
            let sum: Vector3<f64> = (kept.iter())
                .map(|&k| terms[k].transpose() * value[k][axis])
                .sum();
            *c = inverse * sum;
        }
        let rest: Vec<f64> = (0..keep.len())
            .map(|k| {
                let left = [0, 1].map(|a| value[k][a] - (terms[k] * coef[a])[0]);
                left[0].hypot(left[1])
            })
            .collect();
        let mut of_kept: Vec<f64> = kept.iter().map(|&k| rest[k]).collect();
        let limit = CLIP * order::median(&mut of_kept).unwrap_or(0.0) + 1e-9;
        for (k, keep) in keep.iter_mut().enumerate() {
            *keep = use_row[k] && rest[k] < limit;
        }
    }
    for (k, v) in value.iter_mut().enumerate() {
        for a in [0, 1] {
            v[a] -= (terms[k] * coef[a])[0];
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_planted_field_is_taken_out_in_spite_of_outliers() {
        let spot: Vec<[f64; 2]> = (0..40)
            .map(|k| [f64::from(k * 37 % 100), f64::from(k * 53 % 90)].map(|v| 20.0 * v - 900.0))
            .collect();
        let field = |s: [f64; 2]| [3.0 + 0.002 * s[0] - 0.001 * s[1], -1.0 + 0.0005 * s[1]];
        let mut value: Vec<[f64; 2]> = spot.iter().map(|&s| field(s)).collect();
        value[7] = [80.0, -50.0];
        remove_affine_field(&spot, &mut value, &[true; 40]);
        for (k, v) in value.iter().enumerate().filter(|(k, _)| *k != 7) {
            assert!(v[0].hypot(v[1]) < 1e-9, "row {k}: {v:?}");
        }
        assert!(value[7][0] > 70.0);
    }
}
