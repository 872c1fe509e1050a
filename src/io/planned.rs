//! A table already in memory (FITS, VOTable, Parquet) to the columns that a plan wants.

use std::collections::BTreeMap;
use std::path::Path;

use super::columns::{Head, Plan, Want};
use super::delimited::{Column, Planner, RowPlaces, Table, push_id};
use super::fault::{FaultKind, Faults, Place};
use super::number_text::push_float;
use super::table::{self, Precision, Source, Texts, Values};
use crate::model::detection::Ids;

/// Takes the wanted columns. Masked values and `NaN` are "not measured".
///
/// # Errors
/// The planner's faults, an empty table, texts where numbers are wanted, infinite numbers.
pub(super) fn from_table(
    table: table::Table<'_>,
    path: &Path,
    plan: &mut Planner<'_>,
) -> Result<Table, Faults> {
    let table = masked(table);
    let heads: Vec<Head> = table
        .columns
        .iter()
        .map(|c| Head {
            name: c.name.clone(),
            unit: Some(c.unit.clone()).filter(|u| !u.is_empty()),
        })
        .collect();
    let place = Place::file(path);
    let plan: Plan = plan(&heads, &place)?;
    let n_rows = table.n_rows();
    let mut faults = Faults::default();
    if n_rows == 0 {
        faults.push(place, FaultKind::Empty);
    }
    let mut columns = Vec::with_capacity(heads.len());
    for (column, want) in table.columns.iter().zip(&plan.wants) {
        columns.push(match want {
            Want::Skip => Column::Skipped,
            Want::Number => Column::Numbers(numbers(column, n_rows, path, &mut faults)),
            Want::Text => {
                let mut texts = Vec::with_capacity(n_rows);
                each_text(&column.values, n_rows, |t| {
                    texts.push(String::from_utf8_lossy(t).into_owned());
                });
                Column::Texts(texts)
            }
            Want::Id => {
                let mut ids = Ids::default();
                each_text(&column.values, n_rows, |t| push_id(&mut ids, t));
                Column::Ids(ids)
            }
        });
    }
    faults.or(Table {
        heads,
        plan,
        columns,
        n_rows,
        rows: RowPlaces::Numbered,
        taken: None,
    })
}

/// Applies columns `NAME.mask` (true = none), as astropy keeps masks in formats or columns that
/// have no nulls of their own, and leaves them out.
fn masked(table: table::Table<'_>) -> table::Table<'_> {
    const SUFFIX: &str = ".mask";
    let n_rows = table.n_rows();
    let masks: BTreeMap<String, Vec<bool>> = table
        .columns
        .iter()
        .filter_map(|c| {
            let of = c.name.strip_suffix(SUFFIX)?;
            match &c.values {
                Values::Bool(s) if table.column(of).is_some() => {
                    let mask = (0..n_rows).map(|k| s.at(k) == Some(true)).collect();
                    Some((of.to_owned(), mask))
                }
                _ => None,
            }
        })
        .collect();
    if masks.is_empty() {
        return table;
    }
    let mut out = table::Table::new(&table.name, &table.description, n_rows);
    for mut column in table.columns {
        let is_mask = column
            .name
            .strip_suffix(SUFFIX)
            .is_some_and(|of| masks.contains_key(of));
        if let Some(mask) = masks.get(&column.name) {
            column.values = under_mask(&column.values, mask);
        }
        if !is_mask {
            out.push(column);
        }
    }
    out
}

fn under_mask(values: &Values<'_>, mask: &[bool]) -> Values<'static> {
    let rows = || mask.iter().enumerate();
    match values {
        Values::Float(s, precision) => {
            let of = |(k, &none): (usize, &bool)| if none { f64::NAN } else { s.at(k) };
            Values::Float(Source::Held(rows().map(of).collect()), *precision)
        }
        Values::Int(s) => {
            let of = |(k, &none): (usize, &bool)| if none { None } else { s.at(k) };
            Values::Int(Source::Held(rows().map(of).collect()))
        }
        Values::Bool(s) => {
            let of = |(k, &none): (usize, &bool)| if none { None } else { s.at(k) };
            Values::Bool(Source::Held(rows().map(of).collect()))
        }
        Values::Text(t) => {
            let of = |(k, &none): (usize, &bool)| if none { String::new() } else { t.at(k) };
            Values::Text(Texts::Held(rows().map(of).collect()))
        }
    }
}

fn numbers(
    column: &table::Column<'_>,
    n_rows: usize,
    path: &Path,
    faults: &mut Faults,
) -> Vec<f64> {
    let mut wrong = |row: usize, found: String, expected: &str| {
        let place = Place {
            row: Some(row + 1),
            ..Place::file(path).with_column(&column.name)
        };
        faults.push(
            place,
            FaultKind::Value {
                found,
                expected: expected.to_owned(),
            },
        );
        f64::NAN
    };
    (0..n_rows)
        .map(|row| match &column.values {
            Values::Float(s, _) => {
                let v = s.at(row);
                if v.is_infinite() {
                    wrong(row, v.to_string(), "a finite number")
                } else {
                    v + 0.0
                }
            }
            Values::Int(s) => s.at(row).map_or(f64::NAN, |v| v as f64),
            Values::Bool(s) => s.at(row).map_or(f64::NAN, |b| f64::from(u8::from(b))),
            Values::Text(t) => {
                let text = t.at(row);
                if text.trim().is_empty() {
                    f64::NAN
                } else {
                    match text.trim().parse::<f64>() {
                        Ok(v) if v.is_finite() => v + 0.0,
                        _ => wrong(row, text, "a number"),
                    }
                }
            }
        })
        .collect()
}

/// Every value as text; none is the empty text.
fn each_text(values: &Values<'_>, n_rows: usize, mut take: impl FnMut(&[u8])) {
    let mut buffer = Vec::new();
    let mut text = String::new();
    for row in 0..n_rows {
        match values {
            Values::Text(t) => {
                text.clear();
                t.push(row, &mut text);
                take(text.trim().as_bytes());
            }
            Values::Int(s) => take(
                s.at(row)
                    .map_or_else(String::new, |v| v.to_string())
                    .as_bytes(),
            ),
            Values::Bool(s) => take(
                s.at(row)
                    .map_or_else(String::new, |v| v.to_string())
                    .as_bytes(),
            ),
            Values::Float(s, _) => {
                buffer.clear();
                push_float(&mut buffer, s.at(row), Precision::Full);
                take(&buffer);
            }
        }
    }
}
