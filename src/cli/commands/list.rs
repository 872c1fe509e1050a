//! `list`: a table of a result, or some rows and columns of it, lined up for reading.

use std::cmp::Ordering;
use std::path::PathBuf;

use anyhow::Context;
use asterskein::io::number_text::{push_float, push_int};
use asterskein::io::read_run;
use asterskein::io::result_tables::{ELEMENTS, error_name};
use asterskein::io::table::{Column, Precision, Table, Values};
use asterskein::model::flag;
use serde_json::{Map, Value};

use super::super::exit::{Exit, UsageError};
use super::super::lines::{Align, Lines};
use super::super::printer::Printer;

#[derive(Debug, clap::Args)]
pub struct Args {
    /// Result directory written by `link`.
    pub run: PathBuf,
    /// The table.
    #[arg(value_enum, default_value_t = Which::Tracks)]
    pub table: Which,
    /// Columns to show, separated by commas; `all` = every column.
    #[arg(long, value_delimiter = ',', value_name = "NAMES")]
    pub columns: Vec<String>,
    /// Only rows of these tracks.
    #[arg(long, value_delimiter = ',', value_name = "NAMES")]
    pub track: Vec<String>,
    /// Only rows that bear one of these flags.
    #[arg(long, value_delimiter = ',', value_name = "FLAGS")]
    pub flag: Vec<String>,
    /// Sort by a column, smallest first (speeds and probabilities: largest first); its unit may
    /// be left out, as in `--by pericentre_speed`. Where a largest-first column has errors, rows
    /// are ranked by value minus error, so that what is hardly known does not lead. Rows without
    /// a value come last.
    #[arg(long, value_name = "COLUMN")]
    pub by: Option<String>,
    /// Sort the other way round.
    #[arg(long, requires = "by")]
    pub reverse: bool,
    /// Only the first rows.
    #[arg(long, value_name = "N")]
    pub limit: Option<usize>,
}

/// Tables of a result.
#[derive(Clone, Copy, Debug, PartialEq, Eq, clap::ValueEnum)]
pub enum Which {
    Tracks,
    Members,
    Leftovers,
    Epochs,
    Tangles,
    Rivals,
    Orbits,
    /// What became of the names of an earlier result.
    Renamed,
}

impl Which {
    fn file(self) -> &'static str {
        match self {
            Self::Tracks => "tracks",
            Self::Members => "members",
            Self::Leftovers => "leftovers",
            Self::Epochs => "epochs",
            Self::Tangles => "tangles",
            Self::Rivals => "rivals",
            Self::Orbits => "orbits",
            Self::Renamed => "renamed",
        }
    }

    /// Columns that fit a terminal; empty = all.
    fn usual(self) -> &'static [&'static str] {
        match self {
            Self::Tracks => &[
                "track",
                "n_members",
                "model",
                "x_mas",
                "y_mas",
                "vx_mas_yr",
                "vy_mas_yr",
                "mag",
                "probability",
                "flags",
            ],
            Self::Members => &[
                "track",
                "epoch_name",
                "id",
                "x_mas",
                "y_mas",
                "mag",
                "probability",
                "share",
                "dx_mas",
                "dy_mas",
                "flags",
            ],
            Self::Leftovers => &[
                "epoch_name",
                "id",
                "x_mas",
                "y_mas",
                "mag",
                "p_false",
                "nearest_track",
                "nearest_mas",
                "flags",
            ],
            Self::Epochs => &[
                "epoch",
                "epoch_name",
                "time_yr",
                "instrument",
                "n_list",
                "n_matched",
                "rms_mas",
                "error_factor",
                "error_floor_mas",
                "limit_mag",
                "flags",
            ],
            Self::Orbits => &[
                "track",
                "rank",
                "ln_evidence",
                "semi_major_mas",
                "period_yr",
                "eccentricity",
                "inclination_deg",
                "node_deg",
                "arg_pericentre_deg",
                "t_pericentre_yr",
            ],
            Self::Tangles | Self::Rivals | Self::Renamed => &[],
        }
    }
}

pub fn run(args: &Args, printer: &Printer) -> anyhow::Result<Exit> {
    // A result is recognised by its run.json even when only one table is wanted.
    read_run::read_info(&args.run)?;
    let table = read_run::read_table(&args.run, args.table.file())?;
    let columns = chosen_columns(args, &table)?;
    let rows = chosen_rows(args, &table)?;
    if printer.json {
        printer.data(&as_json(&table, &columns, &rows).to_string());
    } else {
        printer.data(&lined_up(&table, &columns, &rows));
    }
    Ok(Exit::Done)
}

fn chosen_columns(args: &Args, table: &Table<'_>) -> anyhow::Result<Vec<usize>> {
    let all = || (0..table.columns.len()).collect();
    let usual = usual_columns(args, table);
    let names = if args.columns.is_empty() {
        &usual
    } else {
        &args.columns
    };
    if names.is_empty() || names.iter().any(|n| n == "all") {
        return Ok(all());
    }
    names
        .iter()
        .map(|name| column_called(table, name).ok_or_else(|| no_column(args, table, name).into()))
        .collect()
}

/// Columns shown unless others are asked for: the one sorted by is always among them.
fn usual_columns(args: &Args, table: &Table<'_>) -> Vec<String> {
    // Tracks sorted by a property of their orbits are wanted for their orbits.
    const ORBITS: [&str; 12] = [
        "track",
        "n_members",
        "semi_major_mas",
        "period_yr",
        "eccentricity",
        "inclination_deg",
        "t_pericentre_yr",
        "pericentre_au",
        "pericentre_speed_km_s",
        "pericentre_speed_err_km_s",
        "probability",
        "flags",
    ];
    let by = args.by.as_ref().and_then(|by| column_called(table, by));
    let by = by.map(|c| table.columns[c].name.as_str());
    let by_orbit = by.is_some_and(|n| ELEMENTS.iter().any(|e| e.0 == n));
    let mut usual = args.table.usual();
    if by_orbit && args.table == Which::Tracks {
        usual = &ORBITS;
    }
    let mut names: Vec<String> = usual.iter().map(|s| (*s).to_owned()).collect();
    if let Some(by) = by.filter(|by| !names.is_empty() && !names.iter().any(|n| n == by)) {
        names.push(by.to_owned());
    }
    names
}

fn no_column(args: &Args, table: &Table<'_>, name: &str) -> UsageError {
    let known: Vec<&str> = table.columns.iter().map(|c| c.name.as_str()).collect();
    UsageError(format!(
        "table `{}` has no column `{name}`; it has {}",
        args.table.file(),
        known.join(", ")
    ))
}

fn chosen_rows(args: &Args, table: &Table<'_>) -> anyhow::Result<Vec<usize>> {
    for word in &args.flag {
        if !flag::TABLE.iter().any(|(_, w, _)| w == word) {
            let known: Vec<&str> = flag::TABLE.iter().map(|f| f.1).collect();
            return Err(UsageError(format!(
                "no flag is called `{word}`; the flags are {}",
                known.join(", ")
            ))
            .into());
        }
    }
    let mut rows: Vec<usize> = (0..table.n_rows()).collect();
    if !args.track.is_empty() {
        let column = if table.column("track").is_some() {
            "track"
        } else {
            "tracks"
        };
        let tracks = table
            .texts(column)
            .with_context(|| "--track needs a table with tracks".to_owned())?;
        rows.retain(|&k| {
            tracks[k]
                .split(';')
                .any(|t| args.track.iter().any(|w| w == t))
        });
    }
    if !args.flag.is_empty() {
        let flags = table
            .texts("flags")
            .with_context(|| "--flag needs a table with flags".to_owned())?;
        rows.retain(|&k| {
            flags[k]
                .split(';')
                .any(|f| args.flag.iter().any(|w| w == f))
        });
    }
    if let Some(by) = &args.by {
        let at = column_called(table, by).ok_or_else(|| no_column(args, table, by))?;
        let error = table.column(&error_name(&table.columns[at].name));
        sort_rows(&mut rows, &table.columns[at], error, args.reverse);
    }
    rows.truncate(args.limit.unwrap_or(usize::MAX));
    Ok(rows)
}

/// A column by its name, or by its name without the unit.
fn column_called(table: &Table<'_>, name: &str) -> Option<usize> {
    const UNITS: [&str; 8] = [
        "_mas", "_mas_yr", "_mas_yr2", "_yr", "_deg", "_au", "_km_s", "_nats",
    ];
    let is = |wanted: &str| table.columns.iter().position(|c| c.name == wanted);
    is(name).or_else(|| UNITS.iter().find_map(|unit| is(&format!("{name}{unit}"))))
}

/// Sorts rows by a column; those without a value come last either way, ties stay in table order.
fn sort_rows(rows: &mut [usize], column: &Column<'_>, error: Option<&Column<'_>>, reverse: bool) {
    let largest_first = ["speed", "probability", "ln_evidence", "n_members"]
        .iter()
        .any(|w| column.name.contains(w));
    let flip = |order: Ordering| {
        if largest_first != reverse {
            order.reverse()
        } else {
            order
        }
    };
    let numbers = |at: &dyn Fn(usize) -> f64, rows: &mut [usize]| {
        rows.sort_by(|&a, &b| {
            let (a, b) = (at(a), at(b));
            match (a.is_nan(), b.is_nan()) {
                (false, false) => flip(a.total_cmp(&b)),
                (a_none, b_none) => a_none.cmp(&b_none),
            }
        });
    };
    match &column.values {
        Values::Float(s, _) => {
            let error = |k: usize| match error.map(|e| &e.values) {
                Some(Values::Float(e, _)) if largest_first && !e.at(k).is_nan() => e.at(k),
                _ => 0.0,
            };
            numbers(&|k| s.at(k) - error(k), rows);
        }
        Values::Int(s) => numbers(&|k| s.at(k).map_or(f64::NAN, |v| v as f64), rows),
        Values::Bool(s) => {
            let at = |k| s.at(k).map_or(f64::NAN, |b| f64::from(u8::from(b)));
            numbers(&at, rows);
        }
        Values::Text(t) => rows.sort_by(|&a, &b| {
            let (a, b) = (t.at(a), t.at(b));
            a.is_empty()
                .cmp(&b.is_empty())
                .then_with(|| flip(a.cmp(&b)))
        }),
    }
}

/// One cell as a person reads it: four decimals are enough.
fn cell(values: &Values<'_>, row: usize) -> String {
    const DECIMALS: u8 = 4;
    let mut out = Vec::new();
    match values {
        Values::Float(s, _) => {
            let v = s.at(row);
            let small = v != 0.0 && v.abs() < 1e-3;
            let precision = if small {
                Precision::Single
            } else {
                Precision::Decimals(DECIMALS)
            };
            push_float(&mut out, v, precision);
        }
        Values::Int(s) => {
            if let Some(v) = s.at(row) {
                push_int(&mut out, v);
            }
        }
        Values::Bool(s) => {
            return s.at(row).map_or_else(String::new, |b| b.to_string());
        }
        Values::Text(t) => return t.at(row),
    }
    String::from_utf8_lossy(&out).into_owned()
}

fn lined_up(table: &Table<'_>, columns: &[usize], rows: &[usize]) -> String {
    let heading: Vec<(&str, Align)> = columns
        .iter()
        .map(|&c| {
            let column = &table.columns[c];
            let is_text = matches!(column.values, Values::Text(_));
            (
                column.name.as_str(),
                if is_text { Align::Left } else { Align::Right },
            )
        })
        .collect();
    let mut lines = Lines::new(&heading);
    for &k in rows {
        let cells = columns.iter().map(|&c| cell(&table.columns[c].values, k));
        lines.push(cells.collect());
    }
    lines.to_string()
}

fn as_json(table: &Table<'_>, columns: &[usize], rows: &[usize]) -> Value {
    let row = |k: usize| {
        let object: Map<String, Value> = columns
            .iter()
            .map(|&c| {
                let column = &table.columns[c];
                let value = match &column.values {
                    // Not a number has no form in JSON and becomes null.
                    Values::Float(s, _) => Value::from(s.at(k)),
                    Values::Int(s) => Value::from(s.at(k)),
                    Values::Bool(s) => Value::from(s.at(k)),
                    Values::Text(t) => Value::from(t.at(k)),
                };
                (column.name.clone(), value)
            })
            .collect();
        Value::Object(object)
    };
    rows.iter().map(|&k| row(k)).collect()
}
