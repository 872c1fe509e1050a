//! Comma- or space-separated text with named columns: plain CSV, or ECSV with its comment block
//! skipped. Only what truth files and the scorer need: cells by column, faults with their place.
//!
//! Layout of ECSV headers: Astropy Proposal for Enhancement 6 (2014), of which only the
//! `delimiter` entry matters here.

use std::fs::File;
use std::io::{BufRead, BufReader, Read};
use std::path::{Path, PathBuf};

use csv::{ByteRecord, ReaderBuilder, Trim};

/// What is wrong with a text table, and where.
#[derive(Debug, thiserror::Error)]
pub enum TextTableError {
    #[error("{}: {source}", path.display())]
    Unreadable {
        path: PathBuf,
        source: std::io::Error,
    },
    #[error("{}: no header line found", path.display())]
    NoHeader { path: PathBuf },
    #[error("{}: no column `{wanted}`; columns found: {found}", path.display())]
    NoColumn {
        path: PathBuf,
        wanted: String,
        found: String,
    },
    #[error("{}:{line}: {found} cells found, {expected} expected", path.display())]
    CellCount {
        path: PathBuf,
        line: u64,
        found: u64,
        expected: u64,
    },
    #[error("{}:{line}: column `{column}`: found `{found}`, expected {expected}", path.display())]
    BadCell {
        path: PathBuf,
        line: u64,
        column: String,
        found: String,
        expected: &'static str,
    },
    #[error("{}:{line}: {what}", path.display())]
    Row {
        path: PathBuf,
        line: u64,
        what: String,
    },
}

/// An open table whose rows have not been read yet.
pub struct TextTable {
    path: PathBuf,
    names: Vec<String>,
    reader: csv::Reader<Box<dyn Read>>,
    /// Comment lines before the header.
    skipped: u64,
}

impl std::fmt::Debug for TextTable {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.debug_struct("TextTable")
            .field("path", &self.path)
            .field("names", &self.names)
            .finish_non_exhaustive()
    }
}

impl TextTable {
    /// Opens a table and reads its header.
    pub fn open(path: &Path) -> Result<Self, TextTableError> {
        let unreadable = |source| TextTableError::Unreadable {
            path: path.to_owned(),
            source,
        };
        let mut text = BufReader::with_capacity(1 << 17, File::open(path).map_err(unreadable)?);
        let (mut skipped, mut delimiter) = (0, b',');
        let mut first = Vec::new();
        loop {
            first.clear();
            if text.read_until(b'\n', &mut first).map_err(unreadable)? == 0 {
                return Err(TextTableError::NoHeader {
                    path: path.to_owned(),
                });
            }
            if first.first() != Some(&b'#') {
                break;
            }
            if skipped == 0 {
                delimiter = b' '; // the default of ECSV
            }
            delimiter = stated_delimiter(&first).unwrap_or(delimiter);
            skipped += 1;
        }
        let whole: Box<dyn Read> = Box::new(std::io::Cursor::new(first).chain(text));
        let mut reader = ReaderBuilder::new()
            .delimiter(delimiter)
            .flexible(true)
            .trim(Trim::All)
            .from_reader(whole);
        let names: Vec<String> = match reader.byte_headers() {
            Ok(head) => head
                .iter()
                .map(|h| {
                    String::from_utf8_lossy(h)
                        .trim_start_matches('\u{feff}')
                        .to_owned()
                })
                .collect(),
            Err(e) => return Err(unreadable(e.into())),
        };
        Ok(Self {
            path: path.to_owned(),
            names,
            reader,
            skipped,
        })
    }

    /// Place of a column, if the table has it.
    #[must_use]
    pub fn column(&self, name: &str) -> Option<usize> {
        self.names.iter().position(|n| n == name)
    }

    /// Place of a column that must be there.
    pub fn require(&self, name: &str) -> Result<usize, TextTableError> {
        self.column(name).ok_or_else(|| TextTableError::NoColumn {
            path: self.path.clone(),
            wanted: name.to_owned(),
            found: self.names.join(", "),
        })
    }

    /// Calls `f` with every row, in file order.
    pub fn for_each(
        mut self,
        mut f: impl FnMut(&Row<'_>) -> Result<(), TextTableError>,
    ) -> Result<(), TextTableError> {
        let mut record = ByteRecord::new();
        loop {
            match self.reader.read_byte_record(&mut record) {
                Ok(false) => return Ok(()),
                Ok(true) => {}
                Err(e) => {
                    return Err(TextTableError::Unreadable {
                        path: self.path,
                        source: e.into(),
                    });
                }
            }
            let line = record.position().map_or(0, csv::Position::line) + self.skipped;
            if record.len() != self.names.len() {
                return Err(TextTableError::CellCount {
                    path: self.path,
                    line,
                    found: record.len() as u64,
                    expected: self.names.len() as u64,
                });
            }
            f(&Row {
                record: &record,
                table: (&self.path, &self.names),
                line,
            })?;
        }
    }
}

/// The delimiter a comment line of an ECSV header states, e.g. `# delimiter: ','`.
fn stated_delimiter(line: &[u8]) -> Option<u8> {
    let line = std::str::from_utf8(line).ok()?;
    let (_, value) = line.split_once("delimiter:")?;
    let value = value.trim().trim_matches(['\'', '"']);
    Some(value.bytes().next().unwrap_or(b' '))
}

/// One row of a table.
#[derive(Debug)]
pub struct Row<'a> {
    record: &'a ByteRecord,
    table: (&'a PathBuf, &'a Vec<String>),
    line: u64,
}

impl Row<'_> {
    /// Line in the file, counted from 1.
    #[must_use]
    pub fn line(&self) -> u64 {
        self.line
    }

    fn bad(&self, column: usize, expected: &'static str) -> TextTableError {
        TextTableError::BadCell {
            path: self.table.0.clone(),
            line: self.line,
            column: self.table.1[column].clone(),
            found: String::from_utf8_lossy(&self.record[column]).into_owned(),
            expected,
        }
    }

    /// A fault of the whole row, in words.
    #[must_use]
    pub fn fault(&self, what: String) -> TextTableError {
        TextTableError::Row {
            path: self.table.0.clone(),
            line: self.line,
            what,
        }
    }

    /// The cell as text.
    pub fn text(&self, column: usize) -> Result<&str, TextTableError> {
        std::str::from_utf8(&self.record[column]).map_err(|_| self.bad(column, "UTF-8 text"))
    }

    /// The cell as a number; an empty cell, `nan` or `null` is `NaN`.
    pub fn number(&self, column: usize) -> Result<f64, TextTableError> {
        match &self.record[column] {
            b"" | b"nan" | b"NaN" | b"null" => Ok(f64::NAN),
            cell => fast_float2::parse(cell).map_err(|_| self.bad(column, "a number")),
        }
    }

    /// The cell as a count.
    pub fn count(&self, column: usize) -> Result<u32, TextTableError> {
        self.text(column)?
            .parse()
            .map_err(|_| self.bad(column, "a whole number that is not negative"))
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn read(text: &str) -> Result<Vec<(String, f64, u32)>, TextTableError> {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("t.csv");
        std::fs::write(&path, text).unwrap();
        let table = TextTable::open(&path)?;
        let (a, b, c) = (
            table.require("a")?,
            table.require("b")?,
            table.require("c")?,
        );
        let mut rows = Vec::new();
        table.for_each(|r| {
            rows.push((r.text(a)?.to_owned(), r.number(b)?, r.count(c)?));
            Ok(())
        })?;
        Ok(rows)
    }

    #[test]
    fn csv_and_ecsv_read_alike() {
        let plain = read("a,b,c\nx,1.5,2\n,,7\n").unwrap();
        let comma = read("# %ECSV 1.0\n# ---\n# delimiter: ','\na,b,c\nx,1.5,2\n,,7\n").unwrap();
        let space = read("# %ECSV 1.0\n# ---\na b c\nx 1.5 2\n\"\" nan 7\n").unwrap();
        assert_eq!(plain[0], ("x".to_owned(), 1.5, 2));
        assert!(plain[1].1.is_nan() && comma[1].1.is_nan() && space[1].1.is_nan());
        assert_eq!(plain[0], comma[0]);
        assert_eq!(plain[0], space[0]);
    }

    #[test]
    fn faults_name_line_and_column() {
        let message = read("# c\na b c\nx one 2\n").unwrap_err().to_string();
        assert!(
            message.ends_with("t.csv:3: column `b`: found `one`, expected a number"),
            "{message}"
        );
        let message = read("a,b\n").unwrap_err().to_string();
        assert!(
            message.ends_with("no column `c`; columns found: a, b"),
            "{message}"
        );
        let message = read("a,b,c\n1,2\n").unwrap_err().to_string();
        assert!(
            message.ends_with("t.csv:2: 2 cells found, 3 expected"),
            "{message}"
        );
    }
}
