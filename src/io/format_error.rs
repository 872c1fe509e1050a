//! What is wrong with a binary or XML table.

use std::fmt;

/// The first thing that does not follow a format, and where.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct FormatError {
    pub line: Option<usize>,
    /// Data row, from 1.
    pub row: Option<usize>,
    pub column: Option<String>,
    pub found: String,
    pub expected: String,
}

impl FormatError {
    #[must_use]
    pub fn new(found: impl Into<String>, expected: impl Into<String>) -> Self {
        Self {
            found: found.into(),
            expected: expected.into(),
            ..Self::default()
        }
    }

    /// The same in a row (from 0).
    #[must_use]
    pub fn in_row(mut self, row: usize) -> Self {
        self.row = Some(row + 1);
        self
    }

    /// The same in a column.
    #[must_use]
    pub fn in_column(mut self, name: &str) -> Self {
        self.column = Some(name.to_owned());
        self
    }
}

impl fmt::Display for FormatError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        if let Some(line) = self.line {
            write!(f, "line {line}, ")?;
        }
        if let Some(row) = self.row {
            write!(f, "row {row}, ")?;
        }
        if let Some(column) = &self.column {
            write!(f, "column `{column}`, ")?;
        }
        write!(f, "found {}, expected {}", self.found, self.expected)
    }
}

impl std::error::Error for FormatError {}
