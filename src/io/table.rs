//! A table in memory: named columns with unit, description and meaning, from which every
//! format is written and into which every table of ours is read.
//!
//! A column either owns its values or makes each from its row number, so that a table of ten
//! million memberships is written without being copied first. `NaN` and the empty text mean
//! "none"; no format ever sees a `NaN`.

use std::collections::BTreeMap;
use std::fmt;

/// A named table.
#[derive(Debug)]
pub struct Table<'a> {
    pub name: String,
    pub description: String,
    pub columns: Vec<Column<'a>>,
    n_rows: usize,
}

/// One column.
#[derive(Debug)]
pub struct Column<'a> {
    pub name: String,
    /// As in `mas / yr`; empty = none. Other spellings: [`super::unit_text`].
    pub unit: String,
    pub description: String,
    /// Unified content descriptor of the Virtual Observatory, where it has one.
    pub ucd: Option<String>,
    pub values: Values<'a>,
}

/// The values of a column.
#[derive(Debug)]
pub enum Values<'a> {
    /// `NaN` = none.
    Float(Source<'a, f64>, Precision),
    Int(Source<'a, Option<i64>>),
    Bool(Source<'a, Option<bool>>),
    Text(Texts<'a>),
}

/// How many digits text formats write; binary formats keep every bit.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Precision {
    /// The shortest text that reads back as the same number.
    Full,
    /// The shortest text that reads back as the same single-precision number.
    Single,
    /// So many digits after the point, trailing zeros left out.
    Decimals(u8),
}

/// Values held, or made from the row number.
pub enum Source<'a, T> {
    Held(Vec<T>),
    Made(Box<dyn Fn(usize) -> T + Sync + 'a>),
}

/// Appends the text of a row.
pub type PushText<'a> = dyn Fn(usize, &mut String) + Sync + 'a;

/// Texts held, or appended to a buffer from the row number.
pub enum Texts<'a> {
    Held(Vec<String>),
    Made(Box<PushText<'a>>),
}

impl<T: Copy> Source<'_, T> {
    #[must_use]
    pub fn at(&self, row: usize) -> T {
        match self {
            Self::Held(v) => v[row],
            Self::Made(f) => f(row),
        }
    }
}

impl Texts<'_> {
    /// Appends the text of a row.
    pub fn push(&self, row: usize, out: &mut String) {
        match self {
            Self::Held(v) => out.push_str(&v[row]),
            Self::Made(f) => f(row, out),
        }
    }

    #[must_use]
    pub fn at(&self, row: usize) -> String {
        let mut s = String::new();
        self.push(row, &mut s);
        s
    }
}

impl<T> fmt::Debug for Source<'_, T> {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::Held(v) => write!(f, "Held({} values)", v.len()),
            Self::Made(_) => write!(f, "Made"),
        }
    }
}

impl fmt::Debug for Texts<'_> {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::Held(v) => write!(f, "Held({} texts)", v.len()),
            Self::Made(_) => write!(f, "Made"),
        }
    }
}

impl<'a> Table<'a> {
    #[must_use]
    pub fn new(name: &str, description: &str, n_rows: usize) -> Self {
        Self {
            name: name.to_owned(),
            description: description.to_owned(),
            columns: Vec::new(),
            n_rows,
        }
    }

    #[must_use]
    pub fn n_rows(&self) -> usize {
        self.n_rows
    }

    /// Adds a column; held values must have one entry per row.
    pub fn push(&mut self, column: Column<'a>) {
        let held = match &column.values {
            Values::Float(Source::Held(v), _) => Some(v.len()),
            Values::Int(Source::Held(v)) => Some(v.len()),
            Values::Bool(Source::Held(v)) => Some(v.len()),
            Values::Text(Texts::Held(v)) => Some(v.len()),
            _ => None,
        };
        assert!(
            held.is_none_or(|n| n == self.n_rows),
            "column {} has {held:?} values in a table of {} rows",
            column.name,
            self.n_rows
        );
        self.columns.push(column);
    }

    fn with(mut self, name: &str, unit: &str, description: &str, values: Values<'a>) -> Self {
        self.push(Column {
            name: name.to_owned(),
            unit: unit.to_owned(),
            description: description.to_owned(),
            ucd: None,
            values,
        });
        self
    }

    /// Adds a column of numbers, `NaN` = none.
    #[must_use]
    pub fn float(
        self,
        name: &str,
        unit: &str,
        description: &str,
        precision: Precision,
        at: impl Fn(usize) -> f64 + Sync + 'a,
    ) -> Self {
        let values = Values::Float(Source::Made(Box::new(at)), precision);
        self.with(name, unit, description, values)
    }

    /// Adds a column of whole numbers.
    #[must_use]
    pub fn int(
        self,
        name: &str,
        description: &str,
        at: impl Fn(usize) -> Option<i64> + Sync + 'a,
    ) -> Self {
        self.with(
            name,
            "",
            description,
            Values::Int(Source::Made(Box::new(at))),
        )
    }

    /// Adds a column of yes and no.
    #[must_use]
    pub fn bool(
        self,
        name: &str,
        description: &str,
        at: impl Fn(usize) -> Option<bool> + Sync + 'a,
    ) -> Self {
        self.with(
            name,
            "",
            description,
            Values::Bool(Source::Made(Box::new(at))),
        )
    }

    /// Adds a column of texts; `at` appends the text of a row.
    #[must_use]
    pub fn text(
        self,
        name: &str,
        description: &str,
        at: impl Fn(usize, &mut String) + Sync + 'a,
    ) -> Self {
        self.with(
            name,
            "",
            description,
            Values::Text(Texts::Made(Box::new(at))),
        )
    }

    /// Gives the last column its content descriptor.
    #[must_use]
    pub fn ucd(mut self, ucd: &str) -> Self {
        if let Some(c) = self.columns.last_mut() {
            c.ucd = Some(ucd.to_owned());
        }
        self
    }

    #[must_use]
    pub fn column(&self, name: &str) -> Option<&Column<'a>> {
        self.columns.iter().find(|c| c.name == name)
    }

    fn required(&self, name: &str) -> Result<&Values<'a>, ColumnError> {
        self.column(name)
            .map(|c| &c.values)
            .ok_or_else(|| ColumnError::Missing {
                table: self.name.clone(),
                column: name.to_owned(),
            })
    }

    fn wrong(&self, name: &str, expected: &'static str) -> ColumnError {
        ColumnError::Kind {
            table: self.name.clone(),
            column: name.to_owned(),
            expected,
        }
    }

    /// A column as numbers, whole numbers included; `NaN` = none.
    ///
    /// # Errors
    /// No such column, or not numbers.
    pub fn floats(&self, name: &str) -> Result<Vec<f64>, ColumnError> {
        let n = self.n_rows;
        match self.required(name)? {
            Values::Float(s, _) => Ok((0..n).map(|k| s.at(k)).collect()),
            Values::Int(s) => Ok((0..n)
                .map(|k| s.at(k).map_or(f64::NAN, |v| v as f64))
                .collect()),
            // A column without a single value has no kind of its own.
            Values::Text(t) if (0..n).all(|k| t.at(k).is_empty()) => Ok(vec![f64::NAN; n]),
            _ => Err(self.wrong(name, "numbers")),
        }
    }

    /// A column as whole numbers.
    ///
    /// # Errors
    /// No such column, or not whole numbers.
    pub fn ints(&self, name: &str) -> Result<Vec<Option<i64>>, ColumnError> {
        match self.required(name)? {
            Values::Int(s) => Ok((0..self.n_rows).map(|k| s.at(k)).collect()),
            _ => Err(self.wrong(name, "whole numbers")),
        }
    }

    /// A column of yes and no.
    ///
    /// # Errors
    /// No such column, or not yes and no.
    pub fn bools(&self, name: &str) -> Result<Vec<Option<bool>>, ColumnError> {
        match self.required(name)? {
            Values::Bool(s) => Ok((0..self.n_rows).map(|k| s.at(k)).collect()),
            _ => Err(self.wrong(name, "true and false")),
        }
    }

    /// A column as texts; empty = none.
    ///
    /// # Errors
    /// No such column, or not text.
    pub fn texts(&self, name: &str) -> Result<Vec<String>, ColumnError> {
        match self.required(name)? {
            Values::Text(t) => Ok((0..self.n_rows).map(|k| t.at(k)).collect()),
            _ => Err(self.wrong(name, "text")),
        }
    }

    /// Row of each text of a column, for looking up names.
    ///
    /// # Errors
    /// No such column, or not text.
    pub fn rows_by(&self, name: &str) -> Result<BTreeMap<String, usize>, ColumnError> {
        let texts = self.texts(name)?;
        Ok(texts.into_iter().enumerate().map(|(k, t)| (t, k)).collect())
    }
}

/// A table lacks what its reader needs.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
pub enum ColumnError {
    #[error("table `{table}` has no column `{column}`")]
    Missing { table: String, column: String },
    #[error("column `{column}` of table `{table}` does not hold {expected}")]
    Kind {
        table: String,
        column: String,
        expected: &'static str,
    },
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn made_and_held_columns_read_alike() {
        let mut t = Table::new("t", "", 2)
            .float("x_mas", "mas", "place", Precision::Full, |k| k as f64)
            .text("id", "name", |k, out| out.push_str(["a", "b"][k]));
        t.push(Column {
            name: "n".into(),
            unit: String::new(),
            description: String::new(),
            ucd: None,
            values: Values::Int(Source::Held(vec![Some(3), None])),
        });
        assert_eq!(t.floats("x_mas").unwrap(), [0.0, 1.0]);
        assert_eq!(t.texts("id").unwrap(), ["a", "b"]);
        assert!(t.floats("n").unwrap()[1].is_nan());
        assert!(matches!(t.ints("id"), Err(ColumnError::Kind { .. })));
        assert!(matches!(t.ints("no"), Err(ColumnError::Missing { .. })));
    }
}
