//! Text tables: comma-separated with a header, or white space without one.
//!
//! One pass over the bytes, straight into columns: no record, no text for a number. Files with
//! quotes go the slower way through the csv crate. Line numbers are kept only where the count
//! of lines and rows drifts apart (blank lines, comments).

use std::path::Path;

use super::columns::{Head, Plan, Want};
use super::fault::{FaultKind, Faults, Place};
use crate::model::detection::Ids;

/// A column as read.
#[derive(Clone, Debug)]
pub(super) enum Column {
    Skipped,
    Numbers(Vec<f64>),
    Texts(Vec<String>),
    Ids(Ids),
}

/// Rows of a table, as columns, with the way back to the place of a row.
#[derive(Clone, Debug)]
pub(super) struct Table {
    pub heads: Vec<Head>,
    pub plan: Plan,
    pub columns: Vec<Column>,
    pub n_rows: usize,
    pub rows: RowPlaces,
    /// Row of the file (from 0) of each row here, when only some were taken.
    pub taken: Option<Vec<u32>>,
}

impl Table {
    /// Row of the file, from 0.
    pub fn file_row(&self, row: usize) -> u32 {
        self.taken.as_ref().map_or(row as u32, |t| t[row])
    }

    /// Place of a row of this table.
    pub fn place(&self, path: &Path, row: usize) -> Place {
        self.rows.place(path, self.file_row(row) as usize)
    }

    /// Numbers of a role; empty when the table has no such column.
    pub fn numbers(&self, role: &str) -> &[f64] {
        match self.plan.role(role).map(|(c, _)| &self.columns[c]) {
            Some(Column::Numbers(v)) => v,
            _ => &[],
        }
    }

    /// A table of some rows, in the given order.
    pub fn rows_taken(&self, rows: &[u32]) -> Self {
        Self {
            heads: self.heads.clone(),
            plan: self.plan.clone(),
            columns: self.columns.iter().map(|c| c.taken(rows)).collect(),
            n_rows: rows.len(),
            rows: self.rows.clone(),
            taken: Some(rows.iter().map(|&k| self.file_row(k as usize)).collect()),
        }
    }
}

impl Column {
    fn taken(&self, rows: &[u32]) -> Self {
        fn pick<T: Clone>(values: &[T], rows: &[u32]) -> Vec<T> {
            rows.iter().map(|&k| values[k as usize].clone()).collect()
        }
        match self {
            Self::Skipped => Self::Skipped,
            Self::Numbers(v) => Self::Numbers(pick(v, rows)),
            Self::Texts(v) => Self::Texts(pick(v, rows)),
            Self::Ids(Ids::Numbers(v)) => Self::Ids(Ids::Numbers(pick(v, rows))),
            Self::Ids(Ids::Text(v)) => Self::Ids(Ids::Text(pick(v, rows))),
        }
    }
}

/// Where rows stand in the file.
#[derive(Clone, Debug, PartialEq, Eq)]
pub(super) enum RowPlaces {
    /// (first row, its line) of each stretch of consecutive lines, from row 0.
    Lines(Vec<(usize, usize)>),
    /// Binary: rows have numbers only.
    Numbered,
}

impl RowPlaces {
    /// Place of a row (from 0).
    pub fn place(&self, path: &Path, row: usize) -> Place {
        match self {
            Self::Lines(stretches) => {
                let k = stretches.partition_point(|&(first, _)| first <= row);
                let (first, line) = stretches[k.saturating_sub(1)];
                Place::line(path, line + row - first)
            }
            Self::Numbered => Place {
                row: Some(row + 1),
                ..Place::file(path)
            },
        }
    }
}

/// How fields are told apart.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Separator {
    Byte(u8),
    WhiteSpace,
}

/// Makes a plan from a header at a place.
pub(super) type Planner<'a> = dyn FnMut(&[Head], &Place) -> Result<Plan, Faults> + 'a;

/// Reads a CSV file with a header line.
///
/// # Errors
/// A wrong separator, no header, the planner's faults, or those of [`read_rows`].
pub(super) fn read_csv(text: &str, path: &Path, plan: &mut Planner<'_>) -> Result<Table, Faults> {
    let Some((line_no, start, end)) = first_line(text) else {
        return Err(Faults::one(Place::file(path), FaultKind::Empty));
    };
    let place = Place::line(path, line_no);
    let header = &text[start..end];
    let names = split_header(header);
    if names.len() == 1
        && let Some(found) = other_separator(header)
    {
        return Err(Faults::one(
            place,
            FaultKind::Separator {
                found: found.to_owned(),
                expected:
                    "commas (or numbered columns for white space: columns = { x = 1, y = 2 })"
                        .to_owned(),
            },
        ));
    }
    if names.iter().all(|n| n.parse::<f64>().is_ok()) {
        return Err(Faults::one(
            place,
            FaultKind::Value {
                found: header.chars().take(40).collect(),
                expected: "a header that names the columns (x, y, x_err, ...)".to_owned(),
            },
        ));
    }
    let heads: Vec<Head> = names
        .into_iter()
        .map(|name| Head { name, unit: None })
        .collect();
    let plan = plan(&heads, &place)?;
    let rest = &text[end..];
    let rest = rest.strip_prefix('\n').unwrap_or(rest);
    read_rows(
        rest,
        path,
        line_no + 1,
        heads,
        plan,
        Separator::Byte(b','),
        false,
    )
}

/// Reads a table without a header, columns separated by white space.
///
/// # Errors
/// A wrong separator, the planner's faults, or those of [`read_rows`].
pub(super) fn read_white_space(
    text: &str,
    path: &Path,
    plan: &mut Planner<'_>,
) -> Result<Table, Faults> {
    let Some((line_no, start, end)) = first_line(text) else {
        return Err(Faults::one(Place::file(path), FaultKind::Empty));
    };
    let first = &text[start..end];
    let place = Place::line(path, line_no);
    let n = first.split_ascii_whitespace().count();
    if n == 1 && first.contains([',', ';']) {
        return Err(Faults::one(
            place,
            FaultKind::Separator {
                found: if first.contains(',') {
                    "commas"
                } else {
                    "semicolons"
                }
                .to_owned(),
                expected: "white space, since the campaign numbers the columns".to_owned(),
            },
        ));
    }
    let heads: Vec<Head> = (1..=n)
        .map(|k| Head {
            name: k.to_string(),
            unit: None,
        })
        .collect();
    let plan = plan(&heads, &place)?;
    read_rows(
        &text[start..],
        path,
        line_no,
        heads,
        plan,
        Separator::WhiteSpace,
        false,
    )
}

/// Reads data rows into columns. `first_line` is the line number of the first byte;
/// `nan_is_empty` accepts a written `nan` as "not measured".
///
/// # Errors
/// Rows with too few or too many fields, cells that are not finite numbers, no rows at all.
pub(super) fn read_rows(
    text: &str,
    path: &Path,
    first_line: usize,
    heads: Vec<Head>,
    plan: Plan,
    separator: Separator,
    nan_is_empty: bool,
) -> Result<Table, Faults> {
    let mut rows = Rows {
        path,
        heads: &heads,
        wants: &plan.wants,
        columns: plan
            .wants
            .iter()
            .map(|w| empty_column(*w, expected_rows(text)))
            .collect(),
        n_rows: 0,
        stretches: Vec::new(),
        next_line: 0,
        faults: Faults::default(),
        nan_is_empty,
    };
    match separator {
        Separator::Byte(byte) if memchr::memchr(b'"', text.as_bytes()).is_some() => {
            rows.read_quoted(text, first_line, byte);
        }
        Separator::Byte(byte) => rows.read_plain(text, first_line, byte),
        Separator::WhiteSpace => rows.read_white(text, first_line),
    }
    if rows.n_rows == 0 && rows.faults.is_empty() {
        rows.faults.push(Place::file(path), FaultKind::Empty);
    }
    let (columns, n_rows, stretches) = (rows.columns, rows.n_rows, rows.stretches);
    rows.faults.or(Table {
        heads,
        plan,
        columns,
        n_rows,
        rows: RowPlaces::Lines(stretches),
        taken: None,
    })
}

struct Rows<'a> {
    path: &'a Path,
    heads: &'a [Head],
    wants: &'a [Want],
    columns: Vec<Column>,
    n_rows: usize,
    stretches: Vec<(usize, usize)>,
    next_line: usize,
    faults: Faults,
    nan_is_empty: bool,
}

impl Rows<'_> {
    fn read_plain(&mut self, text: &str, first_line: usize, separator: u8) {
        let bytes = text.as_bytes();
        let mut line_no = first_line;
        let mut start = 0;
        while start < bytes.len() {
            let end = memchr::memchr(b'\n', &bytes[start..]).map_or(bytes.len(), |k| start + k);
            let line = trim_return(&bytes[start..end]);
            if !is_idle(line) {
                self.begin(line_no);
                let n = self.cells(line, line_no, separator);
                self.end(n, line_no);
            }
            start = end + 1;
            line_no += 1;
        }
    }

    /// Reads the cells of a line and returns their number.
    fn cells(&mut self, line: &[u8], line_no: usize, separator: u8) -> usize {
        let mut start = 0;
        let mut k = 0;
        loop {
            // Most cells are plain decimals: one look at each byte is enough for them.
            if let (Some(Want::Number), Some((value, n))) =
                (self.wants.get(k), plain_decimal(&line[start..], separator))
            {
                push(&mut self.columns[k], value, b"");
                start += n;
            } else {
                let n = line[start..]
                    .iter()
                    .position(|b| *b == separator)
                    .unwrap_or(line.len() - start);
                self.cell(k, &line[start..start + n], line_no);
                start += n;
            }
            k += 1;
            if start >= line.len() {
                return k;
            }
            // `start` is at a separator; a cell follows it, if only an empty one.
            start += 1;
        }
    }

    fn read_white(&mut self, text: &str, first_line: usize) {
        for (k, line) in text.as_bytes().split(|b| *b == b'\n').enumerate() {
            let line = trim_return(line);
            if is_idle(line) {
                continue;
            }
            let line_no = first_line + k;
            self.begin(line_no);
            let mut n = 0;
            for field in line
                .split(u8::is_ascii_whitespace)
                .filter(|f| !f.is_empty())
            {
                self.cell(n, field, line_no);
                n += 1;
            }
            self.end(n, line_no);
        }
    }

    fn read_quoted(&mut self, text: &str, first_line: usize, separator: u8) {
        let mut reader = csv::ReaderBuilder::new()
            .has_headers(false)
            .flexible(true)
            .delimiter(separator)
            .comment(Some(b'#'))
            .from_reader(text.as_bytes());
        let mut record = csv::ByteRecord::new();
        loop {
            match reader.read_byte_record(&mut record) {
                Ok(true) => {}
                Ok(false) => break,
                Err(e) => {
                    self.faults.push(
                        Place::file(self.path),
                        FaultKind::Format {
                            format: "CSV".to_owned(),
                            reason: e.to_string(),
                        },
                    );
                    break;
                }
            }
            let line = record.position().map_or(1, csv::Position::line);
            let line_no = first_line + line as usize - 1;
            if record.len() == 1 && record[0].trim_ascii().is_empty() {
                continue;
            }
            self.begin(line_no);
            for (k, field) in record.iter().enumerate() {
                self.cell(k, field, line_no);
            }
            self.end(record.len(), line_no);
        }
    }

    fn begin(&mut self, line_no: usize) {
        if self.stretches.is_empty() || line_no != self.next_line {
            self.stretches.push((self.n_rows, line_no));
        }
        self.next_line = line_no + 1;
    }

    fn end(&mut self, n_fields: usize, line_no: usize) {
        if n_fields != self.columns.len() {
            self.faults.push(
                Place::line(self.path, line_no),
                FaultKind::FieldCount {
                    found: n_fields,
                    expected: self.columns.len(),
                },
            );
            // Keep columns in step, so that later rows are still checked.
            for k in n_fields..self.columns.len() {
                push(&mut self.columns[k], f64::NAN, b"");
            }
        }
        self.n_rows += 1;
    }

    fn cell(&mut self, k: usize, raw: &[u8], line_no: usize) {
        let Some(want) = self.wants.get(k) else {
            return;
        };
        match want {
            Want::Skip => {}
            Want::Number => {
                let field = raw.trim_ascii();
                let value = match number(field) {
                    Ok(v) => v,
                    Err(_) if self.nan_is_empty && is_nan(field) => f64::NAN,
                    Err(expected) => {
                        self.faults.push(
                            Place::line(self.path, line_no).with_column(&self.heads[k].name),
                            FaultKind::Value {
                                found: String::from_utf8_lossy(field).chars().take(40).collect(),
                                expected: expected.to_owned(),
                            },
                        );
                        f64::NAN
                    }
                };
                push(&mut self.columns[k], value, b"");
            }
            Want::Text | Want::Id => push(&mut self.columns[k], 0.0, raw.trim_ascii()),
        }
    }
}

fn push(column: &mut Column, value: f64, text: &[u8]) {
    match column {
        Column::Skipped => {}
        Column::Numbers(v) => v.push(value),
        Column::Texts(t) => t.push(String::from_utf8_lossy(text).into_owned()),
        Column::Ids(ids) => push_id(ids, text),
    }
}

/// Adds an identifier; the first that is not a plain whole number turns the column to text.
pub(super) fn push_id(ids: &mut Ids, text: &[u8]) {
    if let Ids::Numbers(numbers) = ids {
        if let Some(n) = canonical_number(text) {
            numbers.push(n);
            return;
        }
        *ids = Ids::Text(numbers.iter().map(u64::to_string).collect());
    }
    if let Ids::Text(texts) = ids {
        texts.push(String::from_utf8_lossy(text).into_owned());
    }
}

/// A whole number written the one way we would write it.
fn canonical_number(text: &[u8]) -> Option<u64> {
    if text.is_empty() || text.len() > 19 || (text[0] == b'0' && text.len() > 1) {
        return None;
    }
    let mut n = 0_u64;
    for &b in text {
        if !b.is_ascii_digit() {
            return None;
        }
        n = n * 10 + u64::from(b - b'0');
    }
    Some(n)
}

fn empty_column(want: Want, n_rows: usize) -> Column {
    match want {
        Want::Skip => Column::Skipped,
        Want::Number => Column::Numbers(Vec::with_capacity(n_rows)),
        Want::Text => Column::Texts(Vec::new()),
        Want::Id => Column::Ids(Ids::Numbers(Vec::with_capacity(n_rows))),
    }
}

/// A guess at the number of rows, from the length of the first.
fn expected_rows(text: &str) -> usize {
    let first = memchr::memchr(b'\n', text.as_bytes()).unwrap_or(text.len());
    // A table with one short row at its head must not ask for the world.
    const SHORTEST_ROW: usize = 16;
    text.len() / (first + 1).max(SHORTEST_ROW) + 1
}

/// A plain decimal (`-12.5`) that ends at the separator or the end of the line, and its length.
///
/// Up to 15 digits and 22 places are exact in one division (Clinger 1990, Proc. PLDI, 92, the
/// fast path); everything else, blanks included, is left to the full parser.
fn plain_decimal(bytes: &[u8], separator: u8) -> Option<(f64, usize)> {
    const MOST_DIGITS: usize = 15;
    const POWERS: [f64; 16] = [
        1.0, 1e1, 1e2, 1e3, 1e4, 1e5, 1e6, 1e7, 1e8, 1e9, 1e10, 1e11, 1e12, 1e13, 1e14, 1e15,
    ];
    let is_negative = *bytes.first()? == b'-';
    let mut at = usize::from(is_negative);
    let mut mantissa = 0_u64;
    let mut n_digits = 0;
    let mut point = None;
    while let Some(&b) = bytes.get(at) {
        let digit = b.wrapping_sub(b'0');
        if digit < 10 {
            n_digits += 1;
            if n_digits > MOST_DIGITS {
                return None;
            }
            mantissa = mantissa * 10 + u64::from(digit);
        } else if b == b'.' && point.is_none() {
            point = Some(n_digits);
        } else if b == separator {
            break;
        } else {
            return None;
        }
        at += 1;
    }
    if n_digits == 0 {
        return None;
    }
    let places = point.map_or(0, |p| n_digits - p);
    let value = mantissa as f64 / POWERS[places];
    // Zero keeps no sign, as sorting needs.
    let value = if is_negative { 0.0 - value } else { value };
    Some((value, at))
}

/// A finite number, `NaN` for an empty cell, or what was expected.
fn number(field: &[u8]) -> Result<f64, &'static str> {
    if field.is_empty() {
        return Ok(f64::NAN);
    }
    match fast_float2::parse::<f64, _>(field) {
        // Adding zero makes -0 and 0 the same, as sorting needs.
        Ok(v) if v.is_finite() => Ok(v + 0.0),
        Ok(_) => Err("a finite number (leave the cell empty for \"not measured\")"),
        Err(_) => Err("a number (leave the cell empty for \"not measured\")"),
    }
}

fn is_nan(field: &[u8]) -> bool {
    field.eq_ignore_ascii_case(b"nan")
}

fn trim_return(line: &[u8]) -> &[u8] {
    line.strip_suffix(b"\r").unwrap_or(line)
}

/// Blank, or a comment.
fn is_idle(line: &[u8]) -> bool {
    line.first().is_none_or(|b| *b == b'#') || line.trim_ascii().is_empty()
}

/// Number, start and end of the first line that is neither blank nor a comment.
fn first_line(text: &str) -> Option<(usize, usize, usize)> {
    let mut start = 0;
    for (k, line) in text.split('\n').enumerate() {
        if !is_idle(trim_return(line.as_bytes())) {
            return Some((k + 1, start, start + line.len()));
        }
        start += line.len() + 1;
    }
    None
}

fn split_header(header: &str) -> Vec<String> {
    let mut reader = csv::ReaderBuilder::new()
        .has_headers(false)
        .from_reader(header.as_bytes());
    let record = reader
        .records()
        .next()
        .and_then(Result::ok)
        .unwrap_or_default();
    record.iter().map(|f| f.trim().to_owned()).collect()
}

fn other_separator(header: &str) -> Option<&'static str> {
    if header.contains(';') {
        Some("semicolons")
    } else if header.contains('\t') {
        Some("tabs")
    } else if header.contains('|') {
        Some("bars")
    } else if header.trim().contains(' ') {
        Some("white space")
    } else {
        None
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn plain_decimals_equal_the_full_parser() {
        let samples = [
            "0",
            "-0",
            "7",
            "-12.5",
            "0.1",
            "3.",
            ".5",
            "123456789012345",
            "0.00000000000001",
            "-98765.4321",
            "1234567.8901234",
            "40.102",
            "0.30000000000000",
        ];
        for text in samples {
            let line = format!("{text},rest");
            let (value, n) = plain_decimal(line.as_bytes(), b',').unwrap();
            let full: f64 = text.parse().unwrap();
            assert_eq!(value.to_bits(), (full + 0.0).to_bits(), "{text}");
            assert_eq!(n, text.len());
        }
        for text in [
            "",
            "-",
            ".",
            "1e5",
            " 1",
            "1 ",
            "1.2.3",
            "nan",
            "1234567890123456",
            "+1",
        ] {
            assert_eq!(plain_decimal(text.as_bytes(), b','), None, "{text}");
        }
    }
}
