//! A result into its directory: every table, then `run.json`.

use std::path::PathBuf;

use super::ecsv_write;
use super::format::Format;
use super::result_tables::{self, RunView};
use super::run_dir::{OutputError, RunDir};
use super::run_info::{self, Input, RunInfo, SavedNote, SavedRegion, Timing};
use super::table::Table;
use crate::model::campaign::Campaign;
use crate::model::note::Note;

/// What `run.json` needs beside the result itself.
#[derive(Debug)]
pub struct RunRecord {
    pub inputs: Vec<Input>,
    pub settings: serde_json::Value,
    pub notes: Vec<Note>,
    /// The highest number ever given to a track, so that none is given twice.
    pub last_number: u64,
    pub timing: Timing,
}

/// Writes every table of a result as ECSV, and again in each further format.
///
/// # Errors
/// A file cannot be written.
pub fn write_tables(
    dir: &RunDir<'_>,
    view: RunView<'_>,
    further: &[Format],
) -> Result<(), OutputError> {
    for table in result_tables::all(view) {
        write_table(dir, &table, further)?;
    }
    Ok(())
}

/// Writes one table under its own name as ECSV, which commands on a result read, and again in
/// each further format.
///
/// # Errors
/// A file cannot be written.
pub fn write_table(
    dir: &RunDir<'_>,
    table: &Table<'_>,
    further: &[Format],
) -> Result<(), OutputError> {
    for format in further.iter().filter(|f| **f != Format::Ecsv) {
        let name = format!("{}.{}", table.name, format.extension());
        dir.write(&name, |out| format.write(table, out))?;
    }
    dir.write(&format!("{}.ecsv", table.name), |out| {
        ecsv_write::write(table, out)
    })
}

/// Writes `run.json`, the mark of a complete result.
///
/// # Errors
/// The file cannot be written.
pub fn write_info(
    dir: &RunDir<'_>,
    view: RunView<'_>,
    record: RunRecord,
) -> Result<(), OutputError> {
    let s = view.solution;
    let merged = s.members.iter().filter(|m| m.share < 1.0).count();
    let counts = [
        ("detections", view.epochs.iter().map(|e| e.len()).sum()),
        ("epochs", view.epochs.len()),
        ("tracks", s.tracks.len()),
        ("memberships", s.members.len()),
        ("merged_memberships", merged),
        ("leftovers", s.leftovers.len()),
        ("tangles", s.tangles.len()),
        ("rivals", s.rivals.len()),
    ];
    let counts = counts.map(|(k, n)| (k, n as u64));
    let info = RunInfo {
        program: env!("CARGO_PKG_NAME").to_owned(),
        version: env!("CARGO_PKG_VERSION").to_owned(),
        campaign_name: view.campaign.name.clone(),
        campaign: run_info::relative(dir.target(), &view.campaign.path),
        inputs: record.inputs,
        settings: record.settings,
        counts: counts
            .into_iter()
            .chain([("last_number", record.last_number)])
            .map(|(k, n)| (k.to_owned(), n))
            .collect(),
        notes: record.notes.iter().map(SavedNote::from).collect(),
        regions: SavedRegion::of(view.epochs),
        timing: record.timing,
    };
    dir.write(run_info::FILE, |out| {
        serde_json::to_writer_pretty(&mut *out, &info)?;
        out.write_all(b"\n")
    })
}

/// Digests of every input of a campaign and of further files, in that order.
///
/// # Errors
/// A file cannot be read.
pub fn inputs_of(
    campaign: &Campaign,
    further: &[(&'static str, PathBuf)],
) -> Result<Vec<Input>, OutputError> {
    let mut files = run_info::input_files(campaign);
    files.extend_from_slice(further);
    let folder = campaign
        .path
        .parent()
        .map(PathBuf::from)
        .unwrap_or_default();
    run_info::digest_all(&files, &folder).map_err(|(path, source)| OutputError::Io {
        what: "read",
        path,
        source,
    })
}
