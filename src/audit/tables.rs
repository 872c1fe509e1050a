//! Tables of an audit.

use super::evidence::{Row, Settling};
use super::judge::Judged;
use super::path::Part;
use super::verdict::{Verdict, would_stand};
use crate::io::table::Precision::{Decimals, Full};
use crate::io::table::Table;
use crate::model::campaign::Campaign;
use crate::model::detection::RawList;

/// What tables need to give names.
#[derive(Clone, Copy, Debug)]
pub struct Names<'a> {
    pub campaign: &'a Campaign,
    pub lists: &'a [RawList],
    /// Name of each star of the reopened run.
    pub stars: &'a [String],
}

impl Names<'_> {
    fn star(&self, k: u32) -> &str {
        self.stars.get(k as usize).map_or("", String::as_str)
    }
}

/// Known stars named with a rival explanation.
const NAMED: usize = 6;

/// `verdicts`: one row per claim.
#[must_use]
pub fn verdicts<'a>(judged: &'a [Judged], names: Names<'a>) -> Table<'a> {
    let j = judged;
    Table::new("verdicts", "One row per claim", j.len())
        .text("claim", "name of the claim", |k, out| {
            out.push_str(&j[k].case.name);
        })
        .text(
            "verdict",
            "stands, known_star, blend, strung_together, artefact, chance or undecided",
            |k, out| out.push_str(j[k].verdict.word()),
        )
        .float(
            "p_real",
            "",
            "probability that the claim is one real star of its own",
            Full,
            |k| j[k].odds.p_real(),
        )
        .float(
            "ln_odds",
            "",
            "ln odds of that against the best rival explanation",
            Decimals(3),
            |k| j[k].odds.ln_odds,
        )
        .float(
            "path_nats",
            "",
            "one star against a path that nobody follows, from the claimed positions",
            Decimals(3),
            |k| j[k].odds.path,
        )
        .float(
            "silent_nats",
            "",
            "the same from epochs at which the claim is silent and the star should stand alone",
            Decimals(3),
            |k| j[k].odds.silent,
        )
        .float(
            "robbed_nats",
            "",
            "cost of detections that known stars explain well and the claim takes",
            Decimals(3),
            |k| j[k].odds.robbed,
        )
        .float(
            "chance_p",
            "",
            "share of scrambled campaigns with as good a star",
            Decimals(5),
            |k| j[k].chance_p,
        )
        .float(
            "chance_best_nats",
            "",
            "path_nats of the best path in any scrambled campaign",
            Decimals(3),
            |k| {
                (j[k].scrambled.iter().copied())
                    .fold(f64::NEG_INFINITY, f64::max)
                    .max(-999.0)
            },
        )
        .int(
            "chance_stands",
            "scrambled campaigns in which the path would have stood by its odds",
            |k| {
                let stand = |s: &&f64| would_stand(**s);
                Some(j[k].scrambled.iter().filter(stand).count() as i64)
            },
        )
        .float(
            "chance_expected",
            "",
            "expected number of as rich sets of unexplained detections on one orbit",
            Full,
            |k| j[k].chance_expected,
        )
        .int("n_positions", "positions claimed", |k| {
            Some(j[k].case.places.len() as i64)
        })
        .int("n_listed", "of these with a detection", |k| {
            Some(j[k].case.detections().count() as i64)
        })
        .int(
            "n_explained",
            "of these explained by stars of the run without the claimed one",
            |k| Some(j[k].n_explained() as i64),
        )
        .int(
            "n_core",
            "of these the star's own detections on the best path",
            |k| Some(j[k].count(Part::Core) as i64),
        )
        .int("n_blend", "of these blends on the best path", |k| {
            Some(j[k].count(Part::Blend) as i64)
        })
        .float(
            "share_single",
            "",
            "share of the detections explained by one known star alone",
            Decimals(3),
            |k| j[k].rivals.single,
        )
        .float(
            "share_blend",
            "",
            "share explained by blends of known stars",
            Decimals(3),
            |k| j[k].rivals.blend,
        )
        .float(
            "share_free",
            "",
            "share that no known star explains",
            Decimals(3),
            |k| j[k].rivals.free,
        )
        .text(
            "track",
            "track of the run that is the claimed star",
            move |k, out| {
                if let Some(own) = j[k].candidate.as_ref().and_then(|c| c.own) {
                    out.push_str(names.star(own));
                }
            },
        )
        .text(
            "best_rival",
            "the rival explanation that comes nearest, with its tracks",
            move |k, out| push_rival(&j[k], names, out),
        )
        .text("needs", "what would settle it", move |k, out| {
            out.push_str(&needs(&j[k], names));
        })
}

fn push_rival(j: &Judged, names: Names<'_>, out: &mut String) {
    out.push_str(j.rival.word());
    let stars: Vec<&str> = match j.rival {
        Verdict::Chance => Vec::new(),
        Verdict::Artefact => j.rivals.host.iter().map(|h| names.star(h.0)).collect(),
        Verdict::KnownStar => j.rivals.main.iter().map(|m| names.star(m.0)).collect(),
        _ => (j.rivals.stars.iter().take(NAMED))
            .map(|&k| names.star(k))
            .collect(),
    };
    if !stars.is_empty() {
        out.push_str(": ");
        out.push_str(&stars.join(";"));
    }
}

/// What would settle a claim, in words.
#[must_use]
pub fn needs(j: &Judged, names: Names<'_>) -> String {
    if j.candidate.is_none() {
        return "positions that one motion can pass through".to_owned();
    }
    match j.settling.iter().find(|s| s.is_decisive) {
        Some(s) => {
            let mut text = format!(
                "an image at {:.1}: expected at ({:.1}, {:.1}) +- {:.1} mas",
                s.t_yr,
                s.expected.x_mas,
                s.expected.y_mas,
                s.expected.x_err_mas.max(s.expected.y_err_mas)
            );
            if let Some((k, gap)) = s.nearest {
                text.push_str(&format!(", {gap:.0} mas from {}", names.star(k)));
            }
            text
        }
        None => "higher resolution: with this one it stays close to known stars or its place is \
                 too uncertain"
            .to_owned(),
    }
}

/// `evidence`: one row per claim and epoch.
#[must_use]
pub fn evidence<'a>(judged: &'a [Judged], names: Names<'a>) -> Table<'a> {
    let rows: Vec<(&Judged, &Row)> = judged
        .iter()
        .flat_map(|j| j.rows.iter().map(move |r| (j, r)))
        .collect();
    let n = rows.len();
    let rows = std::sync::Arc::new(rows);
    let or_nan = |v: Option<f64>| v.unwrap_or(f64::NAN);
    let number = |at: fn(&Row) -> Option<f64>| {
        let rows = rows.clone();
        move |k: usize| or_nan(at(rows[k].1))
    };
    let (of, epochs, ids, held) = (rows.clone(), rows.clone(), rows.clone(), rows.clone());
    let (at_epoch, parts, near) = (rows.clone(), rows.clone(), rows.clone());
    let mut t = Table::new("evidence", "One row per claim and epoch", n)
        .text("claim", "name of the claim", move |k, out| {
            out.push_str(&of[k].0.case.name);
        })
        .int(
            "epoch",
            "epoch, counted from 0 in the campaign file; empty for a position with its own date",
            move |k| at_epoch[k].1.epoch.map(|e| e as i64),
        )
        .text("epoch_name", "name of the epoch", move |k, out| {
            if let Some(e) = epochs[k].1.epoch {
                out.push_str(&names.campaign.epochs[e].name);
            }
        })
        .float(
            "time_yr",
            "yr",
            "time (Julian year)",
            Decimals(7),
            number(|r| Some(r.t_yr)),
        );
    t = t
        .float(
            "x_claimed_mas",
            "mas",
            "position claimed",
            Decimals(4),
            number(|r| Some(r.claimed_mas?[0])),
        )
        .float(
            "y_claimed_mas",
            "mas",
            "position claimed",
            Decimals(4),
            number(|r| Some(r.claimed_mas?[1])),
        )
        .float(
            "x_mas",
            "mas",
            "position expected of the star behind the claim",
            Decimals(4),
            number(|r| Some(r.expected?.x_mas)),
        )
        .float(
            "y_mas",
            "mas",
            "position expected of the star behind the claim",
            Decimals(4),
            number(|r| Some(r.expected?.y_mas)),
        )
        .float(
            "x_err_mas",
            "mas",
            "standard error of x_mas",
            Decimals(4),
            number(|r| Some(r.expected?.x_err_mas)),
        )
        .float(
            "y_err_mas",
            "mas",
            "standard error of y_mas",
            Decimals(4),
            number(|r| Some(r.expected?.y_err_mas)),
        )
        .float(
            "mag",
            "mag",
            "magnitude expected",
            Decimals(4),
            number(|r| Some(r.expected?.mag)),
        )
        .float(
            "mag_err",
            "mag",
            "standard error of mag",
            Decimals(4),
            number(|r| Some(r.expected?.mag_err)),
        )
        .text("id", "detection there", move |k, out| {
            if let (Some(e), Some(d)) = (ids[k].1.epoch, ids[k].1.row) {
                names.lists[e].ids.push(d as usize, out);
            }
        })
        .text(
            "explained_by",
            "tracks that make it without the claimed star, with their shares of the light",
            move |k, out| {
                for (n, (star, share)) in held[k].1.holders.iter().enumerate() {
                    if n > 0 {
                        out.push(';');
                    }
                    out.push_str(&format!("{} {share:.2}", names.star(*star)));
                }
            },
        );
    t.text(
        "part",
        "the star behind the claim: alone, blend, or not_there; empty when nothing is listed",
        move |k, out| {
            out.push_str(match parts[k].1.part {
                Some(Part::Core) => "alone",
                Some(Part::Blend) => "blend",
                Some(Part::Stranger) => "not_there",
                None => "",
            });
        },
    )
    .text("nearest", "nearest known track", move |k, out| {
        if let Some((star, _)) = near[k].1.nearest {
            out.push_str(names.star(star));
        }
    })
    .float(
        "nearest_fwhm",
        "",
        "its distance from the detection in resolution elements",
        Decimals(3),
        number(|r| r.nearest.map(|n| n.1)),
    )
    .float(
        "det_mag",
        "mag",
        "magnitude of the detection on the common scale",
        Decimals(3),
        number(|r| r.det_mag),
    )
    .float(
        "star_nats",
        "",
        "for one star against a path that nobody follows",
        Decimals(3),
        number(|r| r.star_nats),
    )
    .float(
        "known_nats",
        "",
        "gain over a false detection: known stars as they are assigned without it",
        Decimals(3),
        number(|r| r.known_nats),
    )
    .float(
        "single_nats",
        "",
        "the same for the best single known star",
        Decimals(3),
        number(|r| r.single_nats),
    )
    .float(
        "blend_nats",
        "",
        "the same for the best blend of known stars",
        Decimals(3),
        number(|r| r.blend_nats),
    )
    .float(
        "missed_nats",
        "",
        "ln of the chance that the star behind the claim was missed here",
        Decimals(3),
        number(|r| r.missed_nats),
    )
}

/// `settling`: predicted positions after the campaign.
#[must_use]
pub fn settling<'a>(judged: &'a [Judged], names: Names<'a>) -> Table<'a> {
    let rows: Vec<(&Judged, &Settling)> = judged
        .iter()
        .flat_map(|j| j.settling.iter().map(move |s| (j, s)))
        .collect();
    let n = rows.len();
    let rows = std::sync::Arc::new(rows);
    let number = |at: fn(&Settling) -> f64| {
        let rows = rows.clone();
        move |k: usize| at(rows[k].1)
    };
    let (of, near, decisive) = (rows.clone(), rows.clone(), rows.clone());
    Table::new(
        "settling",
        "Where the star behind each claim is expected after the campaign",
        n,
    )
    .text("claim", "name of the claim", move |k, out| {
        out.push_str(&of[k].0.case.name);
    })
    .float(
        "time_yr",
        "yr",
        "time (Julian year)",
        Decimals(4),
        number(|s| s.t_yr),
    )
    .float(
        "x_mas",
        "mas",
        "position expected",
        Decimals(3),
        number(|s| s.expected.x_mas),
    )
    .float(
        "y_mas",
        "mas",
        "position expected",
        Decimals(3),
        number(|s| s.expected.y_mas),
    )
    .float(
        "x_err_mas",
        "mas",
        "standard error of x_mas",
        Decimals(3),
        number(|s| s.expected.x_err_mas),
    )
    .float(
        "y_err_mas",
        "mas",
        "standard error of y_mas",
        Decimals(3),
        number(|s| s.expected.y_err_mas),
    )
    .text("nearest", "nearest known track then", move |k, out| {
        if let Some((star, _)) = near[k].1.nearest {
            out.push_str(names.star(star));
        }
    })
    .float(
        "distance_mas",
        "mas",
        "its distance",
        Decimals(2),
        number(|s| s.nearest.map_or(f64::NAN, |n| n.1)),
    )
    .bool(
        "decisive",
        "seen apart from every known star, at a well-known place",
        move |k| Some(decisive[k].1.is_decisive),
    )
}
