//! What all text formats share: from bytes to physical lines, and from lines to text.
//!
//! Invariants: bytes are cut into physical lines before anything is decoded, so that one bad byte spoils one line;
//! every byte belongs to exactly one line (or to the byte-order mark); the buffer is bounded whatever the export
//! holds; text is either what the bytes say in the stated encoding, or a fault.

pub mod decoded;

use std::io::{self, Read};

use encoding_rs::{DecoderResult, UTF_8, UTF_16BE, UTF_16LE};
use memchr::{memchr, memchr2};
use revisant_schema::plan::Encoding;

use super::{Bytes, FileFault};

/// A longer line is no table's row; its bytes are passed over and it is handed out as a fault.
pub const LONGEST_LINE: usize = 1 << 20;
/// How much is read at once.
const CHUNK: usize = 64 * 1024;

/// How a physical line ends.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum LineEnd {
    /// It is the last one, and the bytes simply end.
    Missing,
    /// Line feed.
    Lf,
    /// Carriage return.
    Cr,
    /// Carriage return and line feed.
    CrLf,
}

impl LineEnd {
    /// The line end as text.
    pub fn as_str(self) -> &'static str {
        match self {
            Self::Missing => "",
            Self::Lf => "\n",
            Self::Cr => "\r",
            Self::CrLf => "\r\n",
        }
    }
}

/// One physical line: where it stands. Its bytes are asked of [`Lines`] while they are kept.
#[derive(Debug, Clone, Copy)]
pub struct Line {
    /// From 1.
    pub number: u64,
    /// Its first byte.
    pub start: u64,
    /// The byte after its last, line end excluded.
    pub end: u64,
    /// How it ends.
    pub ending: LineEnd,
    /// Longer than [`LONGEST_LINE`]: its bytes were passed over.
    pub too_long: bool,
    /// The first byte of the next line.
    after: u64,
}

/// Bytes that mean nothing in the export's encoding.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Undecodable {
    /// Where they stand, from the export's first byte (0).
    pub offset: u64,
    /// What is wrong with them.
    pub what: String,
}

/// How bytes become text, once that is settled.
#[derive(Debug, Clone, Copy)]
pub(super) enum Coding {
    Utf8,
    /// Nobody said what it is, and it is not UTF-8: only ASCII is the same in all that it may be.
    Ascii,
    Utf16(&'static encoding_rs::Encoding),
    /// An encoding in which the bytes 0x0A and 0x0D are always line ends: true of all others of the WHATWG list.
    Other(&'static encoding_rs::Encoding),
}

impl Coding {
    fn of(encoding: &'static encoding_rs::Encoding) -> Self {
        if encoding == UTF_8 {
            Self::Utf8
        } else if encoding == UTF_16LE || encoding == UTF_16BE {
            Self::Utf16(encoding)
        } else {
            Self::Other(encoding)
        }
    }

    /// How many bytes a decoded text takes in the export. In encodings of several bytes, which can say one thing in two
    /// ways, it is what encoding it again takes.
    pub(super) fn bytes_of(self, text: &str) -> u64 {
        let count = match self {
            Self::Utf8 | Self::Ascii => text.len(),
            Self::Utf16(_) => 2 * text.encode_utf16().count(),
            Self::Other(encoding) if encoding.is_single_byte() => text.chars().count(),
            Self::Other(encoding) => encoding.encode(text).0.len(),
        };
        count as u64
    }

    /// Bytes of one code unit.
    fn unit(self) -> usize {
        if let Self::Utf16(_) = self { 2 } else { 1 }
    }
}

/// What a search for a line end came to.
enum Search {
    /// The line has so many bytes and ends so.
    Ends(usize, LineEnd),
    /// No line end yet; go on from here when there are more bytes.
    More(usize),
}

/// The physical lines of an export, one after the other.
pub struct Lines<'a> {
    stream: Box<dyn Read + 'a>,
    coding: Coding,
    buffer: Vec<u8>,
    /// The export's offset of the buffer's first byte.
    base: u64,
    /// How much of the buffer holds bytes.
    filled: usize,
    /// The first byte of the next line, in the buffer.
    at: usize,
    /// From this offset on bytes must stay in the buffer.
    kept: u64,
    /// Lines handed out.
    number: u64,
    /// The stream has ended.
    drained: bool,
    /// Up to where nobody knows the encoding, and what to say of it.
    unsettled: Option<Unsettled>,
}

/// Bytes that are not UTF-8 where nobody said what they are.
struct Unsettled {
    /// The last byte that is not ASCII.
    last: u64,
    /// What to say.
    what: String,
}

/// How an export is to be decoded.
struct Settled {
    coding: Coding,
    /// Bytes of the byte-order mark.
    mark: usize,
    unsettled: Option<Unsettled>,
}

impl Settled {
    fn new(encoding: &'static encoding_rs::Encoding, mark: usize) -> Self {
        Self { coding: Coding::of(encoding), mark, unsettled: None }
    }
}

impl<'a> Lines<'a> {
    /// Settles the encoding and stands before the first line.
    pub fn open(encoding: Encoding, bytes: &'a dyn Bytes) -> Result<Self, FileFault> {
        let Settled { coding, mark, unsettled } = settle(encoding, bytes)?;
        let mut lines = Self {
            stream: bytes.open()?,
            coding,
            buffer: vec![0; CHUNK],
            base: 0,
            filled: 0,
            at: 0,
            kept: u64::MAX,
            number: 0,
            drained: false,
            unsettled,
        };
        while lines.filled < mark && lines.fill()? {}
        lines.at = mark.min(lines.filled);
        Ok(lines)
    }

    /// How its bytes become text.
    pub(super) fn coding(&self) -> Coding {
        self.coding
    }

    /// Lines handed out so far.
    pub fn count(&self) -> u64 {
        self.number
    }

    /// A fault unless it is known how the text from this byte on is to be decoded.
    ///
    /// Under the encoding `auto` a preamble in an unknown encoding does no harm to a table of ASCII; anything else of
    /// that kind does.
    pub fn settled_from(&self, offset: u64) -> Result<(), FileFault> {
        match &self.unsettled {
            Some(unsettled) if unsettled.last >= offset => Err(FileFault::Unreadable(unsettled.what.clone())),
            _ => Ok(()),
        }
    }

    /// The next line; `None` at the end.
    pub fn advance(&mut self) -> io::Result<Option<Line>> {
        match self.seek_end(LONGEST_LINE)? {
            Some((0, LineEnd::Missing)) => Ok(None),
            Some((length, ending)) => {
                let start = self.offset();
                Ok(Some(self.take(start, length, ending)))
            }
            None => self.pass_long_line().map(Some),
        }
    }

    /// The next line if it has no more than `limit` bytes, else `Some(None)` and nothing moves; `None` at the end.
    pub fn advance_within(&mut self, limit: usize) -> io::Result<Option<Option<Line>>> {
        Ok(match self.seek_end(limit)? {
            Some((0, LineEnd::Missing)) => None,
            Some((length, _)) if length > limit => Some(None),
            Some((length, ending)) => {
                let start = self.offset();
                Some(Some(self.take(start, length, ending)))
            }
            None => Some(None),
        })
    }

    /// Keeps all bytes from this line on, so that [`Self::rewind`] can go back to it.
    pub fn keep(&mut self, line: &Line) {
        self.kept = self.kept.min(line.start);
    }

    /// Keeps nothing any more.
    pub fn release(&mut self) {
        self.kept = u64::MAX;
    }

    /// Goes back to right after a line that is kept.
    pub fn rewind(&mut self, line: &Line) {
        self.at = (line.after - self.base) as usize;
        self.number = line.number;
    }

    /// Adds the line's text to `text`. When it has none, what can be shown of it is added, and the fault returned.
    pub fn decode(&self, line: &Line, text: &mut String) -> Result<(), Undecodable> {
        let bytes = self.bytes(line);
        let valid = match self.coding {
            Coding::Ascii if !bytes.is_ascii() => bytes.iter().take_while(|byte| byte.is_ascii()).count(),
            Coding::Utf8 | Coding::Ascii => match std::str::from_utf8(bytes) {
                Ok(decoded) => {
                    text.push_str(decoded);
                    return Ok(());
                }
                Err(fault) => fault.valid_up_to(),
            },
            Coding::Utf16(encoding) | Coding::Other(encoding) => match decode(encoding, bytes, text) {
                Ok(()) => return Ok(()),
                Err(valid) => valid,
            },
        };
        Err(self.undecodable(line, valid, text))
    }

    /// Shows what can be shown of a line, and says what is wrong with its byte at `fault`.
    fn undecodable(&self, line: &Line, fault: usize, text: &mut String) -> Undecodable {
        let bytes = self.bytes(line);
        let (encoding, name) = match self.coding {
            Coding::Ascii => (UTF_8, "ASCII"),
            Coding::Utf8 => (UTF_8, UTF_8.name()),
            Coding::Utf16(encoding) | Coding::Other(encoding) => (encoding, encoding.name()),
        };
        text.push_str(&encoding.decode_without_bom_handling(bytes).0);
        let byte = bytes.get(fault).copied().unwrap_or_default();
        let offset = line.start + fault as u64;
        Undecodable { offset, what: format!("the byte 0x{byte:02X} at offset {offset} is not {name}") }
    }

    /// The line's bytes, line end excluded.
    fn bytes(&self, line: &Line) -> &[u8] {
        if line.too_long {
            return &[];
        }
        let start = (line.start - self.base) as usize;
        &self.buffer[start..start + (line.end - line.start) as usize]
    }

    fn offset(&self) -> u64 {
        self.base + self.at as u64
    }

    /// Takes the line that began at `start` and goes on for `length` bytes from here.
    fn take(&mut self, start: u64, length: usize, ending: LineEnd) -> Line {
        let end = self.offset() + length as u64;
        self.at += length + ending.as_str().len() * self.coding.unit();
        self.number += 1;
        Line { number: self.number, start, end, ending, too_long: false, after: self.offset() }
    }

    /// Passes over a line that is too long to be kept.
    fn pass_long_line(&mut self) -> io::Result<Line> {
        let start = self.offset();
        loop {
            self.at += LONGEST_LINE;
            if let Some((length, ending)) = self.seek_end(LONGEST_LINE)? {
                return Ok(Line { too_long: true, ..self.take(start, length, ending) });
            }
        }
    }

    /// The length and the end of the line that begins here; `None` when no end lies within `limit` bytes.
    fn seek_end(&mut self, limit: usize) -> io::Result<Option<(usize, LineEnd)>> {
        let mut from = 0;
        loop {
            match self.search(from) {
                Search::Ends(length, ending) => return Ok(Some((length, ending))),
                Search::More(_) if self.drained => return Ok(Some((self.filled - self.at, LineEnd::Missing))),
                Search::More(resume) => from = resume,
            }
            if from > limit {
                return Ok(None);
            }
            self.fill()?;
        }
    }

    fn search(&self, from: usize) -> Search {
        let bytes = &self.buffer[self.at..self.filled];
        match self.coding {
            Coding::Utf16(encoding) => search_units(bytes, from, encoding == UTF_16LE, self.drained),
            _ => search_bytes(bytes, from, self.drained),
        }
    }

    /// Reads more; `false` at the end of the stream.
    fn fill(&mut self) -> io::Result<bool> {
        if self.filled == self.buffer.len() {
            self.make_room();
        }
        let count = read_some(&mut self.stream, &mut self.buffer[self.filled..])?;
        self.filled += count;
        self.drained = count == 0;
        Ok(count > 0)
    }

    /// Moves what is still needed to the front; grows the buffer only when all of it is needed.
    fn make_room(&mut self) {
        let needed = if self.kept < self.offset() { (self.kept - self.base) as usize } else { self.at };
        self.buffer.copy_within(needed..self.filled, 0);
        self.base += needed as u64;
        self.filled -= needed;
        self.at -= needed;
        if self.filled * 2 > self.buffer.len() {
            self.buffer.resize(self.buffer.len() * 2, 0);
        }
    }
}

/// The part of a line that is read: without a form feed (or a mark left over from joining files) at its beginning
/// and, on the last line, without the end marks of old disk formats (Ctrl-Z).
pub fn readable(text: &str, ending: LineEnd) -> (usize, usize) {
    let start = match text.as_bytes().first() {
        Some(b'\x0c' | 0xEF) => text.len() - text.trim_start_matches(['\u{c}', '\u{feff}']).len(),
        // No other character is meant.
        _ => 0,
    };
    let end = match ending {
        LineEnd::Missing => text.trim_end_matches('\u{1a}').len(),
        _ => text.len(),
    };
    (start.min(end), end)
}

/// Whether a NUL character stands in a text.
pub fn holds_nul(text: &str) -> bool {
    memchr(0, text.as_bytes()).is_some()
}

/// What to say of a line in which a NUL character stands, if one does.
pub fn nul_in(line: &Line, text: &str) -> Option<String> {
    let what = || format!("line {}: a NUL character stands in it; it is no text in the encoding taken", line.number);
    holds_nul(text).then(what)
}

/// Looks for a line end where each byte is a code unit.
fn search_bytes(bytes: &[u8], from: usize, drained: bool) -> Search {
    let Some(at) = memchr2(b'\n', b'\r', &bytes[from..]).map(|found| from + found) else {
        return Search::More(bytes.len());
    };
    match (bytes[at], bytes.get(at + 1)) {
        (b'\n', _) => Search::Ends(at, LineEnd::Lf),
        (_, Some(b'\n')) => Search::Ends(at, LineEnd::CrLf),
        (_, None) if !drained => Search::More(at),
        _ => Search::Ends(at, LineEnd::Cr),
    }
}

/// Looks for a line end where two bytes are a code unit.
fn search_units(bytes: &[u8], mut from: usize, little: bool, drained: bool) -> Search {
    let unit = |at: usize| match bytes.get(at..at + 2) {
        Some(&[low, high]) if little => Some(u16::from_le_bytes([low, high])),
        Some(&[high, low]) => Some(u16::from_be_bytes([high, low])),
        _ => None,
    };
    while let Some(found) = memchr2(b'\n', b'\r', bytes.get(from..).unwrap_or_default()) {
        // The byte may also be half of another character, or lie across two.
        let at = (from + found) & !1;
        match (unit(at), unit(at + 2)) {
            (None, _) => return Search::More(at),
            (Some(0x0A), _) => return Search::Ends(at, LineEnd::Lf),
            (Some(0x0D), Some(0x0A)) => return Search::Ends(at, LineEnd::CrLf),
            (Some(0x0D), None) if !drained => return Search::More(at),
            (Some(0x0D), _) => return Search::Ends(at, LineEnd::Cr),
            _ => from = at + 2,
        }
    }
    Search::More(bytes.len() & !1)
}

/// Decodes without replacing anything; on a fault `text` is as before and the faulty byte's position is returned.
fn decode(encoding: &'static encoding_rs::Encoding, bytes: &[u8], text: &mut String) -> Result<(), usize> {
    let before = text.len();
    let mut decoder = encoding.new_decoder_without_bom_handling();
    text.reserve(decoder.max_utf8_buffer_length_without_replacement(bytes.len()).unwrap_or(bytes.len() * 3));
    match decoder.decode_to_string_without_replacement(bytes, text, true) {
        (DecoderResult::InputEmpty, _) => Ok(()),
        (DecoderResult::Malformed(length, passed), read) => {
            text.truncate(before);
            Err(read.saturating_sub(usize::from(length) + usize::from(passed)))
        }
        // Cannot happen with the room reserved above; a fault is the safe reading.
        (DecoderResult::OutputFull, read) => {
            text.truncate(before);
            Err(read)
        }
    }
}

/// The encoding by mark, by plan or by looking at all bytes.
fn settle(encoding: Encoding, bytes: &dyn Bytes) -> Result<Settled, FileFault> {
    match (encoding, byte_order_mark(bytes)?) {
        (Encoding::Auto, Some((found, mark))) => Ok(Settled::new(found, mark)),
        (Encoding::Auto, None) => look(bytes),
        (Encoding::Label(label), _) if label == encoding_rs::REPLACEMENT => {
            Err(FileFault::Unreadable("the encoding that the plan names is one that nobody decodes any more".into()))
        }
        (Encoding::Label(label), None) => Ok(Settled::new(label, 0)),
        (Encoding::Label(label), Some((found, mark))) if label == found => Ok(Settled::new(label, mark)),
        (Encoding::Label(label), Some((found, _))) => Err(FileFault::Unreadable(format!(
            "the byte-order mark says {}, the plan says {}",
            found.name(),
            label.name()
        ))),
    }
}

/// The encoding that a byte-order mark names, and the mark's length.
pub fn byte_order_mark(bytes: &dyn Bytes) -> Result<Option<(&'static encoding_rs::Encoding, usize)>, FileFault> {
    let mut head = Vec::with_capacity(3);
    bytes.open()?.take(3).read_to_end(&mut head)?;
    Ok(encoding_rs::Encoding::for_bom(&head))
}

/// Looks through all bytes whether they are UTF-8.
fn look(bytes: &dyn Bytes) -> Result<Settled, FileFault> {
    let Some(first) = first_not_utf8(bytes)? else { return Ok(Settled::new(UTF_8, 0)) };
    let what = format!(
        "line {}: the byte at offset {first} is not UTF-8, and there is no byte-order mark; \
         the plan must name the encoding (windows-1252, for example)",
        line_of(bytes, first)?
    );
    let last = last_not_ascii(bytes)?;
    Ok(Settled { coding: Coding::Ascii, mark: 0, unsettled: Some(Unsettled { last, what }) })
}

/// The offset of the first byte that is not UTF-8.
///
/// A character that the end of the bytes cuts off is no evidence against UTF-8: all before it was valid, and the
/// line it stands on becomes a fault of its own when it is read.
fn first_not_utf8(bytes: &dyn Bytes) -> io::Result<Option<u64>> {
    let mut stream = bytes.open()?;
    let mut buffer = vec![0; CHUNK];
    let (mut held, mut passed) = (0, 0_u64);
    loop {
        let count = read_some(&mut stream, &mut buffer[held..])?;
        if count == 0 {
            return Ok(None);
        }
        let seen = &buffer[..held + count];
        let valid = match std::str::from_utf8(seen) {
            Ok(_) => seen.len(),
            Err(fault) if fault.error_len().is_none() => fault.valid_up_to(),
            Err(fault) => return Ok(Some(passed + fault.valid_up_to() as u64)),
        };
        passed += valid as u64;
        let seen = seen.len();
        buffer.copy_within(valid..seen, 0);
        held = seen - valid;
    }
}

/// The offset of the last byte that is not ASCII.
fn last_not_ascii(bytes: &dyn Bytes) -> io::Result<u64> {
    let mut stream = bytes.open()?;
    let mut buffer = vec![0; CHUNK];
    let (mut last, mut passed) = (0, 0_u64);
    loop {
        let count = read_some(&mut stream, &mut buffer)?;
        if count == 0 {
            return Ok(last);
        }
        if let Some(at) = buffer[..count].iter().rposition(|byte| !byte.is_ascii()) {
            last = passed + at as u64;
        }
        passed += count as u64;
    }
}

/// The physical line on which a byte stands.
fn line_of(bytes: &dyn Bytes, offset: u64) -> Result<u64, FileFault> {
    let mut lines = Lines::open(Encoding::Label(UTF_8), bytes)?;
    while let Some(line) = lines.advance()? {
        if offset < line.after {
            return Ok(line.number);
        }
    }
    Ok(lines.count())
}

/// Reads what there is; 0 at the end.
pub fn read_some(stream: &mut dyn Read, into: &mut [u8]) -> io::Result<usize> {
    loop {
        match stream.read(into) {
            Err(fault) if fault.kind() == io::ErrorKind::Interrupted => {}
            outcome => return outcome,
        }
    }
}

#[cfg(test)]
#[allow(clippy::unwrap_used, reason = "tests may")]
mod tests {
    use super::*;

    /// Hands out so many bytes at a time.
    struct Drip(Vec<u8>, usize);

    impl Bytes for Drip {
        fn open(&self) -> io::Result<Box<dyn Read + '_>> {
            Ok(Box::new(DripStream(&self.0, self.1)))
        }
    }

    struct DripStream<'a>(&'a [u8], usize);

    impl Read for DripStream<'_> {
        fn read(&mut self, into: &mut [u8]) -> io::Result<usize> {
            let count = self.1.min(into.len()).min(self.0.len());
            into[..count].copy_from_slice(&self.0[..count]);
            self.0 = &self.0[count..];
            Ok(count)
        }
    }

    fn lines(bytes: &[u8], encoding: Encoding, drip: usize) -> Vec<(u64, u64, String, LineEnd)> {
        let bytes = Drip(bytes.to_vec(), drip);
        let mut lines = Lines::open(encoding, &bytes).unwrap();
        let mut seen = vec![];
        while let Some(line) = lines.advance().unwrap() {
            let mut text = String::new();
            lines.decode(&line, &mut text).unwrap();
            seen.push((line.start, line.end, text, line.ending));
        }
        assert_eq!(lines.count(), seen.len() as u64);
        seen
    }

    #[test]
    fn every_kind_of_line_end_is_one() {
        for drip in 1..5 {
            let seen = lines(b"a\nb\r\nc\rd\r\r\ne", Encoding::Auto, drip);
            let texts = seen.iter().map(|(start, end, text, ending)| (*start, *end, text.as_str(), *ending));
            let expected = [
                (0, 1, "a", LineEnd::Lf),
                (2, 3, "b", LineEnd::CrLf),
                (5, 6, "c", LineEnd::Cr),
                (7, 8, "d", LineEnd::Cr),
                (9, 9, "", LineEnd::CrLf),
                (11, 12, "e", LineEnd::Missing),
            ];
            assert_eq!(texts.collect::<Vec<_>>(), expected);
        }
    }

    #[test]
    fn utf16_is_split_on_code_units() {
        // U+0A0D and U+0D0A hold both bytes of a line end, and U+0A41 U+0041 lies across one.
        let text = "\u{a0d}\u{d0a}\u{a41}A\r\nb\rc\n";
        for little in [true, false] {
            let mut bytes = if little { vec![0xFF, 0xFE] } else { vec![0xFE, 0xFF] };
            let units = text.encode_utf16();
            bytes.extend(units.flat_map(|unit| if little { unit.to_le_bytes() } else { unit.to_be_bytes() }));
            for drip in 1..6 {
                let seen = lines(&bytes, Encoding::Auto, drip);
                let texts: Vec<_> = seen.iter().map(|(start, end, text, _)| (*start, *end, text.as_str())).collect();
                assert_eq!(texts, [(2, 10, "\u{a0d}\u{d0a}\u{a41}A"), (14, 16, "b"), (18, 20, "c")]);
            }
        }
    }

    #[test]
    fn a_long_line_is_passed_over_in_bounded_memory() {
        let mut bytes = b"first\n".to_vec();
        bytes.extend(vec![b'x'; 5 * LONGEST_LINE + 3]);
        bytes.extend(b"\r\nlast\n");
        let mut lines = Lines::open(Encoding::Auto, &bytes).unwrap();
        assert_eq!(lines.advance().unwrap().unwrap().end, 5);
        let long = lines.advance().unwrap().unwrap();
        assert!(long.too_long);
        assert_eq!(long.end - long.start, 5 * LONGEST_LINE as u64 + 3);
        let last = lines.advance().unwrap().unwrap();
        let mut text = String::new();
        lines.decode(&last, &mut text).unwrap();
        assert_eq!((last.number, text.as_str()), (3, "last"));
        assert!(lines.advance().unwrap().is_none());
        assert!(lines.buffer.len() <= 4 * LONGEST_LINE);
    }

    #[test]
    fn what_is_not_utf8_is_named_by_line_and_byte() {
        let bytes = b"one\r\ntwo\rm\xB5\n".to_vec();
        let lines = Lines::open(Encoding::Auto, &bytes).unwrap();
        assert!(lines.settled_from(11).is_ok());
        let fault = lines.settled_from(10).unwrap_err().to_string();
        assert!(fault.contains("line 3") && fault.contains("offset 10") && fault.contains("encoding"), "{fault}");
    }

    #[test]
    fn a_mark_must_agree_with_the_plan() {
        let bytes = b"\xEF\xBB\xBFa\n".to_vec();
        assert!(Lines::open(Encoding::Label(UTF_8), &bytes).is_ok());
        let fault = Lines::open(Encoding::Label(encoding_rs::WINDOWS_1252), &bytes).err().unwrap();
        assert!(matches!(fault, FileFault::Unreadable(_)), "{fault}");
    }

    #[test]
    fn an_undecodable_byte_is_named_by_its_offset() {
        for (encoding, bytes, offset) in [
            (UTF_8, &b"ok\nab\xFFc\n"[..], 5),
            (encoding_rs::SHIFT_JIS, &b"ok\nab\x80\xFFc\n"[..], 6),
            (UTF_16LE, &b"o\0\n\0a\0\0\xDCb\0"[..], 6),
            (UTF_16LE, &b"o\0\n\0a\0b"[..], 6),
        ] {
            let bytes = bytes.to_vec();
            let mut lines = Lines::open(Encoding::Label(encoding), &bytes).unwrap();
            lines.advance().unwrap();
            let line = lines.advance().unwrap().unwrap();
            let mut text = String::new();
            assert_eq!(lines.decode(&line, &mut text).unwrap_err().offset, offset, "{}", encoding.name());
            assert!(text.contains('\u{fffd}'));
        }
    }
}
