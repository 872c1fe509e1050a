//! `run.json`: what a result was made from and how. Times stand only here, so that the tables
//! of two runs can be compared byte for byte.

use std::collections::BTreeMap;
use std::fs::File;
use std::io::{self, Read};
use std::path::{Component, Path, PathBuf};

use rayon::prelude::*;
use serde::{Deserialize, Serialize};
use sha2::{Digest, Sha256};

use crate::model::campaign::{Campaign, ListSource};
use crate::model::detection::FieldEpoch;
use crate::model::note::Note;

/// Name of the file.
pub const FILE: &str = "run.json";

/// Everything `run.json` says.
#[derive(Clone, Debug, Deserialize, PartialEq, Serialize)]
pub struct RunInfo {
    pub program: String,
    pub version: String,
    pub campaign_name: String,
    /// The campaign file, relative to the result directory.
    pub campaign: String,
    /// Every file the result depends on, the campaign file first.
    pub inputs: Vec<Input>,
    pub settings: serde_json::Value,
    pub counts: BTreeMap<String, u64>,
    pub notes: Vec<SavedNote>,
    /// Where each epoch could show a star.
    pub regions: Vec<SavedRegion>,
    pub timing: Timing,
}

/// One input file.
#[derive(Clone, Debug, Deserialize, PartialEq, Serialize)]
pub struct Input {
    /// `campaign`, `list`, `mask`, `known_stars`, `velocities`, `rulings`, `names_from`.
    pub role: String,
    /// Relative to the folder of the campaign file.
    pub path: String,
    pub sha256: String,
}

/// A [`Note`] as read back.
#[derive(Clone, Debug, Deserialize, PartialEq, Serialize)]
pub struct SavedNote {
    pub what: String,
    pub place: String,
    pub text: String,
}

impl From<&Note> for SavedNote {
    fn from(n: &Note) -> Self {
        Self {
            what: n.what.to_owned(),
            place: n.place.clone(),
            text: n.text.clone(),
        }
    }
}

/// Outline and holes of an epoch in the common frame \[mas\].
#[derive(Clone, Debug, Default, Deserialize, PartialEq, Serialize)]
pub struct SavedRegion {
    pub outline_mas: Vec<[f64; 2]>,
    pub holes_mas: Vec<[f64; 3]>,
}

impl SavedRegion {
    /// The regions of all epochs.
    #[must_use]
    pub fn of(epochs: &[FieldEpoch]) -> Vec<Self> {
        epochs
            .iter()
            .map(|e| Self {
                outline_mas: e.region.outline_mas.clone(),
                holes_mas: e.region.holes_mas.clone(),
            })
            .collect()
    }
}

/// How long it took, and with how many threads.
#[derive(Clone, Debug, Default, Deserialize, PartialEq, Serialize)]
pub struct Timing {
    pub threads: usize,
    pub stages: Vec<StageTime>,
}

#[derive(Clone, Debug, Deserialize, PartialEq, Serialize)]
pub struct StageTime {
    pub stage: String,
    pub seconds: f64,
}

/// Every file a campaign reads, with its role; the campaign file first, none twice.
#[must_use]
pub fn input_files(campaign: &Campaign) -> Vec<(&'static str, PathBuf)> {
    let mut files = vec![("campaign", campaign.path.clone())];
    let mut add = |role, path: &Path| {
        if !files.iter().any(|(_, p)| p == path) {
            files.push((role, path.to_owned()));
        }
    };
    if let Some(all) = &campaign.lists {
        add("list", &all.file);
    }
    for epoch in &campaign.epochs {
        if let ListSource::File(path) = &epoch.source {
            add("list", path);
        }
        if let Some(mask) = &epoch.mask {
            add("mask", mask);
        }
    }
    if let Some(known) = &campaign.known_stars {
        add("known_stars", &known.file);
    }
    if let Some(velocities) = &campaign.velocities {
        add("velocities", &velocities.file);
    }
    files
}

/// Digests of files, in the same order; several are read at a time.
///
/// # Errors
/// The first file that cannot be read, with the reason.
pub fn digest_all(
    files: &[(&'static str, PathBuf)],
    folder: &Path,
) -> Result<Vec<Input>, (PathBuf, io::Error)> {
    files
        .par_iter()
        .map(|(role, path)| {
            Ok(Input {
                role: (*role).to_owned(),
                path: relative(folder, path),
                sha256: sha256(path).map_err(|e| (path.clone(), e))?,
            })
        })
        .collect()
}

/// SHA-256 of a file as hexadecimal digits.
///
/// # Errors
/// The file cannot be read.
pub fn sha256(path: &Path) -> io::Result<String> {
    let mut file = File::open(path)?;
    let mut digest = Sha256::new();
    let mut buffer = vec![0; 1 << 16];
    loop {
        let n = file.read(&mut buffer)?;
        if n == 0 {
            break;
        }
        digest.update(&buffer[..n]);
    }
    Ok(digest
        .finalize()
        .iter()
        .map(|b| format!("{b:02x}"))
        .collect())
}

/// `path` as seen from `folder`, with `/` between names. Both may be relative to the working
/// directory; where no relative path exists (another drive), the path itself.
#[must_use]
pub fn relative(folder: &Path, path: &Path) -> String {
    let (Ok(from), Ok(to)) = (resolved(folder), resolved(path)) else {
        return path.display().to_string();
    };
    let (from, to): (Vec<Component<'_>>, Vec<Component<'_>>) =
        (from.components().collect(), to.components().collect());
    let shared = from.iter().zip(&to).take_while(|(a, b)| a == b).count();
    if shared == 0 {
        return path.display().to_string();
    }
    let up = std::iter::repeat_n("..".to_owned(), from.len() - shared);
    let down = to[shared..]
        .iter()
        .map(|c| c.as_os_str().to_string_lossy().into_owned());
    let parts: Vec<String> = up.chain(down).collect();
    parts.join("/")
}

/// Absolute and without links, as far as the path exists.
fn resolved(path: &Path) -> io::Result<PathBuf> {
    let path = std::path::absolute(path)?;
    if let Ok(real) = path.canonicalize() {
        return Ok(real);
    }
    match (path.parent(), path.file_name()) {
        (Some(parent), Some(name)) => Ok(resolved(parent)?.join(name)),
        _ => Ok(path),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn digest_of_the_standard_example() {
        // FIPS 180-4 example: the message "abc".
        let dir = tempfile::tempdir().unwrap();
        let path = dir.path().join("abc");
        std::fs::write(&path, "abc").unwrap();
        assert_eq!(
            sha256(&path).unwrap(),
            "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"
        );
    }

    #[test]
    fn paths_seen_from_elsewhere() {
        let dir = tempfile::tempdir().unwrap();
        let (a, b) = (dir.path().join("a"), dir.path().join("b"));
        std::fs::create_dir_all(a.join("lists")).unwrap();
        std::fs::create_dir(&b).unwrap();
        assert_eq!(relative(&a, &a.join("lists/e0.csv")), "lists/e0.csv");
        std::fs::write(a.join("c.toml"), "").unwrap();
        assert_eq!(relative(&b, &a.join("c.toml")), "../a/c.toml");
    }
}
