//! ECSV detection lists: the header of [`super::ecsv_read`], the rows of [`super::delimited`],
//! so that a list is read as fast as CSV. Empty cells and `nan` are "not measured".

use std::path::Path;

use super::columns::Head;
use super::delimited::{Planner, Separator, Table, read_rows};
use super::ecsv_read;
use super::fault::{FaultKind, Faults, Place};

/// Reads an ECSV file.
///
/// # Errors
/// A header that is not ECSV, names that disagree, the planner's faults, or those of the rows.
pub(super) fn read_ecsv(text: &str, path: &Path, plan: &mut Planner<'_>) -> Result<Table, Faults> {
    let malformed = |line: usize, reason: String| {
        Faults::one(
            Place::line(path, line),
            FaultKind::Format {
                format: "ECSV header".to_owned(),
                reason,
            },
        )
    };
    let header = ecsv_read::Head::read(text.as_bytes()).map_err(|e| {
        malformed(
            e.line,
            format!("found {}, expected {}", e.found, e.expected),
        )
    })?;
    let heads: Vec<Head> = header
        .columns
        .iter()
        .map(|c| Head {
            name: c.name.clone(),
            unit: Some(c.unit.clone()).filter(|u| !u.is_empty()),
        })
        .collect();
    let rest = &text[header.n_bytes..];
    let (names_line, data) = rest.split_once('\n').unwrap_or((rest, ""));
    let line = header.n_lines + 1;
    let names = names(names_line.trim_end_matches('\r'), header.delimiter);
    if heads.iter().map(|h| &h.name).ne(&names) {
        let described: Vec<&str> = heads.iter().map(|h| h.name.as_str()).collect();
        return Err(malformed(
            line,
            format!(
                "found columns `{}`, expected those of `datatype`: `{}`",
                names.join(","),
                described.join(",")
            ),
        ));
    }
    let plan = plan(&heads, &Place::line(path, line))?;
    let separator = Separator::Byte(header.delimiter);
    read_rows(data, path, line + 1, heads, plan, separator, true)
}

fn names(line: &str, separator: u8) -> Vec<String> {
    let mut reader = csv::ReaderBuilder::new()
        .has_headers(false)
        .delimiter(separator)
        .from_reader(line.as_bytes());
    let record = reader
        .records()
        .next()
        .and_then(Result::ok)
        .unwrap_or_default();
    record.iter().map(str::to_owned).collect()
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::io::columns::plan;
    use crate::model::campaign::{Instrument, Unit};

    /// A table of three columns with units, laid out as APE 6 (version 1.0) shows.
    const SMALL: &str = "\
# %ECSV 1.0
# ---
# datatype:
# - {name: x, unit: arcsec, datatype: float64}
# - {name: y, unit: arcsec, datatype: float64}
# - {name: mag, unit: mag, datatype: float64}
# schema: astropy-2.0
x y mag
1.5 2.5 \"\"
-1.0 2.0 nan
";

    #[test]
    fn units_come_from_the_header_and_empty_means_not_measured() {
        let mut instrument = Instrument::new("i", 50.0);
        instrument.unit = Unit::Mas;
        let path = Path::new("a.ecsv");
        let table = read_ecsv(SMALL, path, &mut |h, p| plan(h, &instrument, None, p)).unwrap();
        assert_eq!(table.plan.role("x"), Some((0, 1000.0)));
        assert_eq!(table.numbers("x"), [1.5, -1.0]);
        assert!(table.numbers("mag").iter().all(|m| m.is_nan()));
        assert_eq!(table.rows.place(path, 1).line, Some(10));
    }
}
