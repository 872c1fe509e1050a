//! `members` and `leftovers`: every detection of the campaign stands in exactly one of them
//! (a merged detection once per star it belongs to).

use super::super::table::Precision::{Decimals, Full, Single};
use super::super::table::Table;
use super::{RunView, or_nan};
use crate::maths::cov2::Cov2;

/// Where a detection is: epoch and row.
type Place<'a> = Box<dyn Fn(usize) -> (usize, usize) + Sync + 'a>;

pub(super) fn members(view: RunView<'_>) -> Table<'_> {
    let m = &view.solution.members;
    let tracks = &view.solution.tracks;
    let table = Table::new(
        "members",
        "One row per track and detection; a merged detection has several",
        m.len(),
    )
    .text("track", "name of the track", |k, out| {
        out.push_str(&tracks[m[k].track].name)
    })
    .ucd("meta.id;meta.main");
    let table = detection_columns(table, view, || Box::new(|k| (m[k].epoch, m[k].row)));
    let table = table
        .float(
            "probability",
            "",
            "probability that the detection belongs to the track",
            Decimals(6),
            |k| m[k].probability,
        )
        .ucd("stat.probability")
        .float(
            "share",
            "",
            "share of the detection's flux, 1 when the star is alone in it",
            Decimals(6),
            |k| m[k].share,
        )
        .ucd("phot.flux;arith.ratio")
        .float(
            "dx_mas",
            "mas",
            "measured minus predicted position toward east (of the blend, when merged)",
            Decimals(5),
            |k| m[k].dx_mas,
        )
        .ucd("stat.fit.residual;pos.cartesian.x")
        .float(
            "dy_mas",
            "mas",
            "measured minus predicted position toward north (of the blend, when merged)",
            Decimals(5),
            |k| m[k].dy_mas,
        )
        .ucd("stat.fit.residual;pos.cartesian.y")
        .text("flags", "flags, separated by ;", |k, out| {
            out.push_str(&m[k].flags.words())
        })
        .ucd("meta.code.qual");
    kept_columns(table, view, || Box::new(|k| (m[k].epoch, m[k].row)))
}

pub(super) fn leftovers(view: RunView<'_>) -> Table<'_> {
    let l = &view.solution.leftovers;
    let tracks = &view.solution.tracks;
    let table = Table::new("leftovers", "Detections that belong to no track", l.len());
    let table = detection_columns(table, view, || Box::new(|k| (l[k].epoch, l[k].row)));
    let table = table
        .float(
            "p_false",
            "",
            "probability that it is false: no star at all",
            Decimals(6),
            |k| l[k].p_false,
        )
        .ucd("stat.probability")
        .text(
            "nearest_track",
            "the track that passed nearest",
            |k, out| {
                if let Some((t, _)) = l[k].nearest {
                    out.push_str(&tracks[t].name);
                }
            },
        )
        .ucd("meta.id.cross")
        .float(
            "nearest_mas",
            "mas",
            "its distance at that time",
            Decimals(4),
            |k| or_nan(l[k].nearest.map(|n| n.1)),
        )
        .ucd("pos.angDistance")
        .text("flags", "flags, separated by ;", |k, out| {
            out.push_str(&l[k].flags.words())
        })
        .ucd("meta.code.qual");
    kept_columns(table, view, || Box::new(|k| (l[k].epoch, l[k].row)))
}

/// The detection itself, in the common frame.
fn detection_columns<'a>(
    table: Table<'a>,
    view: RunView<'a>,
    place: impl Fn() -> Place<'a>,
) -> Table<'a> {
    let covariance = || {
        let at = place();
        move |k: usize| -> Cov2 {
            let (e, r) = at(k);
            view.epochs[e].cov_mas2[r]
        }
    };
    let number = |get: fn(&crate::model::detection::FieldEpoch) -> &Vec<f64>| {
        let at = place();
        move |k: usize| -> f64 {
            let (e, r) = at(k);
            get(&view.epochs[e]).get(r).copied().unwrap_or(f64::NAN)
        }
    };
    let at = place();
    let table = table
        .int(
            "epoch",
            "epoch, counted from 0 in the campaign file",
            move |k| Some(at(k).0 as i64),
        )
        .ucd("meta.id;obs");
    let at = place();
    let table = table
        .text("epoch_name", "name of the epoch", move |k, out| {
            out.push_str(&view.campaign.epochs[at(k).0].name);
        })
        .ucd("meta.id;obs");
    let at = place();
    let table = table
        .text("id", "identifier in the epoch's list", move |k, out| {
            let (e, r) = at(k);
            view.lists[e].ids.push(r, out);
        })
        .ucd("meta.id;src");
    let at = place();
    let table = table
        .float(
            "time_yr",
            "yr",
            "time of the epoch (Julian year)",
            Decimals(7),
            move |k| view.epochs[at(k).0].time.yr(),
        )
        .ucd("time.epoch");
    let (cx, cy, cc) = (covariance(), covariance(), covariance());
    let mut table = table
        .float(
            "x_mas",
            "mas",
            "measured position toward east",
            Decimals(6),
            number(|e| &e.x_mas),
        )
        .ucd("pos.cartesian.x")
        .float(
            "y_mas",
            "mas",
            "measured position toward north",
            Decimals(6),
            number(|e| &e.y_mas),
        )
        .ucd("pos.cartesian.y")
        .float(
            "x_err_mas",
            "mas",
            "its stated error toward east",
            Single,
            move |k| cx(k).xx.sqrt(),
        )
        .ucd("stat.error;pos.cartesian.x")
        .float(
            "y_err_mas",
            "mas",
            "its stated error toward north",
            Single,
            move |k| cy(k).yy.sqrt(),
        )
        .ucd("stat.error;pos.cartesian.y")
        .float(
            "xy_corr",
            "",
            "correlation of the two errors",
            Single,
            move |k| {
                let c = cc(k);
                c.xy / (c.xx * c.yy).sqrt()
            },
        )
        .ucd("stat.correlation")
        .float(
            "mag",
            "mag",
            "measured magnitude",
            Decimals(6),
            number(|e| &e.mag),
        )
        .ucd("phot.mag")
        .float(
            "mag_err",
            "mag",
            "its stated error",
            Single,
            number(|e| &e.mag_err),
        )
        .ucd("stat.error;phot.mag");
    if view.epochs.iter().any(|e| !e.rv_km_s.is_empty()) {
        table = table
            .float(
                "rv_km_s",
                "km / s",
                "measured radial velocity, receding",
                Full,
                number(|e| &e.rv_km_s),
            )
            .ucd("spect.dopplerVeloc")
            .float(
                "rv_err_km_s",
                "km / s",
                "its stated error",
                Full,
                number(|e| &e.rv_err_km_s),
            )
            .ucd("stat.error;spect.dopplerVeloc");
    }
    table
}

/// Columns that the campaign asked to carry through, as they stood in the lists.
fn kept_columns<'a>(
    mut table: Table<'a>,
    view: RunView<'a>,
    place: impl Fn() -> Place<'a>,
) -> Table<'a> {
    let mut names: Vec<&str> = Vec::new();
    for (name, _) in view.lists.iter().flat_map(|l| &l.kept) {
        if !names.contains(&name.as_str()) {
            names.push(name);
        }
    }
    for name in names {
        let at = place();
        let taken = table.column(name).is_some();
        let column = if taken {
            format!("list_{name}")
        } else {
            name.to_owned()
        };
        table = table.text(&column, "carried through from the list", move |k, out| {
            let (e, r) = at(k);
            if let Some((_, texts)) = view.lists[e].kept.iter().find(|(n, _)| n == name) {
                out.push_str(&texts[r]);
            }
        });
    }
    table
}
