//! An output directory that appears whole or not at all.
//!
//! Files are written into a temporary sibling of the target, flushed to disk, and the sibling
//! is renamed at the end. A failure on the way (a full disk, an interrupt) leaves the target
//! as it was. Whether the target may be written is settled before any long work begins.

use std::ffi::OsString;
use std::fs;
use std::io::{self, BufWriter, Write};
use std::path::{Path, PathBuf};
use std::sync::Mutex;

/// Why an output directory was not written.
#[derive(Debug, thiserror::Error)]
pub enum OutputError {
    #[error("{} exists and is not empty; choose another directory or pass --replace", .0.display())]
    NotEmpty(PathBuf),
    #[error(
        "{} holds no {marker}, so it does not look like an earlier result; remove it by hand if it may go",
        target.display()
    )]
    NotOurs { target: PathBuf, marker: String },
    #[error("{} is a file; an output directory was expected", .0.display())]
    IsFile(PathBuf),
    #[error("cannot {what} {}: {source}", path.display())]
    Io {
        what: &'static str,
        path: PathBuf,
        source: io::Error,
    },
}

/// What to do with a directory that is already there.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Existing<'a> {
    Refuse,
    /// Replace it if it holds this file, the mark of an earlier result of the same kind.
    Replace {
        marker: &'a str,
    },
}

impl<'a> Existing<'a> {
    /// Refuse, unless replacing was asked for.
    #[must_use]
    pub fn asked(replace: bool, marker: &'a str) -> Self {
        if replace {
            Self::Replace { marker }
        } else {
            Self::Refuse
        }
    }
}

/// Makes the files of a directory; tests inject one that fails.
pub trait FileMaker: Sync {
    /// # Errors
    /// Whatever prevents the file.
    fn create(&self, path: &Path) -> io::Result<Box<dyn DiskFile>>;
}

/// A file that can be forced to disk.
pub trait DiskFile: Write + Send {
    /// # Errors
    /// Whatever the system reports.
    fn sync(&mut self) -> io::Result<()>;
}

impl DiskFile for fs::File {
    fn sync(&mut self) -> io::Result<()> {
        self.sync_all()
    }
}

/// The real file system.
#[derive(Clone, Copy, Debug, Default)]
pub struct Disk;

impl FileMaker for Disk {
    fn create(&self, path: &Path) -> io::Result<Box<dyn DiskFile>> {
        Ok(Box::new(fs::File::create_new(path)?))
    }
}

/// Temporary directories of runs in progress, for [`remove_unfinished`].
static UNFINISHED: Mutex<Vec<PathBuf>> = Mutex::new(Vec::new());

/// Removes what unfinished runs of this process have written so far: for the handler of an
/// interrupt, after which the process ends.
pub fn remove_unfinished() {
    let mut all = UNFINISHED
        .lock()
        .unwrap_or_else(std::sync::PoisonError::into_inner);
    for path in all.drain(..) {
        // Nobody is left to tell; what cannot be removed stays behind under its partial name.
        let _ = fs::remove_dir_all(path);
    }
}

/// A directory in the making. Dropped before [`RunDir::finish`], it removes all it wrote.
pub struct RunDir<'a> {
    target: PathBuf,
    partial: PathBuf,
    files: &'a dyn FileMaker,
    finished: bool,
}

impl std::fmt::Debug for RunDir<'_> {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        write!(
            f,
            "RunDir({} -> {})",
            self.partial.display(),
            self.target.display()
        )
    }
}

impl RunDir<'static> {
    /// Begins a directory on the real file system.
    ///
    /// # Errors
    /// The target may not be replaced, or its parent cannot be written.
    pub fn begin(target: &Path, existing: Existing<'_>) -> Result<Self, OutputError> {
        Self::begin_with(target, existing, &Disk)
    }
}

impl<'a> RunDir<'a> {
    /// Begins a directory whose files come from `files`.
    ///
    /// # Errors
    /// As [`RunDir::begin`].
    pub fn begin_with(
        target: &Path,
        existing: Existing<'_>,
        files: &'a dyn FileMaker,
    ) -> Result<Self, OutputError> {
        check_target(target, existing)?;
        let name = target
            .file_name()
            .map_or_else(|| OsString::from("result"), std::ffi::OsStr::to_os_string);
        let parent = parent_of(target);
        fs::create_dir_all(&parent).map_err(failed("create", &parent))?;
        let partial = parent.join(hidden_name(&name, "partial"));
        fs::create_dir(&partial).map_err(failed("create", &partial))?;
        if let Ok(mut all) = UNFINISHED.lock() {
            all.push(partial.clone());
        }
        Ok(Self {
            target: target.to_owned(),
            partial,
            files,
            finished: false,
        })
    }

    /// Where the files are until the end.
    #[must_use]
    pub fn partial_path(&self) -> &Path {
        &self.partial
    }

    /// Where they will be.
    #[must_use]
    pub fn target(&self) -> &Path {
        &self.target
    }

    /// Writes one file and forces it to disk. `name` may contain folders.
    ///
    /// # Errors
    /// The file cannot be made or written; the path in the error is the one it would have had.
    pub fn write(
        &self,
        name: &str,
        body: impl FnOnce(&mut dyn Write) -> io::Result<()>,
    ) -> Result<(), OutputError> {
        let path = self.partial.join(name);
        let shown = self.target.join(name);
        let folder = parent_of(&path);
        if folder != self.partial {
            fs::create_dir_all(&folder).map_err(failed("create", &folder))?;
        }
        let file = self.files.create(&path).map_err(failed("create", &shown))?;
        let mut buffer = BufWriter::with_capacity(1 << 18, file);
        body(&mut buffer).map_err(failed("write", &shown))?;
        buffer.flush().map_err(failed("write", &shown))?;
        buffer.get_mut().sync().map_err(failed("write", &shown))
    }

    /// Puts the directory in its place.
    ///
    /// # Errors
    /// A rename fails; an earlier result is then back where it was.
    pub fn finish(mut self) -> Result<(), OutputError> {
        sync_folder(&self.partial);
        let parent = parent_of(&self.target);
        let move_failed = |source| OutputError::Io {
            what: "move the finished result to",
            path: self.target.clone(),
            source,
        };
        if self.target.exists() {
            let name = self.target.file_name().unwrap_or_default();
            let old = parent.join(hidden_name(name, "old"));
            fs::rename(&self.target, &old).map_err(move_failed)?;
            if let Err(e) = fs::rename(&self.partial, &self.target) {
                fs::rename(&old, &self.target).map_err(failed("restore", &self.target))?;
                return Err(move_failed(e));
            }
            self.finished = true;
            fs::remove_dir_all(&old).map_err(failed("remove the replaced result", &old))?;
        } else {
            fs::rename(&self.partial, &self.target).map_err(move_failed)?;
            self.finished = true;
        }
        sync_folder(&parent);
        Ok(())
    }
}

impl Drop for RunDir<'_> {
    fn drop(&mut self) {
        if let Ok(mut all) = UNFINISHED.lock() {
            all.retain(|p| *p != self.partial);
        }
        if !self.finished {
            // The error that led here is already on its way to the user.
            let _ = fs::remove_dir_all(&self.partial);
        }
    }
}

/// May a result be written here?
fn check_target(target: &Path, existing: Existing<'_>) -> Result<(), OutputError> {
    let entries = match fs::read_dir(target) {
        Ok(entries) => entries,
        Err(e) if e.kind() == io::ErrorKind::NotFound => return Ok(()),
        Err(_) if target.is_file() => return Err(OutputError::IsFile(target.to_owned())),
        Err(e) => return Err(failed("read", target)(e)),
    };
    if entries.count() == 0 {
        return Ok(());
    }
    match existing {
        Existing::Refuse => Err(OutputError::NotEmpty(target.to_owned())),
        Existing::Replace { marker } if target.join(marker).exists() => Ok(()),
        Existing::Replace { marker } => Err(OutputError::NotOurs {
            target: target.to_owned(),
            marker: marker.to_owned(),
        }),
    }
}

fn parent_of(path: &Path) -> PathBuf {
    match path.parent() {
        Some(p) if !p.as_os_str().is_empty() => p.to_owned(),
        _ => PathBuf::from("."),
    }
}

/// A sibling's name that no other process uses.
fn hidden_name(name: &std::ffi::OsStr, what: &str) -> OsString {
    let mut hidden = OsString::from(".");
    hidden.push(name);
    hidden.push(format!(".{what}-{}", std::process::id()));
    hidden
}

/// Makes renames durable where the system can; where it cannot, they are still in order.
fn sync_folder(path: &Path) {
    if let Ok(folder) = fs::File::open(path) {
        let _ = folder.sync_all();
    }
}

fn failed<'p>(what: &'static str, path: &'p Path) -> impl FnOnce(io::Error) -> OutputError + 'p {
    move |source| OutputError::Io {
        what,
        path: path.to_owned(),
        source,
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn names(dir: &Path) -> Vec<String> {
        let mut n: Vec<String> = fs::read_dir(dir)
            .unwrap()
            .map(|e| e.unwrap().file_name().into_string().unwrap())
            .collect();
        n.sort();
        n
    }

    /// Takes so many bytes, then the disk is full.
    struct SmallDisk(usize);
    struct SmallFile(usize);
    impl FileMaker for SmallDisk {
        fn create(&self, _: &Path) -> io::Result<Box<dyn DiskFile>> {
            Ok(Box::new(SmallFile(self.0)))
        }
    }
    impl Write for SmallFile {
        fn write(&mut self, b: &[u8]) -> io::Result<usize> {
            if b.len() > self.0 {
                return Err(io::ErrorKind::StorageFull.into());
            }
            self.0 -= b.len();
            Ok(b.len())
        }
        fn flush(&mut self) -> io::Result<()> {
            Ok(())
        }
    }
    impl DiskFile for SmallFile {
        fn sync(&mut self) -> io::Result<()> {
            Ok(())
        }
    }

    #[test]
    fn appears_whole() {
        let dir = tempfile::tempdir().unwrap();
        let target = dir.path().join("run");
        let run = RunDir::begin(&target, Existing::Refuse).unwrap();
        run.write("a.txt", |w| w.write_all(b"a")).unwrap();
        run.write("sub/b.txt", |w| w.write_all(b"b")).unwrap();
        assert!(!target.exists());
        run.finish().unwrap();
        assert_eq!(names(dir.path()), ["run"]);
        assert_eq!(names(&target), ["a.txt", "sub"]);
    }

    #[test]
    fn a_full_disk_leaves_nothing_and_keeps_the_old() {
        let dir = tempfile::tempdir().unwrap();
        let target = dir.path().join("run");
        fs::create_dir(&target).unwrap();
        fs::write(target.join("run.json"), "old").unwrap();
        let full = SmallDisk(3);
        let existing = Existing::Replace { marker: "run.json" };
        let run = RunDir::begin_with(&target, existing, &full).unwrap();
        let e = run
            .write("tracks.ecsv", |w| w.write_all(&[b'x'; 100]))
            .unwrap_err();
        assert!(matches!(e, OutputError::Io { what: "write", ref path, .. }
            if *path == target.join("tracks.ecsv")));
        drop(run);
        assert_eq!(names(dir.path()), ["run"]);
        assert_eq!(fs::read(target.join("run.json")).unwrap(), b"old");
    }

    #[test]
    fn refuses_what_it_must_not_touch() {
        let dir = tempfile::tempdir().unwrap();
        let target = dir.path().join("run");
        fs::create_dir(&target).unwrap();
        // Empty: fine.
        drop(RunDir::begin(&target, Existing::Refuse).unwrap());
        fs::write(target.join("thesis.tex"), "").unwrap();
        let refuse = |e| RunDir::begin(&target, e).unwrap_err();
        assert!(matches!(refuse(Existing::Refuse), OutputError::NotEmpty(_)));
        let replace = Existing::Replace { marker: "run.json" };
        assert!(matches!(refuse(replace), OutputError::NotOurs { .. }));
        let file = dir.path().join("file");
        fs::write(&file, "").unwrap();
        let e = RunDir::begin(&file, Existing::Refuse).unwrap_err();
        assert!(matches!(e, OutputError::IsFile(_)));
        assert_eq!(names(dir.path()), ["file", "run"]);
    }

    #[test]
    fn replaces_an_earlier_result() {
        let dir = tempfile::tempdir().unwrap();
        let target = dir.path().join("run");
        fs::create_dir(&target).unwrap();
        fs::write(target.join("run.json"), "old").unwrap();
        let existing = Existing::Replace { marker: "run.json" };
        let run = RunDir::begin(&target, existing).unwrap();
        run.write("run.json", |w| w.write_all(b"new")).unwrap();
        run.finish().unwrap();
        assert_eq!(fs::read(target.join("run.json")).unwrap(), b"new");
        assert_eq!(names(dir.path()), ["run"]);
    }
}
