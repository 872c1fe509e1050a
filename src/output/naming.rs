//! Names that last: tracks of a new run take over the names of an earlier one.
//!
//! Stars are recognised by the detections they share, each weighted by its flux shares, so a
//! merged detection speaks for several stars but for none alone. A detection is found again by
//! its identifier when its list is unchanged, else (a list reduced anew) as the mutual nearest
//! neighbour of its place. Pairs of old and new tracks are taken greedily, most shared first; a
//! name goes over only where at least half of what the smaller of the two holds in common
//! epochs is shared. Numbers only ever grow, so a name that was given up is never given to
//! another star.
//!
//! Fails when most lists of a star were reduced anew and its neighbours lie closer than the
//! tolerance: then the name ends as `lost` and the star is `new`, never someone else's.

use std::collections::BTreeMap;
use std::path::Path;

use crate::io::read_run::{self, RunError};
use crate::io::result_tables::RunView;
use crate::io::run_info::Input;
use crate::io::table::Table;
use crate::model::campaign::ListSource;
use crate::model::change::Change;
use crate::model::result::Solution;
use crate::model::ruling::{Decision, Ruling};
use crate::near::Tree;

/// A detection of a list reduced anew lies within this part of the fwhm of its old place.
const SAME_PLACE_FWHM: f64 = 0.25;
/// Least part of the smaller track that must be shared for a name to go over.
const LEAST_SHARED: f64 = 0.5;

/// What became of a name.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub enum What {
    /// The star kept its name.
    Kept,
    /// A star without a predecessor.
    New,
    /// A part of an old track whose name went to another part.
    Split,
    /// An old track that went up in one that bears another name.
    Joined,
    /// An old track that no new one continues.
    Lost,
}

impl What {
    /// The word used in the table.
    #[must_use]
    pub fn word(self) -> &'static str {
        match self {
            Self::Kept => "kept",
            Self::New => "new",
            Self::Split => "split",
            Self::Joined => "joined",
            Self::Lost => "lost",
        }
    }
}

/// One line of `renamed`.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Renamed {
    /// Empty for a lost name.
    pub track: String,
    /// Empty for a new star.
    pub old_track: String,
    pub what: What,
    /// Detections of both.
    pub n_shared: usize,
}

/// The names of an earlier run and the detections that carry them.
#[derive(Debug, Default)]
pub struct OldNames {
    tracks: Vec<String>,
    epochs: Vec<OldEpoch>,
    inputs: Vec<Input>,
    /// The highest number ever given.
    pub last_number: u64,
}

#[derive(Debug)]
struct OldEpoch {
    name: String,
    time_yr: f64,
    ids: Vec<String>,
    x_mas: Vec<f64>,
    y_mas: Vec<f64>,
    /// Tracks that hold the detection, with their shares.
    held: Vec<Vec<(usize, f64)>>,
}

/// Reads the names of an earlier result; its lists may have changed or gone since.
///
/// # Errors
/// Not a result, or a table that cannot be read.
pub fn read_old(folder: &Path) -> Result<OldNames, RunError> {
    let info = read_run::read_info(folder)?;
    let [tracks, members, epochs] = [
        read_run::read_table(folder, "tracks")?,
        read_run::read_table(folder, "members")?,
        read_run::read_table(folder, "epochs")?,
    ];
    let bad = |name: &str, reason: String| RunError::BadTable {
        path: folder.join(format!("{name}.ecsv")),
        reason,
    };
    let names = tracks
        .texts("track")
        .map_err(|e| bad("tracks", e.to_string()))?;
    let mut old = OldNames {
        last_number: info
            .counts
            .get("last_number")
            .copied()
            .unwrap_or(0)
            .max(names.iter().filter_map(|n| number_of(n)).max().unwrap_or(0)),
        tracks: names,
        epochs: Vec::new(),
        inputs: info.inputs,
    };
    old.read_epochs(&epochs)
        .map_err(|reason| bad("epochs", reason))?;
    old.read_members(&members)
        .map_err(|reason| bad("members", reason))?;
    Ok(old)
}

impl OldNames {
    fn read_epochs(&mut self, table: &Table<'_>) -> Result<(), String> {
        let names = table.texts("epoch_name").map_err(|e| e.to_string())?;
        let times = table.floats("time_yr").map_err(|e| e.to_string())?;
        self.epochs = names
            .into_iter()
            .zip(times)
            .map(|(name, time_yr)| OldEpoch {
                name,
                time_yr,
                ids: Vec::new(),
                x_mas: Vec::new(),
                y_mas: Vec::new(),
                held: Vec::new(),
            })
            .collect();
        Ok(())
    }

    fn read_members(&mut self, table: &Table<'_>) -> Result<(), String> {
        let text = |name| table.texts(name).map_err(|e| e.to_string());
        let number = |name| table.floats(name).map_err(|e| e.to_string());
        let (tracks, ids) = (text("track")?, text("id")?);
        let epochs = table.ints("epoch").map_err(|e| e.to_string())?;
        let [x, y, share] = [number("x_mas")?, number("y_mas")?, number("share")?];
        let by_name: BTreeMap<&str, usize> = self
            .tracks
            .iter()
            .enumerate()
            .map(|(k, n)| (n.as_str(), k))
            .collect();
        // A merged detection has a row per track; they meet in one entry.
        let mut entry: BTreeMap<(usize, &str), usize> = BTreeMap::new();
        for k in 0..tracks.len() {
            let track = *by_name
                .get(tracks[k].as_str())
                .ok_or_else(|| format!("track `{}` is not in the table of tracks", tracks[k]))?;
            let e = epochs[k]
                .and_then(|e| usize::try_from(e).ok())
                .filter(|&e| e < self.epochs.len())
                .ok_or_else(|| format!("row {}: no such epoch", k + 1))?;
            let epoch = &mut self.epochs[e];
            let at = *entry.entry((e, ids[k].as_str())).or_insert_with(|| {
                epoch.ids.push(ids[k].clone());
                epoch.x_mas.push(x[k]);
                epoch.y_mas.push(y[k]);
                epoch.held.push(Vec::new());
                epoch.ids.len() - 1
            });
            epoch.held[at].push((track, share[k]));
        }
        Ok(())
    }
}

/// The number in a name of ours (`L00042`).
fn number_of(name: &str) -> Option<u64> {
    let digits = name.strip_prefix('L')?;
    (digits.len() >= 5 && digits.bytes().all(|b| b.is_ascii_digit()))
        .then(|| digits.parse().ok())
        .flatten()
}

/// A name of ours.
#[must_use]
pub fn numbered(number: u64) -> String {
    format!("L{number:05}")
}

/// New names, what became of the old ones, and the highest number in use.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Renaming {
    /// One per track of the new run.
    pub names: Vec<String>,
    /// In the order of the new tracks, then the names that ended.
    pub rows: Vec<Renamed>,
    pub last_number: u64,
}

/// How much an old and a new track have in common.
#[derive(Clone, Copy, Debug, Default)]
struct Shared {
    weight: f64,
    count: usize,
}

/// What two runs have in common.
struct Common {
    /// By (old, new) track.
    shared: BTreeMap<(usize, usize), Shared>,
    /// The weights again, by (new, old) track.
    by_new: BTreeMap<(usize, usize), f64>,
    /// What each track holds of the detections that both runs have.
    held_old: Vec<f64>,
    held_new: Vec<f64>,
}

/// Gives the tracks of a run the names of an earlier one. `fixed` names (rulings, known stars)
/// stay as they are; the old name then counts as kept under the fixed one.
#[must_use]
pub fn rename(
    view: RunView<'_>,
    inputs: &[Input],
    old: &OldNames,
    fixed: &[Option<String>],
) -> Renaming {
    let n_new = view.solution.tracks.len();
    let mut shared: BTreeMap<(usize, usize), Shared> = BTreeMap::new();
    let mut held_old = vec![0.0; old.tracks.len()];
    let mut held_new = vec![0.0; n_new];
    let holders = holders(view);
    for (e, holders) in holders.iter().enumerate() {
        let Some(before) = old_epoch(view, e, old) else {
            continue;
        };
        for (k, row) in same_detections(view, inputs, e, before, old)
            .into_iter()
            .enumerate()
        {
            let Some(row) = row else { continue };
            for &(o, share) in &before.held[k] {
                held_old[o] += share * share;
            }
            for &(n, share) in &holders[row] {
                held_new[n] += share * share;
                for &(o, old_share) in &before.held[k] {
                    let s = shared.entry((o, n)).or_default();
                    s.weight += share * old_share;
                    s.count += 1;
                }
            }
        }
    }
    let common = Common {
        by_new: shared
            .iter()
            .map(|(&(o, n), s)| ((n, o), s.weight))
            .collect(),
        shared,
        held_old,
        held_new,
    };
    name_all(old, fixed, &common)
}

/// Tracks of every detection of every epoch, with shares.
fn holders(view: RunView<'_>) -> Vec<Vec<Vec<(usize, f64)>>> {
    let mut all: Vec<Vec<Vec<(usize, f64)>>> = view
        .epochs
        .iter()
        .map(|e| vec![Vec::new(); e.len()])
        .collect();
    for m in &view.solution.members {
        all[m.epoch][m.row].push((m.track, m.share));
    }
    all
}

/// The same epoch in the old run: by name, else by time.
fn old_epoch<'a>(view: RunView<'_>, e: usize, old: &'a OldNames) -> Option<&'a OldEpoch> {
    /// Times closer than this are the same exposure \[yr\].
    const SAME_TIME_YR: f64 = 2e-6;
    let new = &view.campaign.epochs[e];
    old.epochs
        .iter()
        .find(|o| o.name == new.name && (o.time_yr - new.time.yr()).abs() < 0.01)
        .or_else(|| {
            let mut at_time = old
                .epochs
                .iter()
                .filter(|o| (o.time_yr - new.time.yr()).abs() < SAME_TIME_YR);
            at_time.next().filter(|_| at_time.next().is_none())
        })
}

/// For every old detection its row in the new list.
fn same_detections(
    view: RunView<'_>,
    inputs: &[Input],
    e: usize,
    before: &OldEpoch,
    old: &OldNames,
) -> Vec<Option<usize>> {
    let list = &view.lists[e];
    if list_unchanged(view, inputs, e, old) {
        let rows: BTreeMap<String, usize> =
            (0..list.len()).map(|r| (list.ids.text(r), r)).collect();
        return before.ids.iter().map(|id| rows.get(id).copied()).collect();
    }
    let now = &view.epochs[e];
    let reach_mas = SAME_PLACE_FWHM * now.fwhm_mas;
    let here = Tree::build(&now.x_mas, &now.y_mas);
    let there = Tree::build(&before.x_mas, &before.y_mas);
    let mut hits = Vec::new();
    let mut nearest = |tree: &Tree, x: f64, y: f64| {
        tree.nearest_n(x, y, 1, &mut hits);
        hits.first().map(|h| h.row as usize)
    };
    (0..before.ids.len())
        .map(|k| {
            let row = nearest(&here, before.x_mas[k], before.y_mas[k])?;
            let back = nearest(&there, now.x_mas[row], now.y_mas[row])?;
            let distance =
                (now.x_mas[row] - before.x_mas[k]).hypot(now.y_mas[row] - before.y_mas[k]);
            (back == k && distance <= reach_mas).then_some(row)
        })
        .collect()
}

/// Is the list of an epoch byte for byte one that the old run read?
fn list_unchanged(view: RunView<'_>, inputs: &[Input], e: usize, old: &OldNames) -> bool {
    let file = match (&view.campaign.epochs[e].source, &view.campaign.lists) {
        (ListSource::File(path), _) => path,
        (ListSource::Key(_), Some(all)) => &all.file,
        (ListSource::Key(_), None) => return false,
    };
    let folder = view.campaign.path.parent().unwrap_or(Path::new(""));
    let path = crate::io::run_info::relative(folder, file);
    inputs
        .iter()
        .find(|i| i.role == "list" && i.path == path)
        .is_some_and(|now| {
            old.inputs
                .iter()
                .any(|o| o.role == "list" && o.sha256 == now.sha256)
        })
}

impl Common {
    /// Greedy pairs of old and new tracks: `(new of each old, old of each new)`.
    fn pair_up(&self) -> (Vec<Option<usize>>, Vec<Option<usize>>) {
        let mut pairs: Vec<((usize, usize), f64)> = self
            .shared
            .iter()
            .map(|(&pair, s)| (pair, s.weight))
            .collect();
        // Ties go to the lower old, then the lower new index: the sort is stable.
        pairs.sort_by(|a, b| b.1.total_cmp(&a.1));
        let mut to_new = vec![None; self.held_old.len()];
        let mut to_old = vec![None; self.held_new.len()];
        for ((o, n), weight) in pairs {
            let enough = weight >= LEAST_SHARED * self.held_old[o].min(self.held_new[n]);
            if to_new[o].is_none() && to_old[n].is_none() && enough {
                to_new[o] = Some(n);
                to_old[n] = Some(o);
            }
        }
        (to_new, to_old)
    }

    /// The old track that a nameless new one is mostly a part of.
    fn parent(&self, n: usize) -> Option<usize> {
        let partners = self.by_new.range((n, 0)..(n + 1, 0));
        best(partners.map(|(&(_, o), &weight)| (o, weight)))
            .filter(|(_, weight)| *weight >= LEAST_SHARED * self.held_new[n])
            .map(|(o, _)| o)
    }

    /// The new track that holds most of an old one.
    fn heir(&self, o: usize) -> Option<usize> {
        let partners = self.shared.range((o, 0)..(o + 1, 0));
        best(partners.map(|(&(_, n), s)| (n, s.weight)))
            .filter(|(_, weight)| *weight >= LEAST_SHARED * self.held_old[o])
            .map(|(n, _)| n)
    }

    fn count(&self, o: usize, n: usize) -> usize {
        self.shared.get(&(o, n)).map_or(0, |s| s.count)
    }
}

/// The partner that shares most, the first of equals.
fn best(partners: impl Iterator<Item = (usize, f64)>) -> Option<(usize, f64)> {
    partners.fold(None, |best, (k, weight)| match best {
        Some((_, b)) if weight <= b => best,
        _ => Some((k, weight)),
    })
}

fn name_all(old: &OldNames, fixed: &[Option<String>], common: &Common) -> Renaming {
    let (to_new, to_old) = common.pair_up();
    let is_fixed = |name: &str| fixed.iter().flatten().any(|f| f == name);
    let mut last_number = old.last_number;
    let mut names = Vec::new();
    for (n, o) in to_old.iter().enumerate() {
        let kept = o
            .map(|o| old.tracks[o].clone())
            .filter(|name| !is_fixed(name));
        let fixed_name = fixed.get(n).cloned().flatten();
        names.push(
            fixed_name
                .or(kept)
                .unwrap_or_else(|| next_number(&mut last_number, is_fixed)),
        );
    }
    let of_new = (0..to_old.len()).map(|n| {
        let part = || common.parent(n).map(|o| (o, What::Split));
        match to_old[n].map(|o| (o, What::Kept)).or_else(part) {
            Some((o, what)) => Renamed {
                track: names[n].clone(),
                old_track: old.tracks[o].clone(),
                what,
                n_shared: common.count(o, n),
            },
            None => Renamed {
                track: names[n].clone(),
                old_track: String::new(),
                what: What::New,
                n_shared: 0,
            },
        }
    });
    let ended = (0..to_new.len()).filter(|&o| to_new[o].is_none());
    let of_ended = ended.map(|o| match common.heir(o) {
        Some(n) => Renamed {
            track: names[n].clone(),
            old_track: old.tracks[o].clone(),
            what: What::Joined,
            n_shared: common.count(o, n),
        },
        None => Renamed {
            track: String::new(),
            old_track: old.tracks[o].clone(),
            what: What::Lost,
            n_shared: 0,
        },
    });
    let rows = of_new.chain(of_ended).collect();
    Renaming {
        names,
        rows,
        last_number,
    }
}

/// The next name of ours that is not taken.
fn next_number(last: &mut u64, taken: impl Fn(&str) -> bool) -> String {
    loop {
        *last += 1;
        let name = numbered(*last);
        if !taken(&name) {
            return name;
        }
    }
}

/// Names that rulings give, by track.
#[must_use]
pub fn ruled_names(solution: &Solution, rulings: &[Ruling]) -> Vec<Option<String>> {
    let mut names = vec![None; solution.tracks.len()];
    for ruling in rulings {
        let Decision::Name(at, name) = &ruling.decision else {
            continue;
        };
        // A merged detection names the star that gives most of its light.
        let holder = solution
            .members
            .iter()
            .filter(|m| (m.epoch, m.row) == (at.epoch, at.row))
            .max_by(|a, b| a.share.total_cmp(&b.share).then(b.track.cmp(&a.track)));
        if let Some(m) = holder {
            names[m.track] = Some(name.clone());
        }
    }
    names
}

/// Puts new names into a solution: its tracks, and the wording of its rivals.
pub fn apply(solution: &mut Solution, names: &[String]) {
    let new_of: BTreeMap<String, String> = solution
        .tracks
        .iter()
        .zip(names)
        .map(|(t, n)| (t.name.clone(), n.clone()))
        .collect();
    let renamed = |name: &mut String| {
        if let Some(new) = new_of.get(name) {
            name.clone_from(new);
        }
    };
    for rival in &mut solution.rivals {
        let clauses: Vec<String> = rival
            .change
            .split("; ")
            .map(|clause| {
                let Some(mut change) = Change::read(clause) else {
                    return clause.to_owned();
                };
                match &mut change {
                    Change::Takes { track, from, .. } => {
                        renamed(track);
                        from.iter_mut().for_each(&renamed);
                    }
                    Change::Shares { track, .. }
                    | Change::Drops { track, .. }
                    | Change::Vanishes { track } => renamed(track),
                }
                change.to_string()
            })
            .collect();
        rival.change = clauses.join("; ");
    }
    for (track, name) in solution.tracks.iter_mut().zip(names) {
        track.name.clone_from(name);
    }
}

/// `renamed` as a table.
#[must_use]
pub fn table(rows: &[Renamed]) -> Table<'_> {
    Table::new(
        "renamed",
        "What became of the names of the earlier result",
        rows.len(),
    )
    .text(
        "track",
        "name in this result; empty for a lost name",
        |k, out| {
            out.push_str(&rows[k].track);
        },
    )
    .ucd("meta.id;meta.main")
    .text(
        "old_track",
        "name in the earlier result; empty for a new star",
        |k, out| {
            out.push_str(&rows[k].old_track);
        },
    )
    .ucd("meta.id")
    .text("what", "kept, new, split, joined or lost", |k, out| {
        out.push_str(rows[k].what.word());
    })
    .ucd("meta.code")
    .int("n_shared", "detections that both hold", |k| {
        Some(rows[k].n_shared as i64)
    })
    .ucd("meta.number")
}
