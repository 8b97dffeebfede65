//! The file of a workbook: a zip archive of parts.
//!
//! Invariants: the kind of file is told by its bytes, never by its name; only parts that are asked for are inflated,
//! and their real bytes are counted against [`Limits`] while that happens, whatever sizes the archive declares; the
//! end of a part is handed out only when its checksum was right.

use std::collections::HashMap;
use std::collections::hash_map::Entry;
use std::io::{self, BufRead, Cursor, Read};
use std::sync::Arc;
use std::sync::mpsc::{Receiver, SyncSender, sync_channel};
use std::thread;

use memchr::memmem;
use thiserror::Error;
use zip::ZipArchive;
use zip::read::{ArchiveOffset, Config, ZipFile};
use zip::result::ZipError;

use super::super::heading::excerpt;
use super::super::{Bytes, FileFault};

/// Every entry of an archive's directory begins so.
const ENTRY: &[u8] = b"PK\x01\x02";
/// What says where the directory's end of a very large archive stands begins so.
const LOCATOR: &[u8] = b"PK\x06\x07";
/// It stands no further from the file's end: the end of the directory with the longest comment, and its own length.
const LONGEST_END: usize = (1 << 16) + 22 + 20;
/// The container of workbooks of before 2007, and of protected ones.
const OLE: &[u8] = b"\xD0\xCF\x11\xE0\xA1\xB1\x1A\xE1";
/// How much is inflated at once.
const BLOCK: usize = 64 * 1024;
/// How many blocks are inflated before the reader has asked for them.
const BLOCKS_AHEAD: usize = 4;

/// What a workbook may take; beyond it is `too-large`.
#[derive(Debug, Clone, Copy)]
pub struct Limits {
    /// Bytes of the file, which is held in memory.
    pub file: u64,
    /// Entries of its directory.
    pub entries: usize,
    /// Inflated bytes of each part that only says where things are.
    pub small: u64,
    /// Inflated bytes of the texts that cells share, which are held in memory.
    pub texts: u64,
    /// How many texts cells may share.
    pub text_count: usize,
    /// Inflated bytes of all parts that are read.
    pub inflated: u64,
}

impl Default for Limits {
    fn default() -> Self {
        const MIB: u64 = 1 << 20;
        Self {
            file: 256 * MIB,
            entries: 10_000,
            small: 16 * MIB,
            texts: 256 * MIB,
            text_count: 1 << 24,
            inflated: 1024 * MIB,
        }
    }
}

/// A bound that was passed, on its way through a reader.
#[derive(Debug, Error)]
#[error("{0}")]
pub struct Excess(pub String);

/// What a failure to read a part comes to.
pub fn fault_of(error: &io::Error, part: &str) -> FileFault {
    match error.get_ref().and_then(|inner| inner.downcast_ref::<Excess>()) {
        Some(excess) => FileFault::TooLarge(excess.0.clone()),
        None => damaged(part, error),
    }
}

fn damaged(part: &str, why: impl std::fmt::Display) -> FileFault {
    FileFault::Unreadable(format!("the workbook is damaged: its part {} cannot be read ({why})", excerpt(part)))
}

/// The file's bytes, shared by all who read from them.
#[derive(Clone)]
struct Shared(Arc<Vec<u8>>);

impl AsRef<[u8]> for Shared {
    fn as_ref(&self) -> &[u8] {
        &self.0
    }
}

/// A workbook's file, its directory read.
pub struct Package {
    archive: ZipArchive<Cursor<Shared>>,
    /// Parts by their names as they are compared.
    parts: HashMap<String, usize>,
    /// What it may take.
    pub limits: Limits,
    /// How many bytes may still be inflated.
    left: u64,
}

impl Package {
    /// Reads the file and its directory.
    pub fn open(bytes: &dyn Bytes, limits: Limits) -> Result<Self, FileFault> {
        let file = load(bytes, limits.file)?;
        told_by_bytes(&file)?;
        let many = memmem::find_iter(&file, ENTRY).nth(limits.entries).is_some();
        if many || declares_more(&file, limits.entries as u64) {
            return Err(FileFault::TooLarge(format!("the workbook has more than {} parts", limits.entries)));
        }
        // The archive begins where the file does: else the end of another archive, stored inside one that was cut
        // off there, would be read in its place.
        let config = Config { archive_offset: ArchiveOffset::Known(0) };
        let archive = ZipArchive::with_config(config, Cursor::new(Shared(Arc::new(file)))).map_err(|_| {
            FileFault::Unreadable(
                "the workbook is damaged or was cut off: its end is not that of a workbook".to_owned(),
            )
        })?;
        let parts = names(&archive)?;
        Ok(Self { archive, parts, limits, left: limits.inflated })
    }

    /// A part's inflated bytes, at most `most` of them; `None` if there is no such part.
    pub fn part(&mut self, name: &str, most: u64) -> Result<Option<Part<'_>>, FileFault> {
        let Some(&index) = self.parts.get(&compared(name)) else { return Ok(None) };
        let file = self.archive.by_index(index).map_err(|error| match error {
            ZipError::UnsupportedArchive(why) if why == ZipError::PASSWORD_REQUIRED => protected(),
            other => damaged(name, other),
        })?;
        Ok(Some(Part { file, left: &mut self.left, most, taken: 0, name: name.to_owned() }))
    }

    /// A part's inflated bytes, as many as there may still be. A thread of its own inflates them a few blocks ahead,
    /// because the library's stream over a part cannot be kept beside the archive that it reads.
    pub fn stream(mut self, name: &str) -> Result<Stream, FileFault> {
        let most = self.left;
        if self.part(name, most)?.is_none() {
            return Err(damaged(name, "there is no such part"));
        }
        let (send, blocks) = sync_channel(BLOCKS_AHEAD);
        let part = name.to_owned();
        let inflate = move || {
            // It was there a moment ago; were it not, the reader would meet a stream without an end, which is a fault.
            if let Ok(Some(part)) = self.part(&part, most) {
                pump(part, &send);
            }
        };
        thread::Builder::new().name("workbook part".to_owned()).spawn(inflate)?;
        Ok(Stream { blocks, block: vec![], at: 0, ended: false })
    }
}

fn load(bytes: &dyn Bytes, most: u64) -> Result<Vec<u8>, FileFault> {
    let mut file = Vec::new();
    bytes.open()?.take(most + 1).read_to_end(&mut file)?;
    if file.len() as u64 > most {
        return Err(FileFault::TooLarge(format!("the workbook's file has more than {most} bytes")));
    }
    Ok(file)
}

/// A fault unless the bytes begin as a zip archive does.
fn told_by_bytes(file: &[u8]) -> Result<(), FileFault> {
    if file.starts_with(b"PK\x03\x04") {
        return Ok(());
    }
    if !file.starts_with(OLE) {
        let what = if file.is_empty() { "it is empty" } else { "its bytes are not those of a workbook (.xlsx)" };
        return Err(FileFault::Unreadable(what.to_owned()));
    }
    let mark: Vec<u8> = "EncryptedPackage".encode_utf16().flat_map(u16::to_le_bytes).collect();
    match memmem::find(file, &mark) {
        Some(_) => Err(protected()),
        None => Err(other_kind(".xls")),
    }
}

fn protected() -> FileFault {
    FileFault::Unreadable("the workbook is protected by a password; save it without one".to_owned())
}

/// What to say of a workbook of a kind that is not read.
pub fn other_kind(kind: &str) -> FileFault {
    FileFault::Unreadable(format!("a workbook of this kind ({kind}) is not read; save it as .xlsx"))
}

/// Whether the directory of a very large archive (4.3.14 and 4.3.15 of the format's description, APPNOTE.TXT 6.3.9)
/// declares more entries, for which room would be made at once.
fn declares_more(file: &[u8], most: u64) -> bool {
    let word = |at: usize| file.get(at..at.checked_add(8)?)?.try_into().ok().map(u64::from_le_bytes);
    let declared = |locator: usize| {
        let record = usize::try_from(word(locator.checked_add(8)?)?).ok()?;
        word(record.checked_add(32)?)
    };
    let tail = file.len().saturating_sub(LONGEST_END);
    memmem::find_iter(&file[tail..], LOCATOR).any(|at| declared(tail + at).is_some_and(|count| count > most))
}

/// The parts by their names. Two of one name could be read as either, so they are a fault.
fn names(archive: &ZipArchive<Cursor<Shared>>) -> Result<HashMap<String, usize>, FileFault> {
    let twice = |name: &str| FileFault::Unreadable(format!("the workbook holds two parts named {}", excerpt(name)));
    if archive.has_duplicate_names() {
        return Err(twice("alike"));
    }
    let mut parts = HashMap::with_capacity(archive.len());
    for index in 0..archive.len() {
        let Some(Ok(name)) = archive.name_for_index(index) else { continue };
        match parts.entry(compared(&name)) {
            Entry::Vacant(free) => free.insert(index),
            Entry::Occupied(_) => return Err(twice(&name)),
        };
    }
    Ok(parts)
}

/// A part's name as it is compared: capitals do not count, and some writers turn the strokes round.
fn compared(name: &str) -> String {
    name.replace('\\', "/").trim_start_matches('/').to_ascii_lowercase()
}

/// A part that is being inflated.
pub struct Part<'p> {
    file: ZipFile<'p, Cursor<Shared>>,
    left: &'p mut u64,
    most: u64,
    taken: u64,
    name: String,
}

impl Read for Part<'_> {
    fn read(&mut self, into: &mut [u8]) -> io::Result<usize> {
        let count = self.file.read(into)?;
        self.taken += count as u64;
        if self.taken > self.most || count as u64 > *self.left {
            let part = excerpt(&self.name);
            let what = format!("the workbook's part {part} expands beyond {} bytes", self.most);
            return Err(io::Error::other(Excess(what)));
        }
        *self.left -= count as u64;
        Ok(count)
    }
}

/// Inflates a part block by block; an empty block is its end.
fn pump(mut part: Part<'_>, blocks: &SyncSender<io::Result<Vec<u8>>>) {
    loop {
        let mut block = vec![0; BLOCK];
        let filled = fill(&mut part, &mut block);
        let last = !matches!(filled, Ok(1..));
        let filled = filled.map(|count| {
            block.truncate(count);
            block
        });
        // Where nobody listens any more, nothing is left to do.
        if blocks.send(filled).is_err() || last {
            return;
        }
    }
}

/// Reads until the block is full or the part ends.
fn fill(part: &mut Part<'_>, block: &mut [u8]) -> io::Result<usize> {
    let mut count = 0;
    while count < block.len() {
        match part.read(&mut block[count..])? {
            0 => break,
            more => count += more,
        }
    }
    Ok(count)
}

/// The bytes of a part that another thread inflates.
pub struct Stream {
    blocks: Receiver<io::Result<Vec<u8>>>,
    block: Vec<u8>,
    at: usize,
    ended: bool,
}

impl BufRead for Stream {
    #[inline]
    fn fill_buf(&mut self) -> io::Result<&[u8]> {
        if self.at == self.block.len() && !self.ended {
            // A thread that went without a last block has failed: that is no end.
            self.block = self.blocks.recv().map_err(|_| io::Error::other("it could not be read to its end"))??;
            self.at = 0;
            self.ended = self.block.is_empty();
        }
        Ok(&self.block[self.at..])
    }

    #[inline]
    fn consume(&mut self, count: usize) {
        self.at = self.block.len().min(self.at + count);
    }
}

impl Read for Stream {
    fn read(&mut self, into: &mut [u8]) -> io::Result<usize> {
        let count = self.fill_buf()?.read(into)?;
        self.consume(count);
        Ok(count)
    }
}
