//! Whole campaigns through the engine, against what is known of them.

mod planets;
mod sky;

use std::collections::BTreeMap;
use std::path::{Path, PathBuf};

use asterskein::engine::{Linked, Settings, Silent, link_lists};
use asterskein::io::{campaign::read_campaign, lists::read_lists};

fn fixture(name: &str) -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR"))
        .join("fixtures")
        .join(name)
}

/// A linked campaign with the ids of its detections.
struct Field {
    linked: Linked,
    /// By epoch and row.
    ids: Vec<Vec<String>>,
    /// Each track's members by epoch.
    members: Vec<BTreeMap<usize, String>>,
}

fn link(folder: &Path) -> Field {
    let (campaign, _) =
        read_campaign(&folder.join("campaign.toml")).unwrap_or_else(|f| panic!("{f}"));
    let (lists, _) = read_lists(&campaign).unwrap_or_else(|f| panic!("{f}"));
    let linked = link_lists(&campaign, &lists, &Settings::default(), &Silent).unwrap();
    let ids: Vec<Vec<String>> = lists
        .iter()
        .map(|l| (0..l.len()).map(|k| l.ids.text(k).to_string()).collect())
        .collect();
    let mut members = vec![BTreeMap::new(); linked.solution.tracks.len()];
    for m in &linked.solution.members {
        members[m.track].insert(m.epoch, ids[m.epoch][m.row].clone());
    }
    Field {
        linked,
        ids,
        members,
    }
}

/// Rows of a small table, without its header.
fn rows(path: &Path) -> Vec<Vec<String>> {
    let text = std::fs::read_to_string(path).unwrap();
    text.lines()
        .skip(1)
        .map(|line| line.split(',').map(str::to_owned).collect())
        .collect()
}
