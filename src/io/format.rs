//! The formats a table can be written in.

use std::io::{self, Write};

use super::table::Table;
use super::{ecsv_write, fits_write, votable_write};

#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Format {
    Ecsv,
    Votable,
    Fits,
    #[cfg(feature = "parquet")]
    Parquet,
}

impl Format {
    /// What the names of its files end in.
    #[must_use]
    pub fn extension(self) -> &'static str {
        match self {
            Self::Ecsv => "ecsv",
            Self::Votable => "vot",
            Self::Fits => "fits",
            #[cfg(feature = "parquet")]
            Self::Parquet => "parquet",
        }
    }

    /// Writes a table.
    ///
    /// # Errors
    /// Whatever the writer reports.
    pub fn write(self, table: &Table<'_>, out: &mut dyn Write) -> io::Result<()> {
        match self {
            Self::Ecsv => ecsv_write::write(table, out),
            Self::Votable => votable_write::write(table, out),
            Self::Fits => fits_write::write(table, out),
            #[cfg(feature = "parquet")]
            Self::Parquet => super::parquet_write::write(table, out),
        }
    }
}
