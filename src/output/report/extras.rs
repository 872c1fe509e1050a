//! Tables of an audit or a recovery that lie beside a result.

use std::path::Path;

use super::ExtraTable;
use crate::io::number_text::{push_float, push_int};
use crate::io::read_run::{RunError, read_table};
use crate::io::table::{Table, Values};

/// Tables of an audit.
pub const AUDIT: &[&str] = &["verdicts", "evidence"];
/// Tables of a recovery.
pub const RECOVERY: &[&str] = &["completeness", "injected"];

/// Reads those of the named tables that are in a folder.
///
/// # Errors
/// A table that is there and cannot be read.
pub fn read_extras(folder: &Path, names: &[&str]) -> Result<Vec<ExtraTable>, RunError> {
    names
        .iter()
        .filter(|name| folder.join(format!("{name}.ecsv")).is_file())
        .map(|name| Ok(words(name, &read_table(folder, name)?)))
        .collect()
}

/// The words of a table as its file has them.
fn words(name: &str, table: &Table<'_>) -> ExtraTable {
    ExtraTable {
        name: name.to_owned(),
        columns: table.columns.iter().map(|c| c.name.clone()).collect(),
        rows: (0..table.n_rows())
            .map(|row| table.columns.iter().map(|c| cell(&c.values, row)).collect())
            .collect(),
    }
}

fn cell(values: &Values<'_>, row: usize) -> String {
    let mut out = Vec::new();
    match values {
        Values::Float(s, precision) => push_float(&mut out, s.at(row), *precision),
        Values::Int(s) => {
            if let Some(v) = s.at(row) {
                push_int(&mut out, v);
            }
        }
        Values::Bool(s) => return s.at(row).map_or_else(String::new, |b| b.to_string()),
        Values::Text(t) => return t.at(row),
    }
    String::from_utf8_lossy(&out).into_owned()
}
