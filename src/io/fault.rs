//! Faults of the input as data: where, what was found, what was expected.
//!
//! Readers collect faults instead of stopping at the first, so that a person mends a file once.
//! Only `Display` here turns them into words; everything else works on the fields.

use std::fmt;
use std::path::{Path, PathBuf};

/// Most faults kept for one file; the rest are counted.
pub const MAX_PER_FILE: usize = 20;
/// Most faults shown at once.
pub const MAX_SHOWN: usize = 100;

/// Where a fault lies. Lines and characters count from 1.
#[derive(Clone, Debug, Default, PartialEq, Eq, PartialOrd, Ord)]
pub struct Place {
    pub file: PathBuf,
    pub line: Option<usize>,
    /// Character of the line (text written by hand).
    pub character: Option<usize>,
    /// Data row, for files that have no lines.
    pub row: Option<usize>,
    /// Name of the column of a table.
    pub column: Option<String>,
}

impl Place {
    #[must_use]
    pub fn file(path: &Path) -> Self {
        Self {
            file: path.to_owned(),
            ..Self::default()
        }
    }
    #[must_use]
    pub fn line(path: &Path, line: usize) -> Self {
        Self {
            line: Some(line),
            ..Self::file(path)
        }
    }
    #[must_use]
    pub fn with_column(mut self, name: &str) -> Self {
        self.column = Some(name.to_owned());
        self
    }
}

impl fmt::Display for Place {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "{}", self.file.display())?;
        if let Some(line) = self.line {
            write!(f, ":{line}")?;
            if let Some(character) = self.character {
                write!(f, ":{character}")?;
            }
        }
        if let Some(row) = self.row {
            write!(f, ", row {row}")?;
        }
        if let Some(column) = &self.column {
            write!(f, ", column `{column}`")?;
        }
        Ok(())
    }
}

/// One thing wrong with the input.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
#[error("{place}: {kind}")]
pub struct Fault {
    pub place: Place,
    pub kind: FaultKind,
}

/// What is wrong.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
#[non_exhaustive]
pub enum FaultKind {
    #[error("no such file{}", did_you_mean(nearest))]
    NoFile { nearest: Option<String> },
    #[error("cannot be read: {reason}")]
    Unreadable { reason: String },
    #[error("byte {byte} is not UTF-8 text; save the file as UTF-8")]
    NotUtf8 { byte: usize },
    #[error("not valid TOML: {message}")]
    Toml { message: String },
    #[error("unknown key `{key}` in {table}{}", nearest_or_known(nearest, known))]
    UnknownKey {
        table: String,
        key: String,
        nearest: Option<String>,
        known: Vec<String>,
    },
    #[error("{table} has no `{key}`; {expected}")]
    MissingKey {
        table: String,
        key: String,
        expected: String,
    },
    #[error("`{key}` is {found}, expected {expected}")]
    BadValue {
        key: String,
        found: String,
        expected: String,
    },
    #[error("{} given together in {table}; {expected}", quoted(keys))]
    Clash {
        table: String,
        keys: Vec<String>,
        expected: String,
    },
    #[error("{what} `{value}` is given twice (first {first}); {expected}")]
    Twice {
        what: String,
        value: String,
        first: String,
        expected: String,
    },
    #[error("unknown {what} `{found}`{}", nearest_or_known(nearest, known))]
    UnknownName {
        what: String,
        found: String,
        nearest: Option<String>,
        known: Vec<String>,
    },
    #[error("holds no rows; a list needs at least one detection")]
    Empty,
    #[error("fields look separated by {found}, expected {expected}")]
    Separator { found: String, expected: String },
    #[error(
        "no column `{wanted}`; found {}{}",
        listed(found),
        did_you_mean(nearest)
    )]
    NoColumn {
        wanted: String,
        found: Vec<String>,
        nearest: Option<String>,
    },
    #[error(
        "is nearly the known name `{known}`; rename it, or name it in the campaign: columns = {{ {known} = \"...\" }}"
    )]
    NearlyNamed { known: String },
    #[error("{found} fields in this row, expected {expected} as in the header")]
    FieldCount { found: usize, expected: usize },
    #[error("found `{found}`, expected {expected}")]
    Value { found: String, expected: String },
    #[error("empty, but every row needs it")]
    EmptyCell,
    #[error(
        "{what} is not given and {instrument} has no `{default}`; add the column or the default"
    )]
    NoDefault {
        what: String,
        instrument: String,
        default: String,
    },
    #[error("unit `{found}` does not fit: expected {expected}")]
    Unit { found: String, expected: String },
    #[error("contradicts the ruling at line {line}: {reason}")]
    Contradiction { line: usize, reason: String },
    #[error("malformed {format}: {reason}")]
    Format { format: String, reason: String },
}

fn did_you_mean(nearest: &Option<String>) -> String {
    nearest
        .as_ref()
        .map_or_else(String::new, |n| format!("; did you mean `{n}`?"))
}

fn nearest_or_known(nearest: &Option<String>, known: &[String]) -> String {
    match nearest {
        Some(_) => did_you_mean(nearest),
        None if known.is_empty() => String::new(),
        None => format!("; known: {}", known.join(", ")),
    }
}

fn quoted(names: &[String]) -> String {
    let q: Vec<String> = names.iter().map(|n| format!("`{n}`")).collect();
    q.join(" and ")
}

fn listed(names: &[String]) -> String {
    const SHOWN: usize = 12;
    if names.is_empty() {
        return "no column".to_owned();
    }
    let mut text = names[..names.len().min(SHOWN)].join(", ");
    if names.len() > SHOWN {
        text.push_str(&format!(" and {} more", names.len() - SHOWN));
    }
    text
}

/// All faults of a reading, sorted by file and place.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Faults {
    list: Vec<Fault>,
    /// Further faults that were found but not kept.
    left_out: usize,
}

impl Faults {
    /// A single fault.
    #[must_use]
    pub fn one(place: Place, kind: FaultKind) -> Self {
        let mut f = Self::default();
        f.push(place, kind);
        f
    }

    /// Adds a fault, or counts it when its file already has [`MAX_PER_FILE`].
    pub fn push(&mut self, place: Place, kind: FaultKind) {
        let of_file = self
            .list
            .iter()
            .rev()
            .take_while(|f| f.place.file == place.file)
            .count();
        if of_file >= MAX_PER_FILE {
            self.left_out += 1;
        } else {
            self.list.push(Fault { place, kind });
        }
    }

    /// Takes over the faults of another reading.
    pub fn append(&mut self, other: Self) {
        self.list.extend(other.list);
        self.left_out += other.left_out;
    }

    /// The value, unless there are faults.
    ///
    /// # Errors
    /// The faults, sorted, when there are any.
    pub fn or<T>(mut self, value: T) -> Result<T, Self> {
        if self.is_empty() {
            return Ok(value);
        }
        self.sort();
        Err(self)
    }

    /// Puts the faults in the order of files and places.
    pub fn sort(&mut self) {
        self.list.sort_by(|a, b| a.place.cmp(&b.place));
    }

    #[must_use]
    pub fn is_empty(&self) -> bool {
        self.list.is_empty()
    }

    /// Faults that are kept; more may have been counted.
    #[must_use]
    pub fn kept(&self) -> &[Fault] {
        &self.list
    }

    /// Number of faults found, kept or not.
    #[must_use]
    pub fn count(&self) -> usize {
        self.list.len() + self.left_out
    }
}

impl fmt::Display for Faults {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        for (k, fault) in self.list.iter().take(MAX_SHOWN).enumerate() {
            if k > 0 {
                writeln!(f)?;
            }
            write!(f, "{fault}")?;
        }
        let hidden = self.count() - self.list.len().min(MAX_SHOWN);
        if hidden > 0 {
            write!(f, "\n... and {hidden} more of these")?;
        }
        Ok(())
    }
}

impl std::error::Error for Faults {}

/// The known name nearest to a wrong one: the same but for case and punctuation, or a few
/// slips of the pen away (Damerau-Levenshtein distance at most a third of the length).
#[must_use]
pub fn nearest<'a>(wrong: &str, known: impl IntoIterator<Item = &'a str>) -> Option<String> {
    let plain = squashed(wrong);
    known
        .into_iter()
        .map(|k| {
            let d = if squashed(k) == plain {
                0
            } else {
                strsim::damerau_levenshtein(&wrong.to_lowercase(), &k.to_lowercase())
            };
            (d, k)
        })
        .filter(|(d, k)| *d == 0 || *d <= k.chars().count().max(3) / 3)
        .min_by_key(|&(d, k)| (d, k.to_owned()))
        .map(|(_, k)| k.to_owned())
}

/// Lower case without `_`, `-`, blanks and dots.
#[must_use]
pub fn squashed(name: &str) -> String {
    name.chars()
        .filter(|c| !matches!(c, '_' | '-' | ' ' | '.'))
        .flat_map(char::to_lowercase)
        .collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn nearest_finds_slips_and_leaves_strangers() {
        let known = ["fwhm_mas", "limit_mag", "unit", "error_unit"];
        assert_eq!(nearest("fwhm_mass", known).as_deref(), Some("fwhm_mas"));
        assert_eq!(nearest("LimitMag", known).as_deref(), Some("limit_mag"));
        assert_eq!(nearest("colour", known), None);
    }

    #[test]
    fn faults_are_limited_per_file_and_counted() {
        let mut f = Faults::default();
        for k in 0..MAX_PER_FILE + 5 {
            f.push(Place::line(Path::new("a.csv"), k + 1), FaultKind::EmptyCell);
        }
        assert_eq!(f.kept().len(), MAX_PER_FILE);
        assert_eq!(f.count(), MAX_PER_FILE + 5);
        assert!(f.to_string().ends_with("... and 5 more of these"));
    }

    #[test]
    fn place_reads_like_a_compiler_message() {
        let p = Place::line(Path::new("lists/e000.csv"), 12).with_column("x");
        assert_eq!(p.to_string(), "lists/e000.csv:12, column `x`");
    }
}
