//! What a check can find, and how it says so.
//!
//! Invariant: each fault is one plain sentence that names the act, the filing and the rows as far as they are known.

use std::fmt;
use std::path::PathBuf;

use crate::records::codec::Hash;
use crate::records::trail::ActNumber;

/// What a check of the records found.
#[derive(Debug, Clone, Default)]
pub struct Verified {
    /// How many rows were computed again: those of the trail and all that belong to its acts.
    pub rows: u64,
    /// How many of them are readings.
    pub readings: u64,
    /// How many raw copies were read.
    pub raw_copies: u64,
    /// The last act and its hash, which is made to be written down elsewhere.
    pub head: Option<(ActNumber, Hash)>,
    /// The act whose hash is the one noted elsewhere, where one was given.
    pub noted: Option<ActNumber>,
    /// What is wrong, by trail order; what belongs to no act comes last.
    pub faults: Vec<VerifyFault>,
    /// What is worth knowing and not wrong.
    pub notes: Vec<VerifyNote>,
}

/// Something that is wrong with the records.
#[derive(Debug, Clone, PartialEq, Eq)]
#[non_exhaustive]
pub enum VerifyFault {
    /// The file's marks are not those of records of this layout.
    Marks {
        /// Its `application_id`.
        application: i64,
        /// Its `user_version`.
        version: i64,
    },
    /// A table, index or trigger is missing.
    LayoutMissing {
        /// Its name.
        name: String,
    },
    /// A table, index, trigger or view is there that should not be.
    LayoutExtra {
        /// Its name.
        name: String,
    },
    /// A table, index or trigger is not as it was made.
    LayoutChanged {
        /// Its name.
        name: String,
    },
    /// SQLite's own check says that the file is damaged.
    Sqlite {
        /// Its words.
        what: String,
    },
    /// A part of the file could not be read to its end.
    Unreadable {
        /// Which part.
        part: String,
        /// What the database says.
        why: String,
    },
    /// Acts are missing from the trail.
    TrailGap {
        /// The first of them.
        from: ActNumber,
        /// The last of them.
        upto: ActNumber,
    },
    /// A row of the trail has a number that no act can have.
    TrailNumber {
        /// The number.
        act: ActNumber,
    },
    /// A row of the trail holds values of the wrong kind.
    TrailUnreadable {
        /// Its number.
        act: ActNumber,
    },
    /// A row of the trail has a moment that is none.
    TrailMoment {
        /// Its number.
        act: ActNumber,
        /// The moment as it stands.
        at: String,
    },
    /// A row of the trail is bound to another row than the one before it.
    TrailPrevious {
        /// Its number.
        act: ActNumber,
    },
    /// A row of the trail was changed.
    TrailHash {
        /// Its number.
        act: ActNumber,
    },
    /// A row that belongs to an act was changed, added or taken away.
    ActDigest {
        /// The act.
        act: ActNumber,
        /// The rows that say they belong to it.
        rows: String,
    },
    /// Rows belong to an act that is not on the trail.
    NoAct {
        /// The act that they name.
        act: ActNumber,
        /// Which rows.
        rows: String,
    },
    /// Rows belong to a filing that is neither published nor being written.
    NoFiling {
        /// Their table.
        table: &'static str,
        /// The filing that they name.
        filing: i64,
        /// The first of them.
        first: i64,
        /// How many they are.
        count: i64,
    },
    /// A reading comes after the last one of its filing.
    BeyondFiling {
        /// The filing's act.
        act: ActNumber,
        /// The filing.
        filing: i64,
        /// The reading.
        reading: i64,
    },
    /// A filing says another number than the rows do.
    FilingCount {
        /// The filing's act.
        act: ActNumber,
        /// The filing.
        filing: i64,
        /// The filing's column.
        column: &'static str,
        /// What it says.
        says: Option<i64>,
        /// What is there.
        found: Option<i64>,
    },
    /// A reading, hold, sighting or going of a filing was changed, added or taken away.
    FilingDigest {
        /// The filing's act.
        act: ActNumber,
        /// The filing.
        filing: i64,
        /// The rows that say they belong to it.
        rows: String,
    },
    /// A row refers to one that is not there.
    Dangling {
        /// The row's act, where it is known.
        act: Option<ActNumber>,
        /// The row's table.
        table: &'static str,
        /// The row's number.
        row: i64,
        /// The column that refers.
        column: &'static str,
        /// The number that is not there.
        to: i64,
    },
    /// SQLite's own check of references found one to a row that is not there.
    Reference {
        /// The row's table.
        table: String,
        /// The row's number.
        row: i64,
        /// The table it refers to.
        parent: String,
    },
    /// A row is blanked, salted or marked as removed in a way that no act does.
    Shape {
        /// The row's act.
        act: ActNumber,
        /// The row's table.
        table: &'static str,
        /// The row's number.
        row: i64,
        /// What is wrong.
        wrong: &'static str,
    },
    /// A removed row was changed, or a row was passed off as removed.
    Removal {
        /// The act that removed.
        act: ActNumber,
        /// How many rows it says it removed.
        says: i64,
        /// How many are marked as removed by it.
        found: i64,
    },
    /// A capture's bytes are not kept.
    RawMissing {
        /// The capture's act.
        act: ActNumber,
        /// The capture.
        capture: i64,
        /// The hash of its bytes.
        sha256: String,
    },
    /// A capture and its raw copy disagree about the number of bytes.
    RawSize {
        /// The capture's act.
        act: ActNumber,
        /// The capture.
        capture: i64,
        /// What the capture says.
        says: i64,
        /// What the raw copy says.
        found: i64,
    },
    /// A raw copy belongs to no capture.
    RawUnknown {
        /// The hash of its bytes.
        sha256: String,
    },
    /// A raw copy cannot be used.
    Raw {
        /// The first act with these bytes, where it is known.
        act: Option<ActNumber>,
        /// The hash of its bytes, as hexadecimal digits.
        sha256: String,
        /// What is wrong.
        wrong: RawWrong,
    },
    /// No act has the hash that was noted elsewhere.
    NotedHead {
        /// The hash as given.
        noted: String,
    },
    /// There are more faults than are listed.
    Further {
        /// How many.
        count: u64,
    },
}

/// What is wrong with a raw copy.
#[derive(Debug, Clone, PartialEq, Eq)]
#[non_exhaustive]
pub enum RawWrong {
    /// Its row holds values of the wrong kind.
    Row,
    /// Its file in `raw/` is not there.
    NoFile,
    /// Its file cannot be read.
    File(String),
    /// The compressed bytes are not those that were stored.
    Stored,
    /// They cannot be expanded.
    Expand(String),
    /// There are more or fewer bytes than the row says.
    Size {
        /// What the row says.
        says: i64,
        /// What is there; counting stops one byte after what the row says.
        found: u64,
    },
    /// The expanded bytes are not the export's.
    Bytes,
}

/// Something that is worth knowing and not wrong.
#[derive(Debug, Clone, PartialEq, Eq)]
#[non_exhaustive]
pub enum VerifyNote {
    /// A file in `raw/` that no row knows, as a crash may leave one.
    LooseFile {
        /// The file.
        file: PathBuf,
    },
    /// A filing that is being written or was broken off; its rows are not covered yet.
    Unpublished {
        /// The filing.
        filing: i64,
    },
    /// Rows whose values an act removed; their digests still count.
    Removed {
        /// The act.
        act: ActNumber,
        /// How many.
        rows: u64,
    },
}

impl VerifyFault {
    /// The act to which the fault belongs.
    pub fn act(&self) -> Option<ActNumber> {
        match self {
            Self::TrailGap { from: act, .. }
            | Self::TrailNumber { act }
            | Self::TrailUnreadable { act }
            | Self::TrailMoment { act, .. }
            | Self::TrailPrevious { act }
            | Self::TrailHash { act }
            | Self::ActDigest { act, .. }
            | Self::NoAct { act, .. }
            | Self::BeyondFiling { act, .. }
            | Self::FilingCount { act, .. }
            | Self::FilingDigest { act, .. }
            | Self::Shape { act, .. }
            | Self::Removal { act, .. }
            | Self::RawMissing { act, .. }
            | Self::RawSize { act, .. } => Some(*act),
            Self::Dangling { act, .. } | Self::Raw { act, .. } => *act,
            _ => None,
        }
    }
}

impl fmt::Display for VerifyFault {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::Marks { application, version } => write!(
                f,
                "the file is marked as application {application}, layout {version}, which is not what this program writes."
            ),
            Self::LayoutMissing { name } => write!(f, "{name} is missing from the file's layout."),
            Self::LayoutExtra { name } => write!(f, "{name} stands in the file's layout and does not belong there."),
            Self::LayoutChanged { name } => write!(f, "{name} is not as this program made it."),
            Self::Sqlite { what } => write!(f, "the file is damaged; SQLite says: {what}."),
            Self::Unreadable { part, why } => write!(f, "{part} cannot be read to the end: {why}."),
            Self::TrailGap { from, upto } if from == upto => write!(f, "act {from} is missing from the trail."),
            Self::TrailGap { from, upto } => write!(f, "acts {from} to {upto} are missing from the trail."),
            Self::TrailNumber { act } => write!(f, "the trail has a row numbered {act}; numbers run from 1."),
            Self::TrailUnreadable { act } => {
                write!(f, "act {act}: its row on the trail holds values of the wrong kind.")
            }
            Self::TrailMoment { act, at } => write!(f, "act {act}: its moment \"{at}\" is none."),
            Self::TrailPrevious { act } => {
                write!(f, "act {act}: it does not follow on the act before it, whose hash is another.")
            }
            Self::TrailHash { act } => write!(f, "act {act}: its row on the trail was changed."),
            Self::ActDigest { act, rows } if rows.is_empty() => {
                write!(f, "act {act}: the rows that belonged to it were taken away.")
            }
            Self::ActDigest { act, rows } => {
                write!(f, "act {act}: a row of it was changed, added or taken away ({rows}).")
            }
            Self::NoAct { act, rows } => write!(f, "rows belong to act {act}, which is not on the trail ({rows})."),
            Self::NoFiling { table, filing, first, count } => write!(
                f,
                "{count} rows of {table}, from row {first} on, belong to filing {filing}, which no act published."
            ),
            Self::BeyondFiling { act, filing, reading } => {
                write!(f, "act {act}: reading {reading} comes after the last one of its filing {filing}.")
            }
            Self::FilingCount { act, filing, column, says, found } => write!(
                f,
                "act {act}: filing {filing} says {column} = {}, and its rows say {}.",
                or_none(*says),
                or_none(*found)
            ),
            Self::FilingDigest { act, filing, rows } if rows.is_empty() => {
                write!(f, "act {act}: the rows of filing {filing} were taken away.")
            }
            Self::FilingDigest { act, filing, rows } => {
                write!(f, "act {act}: a row of filing {filing} was changed, added or taken away ({rows}).")
            }
            Self::Dangling { act, table, row, column, to } => {
                if let Some(act) = act {
                    write!(f, "act {act}: ")?;
                }
                write!(f, "row {row} of {table} refers to {column} {to}, which is not there.")
            }
            Self::Reference { table, row, parent } => {
                write!(f, "row {row} of {table} refers to a row of {parent} that is not there.")
            }
            Self::Shape { act, table, row, wrong } => write!(f, "act {act}: row {row} of {table} {wrong}."),
            Self::Removal { act, says, found } if says == found => {
                write!(f, "act {act}: a row that it removed was changed.")
            }
            Self::Removal { act, says, found } => {
                write!(f, "act {act}: it removed {says} rows, and {found} are marked as removed by it.")
            }
            Self::RawMissing { act, capture, sha256 } => {
                write!(f, "act {act}: the bytes of capture {capture} ({sha256}) are not kept.")
            }
            Self::RawSize { act, capture, says, found } => {
                write!(f, "act {act}: capture {capture} says {says} bytes, and its raw copy {found}.")
            }
            Self::RawUnknown { sha256 } => write!(f, "raw copy {sha256} belongs to no capture."),
            Self::Raw { act, sha256, wrong } => {
                if let Some(act) = act {
                    write!(f, "act {act}: ")?;
                }
                write!(f, "raw copy {sha256} {wrong}.")
            }
            Self::NotedHead { noted } => write!(
                f,
                "no act has the hash {noted} that was noted: the trail was cut short or rebuilt, or the note is not of \
                 these records."
            ),
            Self::Further { count } => write!(f, "there are {count} more faults."),
        }
    }
}

fn or_none(number: Option<i64>) -> String {
    number.map_or_else(|| "nothing".to_owned(), |number| number.to_string())
}

impl fmt::Display for RawWrong {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::Row => f.write_str("has a row with values of the wrong kind"),
            Self::NoFile => f.write_str("has no file in the folder raw"),
            Self::File(why) => write!(f, "has a file that cannot be read: {why}"),
            Self::Stored => f.write_str("holds other compressed bytes than were stored"),
            Self::Expand(why) => write!(f, "cannot be expanded: {why}"),
            Self::Size { says, found } if i64::try_from(*found).is_ok_and(|found| found > *says) => {
                write!(f, "holds more than the {says} bytes that its row says")
            }
            Self::Size { says, found } => write!(f, "holds {found} bytes where its row says {says}"),
            Self::Bytes => f.write_str("holds other bytes than were exported"),
        }
    }
}

impl fmt::Display for VerifyNote {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::LooseFile { file } => {
                write!(f, "{} is known to no row, as after a crash; it may be deleted.", file.display())
            }
            Self::Unpublished { filing } => write!(f, "filing {filing} is not published, and was not checked."),
            Self::Removed { act, rows } => write!(f, "the values of {rows} rows were removed by act {act}."),
        }
    }
}

/// More faults than this are counted and not listed.
const MOST_FAULTS: usize = 1000;

/// Faults, of which those of the earliest acts are kept when there are too many.
#[derive(Default)]
pub(super) struct Faults {
    list: Vec<VerifyFault>,
    further: u64,
}

impl Faults {
    pub(super) fn add(&mut self, fault: VerifyFault) {
        self.list.push(fault);
        if self.list.len() >= 2 * MOST_FAULTS {
            self.trim();
        }
    }

    fn trim(&mut self) {
        self.list.sort_by_key(|fault| fault.act().unwrap_or(ActNumber::MAX));
        self.further += self.list.len().saturating_sub(MOST_FAULTS) as u64;
        self.list.truncate(MOST_FAULTS);
    }

    pub(super) fn end(mut self) -> Vec<VerifyFault> {
        self.trim();
        if self.further > 0 {
            self.list.push(VerifyFault::Further { count: self.further });
        }
        self.list
    }
}
