//! Detection lists: every file of a campaign to columns in a canonical order.
//!
//! Files are read in parallel; results and faults come back in the order of the campaign.

use std::collections::BTreeMap;
use std::path::Path;

use rayon::prelude::*;

use super::columns;
use super::delimited::{self, Planner, Table};
use super::ecsv_list;
use super::fault::{FaultKind, Faults, Place};
use super::files::{self, Disk, Files};
use super::kind::{self, Kind};
use super::one_table;
use super::planned;
use super::raw_list;
use crate::model::campaign::{Campaign, Epoch, Instrument, ListSource};
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
    let (results, notes) = read_each(files, campaign)?;
    let mut faults = Faults::default();
    let mut lists = Vec::with_capacity(results.len());
    for result in results {
        match result {
            Ok(list) => lists.push(list),
            Err(f) => faults.append(f),
        }
    }
    faults.or((lists, notes))
}

/// Each list or its faults, and notes on those that could be read.
///
/// # Errors
/// The faults of a table that holds all epochs.
#[allow(clippy::type_complexity)]
pub(super) fn read_each(
    files: &dyn Files,
    campaign: &Campaign,
) -> Result<(Vec<Result<RawList, Faults>>, Vec<Note>), Faults> {
    let (mut shared, mut notes) = one_table::read(files, campaign)?;
    let results: Vec<Result<ReadList, Faults>> = campaign
        .epochs
        .par_iter()
        .zip(shared.par_iter_mut())
        .map(|(epoch, part)| read_list(files, campaign, epoch, part.take()))
        .collect();
    let mut unknown: BTreeMap<(usize, String), usize> = BTreeMap::new();
    let lists = campaign
        .epochs
        .iter()
        .zip(results)
        .map(|(epoch, result)| {
            result.map(|read| {
                for name in read.unknown {
                    *unknown.entry((epoch.instrument, name)).or_default() += 1;
                }
                read.list
            })
        })
        .collect();
    notes.extend(unknown_column_notes(campaign, &unknown));
    Ok((lists, notes))
}

struct ReadList {
    list: RawList,
    unknown: Vec<String>,
}

fn read_list(
    files: &dyn Files,
    campaign: &Campaign,
    epoch: &Epoch,
    part: Option<Table>,
) -> Result<ReadList, Faults> {
    let (path, table) = match (&epoch.source, &campaign.lists) {
        (ListSource::File(path), _) => {
            let bytes = files::read(files, path)?;
            (path, read_table(&bytes, path, &epoch.settings, None)?)
        }
        (ListSource::Key(key), Some(one)) => {
            let nothing = || one_table::no_rows(one, key);
            (&one.file, part.ok_or_else(nothing)?)
        }
        (ListSource::Key(key), None) => {
            return Err(Faults::one(
                Place::file(&campaign.path),
                FaultKind::MissingKey {
                    table: "the top level".to_owned(),
                    key: "[lists]".to_owned(),
                    expected: format!("epoch key `{key}` needs one table for all epochs"),
                },
            ));
        }
    };
    let unknown = table.plan.unknown.clone();
    let mut list = raw_list::build(table, path, &epoch.settings)?;
    if let Some(mask) = &epoch.mask {
        list.mask = read_mask(files, mask)?;
    }
    Ok(ReadList { list, unknown })
}

/// Reads a table of whatever kind its content shows; `key` is the column of the epoch's key in
/// a table that holds all epochs.
pub(super) fn read_table(
    bytes: &[u8],
    path: &Path,
    instrument: &Instrument,
    key: Option<&str>,
) -> Result<Table, Faults> {
    let headerless = columns::headerless(instrument);
    let mut plan =
        |heads: &[columns::Head], place: &Place| columns::plan(heads, instrument, key, place);
    read_any(bytes, path, headerless, &mut plan)
}

/// Reads a table of any kind into the columns that a plan wants.
pub(super) fn read_any(
    bytes: &[u8],
    path: &Path,
    headerless: bool,
    plan: &mut Planner<'_>,
) -> Result<Table, Faults> {
    let bytes = kind::plain(bytes, path)?;
    let text = || files::text(&bytes, path);
    match kind::kind(&bytes) {
        Kind::Ecsv => ecsv_list::read_ecsv(text()?, path, plan),
        Kind::Text if headerless => delimited::read_white_space(text()?, path, plan),
        Kind::Text => delimited::read_csv(text()?, path, plan),
        other => planned::from_table(kind::read(other, &bytes, path)?, path, plan),
    }
}

/// Circles `x,y,radius` in list units.
fn read_mask(files: &dyn Files, path: &Path) -> Result<Vec<[f64; 3]>, Faults> {
    let bytes = files::read(files, path)?;
    let table = read_any(&bytes, path, false, &mut |heads, place| {
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
                    table.place(path, k).with_column(name),
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
