//! Where bytes come from. Readers take a [`Files`], so that tests can hand them files that
//! fail in ways a real disk shows rarely.

use std::io;
use std::path::Path;

use super::fault::{FaultKind, Faults, Place, nearest};

/// A source of files.
pub trait Files: Sync {
    /// The whole content of a file.
    ///
    /// # Errors
    /// Whatever the source reports.
    fn read(&self, path: &Path) -> io::Result<Vec<u8>>;

    /// Is there such a file?
    fn is_file(&self, path: &Path) -> bool;

    /// Names in a folder, to suggest one; empty when unknown.
    fn names_beside(&self, path: &Path) -> Vec<String>;
}

/// The file system.
#[derive(Clone, Copy, Debug, Default)]
pub struct Disk;

impl Files for Disk {
    fn read(&self, path: &Path) -> io::Result<Vec<u8>> {
        if path.is_dir() {
            return Err(io::Error::other("it is a folder, expected a file"));
        }
        std::fs::read(path)
    }

    fn is_file(&self, path: &Path) -> bool {
        path.is_file()
    }

    fn names_beside(&self, path: &Path) -> Vec<String> {
        let Some(folder) = path.parent() else {
            return Vec::new();
        };
        let folder = if folder.as_os_str().is_empty() {
            Path::new(".")
        } else {
            folder
        };
        let mut names: Vec<String> = std::fs::read_dir(folder)
            .into_iter()
            .flatten()
            .filter_map(|entry| entry.ok()?.file_name().into_string().ok())
            .collect();
        names.sort();
        names
    }
}

/// Reads a file or says why it cannot be read.
///
/// # Errors
/// One fault: no such file (with the nearest name in the folder), or the reason.
pub fn read(files: &dyn Files, path: &Path) -> Result<Vec<u8>, Faults> {
    files.read(path).map_err(|e| {
        let kind = if e.kind() == io::ErrorKind::NotFound {
            no_file(files, path)
        } else {
            FaultKind::Unreadable {
                reason: e.to_string(),
            }
        };
        Faults::one(Place::file(path), kind)
    })
}

/// The fault for a missing file, with the nearest name beside it.
#[must_use]
pub fn no_file(files: &dyn Files, path: &Path) -> FaultKind {
    let names = files.names_beside(path);
    let wrong = path.file_name().and_then(|n| n.to_str()).unwrap_or("");
    FaultKind::NoFile {
        nearest: nearest(wrong, names.iter().map(String::as_str)),
    }
}

/// UTF-8 text without a byte-order mark.
///
/// # Errors
/// One fault with line and byte of the first wrong sequence.
pub fn text<'a>(bytes: &'a [u8], path: &Path) -> Result<&'a str, Faults> {
    let body = bytes.strip_prefix(b"\xef\xbb\xbf").unwrap_or(bytes);
    std::str::from_utf8(body).map_err(|e| {
        let at = e.valid_up_to();
        let line = 1 + memchr::memchr_iter(b'\n', &body[..at]).count();
        Faults::one(
            Place::line(path, line),
            FaultKind::NotUtf8 {
                byte: at + 1 + (bytes.len() - body.len()),
            },
        )
    })
}
