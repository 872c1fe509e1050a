//! Where commands that judge a result put theirs: beside it, unless told otherwise.

use std::fs;
use std::path::{Path, PathBuf};

use anyhow::Context;

use super::super::exit::UsageError;

/// The directory asked for, or the run's own with `ending` added to its name: `run1` to
/// `run1-audit`.
///
/// # Errors
/// When the run cannot be found, or has no name to add to.
pub fn directory(asked: Option<&Path>, run: &Path, ending: &str) -> anyhow::Result<PathBuf> {
    if let Some(dir) = asked {
        return Ok(dir.to_owned());
    }
    let full = fs::canonicalize(run).with_context(|| format!("cannot read {}", run.display()))?;
    if full.file_name().is_none() {
        return Err(
            UsageError("no name beside this directory; give one with --out".to_owned()).into(),
        );
    }
    Ok(sibling(&full, ending))
}

/// The path with an ending added to its last name.
pub fn sibling(path: &Path, ending: &str) -> PathBuf {
    let mut name = path.file_name().unwrap_or_default().to_owned();
    name.push(ending);
    path.with_file_name(name)
}
