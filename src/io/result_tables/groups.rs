//! `epochs`, `tangles` and `rivals`.

use super::super::table::Precision::{Decimals, Full, Single};
use super::super::table::Table;
use super::{RunView, or_nan};
use crate::model::campaign::FrameFreedom;
use crate::model::result::Certificate;

/// Terms of the transformation, as used in column names.
pub const TERMS: [&str; 6] = ["1", "u", "v", "uu", "uv", "vv"];

pub(super) fn epochs(view: RunView<'_>) -> Table<'_> {
    let e = &view.solution.epochs;
    let c = &view.campaign.epochs;
    let mut table = Table::new(
        "epochs",
        "One row per epoch: the list, its transformation into the common frame and what was found about its errors",
        e.len(),
    )
    .int("epoch", "epoch, counted from 0 in the campaign file", |k| Some(k as i64))
    .ucd("meta.id;obs;meta.main")
    .text("epoch_name", "name of the epoch", |k, out| out.push_str(&c[k].name))
    .ucd("meta.id;obs")
    .float("time_yr", "yr", "time (Julian year)", Decimals(7), |k| c[k].time.yr())
    .ucd("time.epoch")
    .text("instrument", "instrument of the campaign file", |k, out| {
        out.push_str(&view.campaign.instruments[c[k].instrument].name);
    })
    .ucd("meta.id;instr")
    .int("n_list", "detections in the list", |k| Some(e[k].n_list as i64))
    .ucd("meta.number")
    .int("n_matched", "detections in a track", |k| Some(e[k].n_matched as i64))
    .ucd("meta.number")
    .int("n_unmatched", "detections in no track", |k| Some(e[k].n_unmatched as i64))
    .ucd("meta.number")
    .text("frame", "how much of the transformation was solved", |k, out| {
        out.push_str(frame_word(c[k].settings.frame));
    })
    .ucd("meta.code")
    .int("n_anchors", "stars the transformation rests on", |k| Some(e[k].n_anchors as i64))
    .ucd("meta.number");
    for (axis, name) in ["x", "y"].into_iter().enumerate() {
        for (i, term) in TERMS.into_iter().enumerate() {
            table = table
                .float(
                    &format!("{name}_{term}"),
                    "",
                    &format!("coefficient of {term} in {name}: mas per power of the list's unit"),
                    Full,
                    move |k| e[k].coef[axis][i],
                )
                .float(
                    &format!("{name}_{term}_err"),
                    "",
                    &format!("standard error of {name}_{term}"),
                    Single,
                    move |k| e[k].coef_err[axis][i],
                );
        }
    }
    table
        .float(
            "rms_mas",
            "mas",
            "root mean square of the residuals of its members",
            Decimals(5),
            |k| or_nan(e[k].rms_mas),
        )
        .ucd("stat.rms;pos")
        .float(
            "error_factor",
            "",
            "factor by which stated errors had to be multiplied",
            Decimals(5),
            |k| e[k].error_factor,
        )
        .ucd("arith.factor")
        .float(
            "error_floor_mas",
            "mas",
            "common error added in quadrature",
            Decimals(5),
            |k| e[k].error_floor_mas,
        )
        .ucd("stat.error;pos")
        .float(
            "limit_mag",
            "mag",
            "magnitude of 50 % completeness, as found from the list",
            Decimals(4),
            |k| or_nan(e[k].limit_mag),
        )
        .ucd("phot.mag;stat.max")
        .float(
            "zero_point_mag",
            "mag",
            "zero point relative to the campaign's mean",
            Decimals(5),
            |k| or_nan(e[k].zero_point_mag),
        )
        .ucd("phot.mag;arith.zp")
        .float(
            "zero_point_err_mag",
            "mag",
            "its standard error",
            Decimals(5),
            |k| or_nan(e[k].zero_point_err_mag),
        )
        .ucd("stat.error;phot.mag")
        .text(
            "failed",
            "why the epoch could not be placed; empty when it was",
            |k, out| {
                out.push_str(e[k].failed.as_deref().unwrap_or(""));
            },
        )
        .ucd("meta.note")
        .text("flags", "flags, separated by ;", |k, out| {
            out.push_str(&e[k].flags.words())
        })
        .ucd("meta.code.qual")
}

fn frame_word(frame: FrameFreedom) -> &'static str {
    match frame {
        FrameFreedom::Known => "known",
        FrameFreedom::Shift => "shift",
        FrameFreedom::Similarity => "similarity",
        FrameFreedom::Affine => "affine",
        FrameFreedom::Quadratic => "quadratic",
    }
}

pub(super) fn tangles(view: RunView<'_>) -> Table<'_> {
    let g = &view.solution.tangles;
    let tracks = &view.solution.tracks;
    Table::new(
        "tangles",
        "One row per connected group of confused stars",
        g.len(),
    )
    .int("tangle", "the group, counted from 0", |k| Some(k as i64))
    .ucd("meta.id;meta.main")
    .text("tracks", "its tracks, separated by ;", |k, out| {
        for (n, &t) in g[k].tracks.iter().enumerate() {
            if n > 0 {
                out.push(';');
            }
            out.push_str(&tracks[t].name);
        }
    })
    .ucd("meta.id")
    .int("n_tracks", "number of its tracks", |k| {
        Some(g[k].tracks.len() as i64)
    })
    .ucd("meta.number")
    .int("n_detections", "detections it holds", |k| {
        Some(g[k].n_detections as i64)
    })
    .ucd("meta.number")
    .int("n_epochs", "epochs it touches", |k| {
        Some(g[k].n_epochs as i64)
    })
    .ucd("meta.number")
    .text(
        "certificate",
        "what is proven: pool, priced_out, all, bounded or none",
        |k, out| {
            out.push_str(g[k].certificate.word());
        },
    )
    .ucd("meta.code.qual")
    .float(
        "gap_nats",
        "",
        "the best explanation is within so many nats of the optimum (bounded only)",
        Full,
        |k| match g[k].certificate {
            Certificate::Bounded { gap_nats } => gap_nats,
            _ => f64::NAN,
        },
    )
    .ucd("stat.error")
    .int("work", "steps of the solver", |k| {
        i64::try_from(g[k].work).ok()
    })
    .ucd("meta.number")
    .text("flags", "flags, separated by ;", |k, out| {
        out.push_str(&g[k].flags.words())
    })
    .ucd("meta.code.qual")
}

pub(super) fn rivals(view: RunView<'_>) -> Table<'_> {
    let r = &view.solution.rivals;
    Table::new("rivals", "Other explanations of the tangles", r.len())
        .int("tangle", "the group, as in the table of tangles", |k| {
            Some(r[k].tangle as i64)
        })
        .ucd("meta.id")
        .int("rank", "1 = the next best", |k| Some(r[k].rank as i64))
        .ucd("meta.code")
        .float(
            "ln_odds",
            "",
            "ln odds against the best explanation; negative = less likely [nat]",
            Decimals(4),
            |k| r[k].ln_odds,
        )
        .ucd("stat.likelihood")
        .text(
            "change",
            "what it changes, clauses separated by ;",
            |k, out| out.push_str(&r[k].change),
        )
        .ucd("meta.note")
}
