//! Detection lists: every file of a campaign to columns in a canonical order.
//!
//! Files are read in parallel; results and faults come back in the order of the campaign.

use std::collections::BTreeMap;
use std::path::Path;

use rayon::prelude::*;

use super::columns;
use super::delimited::{self, Table};
use super::ecsv_list;
use super::fault::{FaultKind, Faults, Place};
use super::files::{self, Disk, Files};
use super::kind::{self, Kind};
use super::raw_list;
use crate::model::campaign::{Campaign, Epoch, ListSource};
use crate::model::detection::RawList;
use crate::model::note::Note;

/// Reads the lists of all epochs, in campaign order.
///
/// # Errors
/// All faults of all lists, up to a limit for each file.
pub fn read_lists(campaign: &Campaign) -> Result<(Vec<RawList>, Vec<Note>), Faults> {
    read_lists_from(&Disk, campaign)
}

/// [`read_lists`] from any source of files.
///
/// # Errors
/// As [`read_lists`].
pub fn read_lists_from(
    files: &dyn Files,
    campaign: &Campaign,
) -> Result<(Vec<RawList>, Vec<Note>), Faults> {
    let results: Vec<Result<ReadList, Faults>> = campaign
        .epochs
        .par_iter()
        .map(|epoch| read_list(files, epoch))
        .collect();
    let mut faults = Faults::default();
    let mut lists = Vec::with_capacity(results.len());
    let mut unknown: BTreeMap<(usize, String), usize> = BTreeMap::new();
    for (epoch, result) in campaign.epochs.iter().zip(results) {
        match result {
            Ok(read) => {
                for name in read.unknown {
                    *unknown.entry((epoch.instrument, name)).or_default() += 1;
                }
                lists.push(read.list);
            }
            Err(f) => faults.append(f),
        }
    }
    faults.or((lists, unknown_column_notes(campaign, &unknown)))
}

struct ReadList {
    list: RawList,
    unknown: Vec<String>,
}

fn read_list(files: &dyn Files, epoch: &Epoch) -> Result<ReadList, Faults> {
    let ListSource::File(path) = &epoch.source else {
        return Ok(ReadList {
            list: RawList::default(),
            unknown: Vec::new(),
        });
    };
    let bytes = files::read(files, path)?;
    let table = read_table(&bytes, path, epoch)?;
    let unknown = table.plan.unknown.clone();
    let mut list = raw_list::build(table, path, &epoch.settings)?;
    if let Some(mask) = &epoch.mask {
        list.mask = read_mask(files, mask)?;
    }
    Ok(ReadList { list, unknown })
}

/// Reads a table of whatever kind its content shows.
fn read_table(bytes: &[u8], path: &Path, epoch: &Epoch) -> Result<Table, Faults> {
    let bytes = kind::plain(bytes, path)?;
    let mut plan =
        |heads: &[columns::Head], place: &Place| columns::plan(heads, &epoch.settings, None, place);
    let text = || files::text(&bytes, path);
    match kind::kind(&bytes) {
        Kind::Ecsv => ecsv_list::read_ecsv(text()?, path, &mut plan),
        Kind::Text if columns::headerless(&epoch.settings) => {
            delimited::read_white_space(text()?, path, &mut plan)
        }
        Kind::Text => delimited::read_csv(text()?, path, &mut plan),
        other => Err(Faults::one(
            Place::file(path),
            FaultKind::Format {
                format: format!("{other:?}"),
                reason: "this kind of table is not read yet".to_owned(),
            },
        )),
    }
}

/// Circles `x,y,radius` in list units.
fn read_mask(files: &dyn Files, path: &Path) -> Result<Vec<[f64; 3]>, Faults> {
    let bytes = files::read(files, path)?;
    let text = files::text(&bytes, path)?;
    let table = delimited::read_csv(text, path, &mut |heads, place| {
        columns::plan_of(heads, &["x", "y", "radius"], &[], place)
    })?;
    let column = |role| table.numbers(role);
    let (x, y, r) = (column("x"), column("y"), column("radius"));
    let mut faults = Faults::default();
    for k in 0..table.n_rows {
        for (name, values, ok) in [
            ("x", x, !x[k].is_nan()),
            ("y", y, !y[k].is_nan()),
            ("radius", r, r[k] > 0.0),
        ] {
            if !ok {
                faults.push(
                    table.rows.place(path, k).with_column(name),
                    raw_list::not_as_expected(
                        values[k],
                        "a number above 0 for the radius, and a place",
                    ),
                );
            }
        }
    }
    let mut circles: Vec<[f64; 3]> = (0..table.n_rows).map(|k| [x[k], y[k], r[k]]).collect();
    circles.sort_by(|a, b| {
        a.iter()
            .zip(b)
            .map(|(p, q)| p.total_cmp(q))
            .find(|o| o.is_ne())
            .unwrap_or(std::cmp::Ordering::Equal)
    });
    faults.or(circles)
}

/// One note for each instrument with columns nobody asked for.
fn unknown_column_notes(
    campaign: &Campaign,
    unknown: &BTreeMap<(usize, String), usize>,
) -> Vec<Note> {
    let mut by_instrument: BTreeMap<usize, Vec<String>> = BTreeMap::new();
    for ((instrument, name), n_files) in unknown {
        by_instrument
            .entry(*instrument)
            .or_default()
            .push(format!("{name} ({n_files} of its lists)"));
    }
    by_instrument
        .into_iter()
        .map(|(k, names)| Note {
            what: "unknown_column",
            place: format!("instrument {}", campaign.instruments[k].name),
            text: format!(
                "columns not used: {}; `keep` carries a column through",
                names.join(", ")
            ),
        })
        .collect()
}

impl Table {
    /// Numbers of a role; empty when the table has no such column.
    pub(super) fn numbers(&self, role: &str) -> &[f64] {
        match self.plan.role(role).map(|(c, _)| &self.columns[c]) {
            Some(delimited::Column::Numbers(v)) => v,
            _ => &[],
        }
    }
}
