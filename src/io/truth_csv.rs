//! The truth beside a made-up campaign: which stars make up which detection.
//!
//! `truth/members.csv` is required; `stars.csv` and `classes.csv` may be missing, as they are
//! for labelled real data. Only the scorer reads these files, never a stage of linking.

use std::collections::{BTreeSet, HashMap};
use std::path::Path;

use super::text_table::{TextTable, TextTableError};
use crate::model::detection::Ids;

/// Stands for "no star".
pub const NO_STAR: u32 = u32::MAX;

/// The truth of a campaign. Stars are numbered in the order of `stars.csv`, or of their labels
/// where there is none.
#[derive(Clone, Debug, Default)]
pub struct Truth {
    pub members: TrueMembers,
    pub stars: TrueStars,
}

/// One entry per (detection, contributing star); a false detection has one entry without a star.
#[derive(Clone, Debug, Default)]
pub struct TrueMembers {
    pub epoch: Vec<u32>,
    pub id: Ids,
    /// Number of the star or [`NO_STAR`].
    pub star: Vec<u32>,
    /// Flux share.
    pub share: Vec<f64>,
}

/// Stars and their classes; all vectors have the same length, except empty optional ones.
#[derive(Clone, Debug, Default)]
pub struct TrueStars {
    pub label: Vec<String>,
    /// (x, y) at the reference epoch; empty when not given.
    pub position_mas: Vec<[f64; 2]>,
    /// (vx, vy) at the reference epoch; empty when not given.
    pub velocity_mas_yr: Vec<[f64; 2]>,
    /// Strongly curved on the sky.
    pub strong: Vec<bool>,
    /// Met a neighbour of similar brightness within the resolution.
    pub encounter: Vec<bool>,
}

/// Reads the folder `truth` of a campaign.
pub fn read_truth(folder: &Path) -> Result<Truth, TextTableError> {
    let mut stars = TrueStars::default();
    let mut keplerian = Vec::new();
    let path = folder.join("stars.csv");
    let listed = path.exists();
    if listed {
        read_stars(&path, &mut stars, &mut keplerian)?;
    }
    let (mut members, labels) = read_members(&folder.join("members.csv"))?;
    if !listed {
        stars.label = in_natural_order(labels.iter().map(|(l, _)| l.as_str()));
        keplerian = vec![false; stars.label.len()];
    }
    let number = numbers(&stars.label);
    let mut star_of_code = Vec::with_capacity(labels.len());
    for (label, line) in &labels {
        star_of_code.push(match number.get(label.as_str()) {
            Some(&k) => k,
            None if label.is_empty() => NO_STAR,
            None => {
                return Err(TextTableError::Row {
                    path: folder.join("members.csv"),
                    line: *line,
                    what: format!("star `{label}` is not in stars.csv"),
                });
            }
        });
    }
    for star in &mut members.star {
        *star = star_of_code[*star as usize];
    }
    let mut truth = Truth { members, stars };
    let path = folder.join("classes.csv");
    truth.stars.encounter = vec![false; truth.stars.label.len()];
    truth.stars.strong = keplerian;
    if path.exists() {
        read_classes(&path, &mut truth.stars)?;
    }
    Ok(truth)
}

fn numbers(labels: &[String]) -> HashMap<String, u32> {
    labels
        .iter()
        .enumerate()
        .map(|(k, l)| (l.clone(), k as u32))
        .collect()
}

/// Distinct non-empty labels: whole numbers by value, anything else by text.
fn in_natural_order<'a>(labels: impl Iterator<Item = &'a str>) -> Vec<String> {
    let set: BTreeSet<(Option<u64>, &str)> = labels
        .filter(|l| !l.is_empty())
        .map(|l| (l.parse().ok(), l))
        .collect();
    if set.iter().all(|(n, _)| n.is_some()) {
        return set.into_iter().map(|(_, l)| l.to_owned()).collect();
    }
    let by_text: BTreeSet<&str> = set.into_iter().map(|(_, l)| l).collect();
    by_text.into_iter().map(str::to_owned).collect()
}

fn read_stars(
    path: &Path,
    stars: &mut TrueStars,
    keplerian: &mut Vec<bool>,
) -> Result<(), TextTableError> {
    let table = TextTable::open(path)?;
    let label = table.require("star")?;
    let kind = table.column("kind");
    let pair = |a, b| Some([table.column(a)?, table.column(b)?]);
    let place = pair("x_mas", "y_mas");
    let speed = pair("vx_mas_yr", "vy_mas_yr");
    table.for_each(|row| {
        stars.label.push(row.text(label)?.to_owned());
        keplerian.push(match kind {
            Some(c) => row.text(c)? == "kepler",
            None => false,
        });
        if let Some([a, b]) = place {
            stars.position_mas.push([row.number(a)?, row.number(b)?]);
        }
        if let Some([a, b]) = speed {
            stars.velocity_mas_yr.push([row.number(a)?, row.number(b)?]);
        }
        Ok(())
    })
}

/// Members with a code in place of the star's number, and for every code its label and the line
/// where it first stands.
fn read_members(path: &Path) -> Result<(TrueMembers, Vec<(String, u64)>), TextTableError> {
    let table = TextTable::open(path)?;
    let columns = ["epoch", "id", "star", "share"].map(|name| table.require(name));
    let [epoch, id, star, share] = columns;
    let (epoch, id, star, share) = (epoch?, id?, star?, share?);
    let mut members = TrueMembers::default();
    let mut labels: Vec<(String, u64)> = Vec::new();
    let mut code_of: HashMap<String, u32> = HashMap::new();
    table.for_each(|row| {
        members.epoch.push(row.count(epoch)?);
        push_id(&mut members.id, row.text(id)?);
        members.share.push(row.number(share)?);
        let label = row.text(star)?;
        let code = code_of.get(label).copied().unwrap_or_else(|| {
            let code = labels.len() as u32;
            labels.push((label.to_owned(), row.line()));
            code_of.insert(label.to_owned(), code);
            code
        });
        members.star.push(code);
        Ok(())
    })?;
    Ok((members, labels))
}

/// Appends an identifier; the column turns into text at the first one that is no plain number.
pub(crate) fn push_id(ids: &mut Ids, text: &str) {
    match ids {
        Ids::Numbers(numbers) => match text.parse::<u64>() {
            Ok(n) if text.len() == 1 || !text.starts_with(['0', '+']) => numbers.push(n),
            _ => {
                let mut all: Vec<String> = numbers.iter().map(u64::to_string).collect();
                all.push(text.to_owned());
                *ids = Ids::Text(all);
            }
        },
        Ids::Text(all) => all.push(text.to_owned()),
    }
}

fn read_classes(path: &Path, stars: &mut TrueStars) -> Result<(), TextTableError> {
    let table = TextTable::open(path)?;
    let Some(strong) = table.column("strong") else {
        return Ok(());
    };
    let label = table.require("star")?;
    let encounter = table.require("encounter")?;
    let number = numbers(&stars.label);
    table.for_each(|row| {
        let name = row.text(label)?;
        let Some(&k) = number.get(name) else {
            return Err(row.fault(format!("star `{name}` is not in stars.csv")));
        };
        stars.strong[k as usize] = row.number(strong)? > 0.0;
        stars.encounter[k as usize] = row.number(encounter)? > 0.0;
        Ok(())
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn labels_without_a_star_list_are_numbered_in_order() {
        let folder = tempfile::tempdir().unwrap();
        let write =
            |name: &str, text: &str| std::fs::write(folder.path().join(name), text).unwrap();
        write(
            "members.csv",
            "epoch,id,star,share\n0,a,10,1\n0,b,9,1\n1,c,,0\n",
        );
        let truth = read_truth(folder.path()).unwrap();
        assert_eq!(truth.stars.label, ["9", "10"]);
        assert_eq!(truth.members.star, [1, 0, NO_STAR]);
        write("stars.csv", "star,kind\n10,kepler\n");
        let message = read_truth(folder.path()).unwrap_err().to_string();
        assert!(
            message.ends_with("members.csv:3: star `9` is not in stars.csv"),
            "{message}"
        );
    }
}
