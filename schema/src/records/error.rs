//! What can go wrong with the records, as people meet it.

use std::io;
use std::path::{Path, PathBuf};

use thiserror::Error;

/// A failure of the records. Its text is one plain sentence or two: what happened, where, and what next.
#[derive(Debug, Error)]
pub enum RecordsError {
    /// There are none.
    #[error(
        "there are no records in {}. They are made by the first command that changes them, such as \
         `revisant roster import roster.csv --study DIR`", .0.display()
    )]
    Absent(PathBuf),
    /// They lie on a network file system.
    #[error(
        "{} lies on a network file system ({kind}), whose locking cannot be trusted with records. Keep the study \
         folder on a local disk and name the share as an instrument's folder in the plan", folder.display()
    )]
    Network {
        /// The records' folder.
        folder: PathBuf,
        /// The kind of file system.
        kind: String,
    },
    /// A newer program made them.
    #[error(
        "{} was made by a newer version of this program (layout {found}; this one knows {known}). It was left \
         untouched; use the newer version", file.display()
    )]
    Newer {
        /// The file.
        file: PathBuf,
        /// Its layout.
        found: i64,
        /// The newest layout known here.
        known: i64,
    },
    /// The file is not records.
    #[error("{} is not a file of records. It was left untouched; move it away, or name another folder", .0.display())]
    Foreign(PathBuf),
    /// Someone else writes.
    #[error(
        "another program is writing to {} and did not finish within {seconds} seconds. Nothing was changed; try \
         again in a moment", file.display()
    )]
    Busy {
        /// The file.
        file: PathBuf,
        /// How long was waited.
        seconds: u64,
    },
    /// The disk is full.
    #[error("the disk that holds {} is full. Nothing of this act was recorded; free some space and try again", .0.display())]
    Full(PathBuf),
    /// No right to write.
    #[error("{} cannot be written ({why}). Nothing was changed; mend the rights of the folder and its files", file.display())]
    ReadOnly {
        /// The file or folder.
        file: PathBuf,
        /// What the system says.
        why: String,
    },
    /// The database failed otherwise.
    #[error("the records in {} failed while {doing}: {source}", file.display())]
    Database {
        /// The file.
        file: PathBuf,
        /// What was being done.
        doing: &'static str,
        /// What the database says.
        source: rusqlite::Error,
    },
    /// A file failed.
    #[error("{}: {doing} failed: {source}", file.display())]
    File {
        /// The file.
        file: PathBuf,
        /// What was being done.
        doing: &'static str,
        /// What the system says.
        source: io::Error,
    },
    /// The records contradict themselves.
    #[error("the records are damaged: {0}. Run `revisant trail verify` and restore from a backup")]
    Damaged(String),
    /// The roster or the plan changed while an export was being placed.
    #[error("the plan, the roster or a decision changed meanwhile")]
    Moved,
    /// The work was stopped on request; what was not finished waits.
    #[error("the work was stopped on request")]
    Stopped,
    /// What was asked for does not exist, or cannot be done as asked.
    #[error("{0}")]
    Refused(String),
}

/// How long a command waits for another writer.
pub const PATIENCE_SECONDS: u64 = 15;

impl RecordsError {
    /// Wraps a database error, telling the common causes apart.
    pub fn database(file: &Path, doing: &'static str, source: rusqlite::Error) -> Self {
        use rusqlite::ErrorCode as Code;
        let file = file.to_path_buf();
        match source.sqlite_error_code() {
            Some(Code::DatabaseBusy | Code::DatabaseLocked) => Self::Busy { file, seconds: PATIENCE_SECONDS },
            Some(Code::DiskFull) => Self::Full(file),
            Some(Code::ReadOnly) => Self::ReadOnly { file, why: "it is read-only".to_owned() },
            Some(Code::CannotOpen | Code::PermissionDenied) => {
                Self::ReadOnly { file, why: "it cannot be opened".to_owned() }
            }
            Some(Code::NotADatabase) => Self::Foreign(file),
            Some(Code::DatabaseCorrupt) => Self::Damaged(format!("{}: {source}", file.display())),
            _ => Self::Database { file, doing, source },
        }
    }

    /// Wraps a file error, telling the common causes apart.
    pub fn file(file: &Path, doing: &'static str, source: io::Error) -> Self {
        let path = file.to_path_buf();
        match source.kind() {
            io::ErrorKind::StorageFull | io::ErrorKind::QuotaExceeded => Self::Full(path),
            io::ErrorKind::PermissionDenied | io::ErrorKind::ReadOnlyFilesystem => {
                Self::ReadOnly { file: path, why: source.to_string() }
            }
            _ => Self::File { file: path, doing, source },
        }
    }

    /// A word for the kind, for machines.
    pub fn kind(&self) -> &'static str {
        match self {
            Self::Absent(_) => "no-records",
            Self::Network { .. } => "network-file-system",
            Self::Newer { .. } => "newer-records",
            Self::Foreign(_) => "not-records",
            Self::Busy { .. } => "busy",
            Self::Full(_) => "disk-full",
            Self::ReadOnly { .. } => "read-only",
            Self::Database { .. } => "database",
            Self::File { .. } => "file",
            Self::Damaged(_) => "damaged",
            Self::Moved => "moved",
            Self::Stopped => "stopped",
            Self::Refused(_) => "refused",
        }
    }
}

/// What a function on the records gives.
pub type Result<T> = std::result::Result<T, RecordsError>;
