//! The doors to the world: clock, chance and files.
//!
//! Invariant: intake and records reach the clock, random bytes and export or raw files only through a [`World`], so
//! that a test can stand a simulated one in their place. SQLite's own file access stays real.

use std::fs;
use std::io::{self, Read, Write};
use std::os::unix::fs::{MetadataExt, OpenOptionsExt};
use std::path::{Path, PathBuf};

use chrono::{DateTime, Utc};

/// What a folder holds under one name.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Entry {
    /// The whole path.
    pub path: PathBuf,
    /// Whether it is a folder.
    pub folder: bool,
}

/// What is known of a file without reading it.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Stat {
    /// Bytes.
    pub size: u64,
    /// When its bytes were last written, in nanoseconds since 1970.
    pub modified: i64,
    /// When its entry last changed, in nanoseconds since 1970: a copy with old times betrays itself here.
    pub changed: i64,
}

/// A file in the making, which nobody sees under its name until [`NewFile::finish`].
pub trait NewFile: Write {
    /// Makes the bytes durable, gives them their name, and makes the name durable.
    fn finish(self: Box<Self>, name: &Path) -> io::Result<()>;
}

/// Clock, chance and files.
pub trait World: Send + Sync {
    /// The moment.
    fn now(&self) -> DateTime<Utc>;
    /// Fills `bytes` at random.
    fn chance(&self, bytes: &mut [u8]);
    /// What a folder holds, in no particular order.
    fn list(&self, folder: &Path) -> io::Result<Vec<Entry>>;
    /// What is known of a file.
    fn stat(&self, file: &Path) -> io::Result<Stat>;
    /// A file's bytes from the start.
    fn open(&self, file: &Path) -> io::Result<Box<dyn Read + Send>>;
    /// A new file in `folder`, readable by its owner alone.
    fn create(&self, folder: &Path) -> io::Result<Box<dyn NewFile>>;
}

/// The machine's own clock and files.
#[derive(Debug, Clone, Copy, Default)]
pub struct RealWorld;

struct RealNewFile {
    file: tempfile::NamedTempFile,
}

impl Write for RealNewFile {
    fn write(&mut self, bytes: &[u8]) -> io::Result<usize> {
        self.file.write(bytes)
    }
    fn flush(&mut self) -> io::Result<()> {
        self.file.flush()
    }
}

impl NewFile for RealNewFile {
    fn finish(self: Box<Self>, name: &Path) -> io::Result<()> {
        self.file.as_file().sync_all()?;
        self.file.persist(name).map_err(|error| error.error)?;
        match name.parent() {
            Some(folder) => fs::File::open(folder)?.sync_all(),
            None => Ok(()),
        }
    }
}

impl World for RealWorld {
    fn now(&self) -> DateTime<Utc> {
        Utc::now()
    }

    fn chance(&self, bytes: &mut [u8]) {
        rand::fill(bytes);
    }

    fn list(&self, folder: &Path) -> io::Result<Vec<Entry>> {
        fs::read_dir(folder)?
            .map(|entry| {
                let entry = entry?;
                // A link to a file is an export like any other; a link to a folder is not followed, so that no
                // loop and no way out of the export folder arises.
                Ok(Entry { path: entry.path(), folder: entry.file_type()?.is_dir() })
            })
            .collect()
    }

    fn stat(&self, file: &Path) -> io::Result<Stat> {
        let meta = fs::metadata(file)?;
        if !meta.is_file() {
            return Err(io::Error::new(io::ErrorKind::InvalidInput, "not a regular file"));
        }
        let nanos = |seconds: i64, nanos: i64| seconds.saturating_mul(1_000_000_000).saturating_add(nanos);
        Ok(Stat {
            size: meta.len(),
            modified: nanos(meta.mtime(), meta.mtime_nsec()),
            changed: nanos(meta.ctime(), meta.ctime_nsec()),
        })
    }

    fn open(&self, file: &Path) -> io::Result<Box<dyn Read + Send>> {
        // O_NONBLOCK: an export folder may hold a pipe, which would otherwise stop the whole intake.
        let flags = rustix::fs::OFlags::NONBLOCK.bits() as i32;
        let file = fs::OpenOptions::new().read(true).custom_flags(flags).open(file)?;
        Ok(Box::new(file))
    }

    fn create(&self, folder: &Path) -> io::Result<Box<dyn NewFile>> {
        Ok(Box::new(RealNewFile { file: tempfile::Builder::new().prefix(".new-").tempfile_in(folder)? }))
    }
}
