//! A result directory back into typed data, with the lists it was made from.
//!
//! The lists are found through `run.json` and must be the ones that were linked: a file whose
//! digest differs is refused by name. Positions in the common frame come from the tables (all
//! detections stand there), so nothing is fitted again.

mod rebuild;

use std::fmt;
use std::path::{Path, PathBuf};

use super::campaign::read_campaign;
use super::ecsv_read::{self, EcsvError};
use super::fault::Faults;
use super::lists::read_lists;
use super::run_info::{self, RunInfo};
use super::table::{ColumnError, Table};
use crate::model::campaign::Campaign;
use crate::model::detection::{FieldEpoch, RawList};
use crate::model::result::Solution;

pub use rebuild::{Tables, rebuild};

/// A result and all it rests on.
#[derive(Clone, Debug)]
pub struct Run {
    pub folder: PathBuf,
    pub info: RunInfo,
    pub campaign: Campaign,
    pub lists: Vec<RawList>,
    /// In the final frame; errors as stated.
    pub epochs: Vec<FieldEpoch>,
    /// Without notes: those stand in `info`.
    pub solution: Solution,
}

/// Why a result cannot be used.
#[derive(Debug, thiserror::Error)]
pub enum RunError {
    #[error("{}: no `run.json`; a directory written by `asterskein link` was expected", .0.display())]
    NotARun(PathBuf),
    #[error("cannot read {}: {reason}", path.display())]
    Unreadable { path: PathBuf, reason: String },
    #[error("{}: {reason}; the result must be linked again", path.display())]
    BadTable { path: PathBuf, reason: String },
    #[error("{}", changed(.0))]
    Changed(Vec<ChangedInput>),
    #[error("{0}")]
    Faults(Faults),
}

/// An input that is no longer what it was.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct ChangedInput {
    pub path: PathBuf,
    pub missing: bool,
}

fn changed(inputs: &[ChangedInput]) -> String {
    const SHOWN: usize = 10;
    let mut text = String::from("the result does not fit its inputs any more; link again");
    for i in inputs.iter().take(SHOWN) {
        let what = if i.missing {
            "is missing"
        } else {
            "has changed"
        };
        text.push_str(&format!("\n  {} {what}", i.path.display()));
    }
    if inputs.len() > SHOWN {
        text.push_str(&format!("\n  and {} more", inputs.len() - SHOWN));
    }
    text
}

/// Reads a result directory.
///
/// # Errors
/// Not a result, an unreadable or foreign table, or inputs that have changed since.
pub fn read_run(folder: &Path) -> Result<Run, RunError> {
    let info = read_info(folder)?;
    check_inputs(folder, &info)?;
    let path = campaign_path(folder, &info);
    let (campaign, _) = read_campaign(&path).map_err(RunError::Faults)?;
    let (lists, _) = read_lists(&campaign).map_err(RunError::Faults)?;
    let read = |name| read_table(folder, name);
    let tables = Tables {
        tracks: read("tracks")?,
        members: read("members")?,
        leftovers: read("leftovers")?,
        epochs: read("epochs")?,
        tangles: read("tangles")?,
        rivals: read("rivals")?,
        orbits: campaign
            .central
            .is_some()
            .then(|| read("orbits"))
            .transpose()?,
    };
    let (epochs, solution) =
        rebuild(&campaign, &lists, &info.regions, &tables).map_err(|e| RunError::BadTable {
            path: folder.join(format!("{}.ecsv", e.table)),
            reason: e.reason,
        })?;
    Ok(Run {
        folder: folder.to_owned(),
        info,
        campaign,
        lists,
        epochs,
        solution,
    })
}

/// Reads `run.json` alone.
///
/// # Errors
/// Not a result, or written in another form.
pub fn read_info(folder: &Path) -> Result<RunInfo, RunError> {
    let path = folder.join(run_info::FILE);
    let text = match std::fs::read_to_string(&path) {
        Ok(text) => text,
        Err(e) if e.kind() == std::io::ErrorKind::NotFound => {
            return Err(RunError::NotARun(folder.to_owned()));
        }
        Err(e) => {
            return Err(RunError::Unreadable {
                path,
                reason: e.to_string(),
            });
        }
    };
    serde_json::from_str(&text).map_err(|e| RunError::BadTable {
        path,
        reason: e.to_string(),
    })
}

/// Where the campaign of a result lies.
#[must_use]
pub fn campaign_path(folder: &Path, info: &RunInfo) -> PathBuf {
    folder.join(&info.campaign)
}

/// One table of a result.
///
/// # Errors
/// The file is missing or malformed.
pub fn read_table(folder: &Path, name: &str) -> Result<Table<'static>, RunError> {
    let path = folder.join(format!("{name}.ecsv"));
    let bytes = std::fs::read(&path).map_err(|e| RunError::Unreadable {
        path: path.clone(),
        reason: e.to_string(),
    })?;
    ecsv_read::read(&bytes).map_err(|e: EcsvError| RunError::BadTable {
        path,
        reason: e.to_string(),
    })
}

/// Are the inputs still the ones that were linked?
fn check_inputs(folder: &Path, info: &RunInfo) -> Result<(), RunError> {
    let campaign = campaign_path(folder, info);
    let base = campaign.parent().unwrap_or(Path::new("."));
    let bad: Vec<ChangedInput> = info
        .inputs
        .iter()
        // Rulings and old names shaped the result but are not read again.
        .filter(|i| !matches!(i.role.as_str(), "rulings" | "names_from"))
        .filter_map(|i| {
            let path = if i.role == "campaign" {
                campaign.clone()
            } else {
                base.join(&i.path)
            };
            match run_info::sha256(&path) {
                Ok(digest) if digest == i.sha256 => None,
                Ok(_) => Some(ChangedInput {
                    path,
                    missing: false,
                }),
                Err(_) => Some(ChangedInput {
                    path,
                    missing: true,
                }),
            }
        })
        .collect();
    if bad.is_empty() {
        Ok(())
    } else {
        Err(RunError::Changed(bad))
    }
}

/// A table whose content does not fit the campaign.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Misfit {
    pub table: String,
    pub reason: String,
}

impl fmt::Display for Misfit {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "table `{}`: {}", self.table, self.reason)
    }
}

impl From<ColumnError> for Misfit {
    fn from(e: ColumnError) -> Self {
        let table = match &e {
            ColumnError::Missing { table, .. } | ColumnError::Kind { table, .. } => table.clone(),
        };
        Self {
            table,
            reason: e.to_string(),
        }
    }
}
