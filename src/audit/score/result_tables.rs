//! The two tables of a result that the scorer reads, ECSV or plain CSV.

use std::path::{Path, PathBuf};

use crate::io::text_table::{TextTable, TextTableError};
use crate::io::truth_csv::push_id;
use crate::model::detection::Ids;

/// Memberships as given; all vectors have the same length.
#[derive(Clone, Debug, Default)]
pub struct GivenMembers {
    pub track: Vec<String>,
    pub epoch: Vec<u32>,
    pub id: Ids,
    /// `NaN` = not given.
    pub probability: Vec<f64>,
    /// `NaN` = not given, which counts as present.
    pub share: Vec<f64>,
    /// Carries the flag `ambiguous`.
    pub ambiguous: Vec<bool>,
}

/// Positions and velocities of tracks at the reference epoch; an axis pair is empty when the
/// table lacks it or its errors.
#[derive(Clone, Debug, Default)]
pub struct GivenTracks {
    pub track: Vec<String>,
    pub position: Vec<[Measured; 2]>,
    pub velocity: Vec<[Measured; 2]>,
}

/// A value with its stated error; `NaN` = not given.
#[derive(Clone, Copy, Debug)]
pub struct Measured {
    pub value: f64,
    pub error: f64,
}

/// `stem.csv`, or else `stem.ecsv`.
fn find(folder: &Path, stem: &str) -> Option<PathBuf> {
    [".csv", ".ecsv"]
        .iter()
        .map(|ending| folder.join(format!("{stem}{ending}")))
        .find(|p| p.exists())
}

/// Reads `members.csv` or `members.ecsv`.
///
/// # Errors
/// When there is no such table, or a cell cannot be understood.
pub fn read_members(folder: &Path) -> Result<GivenMembers, TextTableError> {
    let path = find(folder, "members").unwrap_or_else(|| folder.join("members.ecsv"));
    let table = TextTable::open(&path)?;
    let (track, epoch, id) = (
        table.require("track")?,
        table.require("epoch")?,
        table.require("id")?,
    );
    let probability = table.column("probability");
    let share = table.column("share");
    let flags = table.column("flags");
    let mut out = GivenMembers::default();
    table.for_each(|row| {
        let name = row.text(track)?;
        if name.is_empty() {
            return Err(row.fault("a membership without a track".to_owned()));
        }
        out.track.push(name.to_owned());
        out.epoch.push(row.count(epoch)?);
        push_id(&mut out.id, row.text(id)?);
        let optional = |column: Option<usize>| column.map_or(Ok(f64::NAN), |c| row.number(c));
        out.probability.push(optional(probability)?);
        out.share.push(optional(share)?);
        out.ambiguous.push(match flags {
            Some(c) => row.text(c)?.contains("ambiguous"),
            None => false,
        });
        Ok(())
    })?;
    Ok(out)
}

/// Reads `tracks.csv` or `tracks.ecsv`; `None` where there is no such table.
///
/// # Errors
/// When a cell cannot be understood.
pub fn read_tracks(folder: &Path) -> Result<Option<GivenTracks>, TextTableError> {
    let Some(path) = find(folder, "tracks") else {
        return Ok(None);
    };
    let table = TextTable::open(&path)?;
    let track = table.require("track")?;
    let measured = |axis: &str, unit: &str| {
        let value = table.column(&format!("{axis}_{unit}"))?;
        let error = [
            format!("{axis}_{unit}_err"),
            format!("{axis}_err_{unit}"),
            format!("{axis}_err"),
        ]
        .iter()
        .find_map(|name| table.column(name))?;
        Some((value, error))
    };
    let position = measured("x", "mas").zip(measured("y", "mas"));
    let velocity = measured("vx", "mas_yr").zip(measured("vy", "mas_yr"));
    let mut out = GivenTracks::default();
    table.for_each(|row| {
        out.track.push(row.text(track)?.to_owned());
        let read = |(value, error)| -> Result<Measured, TextTableError> {
            Ok(Measured {
                value: row.number(value)?,
                error: row.number(error)?,
            })
        };
        if let Some((x, y)) = position {
            out.position.push([read(x)?, read(y)?]);
        }
        if let Some((x, y)) = velocity {
            out.velocity.push([read(x)?, read(y)?]);
        }
        Ok(())
    })?;
    Ok(Some(out))
}
