//! The canonical form of rows, over which every digest and the trail's chain are taken.
//!
//! Invariant: the form depends on what a row says alone, so that anyone can compute it again with another tool.
//!
//! **Values.** A value is written as one letter for its kind, the number of bytes that follow in decimal, a colon, and
//! the bytes: `n0:` for NULL; `i` an integer in decimal; `r` a real as the 16 lower-case hexadecimal digits of its
//! IEEE 754 bits, highest first; `t` a text in UTF-8; `b` bytes as they are. The kind is the stored value's; a column
//! that is declared REAL gives reals alone.
//!
//! **Rows.** A row is its table's name as a `t`, then its values in the order in which the table declares its columns,
//! which is that of [`Table::columns`]. `salt`, `removed`, and the `digest` beside them are not among them; the `digest`
//! of `filing` and of `removal` is. A number that stands for something else is written as what it stands for:
//! - a term (`instrument`, `measure`, `condition`, `unit` and `operator` of `reading`, `instrument` of `capture`) as its
//!   text, the term 0 as the empty text;
//! - a subject (`subject` of `roster_event`, `accounted` and `removal`) as its code;
//! - a session (`session` of `reading`) as three values: its subject's code, its day as an integer, its label as a term.
//!
//! **Digest of a row.** SHA-256 over that form, preceded by the row's 16 bytes of salt in the tables that have salt
//! (`roster_event`, `reading`, `hold`, `hold_event`): the digest of a removed value then cannot be searched for. A row
//! whose `removed` is not NULL has lost values and salt; its digest is the one in its column `digest`.
//!
//! **Digest of an act.** SHA-256 over the digests of the rows whose `act` is the act's number, table by table in the
//! order of [`OF_ACT`] (plan_version, roster_event, capture, account, filing, reading_event, hold_event, accounted, cut,
//! removal, raw_removal), by id within a table.
//!
//! **Digest of a filing.** SHA-256 over four digests, one for each table of [`OF_FILING`] in that order (reading, hold,
//! sighting, gone), each of which is SHA-256 over the digests of the rows in that table whose `filing` is the filing's
//! id, by id. Rows of a filing that has no row in `filing` are not covered yet.
//!
//! **Digest of a removal.** SHA-256 over one digest for each row whose `removed` is the removal's act, table by table in
//! the order roster_event, reading, hold, hold_event, by id within a table: that of the row as it stands now, its column
//! `digest` in the place of the salt.

use rusqlite::types::ValueRef;
use sha2::{Digest, Sha256};

/// A SHA-256.
pub type Hash = [u8; 32];

/// How a column is written in the canonical form.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Kind {
    /// As it stands.
    Plain,
    /// The text of the term.
    Term,
    /// The subject's code.
    Subject,
    /// Subject, day and label of the session.
    Session,
}

/// A table whose rows are covered by the trail.
#[derive(Debug)]
pub struct Table {
    /// Its name.
    pub name: &'static str,
    /// Its columns in canonical order; salt, digest and removed are not among them.
    pub columns: &'static [(&'static str, Kind)],
    /// Whether its rows are salted.
    pub salted: bool,
}

macro_rules! table {
    ($name:literal, $salted:literal, $($column:literal $kind:ident),+) => {
        Table { name: $name, salted: $salted, columns: &[$(($column, Kind::$kind)),+] }
    };
}

/// Tables whose rows name their act, in the order in which an act's digest takes them.
pub const OF_ACT: &[Table] = &[
    table!("plan_version", false, "id" Plain, "act" Plain, "sha256" Plain, "files" Plain),
    table!("roster_event", true, "id" Plain, "act" Plain, "subject" Subject, "field" Plain, "value" Plain),
    table!("capture", false, "id" Plain, "act" Plain, "instrument" Term, "path" Plain, "modified" Plain, "size" Plain,
        "sha256" Plain, "plan" Plain, "repeat_of" Plain, "continues" Plain),
    table!("account", false, "id" Plain, "act" Plain, "capture" Plain, "lines" Plain),
    table!("filing", false, "id" Plain, "act" Plain, "capture" Plain, "first_reading" Plain, "last_reading" Plain,
        "readings" Plain, "holds" Plain, "digest" Plain),
    table!("reading_event", false, "id" Plain, "act" Plain, "reading" Plain, "kind" Plain),
    table!("hold_event", true, "id" Plain, "act" Plain, "hold" Plain, "state" Plain, "answer" Plain),
    table!("accounted", false, "id" Plain, "act" Plain, "subject" Subject, "visit" Plain, "measure" Plain),
    table!("cut", false, "id" Plain, "act" Plain, "name" Plain, "trail" Plain),
    table!("removal", false, "id" Plain, "act" Plain, "subject" Subject, "rows" Plain, "digest" Plain),
    table!("raw_removal", false, "id" Plain, "act" Plain, "sha256" Plain, "instead" Plain),
];

/// Tables whose rows name their filing, in the order in which a filing's digest takes them.
pub const OF_FILING: &[Table] = &[
    table!("reading", true, "id" Plain, "filing" Plain, "capture" Plain, "line" Plain, "byte_from" Plain,
        "byte_to" Plain, "cell" Plain, "instrument" Term, "measure" Term, "condition" Term, "replicate" Plain,
        "labelled" Plain, "session" Session, "text" Plain, "exported" Plain, "unit" Term, "number" Plain, "mark" Plain,
        "written" Plain, "moment" Plain, "operator" Term, "plan" Plain, "identity" Plain, "ordinal" Plain,
        "supersedes" Plain, "source" Plain),
    table!("hold", true, "id" Plain, "filing" Plain, "capture" Plain, "reason" Plain, "line" Plain, "cell" Plain,
        "byte_from" Plain, "byte_to" Plain, "column" Plain, "row_key" Plain, "row" Plain, "detail" Plain),
    table!("sighting", false, "id" Plain, "filing" Plain, "capture" Plain, "hold" Plain, "line" Plain),
    table!("gone", false, "id" Plain, "filing" Plain, "reading" Plain),
];

/// The table of that name, and its place in its list.
pub fn table(name: &str) -> Option<(usize, &'static Table)> {
    [OF_ACT, OF_FILING].into_iter().find_map(|list| list.iter().enumerate().find(|(_, table)| table.name == name))
}

/// Takes values one by one in the canonical form.
#[derive(Default, Clone)]
pub struct Canon {
    hasher: Sha256,
    scratch: Vec<u8>,
}

impl Canon {
    /// Starts, with salt or without (`&[]`).
    pub fn start(&mut self, salt: &[u8]) {
        self.scratch.clear();
        self.scratch.extend_from_slice(salt);
    }

    fn put(&mut self, kind: u8, bytes: &[u8]) {
        self.scratch.push(kind);
        let mut digits = [0u8; 20];
        let from = decimal(&mut digits, bytes.len() as i64);
        self.scratch.extend_from_slice(&digits[from..]);
        self.scratch.push(b':');
        self.scratch.extend_from_slice(bytes);
    }

    /// NULL
    pub fn null(&mut self) {
        self.put(b'n', b"");
    }

    /// An integer.
    pub fn integer(&mut self, value: i64) {
        let mut digits = [0u8; 20];
        let from = decimal(&mut digits, value);
        self.put(b'i', &digits[from..]);
    }

    /// A real.
    pub fn real(&mut self, value: f64) {
        let mut digits = [0u8; 16];
        for (at, digit) in digits.iter_mut().enumerate() {
            let nibble = (value.to_bits() >> (60 - 4 * at)) & 0xf;
            *digit = b"0123456789abcdef"[nibble as usize];
        }
        self.put(b'r', &digits);
    }

    /// A text.
    pub fn text(&mut self, value: &str) {
        self.put(b't', value.as_bytes());
    }

    /// Bytes.
    pub fn bytes(&mut self, value: &[u8]) {
        self.put(b'b', value);
    }

    /// An integer or NULL.
    pub fn integer_or_null(&mut self, value: Option<i64>) {
        match value {
            Some(value) => self.integer(value),
            None => self.null(),
        }
    }

    /// A real or NULL.
    pub fn real_or_null(&mut self, value: Option<f64>) {
        match value {
            Some(value) => self.real(value),
            None => self.null(),
        }
    }

    /// A text or NULL.
    pub fn text_or_null(&mut self, value: Option<&str>) {
        match value {
            Some(value) => self.text(value),
            None => self.null(),
        }
    }

    /// Whatever the database holds.
    pub fn value(&mut self, value: ValueRef<'_>) {
        match value {
            ValueRef::Null => self.null(),
            ValueRef::Integer(value) => self.integer(value),
            ValueRef::Real(value) => self.real(value),
            ValueRef::Text(value) => self.put(b't', value),
            ValueRef::Blob(value) => self.put(b'b', value),
        }
    }

    /// The digest of what was put since the start.
    pub fn digest(&mut self) -> Hash {
        self.hasher.update(&self.scratch);
        self.hasher.finalize_reset().into()
    }
}

/// Writes a number's digits at the end of `digits`, which the longest fits; gives where they begin.
fn decimal(digits: &mut [u8; 20], value: i64) -> usize {
    let mut at = digits.len();
    let mut rest = value.unsigned_abs();
    loop {
        at -= 1;
        digits[at] = b'0' + (rest % 10) as u8;
        rest /= 10;
        if rest == 0 {
            break;
        }
    }
    if value < 0 {
        at -= 1;
        digits[at] = b'-';
    }
    at
}

/// SHA-256 of bytes.
pub fn sha256(bytes: &[u8]) -> Hash {
    Sha256::digest(bytes).into()
}

/// Lower-case hexadecimal.
pub fn hex(bytes: &[u8]) -> String {
    bytes.iter().map(|byte| format!("{byte:02x}")).collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_longest_numbers_fit() {
        for value in [i64::MIN, i64::MAX, 0, -1, 10, -10] {
            let mut digits = [0u8; 20];
            let from = decimal(&mut digits, value);
            assert_eq!(digits[from..], *value.to_string().as_bytes());
        }
    }

    #[test]
    fn the_form_is_the_documented_one() {
        let mut canon = Canon::default();
        canon.start(b"salt");
        canon.text("cut");
        canon.integer(-12);
        canon.real(1.5);
        canon.null();
        canon.bytes(&[0, 255]);
        let form = b"saltt3:cuti3:-12r16:3ff8000000000000n0:b2:\x00\xff";
        assert_eq!(canon.scratch, form);
        assert_eq!(canon.digest(), sha256(form));
    }
}
