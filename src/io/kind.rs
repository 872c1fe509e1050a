//! What kind of table a file is, told by its first bytes.

use std::borrow::Cow;
use std::io::Read;
use std::path::Path;

use super::fault::{FaultKind, Faults, Place};
use super::fits_read;
use super::format_error::FormatError;
#[cfg(feature = "parquet")]
use super::parquet_read;
use super::table::Table;
use super::votable_read;

/// Kinds of table.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Kind {
    Text,
    Ecsv,
    VoTable,
    Fits,
    Parquet,
}

/// The kind of a file that is not compressed.
pub(super) fn kind(bytes: &[u8]) -> Kind {
    let start = bytes
        .strip_prefix(b"\xef\xbb\xbf")
        .unwrap_or(bytes)
        .trim_ascii_start();
    if bytes.starts_with(b"SIMPLE  =") {
        Kind::Fits
    } else if bytes.starts_with(b"PAR1") {
        Kind::Parquet
    } else if start.starts_with(b"<") {
        Kind::VoTable
    } else if super::ecsv_read::looks_like_ecsv(start) {
        Kind::Ecsv
    } else {
        Kind::Text
    }
}

/// The content of a gzip file (any number of members), or the bytes as they are.
///
/// # Errors
/// Damaged gzip data.
pub(super) fn plain<'a>(bytes: &'a [u8], path: &Path) -> Result<Cow<'a, [u8]>, Faults> {
    if !bytes.starts_with(&[0x1f, 0x8b]) {
        return Ok(Cow::Borrowed(bytes));
    }
    let mut out = Vec::with_capacity(bytes.len() * 4);
    match flate2::read::MultiGzDecoder::new(bytes).read_to_end(&mut out) {
        Ok(_) => Ok(Cow::Owned(out)),
        Err(e) => Err(Faults::one(
            Place::file(path),
            FaultKind::Format {
                format: "gzip".to_owned(),
                reason: e.to_string(),
            },
        )),
    }
}

/// Reads a binary or XML table.
///
/// # Errors
/// What does not follow the format.
pub(super) fn read(kind: Kind, bytes: &[u8], path: &Path) -> Result<Table<'static>, Faults> {
    let (format, result) = match kind {
        Kind::VoTable => ("VOTable", votable_read::read(bytes)),
        Kind::Fits => ("FITS", fits_read::read(bytes)),
        #[cfg(feature = "parquet")]
        Kind::Parquet => ("Parquet", parquet_read::read(bytes)),
        #[cfg(not(feature = "parquet"))]
        Kind::Parquet => (
            "Parquet",
            Err(FormatError::new(
                "a Parquet file",
                "another format: this program was built without Parquet",
            )),
        ),
        Kind::Text | Kind::Ecsv => (
            "table",
            Err(FormatError::new("text", "a FITS, VOTable or Parquet file")),
        ),
    };
    result.map_err(|e| {
        Faults::one(
            Place {
                line: e.line,
                row: e.row,
                column: e.column.clone(),
                ..Place::file(path)
            },
            FaultKind::Format {
                format: format.to_owned(),
                reason: format!("found {}, expected {}", e.found, e.expected),
            },
        )
    })
}
