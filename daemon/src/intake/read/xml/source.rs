//! From an export's bytes to the text of a document, piece by piece.
//!
//! Invariants: text is what the bytes say in one settled encoding, and holds only characters that XML allows, or
//! reading fails where they stop; what is remembered is bounded; every position in the text is known as line, column
//! and byte.

use std::io::{self, BufRead, Read};

use encoding_rs::{Decoder, DecoderResult, Encoding as Coding, REPLACEMENT, UTF_8, UTF_16BE, UTF_16LE};
use memchr::memchr2;
use revisant_schema::plan::Encoding;

use super::grammar::Declaration;
use crate::intake::read::heading::excerpt;
use crate::intake::read::text::{byte_order_mark, read_some};
use crate::intake::read::{Bytes, FileFault};

/// No row, and nothing else that stands between two tags, takes more text.
pub const LARGEST: usize = 16 << 20;
/// How much is read at once.
const CHUNK: usize = 64 * 1024;
/// An XML declaration ends within so many bytes, or names no encoding.
const LONGEST_DECLARATION: u64 = 4096;

/// A position in the text, as people count.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Place {
    /// The physical line (ended by LF, CR or both), from 1.
    pub line: u64,
    /// The character on it, from 1.
    pub column: u64,
    after_return: bool,
}

impl Place {
    const START: Self = Self { line: 1, column: 1, after_return: false };

    /// The place behind this text.
    pub fn after(mut self, text: &str) -> Self {
        for byte in text.bytes() {
            let ends_line = matches!(byte, b'\n' | b'\r');
            self.line += u64::from(ends_line && !(byte == b'\n' && self.after_return));
            let begins_character = (byte & 0xC0) != 0x80;
            self.column = if ends_line { 1 } else { self.column + u64::from(begins_character) };
            self.after_return = byte == b'\r';
        }
        self
    }

    /// A fault of the document here.
    pub fn unreadable(self, what: impl std::fmt::Display) -> FileFault {
        FileFault::Unreadable(format!("line {}, column {}: {what}", self.line, self.column))
    }
}

/// Who says what the encoding is.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Says {
    Plan,
    Mark,
    Declaration,
    Nobody,
}

impl Says {
    fn name(self) -> &'static str {
        match self {
            Self::Plan => "the plan",
            Self::Mark => "the byte-order mark",
            Self::Declaration => "the XML declaration",
            Self::Nobody => "XML itself, where nothing else is said,",
        }
    }
}

/// The text of a document as a stream.
pub struct Source<'a> {
    stream: Box<dyn Read + 'a>,
    coding: &'static Coding,
    says: Says,
    decoder: Decoder,
    raw: Vec<u8>,
    /// Bytes of the export that have been read.
    passed: u64,
    drained: bool,
    text: String,
    /// The byte of the export at which `text` begins, if the encoding is UTF-8.
    text_begins: u64,
    /// How much of `text` has been taken.
    at: usize,
    /// Pairs of positions in `text` and in the export that belong together; the first is where `text` begins. Nothing
    /// asks for them in UTF-8.
    pairs: Vec<(usize, u64)>,
    place: Place,
    /// The text taken since [`Self::forget`].
    taken: String,
    /// What is wrong right behind `text`.
    wrong: Option<String>,
    /// Why reading failed.
    fault: Option<FileFault>,
}

impl<'a> Source<'a> {
    /// Settles the encoding and stands before the first character.
    pub fn open(encoding: Encoding, bytes: &'a dyn Bytes) -> Result<Self, FileFault> {
        let mark = byte_order_mark(bytes)?;
        let (coding, says) = settle(encoding, mark.map(|(found, _)| found), bytes)?;
        let mut stream = bytes.open()?;
        let length = mark.map_or(0, |(_, length)| length as u64);
        let passed = io::copy(&mut stream.by_ref().take(length), &mut io::sink())?;
        Ok(Self {
            stream,
            coding,
            says,
            decoder: coding.new_decoder_without_bom_handling(),
            raw: vec![0; CHUNK],
            passed,
            drained: false,
            text: String::new(),
            text_begins: passed,
            at: 0,
            pairs: vec![(0, passed)],
            place: Place::START,
            taken: String::new(),
            wrong: None,
            fault: None,
        })
    }

    /// Where it stands.
    pub fn place(&self) -> Place {
        self.place
    }

    /// The export's byte at which it stands: exact before `<` and behind `>`.
    pub fn offset(&self) -> u64 {
        if self.coding == UTF_8 {
            return self.text_begins + self.at as u64;
        }
        let next = self.pairs.partition_point(|(text, _)| *text <= self.at);
        let (text, byte) = next.checked_sub(1).and_then(|last| self.pairs.get(last)).copied().unwrap_or_default();
        // Between two pairs this is no more than near.
        let into = byte + (self.at - text) as u64;
        self.pairs.get(next).map_or(into, |(_, end)| into.min(end.saturating_sub(1)))
    }

    /// The text taken since [`Self::forget`].
    pub fn taken(&self) -> &str {
        &self.taken
    }

    /// Forgets what has been taken.
    pub fn forget(&mut self) {
        self.taken.clear();
    }

    /// Why reading failed, if it did.
    pub fn fault(&mut self) -> Option<FileFault> {
        self.fault.take()
    }

    /// A fault if what the XML declaration says of the encoding is not so.
    pub fn agree(&self, declared: &str) -> Result<(), String> {
        let same_family = |named: &Coding| named == UTF_16LE && !declared.trim().eq_ignore_ascii_case("utf-16le");
        match Coding::for_label(declared.as_bytes()) {
            Some(named) if named == self.coding => Ok(()),
            // "UTF-16" leaves the order of bytes to the mark.
            Some(named) if same_family(named) && self.coding == UTF_16BE => Ok(()),
            None if self.says == Says::Plan => Ok(()),
            None => Err(unknown(declared)),
            Some(_) => Err(format!(
                "the XML declaration says that the encoding is {}, {} says {}",
                excerpt(declared),
                self.says.name(),
                self.coding.name()
            )),
        }
    }

    /// Reads and decodes until there is text, a fault or the end.
    fn refill(&mut self) -> io::Result<()> {
        self.text_begins += self.text.len() as u64;
        self.text.clear();
        self.at = 0;
        self.pairs.clear();
        self.pairs.push((0, self.begun(self.passed)));
        while self.text.is_empty() && self.wrong.is_none() && !self.drained {
            let count = read_some(&mut *self.stream, &mut self.raw)?;
            self.drained = count == 0;
            self.decode(count);
            self.check();
        }
        Ok(())
    }

    /// Decodes what has been read.
    fn decode(&mut self, count: usize) {
        let mut from = 0;
        loop {
            let rest = self.raw.get(from..count).unwrap_or_default();
            let piece = self.piece(rest, self.passed + from as u64);
            let bytes = rest.get(..piece).unwrap_or_default();
            self.text.reserve(self.decoder.max_utf8_buffer_length_without_replacement(piece).unwrap_or(piece * 4 + 16));
            let decoded = self.decoder.decode_to_string_without_replacement(bytes, &mut self.text, self.drained);
            let begun = self.passed + from as u64;
            let undecodable = match decoded {
                (DecoderResult::InputEmpty, _) => None,
                (DecoderResult::Malformed(length, after), read) => {
                    Some((begun + read as u64).saturating_sub(u64::from(length) + u64::from(after)))
                }
                // Cannot happen with the room reserved above; a fault is the safe reading.
                (DecoderResult::OutputFull, read) => Some(begun + read as u64),
            };
            if let Some(offset) = undecodable {
                self.wrong = Some(self.undecodable(offset));
                return;
            }
            from += piece;
            self.pairs.push((self.text.len(), self.begun(self.passed + from as u64)));
            if from >= count {
                break;
            }
        }
        self.passed += count as u64;
    }

    /// How many of the bytes, which begin at `offset`, are decoded at once: up to the next byte that may be `<` or
    /// `>`, or that byte alone, so that the positions around it are known in bytes.
    fn piece(&self, bytes: &[u8], offset: u64) -> usize {
        if self.coding == UTF_8 {
            return bytes.len();
        }
        let unit = self.unit();
        let into = |at: u64| (at % unit as u64) as usize;
        let end = match memchr2(b'<', b'>', bytes) {
            // A code unit that was begun before is ended first, since it may be one of them.
            _ if into(offset) > 0 => unit - into(offset),
            None => bytes.len(),
            Some(found) => match found - into(offset + found as u64) {
                0 => unit,
                before => before,
            },
        };
        end.min(bytes.len())
    }

    /// Bytes of one code unit.
    fn unit(&self) -> usize {
        if self.coding == UTF_16LE || self.coding == UTF_16BE { 2 } else { 1 }
    }

    /// Where the text begins whose bytes have been read up to `offset`, perhaps to the middle of a code unit.
    fn begun(&self, offset: u64) -> u64 {
        offset - offset % self.unit() as u64
    }

    fn undecodable(&self, offset: u64) -> String {
        if self.says == Says::Nobody {
            return format!(
                "the byte at offset {offset} is not UTF-8, and there is neither a byte-order mark nor an encoding in an \
                 XML declaration; the plan must name the encoding (windows-1252, for example)"
            );
        }
        format!("the byte at offset {offset} is not {}, as {} says", self.coding.name(), self.says.name())
    }

    /// Cuts the text before a character that no document may hold.
    fn check(&mut self) {
        let doubled = self.place == Place::START && self.taken.is_empty() && self.text.starts_with('\u{feff}');
        let found = if doubled { Some(0) } else { forbidden(&self.text) };
        let Some(at) = found else { return };
        let character = self.text.get(at..).and_then(|rest| rest.chars().next()).unwrap_or_default();
        self.text.truncate(at);
        self.wrong = Some(match character {
            '\0' => "a NUL character, so this is no text in the encoding taken (if it is UTF-16 without a byte-order \
                     mark, the plan must say so)"
                .to_owned(),
            '\u{feff}' => "a second byte-order mark".to_owned(),
            other => format!("the character U+{:04X}, which no XML document may hold", u32::from(other)),
        });
    }

    fn fail(&mut self, fault: FileFault) -> io::Error {
        self.fault = Some(fault);
        io::Error::other("the document's text ends in a fault")
    }
}

impl Read for Source<'_> {
    fn read(&mut self, into: &mut [u8]) -> io::Result<usize> {
        let count = self.fill_buf()?.read(into)?;
        self.consume(count);
        Ok(count)
    }
}

impl BufRead for Source<'_> {
    fn fill_buf(&mut self) -> io::Result<&[u8]> {
        if self.at >= self.text.len() {
            if self.taken.len() > LARGEST {
                let fault = too_large(self.place);
                return Err(self.fail(fault));
            }
            if self.wrong.is_none()
                && let Err(fault) = self.refill()
            {
                return Err(self.fail(FileFault::Io(fault)));
            }
            if self.at >= self.text.len()
                && let Some(wrong) = self.wrong.take()
            {
                let fault = self.place.unreadable(wrong);
                return Err(self.fail(fault));
            }
        }
        Ok(self.text.get(self.at..).unwrap_or_default().as_bytes())
    }

    fn consume(&mut self, count: usize) {
        let end = (self.at + count).min(self.text.len());
        // The parser stops only at ASCII characters and at the end.
        let passed = self.text.get(self.at..end).unwrap_or_default();
        self.place = self.place.after(passed);
        self.taken.push_str(passed);
        self.at = end;
    }
}

/// What to say of more text than is read at once.
pub fn too_large(place: Place) -> FileFault {
    FileFault::TooLarge(format!(
        "line {}: what stands here takes more than {} MiB of text without an end, more than any row",
        place.line,
        LARGEST >> 20
    ))
}

/// Where a character stands that no document may hold (XML 1.0, production 2).
fn forbidden(text: &str) -> Option<usize> {
    let control = |byte: u8| byte < 0x20 && !matches!(byte, b'\t' | b'\n' | b'\r');
    // U+FFFE and U+FFFF begin with 0xEF; looking at all bytes without a branch is many times faster.
    if !text.bytes().fold(false, |found, byte| found | control(byte) | (byte == 0xEF)) {
        return None;
    }
    text.find(|character: char| {
        matches!(character, '\u{fffe}' | '\u{ffff}') || (character < ' ' && control(character as u8))
    })
}

/// The encoding by the plan, by mark or by declaration.
fn settle(
    encoding: Encoding,
    mark: Option<&'static Coding>,
    bytes: &dyn Bytes,
) -> Result<(&'static Coding, Says), FileFault> {
    let (coding, says) = match (encoding, mark) {
        (Encoding::Label(label), _) => (label, Says::Plan),
        (Encoding::Auto, Some(found)) => (found, Says::Mark),
        (Encoding::Auto, None) => declared(bytes)?.map_or((UTF_8, Says::Nobody), |named| (named, Says::Declaration)),
    };
    if coding == REPLACEMENT {
        let what = format!("the encoding that {} names is one that nobody decodes any more", says.name());
        return Err(FileFault::Unreadable(what));
    }
    match mark {
        Some(found) if found != coding => Err(FileFault::Unreadable(format!(
            "the byte-order mark says {}, {} says {}",
            found.name(),
            says.name(),
            coding.name()
        ))),
        _ => Ok((coding, says)),
    }
}

/// The encoding that the XML declaration names, in an export without a byte-order mark.
fn declared(bytes: &dyn Bytes) -> Result<Option<&'static Coding>, FileFault> {
    let mut head = Vec::new();
    bytes.open()?.take(LONGEST_DECLARATION).read_to_end(&mut head)?;
    let head = String::from_utf8_lossy(&head);
    let Some(end) = head.find("?>") else { return Ok(None) };
    // What is wrong with a declaration is said when it is read as a part of the document.
    let Ok(Declaration { encoding: Some(label) }) = Declaration::parse(&head[..end + 2]) else { return Ok(None) };
    match Coding::for_label(label.as_bytes()) {
        Some(named) if named == UTF_16LE || named == UTF_16BE => Err(FileFault::Unreadable(format!(
            "the XML declaration says that the encoding is {label}, but it is not written in it itself; the plan must \
             name the encoding"
        ))),
        Some(named) => Ok(Some(named)),
        None => Err(FileFault::Unreadable(unknown(label))),
    }
}

fn unknown(label: &str) -> String {
    format!(
        "the XML declaration names the encoding \"{}\", which is not known; the plan must name the encoding",
        excerpt(label)
    )
}
