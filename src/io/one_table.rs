//! One table that holds all epochs: read once, rows handed to the epoch whose key they carry.

use std::collections::BTreeMap;

use super::delimited::{Column, Table};
use super::fault::{FaultKind, Faults, Place};
use super::files::{self, Files};
use super::lists::read_table;
use crate::model::campaign::{Campaign, Instrument, ListSource, OneTable};
use crate::model::note::Note;

/// The rows of each epoch that has a key, in campaign order; `None` for other epochs and for
/// keys that no row carries.
pub(super) fn read(
    files: &dyn Files,
    campaign: &Campaign,
) -> Result<(Vec<Option<Table>>, Vec<Note>), Faults> {
    let mut parts: Vec<Option<Table>> = campaign.epochs.iter().map(|_| None).collect();
    let mut notes = Vec::new();
    let Some(one) = &campaign.lists else {
        return Ok((parts, notes));
    };
    let keyed: Vec<(usize, &str)> = campaign
        .epochs
        .iter()
        .enumerate()
        .filter_map(|(k, e)| match &e.source {
            ListSource::Key(key) => Some((k, key.as_str())),
            ListSource::File(_) => None,
        })
        .collect();
    let Some(&(first, _)) = keyed.first() else {
        return Ok((parts, notes));
    };
    let bytes = files::read(files, &one.file)?;
    // Instruments may name columns differently: one reading for each way of naming them.
    let mut layouts: Vec<(&Instrument, Table)> = Vec::new();
    let mut faults = Faults::default();
    for &(k, _) in &keyed {
        let settings = &campaign.epochs[k].settings;
        if layouts.iter().any(|(s, _)| same_layout(s, settings)) {
            continue;
        }
        match read_table(&bytes, &one.file, settings, Some(&one.epoch_column)) {
            Ok(table) => layouts.push((settings, table)),
            Err(f) => {
                faults.append(f);
                break;
            }
        }
    }
    faults.or(())?;
    for (settings, table) in &layouts {
        let (rows, strangers) = rows_by_epoch(table, &keyed);
        for (&(k, _), rows) in keyed.iter().zip(&rows) {
            if !rows.is_empty() && same_layout(settings, &campaign.epochs[k].settings) {
                parts[k] = Some(table.rows_taken(rows));
            }
        }
        if same_layout(settings, &campaign.epochs[first].settings) && !strangers.is_empty() {
            notes.push(unused_rows(one, &strangers));
        }
    }
    Ok((parts, notes))
}

/// The fault for a key that no row carries.
pub(super) fn no_rows(one: &OneTable, key: &str) -> Faults {
    Faults::one(
        Place::file(&one.file).with_column(&one.epoch_column),
        FaultKind::Value {
            found: format!("no row with `{key}`"),
            expected: "at least one detection for every epoch of the campaign".to_owned(),
        },
    )
}

/// Do two instruments read a table the same way?
fn same_layout(a: &Instrument, b: &Instrument) -> bool {
    a.columns == b.columns && a.keep == b.keep && a.unit == b.unit && a.error_unit == b.error_unit
}

/// Rows of each key, and how many rows carry each key that no epoch has.
///
/// Keys are compared as texts, then as numbers (a whole number may come back as `7.0`).
fn rows_by_epoch<'a>(
    table: &'a Table,
    keyed: &[(usize, &str)],
) -> (Vec<Vec<u32>>, BTreeMap<&'a str, usize>) {
    let by_text: BTreeMap<&str, usize> = keyed.iter().map(|&(_, t)| t).zip(0..).collect();
    let by_number: Vec<(f64, usize)> = keyed
        .iter()
        .enumerate()
        .filter_map(|(slot, &(_, t))| Some((t.parse().ok()?, slot)))
        .collect();
    let mut rows = vec![Vec::new(); keyed.len()];
    let mut strangers = BTreeMap::new();
    let Some(Column::Texts(keys)) = table.plan.key.map(|c| &table.columns[c]) else {
        return (rows, strangers);
    };
    let find = |key: &str| {
        by_text.get(key).copied().or_else(|| {
            let v: f64 = key.parse().ok()?;
            by_number.iter().find(|(n, _)| *n == v).map(|&(_, s)| s)
        })
    };
    // Tables are mostly sorted by epoch, so the last answer often holds.
    let mut last: Option<(&str, Option<usize>)> = None;
    for (row, key) in (0_u32..).zip(keys) {
        let slot = match last {
            Some((k, slot)) if k == key.as_str() => slot,
            _ => find(key),
        };
        last = Some((key, slot));
        match slot {
            Some(slot) => rows[slot].push(row),
            None => *strangers.entry(key.as_str()).or_insert(0) += 1,
        }
    }
    (rows, strangers)
}

fn unused_rows(one: &OneTable, strangers: &BTreeMap<&str, usize>) -> Note {
    const SHOWN: usize = 6;
    let mut shown: Vec<String> = strangers
        .iter()
        .take(SHOWN)
        .map(|(key, n)| format!("`{key}` ({n} rows)"))
        .collect();
    if strangers.len() > SHOWN {
        shown.push(format!("{} more", strangers.len() - SHOWN));
    }
    Note {
        what: "unused_rows",
        place: one.file.display().to_string(),
        text: format!(
            "rows of column `{}` that belong to no epoch of the campaign: {}",
            one.epoch_column,
            shown.join(", ")
        ),
    }
}
