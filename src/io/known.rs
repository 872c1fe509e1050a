//! The list of known stars and the table of radial velocities.

use std::path::Path;

use super::columns::{self, Want};
use super::delimited::{Column, Table};
use super::fault::{FaultKind, Faults};
use super::files::{self, Disk, Files};
use super::lists::read_any;
use super::raw_list::not_as_expected;
use crate::model::campaign::{KnownStars, Velocities};
use crate::model::known::{KnownStar, StarVelocity, WhichStar};

/// Reads the list of known stars, in the order of the file.
///
/// # Errors
/// All faults of the file, among them a name given twice, and errors that are missing although
/// the campaign uses the stars as priors or for the frame.
pub fn read_known_stars(known: &KnownStars) -> Result<Vec<KnownStar>, Faults> {
    read_known_stars_from(&Disk, known)
}

/// [`read_known_stars`] from any source of files.
///
/// # Errors
/// As [`read_known_stars`].
pub fn read_known_stars_from(
    files: &dyn Files,
    known: &KnownStars,
) -> Result<Vec<KnownStar>, Faults> {
    const NUMBERS: [&str; 3] = ["epoch_yr", "x_mas", "y_mas"];
    const MORE: [(&str, Want); 8] = [
        ("name", Want::Text),
        ("x_err_mas", Want::Number),
        ("y_err_mas", Want::Number),
        ("vx_mas_yr", Want::Number),
        ("vy_mas_yr", Want::Number),
        ("vx_err_mas_yr", Want::Number),
        ("vy_err_mas_yr", Want::Number),
        ("mag", Want::Number),
    ];
    let path = known.file.as_path();
    let table = read(files, path, &NUMBERS, &MORE)?;
    let mut rows = Rows::new(&table, path);
    let names = rows.texts("name");
    if names.is_empty() {
        rows.no_column("name");
    }
    let mut first_of = std::collections::BTreeMap::new();
    let mut stars = Vec::with_capacity(table.n_rows);
    for k in 0..table.n_rows {
        let name = names.get(k).cloned().unwrap_or_default();
        if name.is_empty() {
            rows.fault(k, "name", FaultKind::EmptyCell);
        } else if let Some(first) = first_of.insert(name.clone(), k) {
            rows.twice(k, "name", &name, first);
        }
        let star = KnownStar {
            name,
            epoch_yr: rows.needed(k, "epoch_yr"),
            x_mas: rows.needed(k, "x_mas"),
            y_mas: rows.needed(k, "y_mas"),
            x_err_mas: rows.error(k, "x_err_mas"),
            y_err_mas: rows.error(k, "y_err_mas"),
            vx_mas_yr: rows.optional(k, "vx_mas_yr"),
            vy_mas_yr: rows.optional(k, "vy_mas_yr"),
            vx_err_mas_yr: rows.error(k, "vx_err_mas_yr"),
            vy_err_mas_yr: rows.error(k, "vy_err_mas_yr"),
            mag: rows.optional(k, "mag"),
        };
        let errors = [
            (
                "x_err_mas",
                star.x_err_mas,
                known.for_frame || known.for_priors,
            ),
            (
                "y_err_mas",
                star.y_err_mas,
                known.for_frame || known.for_priors,
            ),
            ("vx_err_mas_yr", star.vx_err_mas_yr, known.for_priors),
            ("vy_err_mas_yr", star.vy_err_mas_yr, known.for_priors),
        ];
        for (column, value, needed) in errors {
            if needed && value.is_none() {
                rows.fault(k, column, FaultKind::EmptyCell);
            }
        }
        stars.push(star);
    }
    rows.faults.or(stars)
}

/// Reads the table of radial velocities, in the order of the file.
///
/// # Errors
/// All faults of the file, among them rows with neither a name nor a place.
pub fn read_velocities(velocities: &Velocities) -> Result<Vec<StarVelocity>, Faults> {
    read_velocities_from(&Disk, velocities)
}

/// [`read_velocities`] from any source of files.
///
/// # Errors
/// As [`read_velocities`].
pub fn read_velocities_from(
    files: &dyn Files,
    velocities: &Velocities,
) -> Result<Vec<StarVelocity>, Faults> {
    const NUMBERS: [&str; 3] = ["time_yr", "rv_km_s", "rv_err_km_s"];
    const MORE: [(&str, Want); 3] = [
        ("name", Want::Text),
        ("x_mas", Want::Number),
        ("y_mas", Want::Number),
    ];
    let path = velocities.file.as_path();
    let table = read(files, path, &NUMBERS, &MORE)?;
    let mut rows = Rows::new(&table, path);
    let names = rows.texts("name");
    let mut out = Vec::with_capacity(table.n_rows);
    for k in 0..table.n_rows {
        let name = names.get(k).filter(|n| !n.is_empty());
        let at = (rows.optional(k, "x_mas"), rows.optional(k, "y_mas"));
        let star = match (name, at) {
            (Some(name), _) => WhichStar::Named(name.clone()),
            (None, (Some(x_mas), Some(y_mas))) => WhichStar::At { x_mas, y_mas },
            _ => {
                rows.fault(
                    k,
                    "name",
                    FaultKind::Value {
                        found: "neither a name nor a place".to_owned(),
                        expected: "a name, or x_mas and y_mas".to_owned(),
                    },
                );
                continue;
            }
        };
        out.push(StarVelocity {
            time_yr: rows.needed(k, "time_yr"),
            star,
            rv_km_s: rows.needed(k, "rv_km_s"),
            rv_err_km_s: rows.needed_error(k, "rv_err_km_s"),
        });
    }
    rows.faults.or(out)
}

fn read(
    files: &dyn Files,
    path: &Path,
    needed: &[&'static str],
    optional: &[(&'static str, Want)],
) -> Result<Table, Faults> {
    let bytes = files::read(files, path)?;
    read_any(&bytes, path, false, &mut |heads, place| {
        columns::plan_of(heads, needed, optional, place)
    })
}

/// Cells by row and column name, with the faults met on the way.
struct Rows<'a> {
    table: &'a Table,
    path: &'a Path,
    faults: Faults,
}

impl<'a> Rows<'a> {
    fn new(table: &'a Table, path: &'a Path) -> Self {
        Self {
            table,
            path,
            faults: Faults::default(),
        }
    }

    fn fault(&mut self, row: usize, column: &str, kind: FaultKind) {
        let place = self.table.place(self.path, row).with_column(column);
        self.faults.push(place, kind);
    }

    fn no_column(&mut self, wanted: &str) {
        let found = self.table.heads.iter().map(|h| h.name.clone()).collect();
        self.faults.push(
            super::fault::Place::file(self.path),
            FaultKind::NoColumn {
                wanted: wanted.to_owned(),
                found,
                nearest: None,
            },
        );
    }

    fn twice(&mut self, row: usize, column: &str, value: &str, first: usize) {
        let first = self.table.place(self.path, first);
        let first = match first.line {
            Some(line) => format!("in line {line}"),
            None => format!("in row {}", first.row.unwrap_or(0)),
        };
        let kind = FaultKind::Twice {
            what: column.to_owned(),
            value: value.to_owned(),
            first,
            expected: format!("expected every {column} once"),
        };
        self.fault(row, column, kind);
    }

    fn texts(&self, column: &str) -> Vec<String> {
        match self
            .table
            .plan
            .role(column)
            .map(|(c, _)| &self.table.columns[c])
        {
            Some(Column::Texts(t)) => t.clone(),
            _ => Vec::new(),
        }
    }

    fn value(&self, row: usize, column: &str) -> f64 {
        let factor = self.table.plan.role(column).map_or(1.0, |(_, f)| f);
        let values = self.table.numbers(column);
        values.get(row).map_or(f64::NAN, |v| v * factor)
    }

    fn optional(&self, row: usize, column: &str) -> Option<f64> {
        Some(self.value(row, column)).filter(|v| !v.is_nan())
    }

    fn needed(&mut self, row: usize, column: &str) -> f64 {
        let v = self.value(row, column);
        if v.is_nan() {
            self.fault(row, column, FaultKind::EmptyCell);
        }
        v
    }

    fn error(&mut self, row: usize, column: &str) -> Option<f64> {
        let v = self.optional(row, column)?;
        if v <= 0.0 {
            self.fault(row, column, not_as_expected(v, "an error above 0"));
        }
        Some(v)
    }

    fn needed_error(&mut self, row: usize, column: &str) -> f64 {
        let v = self.needed(row, column);
        if v <= 0.0 {
            self.fault(row, column, not_as_expected(v, "an error above 0"));
        }
        v
    }
}
