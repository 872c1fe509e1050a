//! Tables for an orbit fitter: clean observations of chosen tracks, with everything a fitter
//! should know about them, and where to begin.
//!
//! One table of observations per track, `starts.ecsv` (the tracks' motions, states and elements
//! with covariances), `orbits.ecsv` (every kept minimum, for fields with a mass), `centre.ecsv`
//! (the mass as used) and a README of conventions.
//!
//! The covariance of an observation has three parts, which add up:
//! * the list's own error, inflated as found in linking (factor and floor of the epoch);
//! * the frame: p rms^2 / n per axis, the mean variance of a fitted place over its n anchors with
//!   p terms per axis. It is common to all stars of the epoch, not independent from star to star;
//! * confusion with stars too faint to be seen. Known-PSF fits of a bright star are pulled by
//!   sigma^2 = 2 pi s^4 int q^2 rho(m) dm per axis (s: sigma of the PSF, q: flux ratio, rho:
//!   stars per mas^2 and mag), for uniform faint stars; rho is continued at its value near the
//!   limit, counted among the nearest tracks. It changes slowly, as stars drift by.
//!
//! Merged detections are kept and marked. Their measured place is that of the blend; the columns
//! `star_x_mas`, `star_y_mas` give the place it implies for the star alone (the misfit of the
//! blend divided by the star's flux share, its error likewise), and `use` is false for them.

mod notes;
mod rows;

use std::collections::BTreeSet;

use crate::io::ecsv_write;
use crate::io::result_tables::{self, RunView};
use crate::io::run_dir::{OutputError, RunDir};
use crate::io::table::{Precision, Table};
use crate::model::campaign::Campaign;
use crate::model::motion::MotionKind;
use crate::model::result::Solution;

pub use rows::{Confusion, Observation, observations};

/// The file that marks a hand-over directory.
pub const MARKER: &str = "starts.ecsv";

/// Which tracks to hand over.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum Choice {
    /// Those with a Keplerian orbit.
    Keplerian,
    All,
    Named(Vec<String>),
}

/// Why nothing was handed over.
#[derive(Debug, thiserror::Error)]
pub enum HandoffError {
    #[error("the result has no track `{name}`{}", near(.nearest))]
    NoTrack {
        name: String,
        nearest: Option<String>,
    },
    #[error(
        "the result has no Keplerian track; name tracks with --tracks, or ask for `--tracks all`"
    )]
    NoOrbits,
    #[error("the result has no track")]
    Empty,
    #[error(transparent)]
    Output(#[from] OutputError),
}

fn near(name: &Option<String>) -> String {
    name.as_ref()
        .map_or_else(String::new, |n| format!("; did you mean `{n}`?"))
}

/// What was written.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Summary {
    pub tracks: usize,
    pub observations: usize,
    pub merged: usize,
    pub velocities: usize,
}

/// Indices of the chosen tracks, in table order.
///
/// # Errors
/// A name the result does not have, or nothing to choose from.
pub fn choose(solution: &Solution, choice: &Choice) -> Result<Vec<usize>, HandoffError> {
    let all = 0..solution.tracks.len();
    match choice {
        Choice::All if solution.tracks.is_empty() => Err(HandoffError::Empty),
        Choice::All => Ok(all.collect()),
        Choice::Keplerian => {
            let found: Vec<usize> = all
                .filter(|&k| solution.tracks[k].motion.kind == MotionKind::Keplerian)
                .collect();
            if found.is_empty() {
                Err(HandoffError::NoOrbits)
            } else {
                Ok(found)
            }
        }
        Choice::Named(names) => {
            let mut found = BTreeSet::new();
            for name in names {
                let at = solution.tracks.iter().position(|t| t.name == *name);
                found.insert(at.ok_or_else(|| HandoffError::NoTrack {
                    name: name.clone(),
                    nearest: nearest_name(solution, name),
                })?);
            }
            Ok(found.into_iter().collect())
        }
    }
}

fn nearest_name(solution: &Solution, name: &str) -> Option<String> {
    solution
        .tracks
        .iter()
        .map(|t| (strsim::jaro_winkler(&t.name, name), &t.name))
        .filter(|(s, _)| *s > 0.8)
        .max_by(|a, b| a.0.total_cmp(&b.0))
        .map(|(_, n)| n.clone())
}

/// Writes everything for the chosen tracks into a directory in the making.
///
/// # Errors
/// A file cannot be written.
pub fn write(
    dir: &RunDir<'_>,
    view: RunView<'_>,
    chosen: &[usize],
) -> Result<Summary, HandoffError> {
    let files = file_names(view.solution, chosen);
    let confusion = Confusion::new(view);
    let mut summary = Summary {
        tracks: chosen.len(),
        ..Summary::default()
    };
    for (&track, file) in chosen.iter().zip(&files) {
        let rows = observations(view, &confusion, track);
        summary.observations += rows.len();
        summary.merged += rows.iter().filter(|o| o.merged).count();
        summary.velocities += rows.iter().filter(|o| o.rv_km_s.is_finite()).count();
        let table = rows::table(view, track, &rows);
        dir.write(file, |out| ecsv_write::write(&table, out))?;
    }
    let part = part_of(view.solution, chosen);
    let part_view = RunView {
        solution: &part,
        ..view
    };
    for mut table in result_tables::all(part_view) {
        match table.name.as_str() {
            "tracks" => {
                table.name = "starts".to_owned();
                table.description =
                    "Where a fit can begin: motions, states and elements of the tracks".to_owned();
                let names = &files;
                let table = table.text("file", "its table of observations", |k, out| {
                    out.push_str(&names[k]);
                });
                dir.write(MARKER, |out| ecsv_write::write(&table, out))?;
            }
            "orbits" if !part.orbits.is_empty() => {
                dir.write("orbits.ecsv", |out| ecsv_write::write(&table, out))?;
            }
            _ => {}
        }
    }
    if let Some(table) = centre_table(view.campaign) {
        dir.write("centre.ecsv", |out| ecsv_write::write(&table, out))?;
    }
    let text = notes::readme(view, &summary, !part.orbits.is_empty());
    dir.write("README.md", |out| out.write_all(text.as_bytes()))?;
    Ok(summary)
}

/// One file per track: its name, with anything unusual in a file name replaced, kept distinct.
fn file_names(solution: &Solution, chosen: &[usize]) -> Vec<String> {
    let mut used: BTreeSet<String> = ["starts", "orbits", "centre"].map(str::to_owned).into();
    chosen
        .iter()
        .map(|&k| {
            let plain: String = solution.tracks[k]
                .name
                .chars()
                .map(|c| {
                    if c.is_ascii_alphanumeric() || "-_+".contains(c) {
                        c
                    } else {
                        '_'
                    }
                })
                .collect();
            let mut name = plain.clone();
            let mut n = 2;
            // Some file systems do not tell upper from lower case.
            while !used.insert(name.to_lowercase()) {
                name = format!("{plain}_{n}");
                n += 1;
            }
            format!("{name}.ecsv")
        })
        .collect()
}

/// The chosen tracks alone, with their minima.
fn part_of(solution: &Solution, chosen: &[usize]) -> Solution {
    let place = |track: usize| chosen.binary_search(&track).ok();
    Solution {
        tracks: chosen.iter().map(|&k| solution.tracks[k].clone()).collect(),
        orbits: solution
            .orbits
            .iter()
            .filter_map(|o| {
                Some(crate::model::result::OrbitMinimum {
                    track: place(o.track)?,
                    ..o.clone()
                })
            })
            .collect(),
        ..Solution::default()
    }
}

fn centre_table(campaign: &Campaign) -> Option<Table<'static>> {
    let c = campaign.central.as_ref()?.clone();
    let t_ref = campaign.reference.yr();
    let none = |v: Option<f64>| v.unwrap_or(f64::NAN);
    let full = Precision::Full;
    let mut table = Table::new("centre", "The central mass as used in linking", 1).float(
        "time_yr",
        "yr",
        "time at which the position holds (Julian year)",
        full,
        move |_| t_ref,
    );
    for (name, unit, text, value) in [
        (
            "gm_mas3_yr2",
            "mas3 / yr2",
            "GM / D^3 in angular units",
            c.gm_mas3_yr2,
        ),
        (
            "gm_err_mas3_yr2",
            "mas3 / yr2",
            "its error; empty = not given",
            none(c.gm_err_mas3_yr2),
        ),
        (
            "mass_msun",
            "solMass",
            "mass; empty when only GM / D^3 was given",
            none(c.mass_msun),
        ),
        ("distance_pc", "pc", "distance", none(c.distance_pc)),
        ("x_mas", "mas", "position toward east", c.x_mas),
        ("y_mas", "mas", "position toward north", c.y_mas),
        ("x_err_mas", "mas", "standard error of x_mas", c.x_err_mas),
        ("y_err_mas", "mas", "standard error of y_mas", c.y_err_mas),
        ("vx_mas_yr", "mas / yr", "motion toward east", c.vx_mas_yr),
        ("vy_mas_yr", "mas / yr", "motion toward north", c.vy_mas_yr),
        (
            "rv_km_s",
            "km / s",
            "systemic radial velocity, receding; empty = not given",
            none(c.rv_km_s),
        ),
        (
            "rv_err_km_s",
            "km / s",
            "its error; empty = not given",
            none(c.rv_err_km_s),
        ),
    ] {
        table = table.float(name, unit, text, full, move |_| value);
    }
    Some(table)
}
