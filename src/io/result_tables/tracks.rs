//! `tracks`: one row per star as linked.

use super::super::table::Precision::{Decimals, Full, Single};
use super::super::table::Table;
use super::{RunView, or_nan, orbits};
use crate::model::motion::MotionKind;
use crate::model::result::Track;

/// Names and units of (x, y, vx, vy, ax, ay), as used in column names.
pub const SKY: [(&str, &str); 6] = [
    ("x", "mas"),
    ("y", "mas"),
    ("vx", "mas / yr"),
    ("vy", "mas / yr"),
    ("ax", "mas / yr2"),
    ("ay", "mas / yr2"),
];

/// Suffix of column names for each unit.
pub fn suffix(unit: &str) -> &'static str {
    match unit {
        "mas" => "mas",
        "mas / yr" => "mas_yr",
        _ => "mas_yr2",
    }
}

/// Unit of a covariance of quantities whose units are mas per year to these powers.
pub fn covariance_unit(years: usize) -> &'static str {
    [
        "mas2",
        "mas2 / yr",
        "mas2 / yr2",
        "mas2 / yr3",
        "mas2 / yr4",
    ][years]
}

pub(super) fn table(view: RunView<'_>) -> Table<'_> {
    let t: &[Track] = &view.solution.tracks;
    let mut table = Table::new("tracks", "One row per star as linked", t.len())
        .text("track", "name of the track", |k, out| {
            out.push_str(&t[k].name)
        })
        .ucd("meta.id;meta.main")
        .int("n_members", "detections it holds", |k| {
            Some(t[k].n_members as i64)
        })
        .ucd("meta.number")
        .float(
            "first_yr",
            "yr",
            "time of its first detection (Julian year)",
            Decimals(6),
            |k| t[k].first_yr,
        )
        .ucd("time.epoch")
        .float(
            "last_yr",
            "yr",
            "time of its last detection (Julian year)",
            Decimals(6),
            |k| t[k].last_yr,
        )
        .ucd("time.epoch")
        .float(
            "mean_epoch_yr",
            "yr",
            "its own mean epoch, where it is best known (Julian year)",
            Decimals(6),
            |k| t[k].mean_epoch_yr,
        )
        .ucd("time.epoch")
        .float(
            "x_mean_mas",
            "mas",
            "position toward east at its mean epoch",
            Decimals(6),
            |k| t[k].x_mean_mas,
        )
        .ucd("pos.cartesian.x")
        .float(
            "y_mean_mas",
            "mas",
            "position toward north at its mean epoch",
            Decimals(6),
            |k| t[k].y_mean_mas,
        )
        .ucd("pos.cartesian.y")
        .float(
            "x_mean_err_mas",
            "mas",
            "standard error of x_mean_mas",
            Single,
            |k| t[k].x_mean_err_mas,
        )
        .ucd("stat.error;pos.cartesian.x")
        .float(
            "y_mean_err_mas",
            "mas",
            "standard error of y_mean_mas",
            Single,
            |k| t[k].y_mean_err_mas,
        )
        .ucd("stat.error;pos.cartesian.y")
        .float(
            "vx_mean_mas_yr",
            "mas / yr",
            "motion toward east at its mean epoch",
            Decimals(7),
            |k| t[k].vx_mean_mas_yr,
        )
        .ucd("pos.pm")
        .float(
            "vy_mean_mas_yr",
            "mas / yr",
            "motion toward north at its mean epoch",
            Decimals(7),
            |k| t[k].vy_mean_mas_yr,
        )
        .ucd("pos.pm")
        .float(
            "vx_mean_err_mas_yr",
            "mas / yr",
            "standard error of vx_mean_mas_yr",
            Single,
            |k| t[k].vx_mean_err_mas_yr,
        )
        .ucd("stat.error;pos.pm")
        .float(
            "vy_mean_err_mas_yr",
            "mas / yr",
            "standard error of vy_mean_mas_yr",
            Single,
            |k| t[k].vy_mean_err_mas_yr,
        )
        .ucd("stat.error;pos.pm")
        .text(
            "model",
            "law of motion: linear, accelerated or keplerian",
            |k, out| out.push_str(t[k].motion.kind.word()),
        )
        .ucd("meta.code");
    table = sky_columns(table, t);
    table = table
        .float("mag", "mag", "mean magnitude", Decimals(5), |k| or_nan(t[k].mag))
        .ucd("phot.mag")
        .float("mag_scatter", "mag", "scatter of its magnitudes about the mean", Decimals(5), |k| or_nan(t[k].mag_scatter))
        .ucd("stat.stdev;phot.mag")
        .float("chi2", "", "chi-square of its positions against the model", Decimals(4), |k| t[k].chi2)
        .ucd("stat.fit.chi2")
        .int("dof", "degrees of freedom of chi2", |k| Some(t[k].dof as i64))
        .ucd("stat.fit.dof")
        .float("ln_evidence", "", "ln of the marginal likelihood of its detections, motion integrated out [nat]", Decimals(4), |k| t[k].ln_evidence)
        .ucd("stat.likelihood")
        .float("probability", "", "probability that this track is one real star", Decimals(6), |k| t[k].probability)
        .ucd("stat.probability")
        .int("tangle", "row (from 0) of its confused group in the table of tangles; empty for a star without rivals", |k| t[k].tangle.map(|g| g as i64))
        .ucd("meta.id")
        .text("flags", "flags, separated by ;", |k, out| out.push_str(&t[k].flags.words()))
        .ucd("meta.code.qual");
    if view.campaign.central.is_some() {
        table = orbits::state_columns(table, t.len(), |k| {
            (t[k].motion.kind == MotionKind::Keplerian).then_some(&t[k].motion)
        });
        table = orbits::element_columns(table, |k| t[k].orbit.as_ref());
    }
    table
}

/// Position, velocity and acceleration at the reference epoch with their covariance.
fn sky_columns<'a>(mut table: Table<'a>, t: &'a [Track]) -> Table<'a> {
    const WORDS: [&str; 6] = [
        "position toward east",
        "position toward north",
        "motion toward east",
        "motion toward north",
        "acceleration toward east",
        "acceleration toward north",
    ];
    const UCDS: [&str; 6] = [
        "pos.cartesian.x",
        "pos.cartesian.y",
        "pos.pm",
        "pos.pm",
        "phys.acceleration",
        "phys.acceleration",
    ];
    // A linear motion has no acceleration: the cells stay empty.
    let present = |k: usize, i: usize| i < 4 || t[k].motion.kind != MotionKind::Linear;
    for (i, (name, unit)) in SKY.into_iter().enumerate() {
        let column = format!("{name}_{}", suffix(unit));
        let text = format!("{} at the reference epoch", WORDS[i]);
        let precision = [Decimals(6), Decimals(7), Decimals(9)][i / 2];
        table = table
            .float(&column, unit, &text, precision, move |k| {
                if present(k, i) {
                    t[k].sky.p[i]
                } else {
                    f64::NAN
                }
            })
            .ucd(UCDS[i]);
    }
    for (i, (name, unit)) in SKY.into_iter().enumerate() {
        let column = format!("{name}_err_{}", suffix(unit));
        let text = format!("standard error of {name}_{}", suffix(unit));
        table = table
            .float(&column, unit, &text, Full, move |k| {
                if present(k, i) {
                    t[k].sky.cov[i][i].sqrt()
                } else {
                    f64::NAN
                }
            })
            .ucd(&format!("stat.error;{}", UCDS[i]));
    }
    for (i, (a, _)) in SKY.into_iter().enumerate() {
        for (j, (b, _)) in SKY.into_iter().enumerate().skip(i + 1) {
            table = table
                .float(
                    &format!("cov_{a}_{b}"),
                    covariance_unit(i / 2 + j / 2),
                    &format!("covariance of {a} and {b} at the reference epoch"),
                    Full,
                    move |k| {
                        if present(k, j) {
                            t[k].sky.cov[i][j]
                        } else {
                            f64::NAN
                        }
                    },
                )
                .ucd("stat.covariance");
        }
    }
    table
}
