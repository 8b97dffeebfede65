//! Raw copies: the exact bytes of every export, compressed, under their SHA-256.
//!
//! Invariant: bytes are durable before any row refers to them: a large copy is written, synced, renamed and its folder
//! synced; a small one is committed with its filing.

use std::io::{self, Read, Write};
use std::path::{Path, PathBuf};

use rusqlite::{OptionalExtension, params};
use sha2::{Digest, Sha256};

use super::codec::{Hash, hex, sha256};
use super::error::{RecordsError, Result};
use super::open::Records;

/// Exports up to this many bytes are kept in the database itself: one fsync for many of them.
pub const SMALL: u64 = 64 * 1024;

const LEVEL: i32 = 1;

/// An export's bytes, kept or ready to be kept.
#[derive(Debug, Clone)]
pub struct Kept {
    /// SHA-256 of the bytes.
    pub sha256: Hash,
    /// How many they are.
    pub size: u64,
    /// SHA-256 of the compressed bytes.
    pub stored_sha256: Hash,
    /// The compressed bytes, when they are to be committed with the filing.
    pub stored: Option<Vec<u8>>,
    /// The bytes themselves, when small.
    pub bytes: Option<Vec<u8>>,
}

impl Records {
    /// Keeps a small export's bytes for the act that will file it.
    pub fn keep_small(&self, bytes: Vec<u8>) -> Result<Kept> {
        let failed = |error| RecordsError::file(&self.file, "compressing an export", error);
        let stored = zstd::bulk::compress(&bytes, LEVEL).map_err(failed)?;
        Ok(Kept {
            sha256: sha256(&bytes),
            size: bytes.len() as u64,
            stored_sha256: sha256(&stored),
            stored: Some(stored),
            bytes: Some(bytes),
        })
    }

    /// Copies a large export's bytes into `raw/`, and makes the copy durable.
    pub fn keep_large(&self, source: &mut dyn Read) -> std::result::Result<Kept, KeepError> {
        let folder = self.folder.join("raw");
        let target = |error| KeepError::Copy(RecordsError::file(&folder, "keeping an export", error));
        let file = self.world.create(&folder).map_err(target)?;
        let mut outer = zstd::Encoder::new(Hashing::new(file), LEVEL).map_err(target)?;
        let mut hasher = Sha256::new();
        let mut size = 0;
        let mut buffer = vec![0u8; 256 * 1024];
        loop {
            let count = match source.read(&mut buffer) {
                Ok(0) => break,
                Ok(count) => count,
                Err(error) if error.kind() == io::ErrorKind::Interrupted => continue,
                Err(error) => return Err(KeepError::Source(error)),
            };
            hasher.update(&buffer[..count]);
            outer.write_all(&buffer[..count]).map_err(target)?;
            size += count as u64;
        }
        let inner = outer.finish().map_err(target)?;
        let sha256: Hash = hasher.finalize().into();
        let stored_sha256: Hash = inner.hasher.finalize().into();
        let name = self.raw_file(&sha256);
        // A copy left by an earlier try may be written again; one that a row knows stays, since another version of the
        // compression would write other bytes than those whose hash stands in the row.
        if !self.has_raw_file(&sha256, &name)? {
            inner.file.finish(&name).map_err(target)?;
        }
        Ok(Kept { sha256, size, stored_sha256, stored: None, bytes: None })
    }

    fn has_raw_file(&self, sha256: &Hash, name: &Path) -> Result<bool> {
        let known = self
            .conn
            .prepare_cached("SELECT 1 FROM raw WHERE sha256 = ?1 AND stored IS NULL")
            .and_then(|mut statement| statement.exists([sha256.as_slice()]))
            .map_err(self.failed("looking for a raw copy"))?;
        Ok(known && self.world.stat(name).is_ok())
    }

    /// Where a large copy lies.
    pub fn raw_file(&self, sha256: &Hash) -> PathBuf {
        self.folder.join("raw").join(format!("{}.zst", hex(sha256)))
    }

    /// Opens an export's bytes from the start.
    pub fn open_raw(&self, sha256: &Hash) -> Result<Box<dyn Read + '_>> {
        let failed = self.failed("reading a raw copy");
        let stored: Option<Option<Vec<u8>>> = self
            .conn
            .prepare_cached("SELECT stored FROM raw WHERE sha256 = ?1")
            .map_err(&failed)?
            .query_row([sha256.as_slice()], |row| row.get(0))
            .optional()
            .map_err(&failed)?;
        let source: Box<dyn Read> = match stored.flatten() {
            Some(bytes) => Box::new(io::Cursor::new(bytes)),
            None => self.open_raw_file(sha256)?,
        };
        let decoder = zstd::Decoder::new(source).map_err(|error| self.raw_failed(sha256, error))?;
        Ok(Box::new(decoder))
    }

    fn open_raw_file(&self, sha256: &Hash) -> Result<Box<dyn Read>> {
        let name = self.raw_file(sha256);
        Ok(self.world.open(&name).map_err(|error| RecordsError::file(&name, "reading a raw copy", error))?)
    }

    fn raw_failed(&self, sha256: &Hash, error: io::Error) -> RecordsError {
        RecordsError::file(&self.raw_file(sha256), "reading a raw copy", error)
    }

    /// Writes the row of a raw copy, unless it is there.
    pub(crate) fn insert_raw(&mut self, kept: &Kept) -> rusqlite::Result<()> {
        let known: Option<i64> = self
            .conn
            .prepare_cached("SELECT 1 FROM raw WHERE sha256 = ?1")?
            .query_row([kept.sha256.as_slice()], |row| row.get(0))
            .optional()?;
        if known.is_none() {
            self.conn
                .prepare_cached("INSERT INTO raw (sha256, size, stored_sha256, stored) VALUES (?1, ?2, ?3, ?4)")?
                .execute(params![
                    kept.sha256.as_slice(),
                    kept.size as i64,
                    kept.stored_sha256.as_slice(),
                    kept.stored.as_deref()
                ])?;
        }
        Ok(())
    }
}

/// An export's kept bytes, which can be read as often as needed while the records are written to.
pub enum RawSource {
    /// As they are.
    Plain(Vec<u8>),
    /// Compressed, from the database.
    Stored(Vec<u8>),
    /// Compressed, in `raw/`.
    File {
        /// The doors.
        world: std::sync::Arc<dyn crate::world::World>,
        /// The copy.
        file: PathBuf,
    },
}

impl RawSource {
    /// A fresh stream over all bytes.
    pub fn open(&self) -> io::Result<Box<dyn Read + '_>> {
        Ok(match self {
            Self::Plain(bytes) => Box::new(bytes.as_slice()),
            Self::Stored(bytes) => Box::new(zstd::Decoder::new(bytes.as_slice())?),
            Self::File { world, file } => Box::new(zstd::Decoder::new(world.open(file)?)?),
        })
    }
}

impl Records {
    /// An export's kept bytes.
    pub fn raw_source(&self, sha256: &Hash) -> Result<RawSource> {
        let stored: Option<Option<Vec<u8>>> = self
            .conn
            .prepare_cached("SELECT stored FROM raw WHERE sha256 = ?1")
            .and_then(|mut statement| statement.query_row([sha256.as_slice()], |row| row.get(0)).optional())
            .map_err(self.failed("reading a raw copy"))?;
        Ok(match stored.flatten() {
            Some(bytes) => RawSource::Stored(bytes),
            None => RawSource::File { world: self.world.clone(), file: self.raw_file(sha256) },
        })
    }

    /// The kept bytes of an export that is about to be filed.
    pub fn kept_source(&self, kept: &mut Kept) -> RawSource {
        match kept.bytes.take() {
            Some(bytes) => RawSource::Plain(bytes),
            None => RawSource::File { world: self.world.clone(), file: self.raw_file(&kept.sha256) },
        }
    }
}

/// Why an export's bytes could not be kept.
#[derive(Debug, thiserror::Error)]
pub enum KeepError {
    /// The export could not be read.
    #[error("{0}")]
    Source(io::Error),
    /// The copy could not be written.
    #[error(transparent)]
    Copy(#[from] RecordsError),
}

/// Hashes what passes through into a new file.
struct Hashing {
    file: Box<dyn crate::world::NewFile>,
    hasher: Sha256,
}

impl Hashing {
    fn new(file: Box<dyn crate::world::NewFile>) -> Self {
        Self { file, hasher: Sha256::new() }
    }
}

impl Write for Hashing {
    fn write(&mut self, bytes: &[u8]) -> io::Result<usize> {
        let count = self.file.write(bytes)?;
        self.hasher.update(&bytes[..count]);
        Ok(count)
    }
    fn flush(&mut self) -> io::Result<()> {
        self.file.flush()
    }
}

/// Whether a file's name is one of a raw copy.
pub fn is_raw_name(path: &Path) -> bool {
    path.extension().is_some_and(|ext| ext == "zst")
}
