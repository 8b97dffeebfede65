//! Raw copies: that each capture's bytes are kept, and are the bytes that were exported.

use std::collections::HashSet;
use std::io::{self, Read};

use rusqlite::Row;
use rusqlite::types::ValueRef;
use sha2::{Digest, Sha256};

use super::{Check, RawWrong, VerifyFault, VerifyNote};
use crate::records::codec::{Hash, hex};
use crate::records::error::{RecordsError, Result};
use crate::records::trail::ActNumber;

impl Check<'_> {
    pub(super) fn captures(&mut self) -> rusqlite::Result<()> {
        let conn = self.conn;
        let mut statement = conn.prepare(
            "SELECT c.id, c.act, c.size, c.sha256, r.size FROM capture c LEFT JOIN raw r ON r.sha256 = c.sha256 ORDER BY c.id",
        )?;
        let mut rows = statement.query([])?;
        while let Some(row) = rows.next()? {
            let (capture, act, says): (i64, ActNumber, i64) = (row.get(0)?, row.get(1)?, row.get(2)?);
            let sha256: Vec<u8> = row.get(3)?;
            match row.get::<_, Option<i64>>(4)? {
                Some(found) if found != says => self.faults.add(VerifyFault::RawSize { act, capture, says, found }),
                None if !self.is_kept_instead(&sha256)? => {
                    self.faults.add(VerifyFault::RawMissing { act, capture, sha256: hex(&sha256) });
                }
                _ => {}
            }
        }
        Ok(())
    }

    /// Whether a removal put other bytes in the place of these, and they, or their own successors, are kept.
    fn is_kept_instead(&self, sha256: &[u8]) -> rusqlite::Result<bool> {
        let mut seen: HashSet<&[u8]> = HashSet::new();
        let mut next: Vec<&[u8]> = vec![sha256];
        while let Some(sha256) = next.pop() {
            for instead in self.known.instead.get(sha256).into_iter().flatten() {
                if self.conn.prepare_cached("SELECT 1 FROM raw WHERE sha256 = ?1")?.exists([instead])? {
                    return Ok(true);
                }
                if seen.insert(instead) {
                    next.push(instead);
                }
            }
        }
        Ok(false)
    }

    pub(super) fn raw_copies(&mut self) -> rusqlite::Result<()> {
        let conn = self.conn;
        let removal: HashSet<Vec<u8>> = self.known.instead.values().flatten().cloned().collect();
        let mut statement = conn.prepare("SELECT sha256, size, stored_sha256, stored FROM raw ORDER BY sha256")?;
        let mut rows = statement.query([])?;
        while let Some(row) = rows.next()? {
            self.raw_copy(row, &removal)?;
            self.verified.raw_copies += 1;
            self.step();
        }
        Ok(())
    }

    fn raw_copy(&mut self, row: &Row<'_>, removal: &HashSet<Vec<u8>>) -> rusqlite::Result<()> {
        let sha256: Vec<u8> = row.get(0)?;
        let act: Option<ActNumber> = self
            .conn
            .prepare_cached("SELECT min(act) FROM capture WHERE sha256 = ?1")?
            .query_row([&sha256], |row| row.get(0))?;
        if act.is_none() && !removal.contains(&sha256) {
            self.faults.add(VerifyFault::RawUnknown { sha256: hex(&sha256) });
        }
        if let Err(wrong) = self.raw_bytes(row) {
            self.faults.add(VerifyFault::Raw { act, sha256: hex(&sha256), wrong });
        }
        Ok(())
    }

    fn raw_bytes(&self, row: &Row<'_>) -> std::result::Result<(), RawWrong> {
        let read = || -> rusqlite::Result<(Hash, i64, Hash)> { Ok((row.get(0)?, row.get(1)?, row.get(2)?)) };
        let (sha256, size, stored_sha256) = read().map_err(|_| RawWrong::Row)?;
        let stored = row.get_ref(3).map_err(|_| RawWrong::Row)?;
        match stored {
            ValueRef::Blob(stored) => expand(stored, &sha256, size, &stored_sha256),
            ValueRef::Null => {
                let name = self.records.raw_file(&sha256);
                let file = self.records.world.open(&name).map_err(|error| match error.kind() {
                    io::ErrorKind::NotFound => RawWrong::NoFile,
                    _ => RawWrong::File(error.to_string()),
                })?;
                expand(file, &sha256, size, &stored_sha256)
            }
            _ => Err(RawWrong::Row),
        }
    }

    /// Notes files in `raw/` that no row knows.
    pub(super) fn loose_files(&mut self) -> Result<()> {
        let folder = self.records.folder.join("raw");
        let listed = self.records.world.list(&folder);
        let mut entries = listed.map_err(|error| RecordsError::file(&folder, "listing raw copies", error))?;
        entries.sort_by(|one, other| one.path.cmp(&other.path));
        for entry in entries {
            let known = self.is_known(&entry.path).map_err(self.records.failed("verifying"))?;
            if !known {
                self.verified.notes.push(VerifyNote::LooseFile { file: entry.path });
            }
        }
        Ok(())
    }

    fn is_known(&self, file: &std::path::Path) -> rusqlite::Result<bool> {
        let name = file.file_name().and_then(|name| name.to_str()).and_then(|name| name.strip_suffix(".zst"));
        let Some(digits) = name.filter(|digits| digits.len() == 64) else { return Ok(false) };
        self.conn.prepare_cached("SELECT 1 FROM raw WHERE sha256 = unhex(?1) AND stored IS NULL")?.exists([digits])
    }
}

/// Hashes what passes through.
struct Hashing<R> {
    source: R,
    hasher: Sha256,
}

impl<R: Read> Read for Hashing<R> {
    fn read(&mut self, buffer: &mut [u8]) -> io::Result<usize> {
        let count = self.source.read(buffer)?;
        self.hasher.update(&buffer[..count]);
        Ok(count)
    }
}

/// Reads a raw copy through once, and compares its size and both hashes.
fn expand(source: impl Read, sha256: &Hash, size: i64, stored_sha256: &Hash) -> std::result::Result<(), RawWrong> {
    let mut source = Hashing { source, hasher: Sha256::new() };
    let expanded = expanded_bytes(&mut source, size);
    // Damaged bytes end the expanding early, and bytes may follow its end: the rest counts for the stored hash as well.
    io::copy(&mut source, &mut io::sink()).map_err(|error| RawWrong::File(error.to_string()))?;
    let stored: Hash = source.hasher.finalize().into();
    if stored != *stored_sha256 {
        return Err(RawWrong::Stored);
    }
    let (found, bytes) = expanded.map_err(|error| RawWrong::Expand(error.to_string()))?;
    if i64::try_from(found).ok() != Some(size) {
        return Err(RawWrong::Size { says: size, found });
    }
    if bytes == *sha256 { Ok(()) } else { Err(RawWrong::Bytes) }
}

/// How many bytes there are when expanded, and their hash; no more than one byte beyond `size` is looked at.
fn expanded_bytes(source: &mut impl Read, size: i64) -> io::Result<(u64, Hash)> {
    let most = u64::try_from(size).unwrap_or(0).saturating_add(1);
    let mut bytes = Hashing { source: zstd::Decoder::new(source)?.take(most), hasher: Sha256::new() };
    let found = io::copy(&mut bytes, &mut io::sink())?;
    Ok((found, bytes.hasher.finalize().into()))
}
