//! Detection lists as columns: as read (list units) and in the common frame.

use super::region::Region;
use super::time::JulianYear;
use crate::maths::cov2::Cov2;

/// One list as read: list units, rows in a canonical order (x, y, magnitude, id) that does
/// not depend on the order of rows in the file. All columns have the same length.
#[derive(Clone, Debug, Default)]
pub struct RawList {
    pub ids: Ids,
    /// Row of the file (1-based data row) each entry came from.
    pub file_row: Vec<u32>,
    pub x: Vec<f64>,
    pub y: Vec<f64>,
    /// Error of the position in `error_unit`; `None` where the list has none.
    pub err: Vec<Option<Cov2>>,
    /// Magnitude, `NaN` = not measured.
    pub mag: Vec<f64>,
    /// Error of the magnitude, `NaN` = not given.
    pub mag_err: Vec<f64>,
    /// Radial velocity and its error \[km/s\]; empty when the list has none, `NaN` = not measured.
    pub rv_km_s: Vec<f64>,
    pub rv_err_km_s: Vec<f64>,
    /// Trust 0..1; empty when the list has none.
    pub quality: Vec<f64>,
    /// Name given by the list; empty vector when the list has none, empty text = no name.
    pub given_name: Vec<String>,
    /// Columns carried through: (name, text of every row).
    pub kept: Vec<(String, Vec<String>)>,
    /// Circles (x, y, radius) in list units where nothing can be seen.
    pub mask: Vec<[f64; 3]>,
}

impl RawList {
    #[must_use]
    pub fn len(&self) -> usize {
        self.x.len()
    }
    #[must_use]
    pub fn is_empty(&self) -> bool {
        self.x.is_empty()
    }
}

/// Identifiers of a list's rows, unique within the list.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum Ids {
    /// Whole numbers, kept as such (every text was a canonical decimal).
    Numbers(Vec<u64>),
    Text(Vec<String>),
}

impl Default for Ids {
    fn default() -> Self {
        Self::Numbers(Vec::new())
    }
}

impl Ids {
    /// The identifier as it stood in the list.
    #[must_use]
    pub fn text(&self, row: usize) -> String {
        match self {
            Self::Numbers(n) => n[row].to_string(),
            Self::Text(t) => t[row].clone(),
        }
    }
    /// Appends the identifier of a row.
    pub fn push(&self, row: usize, out: &mut String) {
        use std::fmt::Write;
        match self {
            // Writing to a text cannot fail.
            Self::Numbers(n) => drop(write!(out, "{}", n[row])),
            Self::Text(t) => out.push_str(&t[row]),
        }
    }
    #[must_use]
    pub fn len(&self) -> usize {
        match self {
            Self::Numbers(n) => n.len(),
            Self::Text(t) => t.len(),
        }
    }
    #[must_use]
    pub fn is_empty(&self) -> bool {
        self.len() == 0
    }
}

/// One epoch in the common frame; row k is row k of its [`RawList`].
#[derive(Clone, Debug)]
pub struct FieldEpoch {
    pub time: JulianYear,
    /// Index into `Campaign::instruments`.
    pub instrument: usize,
    pub fwhm_mas: f64,
    pub x_mas: Vec<f64>,
    pub y_mas: Vec<f64>,
    /// Stated errors, before any inflation \[mas^2\].
    pub cov_mas2: Vec<Cov2>,
    /// `NaN` = not measured.
    pub mag: Vec<f64>,
    pub mag_err: Vec<f64>,
    /// Empty when the list has none; `NaN` = not measured.
    pub rv_km_s: Vec<f64>,
    pub rv_err_km_s: Vec<f64>,
    /// Empty when the list has none.
    pub quality: Vec<f64>,
    /// Where a star could have been seen.
    pub region: Region,
}

impl FieldEpoch {
    #[must_use]
    pub fn len(&self) -> usize {
        self.x_mas.len()
    }
    #[must_use]
    pub fn is_empty(&self) -> bool {
        self.x_mas.is_empty()
    }
}
