//! Observations of one track with the parts of their covariance.

use crate::io::result_tables::RunView;
use crate::io::table::{Precision, Table};
use crate::maths::cov2::Cov2;
use crate::maths::units;
use crate::model::campaign::{Campaign, FrameFreedom};
use crate::model::flag::Flags;
use crate::model::motion::{Motion, MotionKind};
use crate::model::time::JulianYear;
use crate::motion::{kepler, linear};

/// One detection of a track.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Observation {
    pub epoch: usize,
    pub row: usize,
    pub time: JulianYear,
    /// As measured; of the blend, when merged.
    pub x_mas: f64,
    pub y_mas: f64,
    /// Place of the star alone; equal to the measured one unless merged.
    pub star_x_mas: f64,
    pub star_y_mas: f64,
    /// Covariance of the star's place: list + frame + confusion.
    pub total: Cov2,
    /// The list's own part, inflated, for the star alone.
    pub list: Cov2,
    /// Variance per axis common to all stars of the epoch.
    pub frame_var: f64,
    /// Variance per axis from unseen stars.
    pub confusion_var: f64,
    pub merged: bool,
    /// Worth using in a plain fit: alone and very likely a member.
    pub clean: bool,
    pub probability: f64,
    pub share: f64,
    pub mag: f64,
    pub mag_err: f64,
    pub rv_km_s: f64,
    pub rv_err_km_s: f64,
    pub flags: Flags,
}

/// Least membership probability of an observation marked for use.
const LEAST_PROBABILITY: f64 = 0.9;
/// Tracks among which the density of stars is counted.
const NEIGHBOURS: usize = 100;
/// Width of the magnitude range above the limit in which stars are counted.
const COUNT_RANGE_MAG: f64 = 1.5;
/// ln 10 * 0.8: integral of q^2 over all magnitudes below a limit, per q^2 there.
const Q2_PER_MAG: f64 = 0.8 * std::f64::consts::LN_10;

/// Density of stars near the limit, for the noise from unseen ones.
#[derive(Debug)]
pub struct Confusion {
    /// Mean place and magnitude of every track that has one.
    stars: Vec<([f64; 2], f64)>,
}

impl Confusion {
    #[must_use]
    pub fn new(view: RunView<'_>) -> Self {
        Self {
            stars: view
                .solution
                .tracks
                .iter()
                .filter_map(|t| Some(([t.x_mean_mas, t.y_mean_mas], t.mag?)))
                .collect(),
        }
    }

    /// Stars per mas^2 and mag just above a limiting magnitude, around a place; 0 when too few
    /// tracks are there to tell.
    #[must_use]
    pub fn density(&self, at: [f64; 2], limit_mag: f64) -> f64 {
        let mut near: Vec<(f64, f64)> = self
            .stars
            .iter()
            .map(|(p, m)| ((p[0] - at[0]).powi(2) + (p[1] - at[1]).powi(2), *m))
            .collect();
        if near.len() < 10 {
            return 0.0;
        }
        let n = near.len().min(NEIGHBOURS);
        near.select_nth_unstable_by(n - 1, |a, b| a.0.total_cmp(&b.0));
        let radius2 = near[n - 1].0;
        let counted = near[..n]
            .iter()
            .filter(|(_, m)| (limit_mag - COUNT_RANGE_MAG..limit_mag).contains(m))
            .count();
        counted as f64 / (COUNT_RANGE_MAG * std::f64::consts::PI * radius2.max(1e-9))
    }

    /// Variance per axis \[mas^2\] that unseen stars give a star of a magnitude, for an image of a
    /// resolution and limit.
    #[must_use]
    pub fn variance(density: f64, mag: f64, limit_mag: f64, fwhm_mas: f64) -> f64 {
        let sigma = fwhm_mas / units::FWHM_PER_SIGMA;
        let q = 10f64.powf(-0.4 * (limit_mag - mag)).min(1.0);
        2.0 * std::f64::consts::PI * sigma.powi(4) * density * q * q / Q2_PER_MAG
    }
}

/// All detections of a track in order of time.
#[must_use]
pub fn observations(view: RunView<'_>, confusion: &Confusion, track: usize) -> Vec<Observation> {
    let star = &view.solution.tracks[track];
    let members = &view.solution.members;
    let from = members.partition_point(|m| m.track < track);
    let mut rows: Vec<Observation> = members[from..]
        .iter()
        .take_while(|m| m.track == track)
        .map(|m| {
            let epoch = &view.epochs[m.epoch];
            let report = &view.solution.epochs[m.epoch];
            let settings = &view.campaign.epochs[m.epoch].settings;
            let merged = m.flags.has(Flags::MERGED) || m.share < 1.0;
            let share = if m.share > 0.0 { m.share } else { 1.0 };
            let (x, y) = (epoch.x_mas[m.row], epoch.y_mas[m.row]);
            let factor = if report.error_factor > 0.0 {
                report.error_factor
            } else {
                1.0
            };
            let measured = epoch.cov_mas2[m.row].scaled(factor * factor)
                + Cov2::round(report.error_floor_mas * report.error_floor_mas);
            let list = measured.scaled(1.0 / (share * share));
            let frame_var = frame_variance(settings.frame, report.rms_mas, report.n_anchors);
            let limit = report.limit_mag.or(settings.limit_mag);
            let confusion_var = match (star.mag, limit) {
                (Some(mag), Some(limit)) => {
                    let density = confusion.density([x, y], limit);
                    Confusion::variance(density, mag, limit, epoch.fwhm_mas)
                }
                _ => 0.0,
            };
            let of = |column: &[f64]| column.get(m.row).copied().unwrap_or(f64::NAN);
            // The blend moves by share times what the star moves.
            let [star_x_mas, star_y_mas] = if merged {
                let at = predicted(view.campaign, &star.motion, epoch.time.yr());
                [at[0] + m.dx_mas / share, at[1] + m.dy_mas / share]
            } else {
                [x, y]
            };
            Observation {
                epoch: m.epoch,
                row: m.row,
                time: epoch.time,
                x_mas: x,
                y_mas: y,
                star_x_mas,
                star_y_mas,
                total: list + Cov2::round(frame_var + confusion_var),
                list,
                frame_var,
                confusion_var,
                merged,
                clean: !merged && m.probability >= LEAST_PROBABILITY,
                probability: m.probability,
                share: m.share,
                mag: epoch.mag[m.row],
                mag_err: epoch.mag_err[m.row],
                rv_km_s: of(&epoch.rv_km_s),
                rv_err_km_s: of(&epoch.rv_err_km_s),
                flags: m.flags,
            }
        })
        .collect();
    rows.sort_by(|a, b| {
        a.time
            .yr()
            .total_cmp(&b.time.yr())
            .then(a.epoch.cmp(&b.epoch))
            .then(a.row.cmp(&b.row))
    });
    rows
}

/// Mean variance per axis of a place in a frame solved from anchors.
fn frame_variance(freedom: FrameFreedom, rms_mas: Option<f64>, n_anchors: usize) -> f64 {
    let terms = match freedom {
        FrameFreedom::Known => 0.0,
        FrameFreedom::Shift => 1.0,
        FrameFreedom::Similarity => 2.0,
        FrameFreedom::Affine => 3.0,
        FrameFreedom::Quadratic => 6.0,
    };
    match rms_mas {
        Some(rms) if n_anchors > 0 => terms * rms * rms / n_anchors as f64,
        _ => 0.0,
    }
}

/// Place of a star at a time by its track's motion (two-body motion about the campaign's mass).
#[must_use]
pub fn predicted(campaign: &Campaign, motion: &Motion, t_yr: f64) -> [f64; 2] {
    match (motion.kind, &campaign.central) {
        (MotionKind::Keplerian, Some(c)) => {
            let p = &motion.p;
            let since_ref = motion.t_ref_yr - campaign.reference.yr();
            let centre = |dt: f64| [c.x_mas + c.vx_mas_yr * dt, c.y_mas + c.vy_mas_yr * dt];
            let start = centre(since_ref);
            let r = [p[0] - start[0], p[1] - start[1], p[2]];
            let v = [p[3] - c.vx_mas_yr, p[4] - c.vy_mas_yr, p[5]];
            let dt = t_yr - motion.t_ref_yr;
            let (at, _) = kepler::propagate(c.gm_mas3_yr2, r, v, dt);
            let now = centre(since_ref + dt);
            [now[0] + at[0], now[1] + at[1]]
        }
        _ => {
            let at = linear::predict(motion, t_yr);
            [at.x_mas, at.y_mas]
        }
    }
}

/// The table of a track's observations.
#[must_use]
pub fn table<'a>(view: RunView<'a>, track: usize, o: &'a [Observation]) -> Table<'a> {
    let full = Precision::Full;
    let name = &view.solution.tracks[track].name;
    let mut table = Table::new(name, &format!("Observations of {name}"), o.len())
        .float("time_yr", "yr", "Julian year", full, |k| o[k].time.yr())
        .float("mjd", "d", "modified Julian date", full, |k| {
            o[k].time.mjd()
        })
        .int("epoch", "epoch, counted from 0 in the campaign file", |k| {
            Some(o[k].epoch as i64)
        })
        .text("epoch_name", "name of the epoch", |k, out| {
            out.push_str(&view.campaign.epochs[o[k].epoch].name);
        })
        .text("id", "identifier in the epoch's list", |k, out| {
            view.lists[o[k].epoch].ids.push(o[k].row, out);
        });
    type Number = (
        &'static str,
        &'static str,
        &'static str,
        fn(&Observation) -> f64,
    );
    let places: [Number; 18] = [
        (
            "x_mas",
            "mas",
            "measured position toward east; of the blend, when merged",
            |o| o.x_mas,
        ),
        (
            "y_mas",
            "mas",
            "measured position toward north; of the blend, when merged",
            |o| o.y_mas,
        ),
        (
            "star_x_mas",
            "mas",
            "position of the star alone toward east: measured, or implied by the blend",
            |o| o.star_x_mas,
        ),
        (
            "star_y_mas",
            "mas",
            "position of the star alone toward north: measured, or implied by the blend",
            |o| o.star_y_mas,
        ),
        (
            "cov_xx_mas2",
            "mas2",
            "variance of star_x_mas: list, frame and confusion",
            |o| o.total.xx,
        ),
        (
            "cov_xy_mas2",
            "mas2",
            "covariance of star_x_mas and star_y_mas",
            |o| o.total.xy,
        ),
        (
            "cov_yy_mas2",
            "mas2",
            "variance of star_y_mas: list, frame and confusion",
            |o| o.total.yy,
        ),
        (
            "list_xx_mas2",
            "mas2",
            "part of cov_xx_mas2 from the list, inflated as found in linking",
            |o| o.list.xx,
        ),
        ("list_xy_mas2", "mas2", "the same for cov_xy_mas2", |o| {
            o.list.xy
        }),
        ("list_yy_mas2", "mas2", "the same for cov_yy_mas2", |o| {
            o.list.yy
        }),
        (
            "frame_var_mas2",
            "mas2",
            "part per axis from the frame, common to all stars of the epoch",
            |o| o.frame_var,
        ),
        (
            "confusion_var_mas2",
            "mas2",
            "part per axis from unseen stars, changing slowly from epoch to epoch",
            |o| o.confusion_var,
        ),
        (
            "probability",
            "",
            "probability that the detection belongs to the track",
            |o| o.probability,
        ),
        (
            "share",
            "",
            "share of the detection's flux, 1 when the star is alone in it",
            |o| o.share,
        ),
        ("mag", "mag", "magnitude of the detection", |o| o.mag),
        ("mag_err", "mag", "its error", |o| o.mag_err),
        (
            "rv_km_s",
            "km / s",
            "radial velocity in the list, receding",
            |o| o.rv_km_s,
        ),
        ("rv_err_km_s", "km / s", "its error", |o| o.rv_err_km_s),
    ];
    for (name, unit, text, get) in places {
        table = table.float(name, unit, text, full, move |k| get(&o[k]));
    }
    table
        .bool("merged", "shared with other stars", |k| Some(o[k].merged))
        .bool(
            "use",
            "alone in its detection and a member with probability 0.9 or more",
            |k| Some(o[k].clean),
        )
        .text("flags", "flags, separated by ;", |k, out| {
            out.push_str(&o[k].flags.words());
        })
}
