//! Opening the records: their place, their layout, and what is refused.
//!
//! Invariants: a file from a newer program, a foreign file and a network file system are refused before anything is
//! written; a migration is one transaction and runs after a backup of the file.

use std::fs;
use std::io;
use std::os::unix::fs::{DirBuilderExt, OpenOptionsExt, PermissionsExt};
use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::time::Duration;

use rusqlite::{Connection, OpenFlags};

use super::error::{PATIENCE_SECONDS, RecordsError, Result};
use super::texts::Texts;
use crate::world::World;

/// Marks the file as records (`application_id`).
pub(crate) const APPLICATION: i64 = 0x5256_5354;

/// The numbered steps from an empty file to the newest layout.
const MIGRATIONS: &[&str] = &[include_str!("../../migrations/0001_records.sql")];

/// All that is stored of one study.
pub struct Records {
    pub(crate) conn: Connection,
    pub(crate) folder: PathBuf,
    pub(crate) file: PathBuf,
    pub(crate) world: Arc<dyn World>,
    pub(crate) texts: Texts,
    patience: Duration,
}

impl Records {
    /// The records' folder of a study.
    pub fn folder_of(study: &Path) -> PathBuf {
        study.join("records")
    }

    /// Opens the records of a study, or says that there are none.
    pub fn open(study: &Path, world: Arc<dyn World>) -> Result<Self> {
        let folder = Self::folder_of(study);
        if !folder.join("records.sqlite").exists() {
            return Err(RecordsError::Absent(folder));
        }
        Self::open_or_create(study, world)
    }

    /// Opens the records of a study, and makes them when there are none.
    pub fn open_or_create(study: &Path, world: Arc<dyn World>) -> Result<Self> {
        let folder = Self::folder_of(study);
        refuse_network(&folder)?;
        make_private_folder(&folder)?;
        let file = folder.join("records.sqlite");
        make_file(&file)?;
        let conn = connect(&file)?;
        let version = examine(&conn, &file)?;
        make_private_file(&file)?;
        make_private_folder(&folder.join("raw"))?;
        configure(&conn, &file)?;
        let patience = Duration::from_secs(PATIENCE_SECONDS);
        let mut records = Self { conn, folder, file, world, texts: Texts::default(), patience };
        records.migrate(version)?;
        Ok(records)
    }

    /// Sets how long to wait for another writer; [`PATIENCE_SECONDS`] unless set.
    pub fn set_patience(&mut self, patience: Duration) -> Result<()> {
        self.patience = patience;
        self.conn.busy_timeout(patience).map_err(self.failed("setting the patience"))
    }

    /// The moment, by the world's clock.
    pub fn now(&self) -> chrono::DateTime<chrono::Utc> {
        self.world.now()
    }

    /// The doors that these records use.
    pub fn world(&self) -> &Arc<dyn World> {
        &self.world
    }

    /// The folder of the records.
    pub fn folder(&self) -> &Path {
        &self.folder
    }

    pub(crate) fn failed(&self, doing: &'static str) -> impl Fn(rusqlite::Error) -> RecordsError + use<> {
        let (file, patience) = (self.file.clone(), self.patience);
        move |source| match RecordsError::database(&file, doing, source) {
            RecordsError::Busy { file, .. } => RecordsError::Busy { file, seconds: patience.as_secs() },
            other => other,
        }
    }

    fn migrate(&mut self, version: i64) -> Result<()> {
        let known = Self::newest_layout();
        if version == known {
            return Ok(());
        }
        if version > 0 {
            self.copy_before_migration(version)?;
        }
        self.run_migrations()
    }

    /// Runs the steps still to come, looking again at the version under the lock: two programs may open a new file at
    /// the same moment.
    fn run_migrations(&mut self) -> Result<()> {
        let failed = self.failed("bringing the records up to date");
        let tx = self.conn.transaction_with_behavior(rusqlite::TransactionBehavior::Immediate).map_err(&failed)?;
        let version: i64 = tx.pragma_query_value(None, "user_version", |row| row.get(0)).map_err(&failed)?;
        for step in MIGRATIONS.iter().skip(version as usize) {
            tx.execute_batch(step).map_err(&failed)?;
        }
        tx.pragma_update(None, "application_id", APPLICATION).map_err(&failed)?;
        tx.pragma_update(None, "user_version", MIGRATIONS.len() as i64).map_err(&failed)?;
        tx.commit().map_err(&failed)
    }

    fn copy_before_migration(&self, version: i64) -> Result<()> {
        let failed = self.failed("backing up before bringing the records up to date");
        let copy = self.folder.join(format!("before-layout-{}.sqlite", version + 1));
        make_private_file(&copy)?;
        let mut target = Connection::open(&copy).map_err(&failed)?;
        let backup = rusqlite::backup::Backup::new(&self.conn, &mut target).map_err(&failed)?;
        backup.run_to_completion(1000, Duration::ZERO, None).map_err(&failed)
    }

    /// The number of the newest layout that this program knows.
    pub(crate) fn newest_layout() -> i64 {
        MIGRATIONS.len() as i64
    }

    /// The statements that made the layout, as this program knows it: what `verify` compares the file with.
    pub(crate) fn expected_layout() -> rusqlite::Result<Vec<(String, String)>> {
        let conn = Connection::open_in_memory()?;
        for step in MIGRATIONS {
            conn.execute_batch(step)?;
        }
        layout(&conn)
    }
}

/// Name and statement of everything in the schema, sorted; SQLite's own indexes have no statement, and its statistics
/// are none of the layout.
pub(crate) fn layout(conn: &Connection) -> rusqlite::Result<Vec<(String, String)>> {
    let mut statement = conn.prepare(
        "SELECT name, sql FROM sqlite_master
         WHERE sql IS NOT NULL AND name NOT IN ('sqlite_stat1', 'sqlite_stat4') ORDER BY name",
    )?;
    let rows = statement.query_map([], |row| Ok((row.get(0)?, row.get(1)?)))?;
    rows.collect()
}

fn connect(file: &Path) -> Result<Connection> {
    let failed = |source| RecordsError::database(file, "opening the records", source);
    let flags = OpenFlags::SQLITE_OPEN_READ_WRITE | OpenFlags::SQLITE_OPEN_NO_MUTEX;
    let conn = Connection::open_with_flags(file, flags).map_err(failed)?;
    conn.busy_timeout(Duration::from_secs(PATIENCE_SECONDS)).map_err(failed)?;
    Ok(conn)
}

/// Gives the layout's number, or refuses what is not records of a known layout, before anything is written: even the
/// journal's mode is written into the file.
fn examine(conn: &Connection, file: &Path) -> Result<i64> {
    let failed = |source| RecordsError::database(file, "opening the records", source);
    // One transaction, since another program may be making the records at this moment.
    let transaction = conn.unchecked_transaction().map_err(failed)?;
    let number = |sql: &str| transaction.query_row(sql, [], |row| row.get::<_, i64>(0));
    let tables = number("SELECT count(*) FROM sqlite_master").map_err(failed)?;
    let application = number("PRAGMA application_id").map_err(failed)?;
    let version = number("PRAGMA user_version").map_err(failed)?;
    let known = Records::newest_layout();
    match (application, version, tables) {
        (0, 0, 0) | (APPLICATION, 1.., _) => {}
        _ => return Err(RecordsError::Foreign(file.to_path_buf())),
    }
    if version > known {
        return Err(RecordsError::Newer { file: file.to_path_buf(), found: version, known });
    }
    Ok(version)
}

fn configure(conn: &Connection, file: &Path) -> Result<()> {
    let failed = |source| RecordsError::database(file, "opening the records", source);
    write_ahead(conn).map_err(failed)?;
    // recursive_triggers: without it INSERT OR REPLACE deletes without firing the DELETE triggers of this connection.
    conn.execute_batch(
        "PRAGMA synchronous = FULL; PRAGMA foreign_keys = ON;
         PRAGMA recursive_triggers = ON; PRAGMA trusted_schema = OFF;
         PRAGMA cache_size = -49152; PRAGMA wal_autocheckpoint = 8000; PRAGMA temp_store = MEMORY;
         PRAGMA secure_delete = ON;",
    )
    .map_err(failed)?;
    // Without this SQLite plans a statement anew whenever the value bound to it changes.
    conn.set_db_config(rusqlite::config::DbConfig::SQLITE_DBCONFIG_ENABLE_QPSG, true).map_err(failed)?;
    conn.set_prepared_statement_cache_capacity(64);
    Ok(())
}

/// Turns the write-ahead log on. SQLite does not wait for its turn here, so two who open a new file at once would fail.
fn write_ahead(conn: &Connection) -> rusqlite::Result<()> {
    const PAUSE: Duration = Duration::from_millis(10);
    let mut waited = Duration::ZERO;
    loop {
        let busy = match conn.execute_batch("PRAGMA journal_mode = WAL") {
            Err(error) if error.sqlite_error_code() == Some(rusqlite::ErrorCode::DatabaseBusy) => error,
            done => return done,
        };
        if waited >= Duration::from_secs(PATIENCE_SECONDS) {
            return Err(busy);
        }
        std::thread::sleep(PAUSE);
        waited += PAUSE;
    }
}

fn make_private_folder(folder: &Path) -> Result<()> {
    if folder.is_dir() {
        return Ok(());
    }
    // Asked of one look: another program may be making the folder at this moment.
    if folder.metadata().is_ok_and(|meta| !meta.is_dir()) {
        let text = format!("{} is a file where the records' folder belongs; move it away", folder.display());
        return Err(RecordsError::Refused(text));
    }
    fs::DirBuilder::new()
        .recursive(true)
        .mode(0o700)
        .create(folder)
        .map_err(|error| RecordsError::file(folder, "making the folder", error))
}

/// Makes the file when there is none, for its owner alone.
fn make_file(file: &Path) -> Result<()> {
    let made = fs::OpenOptions::new().write(true).create_new(true).mode(0o600).open(file);
    match made {
        Err(error) if error.kind() != io::ErrorKind::AlreadyExists => {
            Err(RecordsError::file(file, "making the file", error))
        }
        _ => Ok(()),
    }
}

/// Makes the file when there is none, and takes rights away that others have.
fn make_private_file(file: &Path) -> Result<()> {
    let failed = |error| RecordsError::file(file, "making the file private", error);
    make_file(file)?;
    let mut rights = fs::metadata(file).map_err(failed)?.permissions();
    if rights.mode() & 0o077 != 0 {
        rights.set_mode(0o600);
        fs::set_permissions(file, rights).map_err(failed)?;
    }
    Ok(())
}

/// Kinds of file system on which another machine may hold the same file open.
fn is_network(kind: &str) -> bool {
    const KINDS: &[&str] = &[
        "nfs",
        "nfs4",
        "cifs",
        "smb3",
        "smbfs",
        "ceph",
        "9p",
        "afs",
        "glusterfs",
        "lustre",
        "gfs2",
        "ocfs2",
        "beegfs",
    ];
    KINDS.contains(&kind) || kind == "fuse" || kind.starts_with("fuse.")
}

fn refuse_network(folder: &Path) -> Result<()> {
    let Ok(mounts) = fs::read_to_string("/proc/self/mountinfo") else { return Ok(()) };
    let there = folder.ancestors().find_map(|folder| folder.canonicalize().ok());
    let Some(there) = there else { return Ok(()) };
    match mount_kind(&mounts, &there) {
        Some(kind) if is_network(kind) => {
            Err(RecordsError::Network { folder: folder.to_path_buf(), kind: kind.to_owned() })
        }
        _ => Ok(()),
    }
}

/// The kind of the file system that holds `path`, from the kernel's list of mounts: the longest mount point wins, and
/// of equal ones the last.
fn mount_kind<'a>(mounts: &'a str, path: &Path) -> Option<&'a str> {
    mounts
        .lines()
        .filter_map(|line| {
            let (front, back) = line.split_once(" - ")?;
            let point = front.split(' ').nth(4)?.replace("\\040", " ");
            let kind = back.split(' ').next()?;
            path.starts_with(&point).then_some((point.len(), kind))
        })
        .max_by_key(|(length, _)| *length)
        .map(|(_, kind)| kind)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_deepest_mount_decides() {
        let mounts = "22 1 8:1 / / rw - ext4 /dev/vda rw\n30 22 0:40 / /srv/lab\\040share rw - cifs //lab/x rw\n";
        assert_eq!(mount_kind(mounts, Path::new("/home/study/records")), Some("ext4"));
        assert_eq!(mount_kind(mounts, Path::new("/srv/lab share/study")), Some("cifs"));
        assert!(is_network("cifs") && is_network("fuse.sshfs") && is_network("nfs4"));
        assert!(!is_network("ext4") && !is_network("tmpfs") && !is_network("overlay") && !is_network("fuseblk"));
    }
}
