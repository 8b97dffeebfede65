//! JSON text, read from one end to the other.
//!
//! Invariants: whatever is passed over is checked as RFC 8259 has it; what has been passed over is forgotten unless
//! it is kept, and what is kept is bounded, so that memory does not grow with the document; nothing nests deeper
//! than [`DEEPEST`]; a line is what it is in every other text format (LF, CR or CRLF ends it).

use super::super::FileFault;
use super::super::heading::fold;
use super::super::text::Coding;
use super::super::text::decoded::Decoded;

/// A row, a key or an enclosing text takes no more bytes than this once it is decoded.
pub const LARGEST: usize = 16 << 20;
/// How many objects and arrays may lie in each other.
const DEEPEST: u32 = 128;

/// Where a scan gets its text from.
pub trait Feed {
    /// What to call all of the text in a message.
    const WHOLE: &'static str;
    /// Adds more text; `false` at the end.
    fn more(&mut self, into: &mut String) -> Result<bool, FileFault>;
    /// How many bytes a text takes in the export.
    fn bytes_of(&self, text: &str) -> u64;
}

impl Feed for Decoded<'_> {
    const WHOLE: &'static str = "the document";

    fn more(&mut self, into: &mut String) -> Result<bool, FileFault> {
        Decoded::more(self, into)
    }

    fn bytes_of(&self, text: &str) -> u64 {
        Decoded::bytes_of(self, text)
    }
}

/// A line, of which there is nothing more to come.
pub struct OneLine(pub Coding);

impl Feed for OneLine {
    const WHOLE: &'static str = "the line";

    fn more(&mut self, _: &mut String) -> Result<bool, FileFault> {
        Ok(false)
    }

    fn bytes_of(&self, text: &str) -> u64 {
        self.0.bytes_of(text)
    }
}

/// JSON text and a place in it.
///
/// Spots are counted in bytes of decoded text from its first character. After every function that succeeds the place
/// is right behind what the function names.
pub struct Scan<F> {
    feed: F,
    /// The text from the spot `base` on.
    text: String,
    base: u64,
    /// The place, in `text`.
    at: usize,
    /// From this spot on text must stay.
    kept: Option<u64>,
    drained: bool,
    /// Objects (1) and arrays (0) that are open, the innermost in the lowest bit.
    kinds: u128,
    depth: u32,
    /// An object or array has just been opened: no comma precedes its first child.
    fresh: bool,
    place: Place,
    /// The line and the byte offset at which it all begins.
    begins: (u64, u64),
    /// The export's byte offset of a spot, from which others are counted.
    counted: (u64, u64),
}

/// What is known of the present line.
struct Place {
    line: u64,
    /// The spot of its first character.
    start: u64,
    /// The spot behind the last CR: an LF there ends no further line.
    after_cr: Option<u64>,
    /// How many of its characters have been forgotten.
    forgotten: u64,
}

impl Place {
    fn at_line(line: u64) -> Self {
        Self { line, start: 0, after_cr: None, forgotten: 0 }
    }
}

type Outcome<T> = Result<T, FileFault>;

impl<F: Feed> Scan<F> {
    /// Stands before the first character, whose byte offset in the export is `offset`.
    pub fn new(feed: F, offset: u64) -> Self {
        Self {
            feed,
            text: String::new(),
            base: 0,
            at: 0,
            kept: None,
            drained: false,
            kinds: 0,
            depth: 0,
            fresh: false,
            place: Place::at_line(1),
            begins: (1, offset),
            counted: (0, offset),
        }
    }

    /// Stands before the first character of a text of its own, on the line `line` and at the byte `offset`. Such a text
    /// is all there is, and none of it is forgotten.
    pub fn set(&mut self, text: &str, line: u64, offset: u64) {
        self.text.clear();
        self.text.push_str(text);
        self.drained = true;
        self.begins = (line, offset);
        self.rewind();
    }

    /// Goes back to the first character of a text that was [`Self::set`].
    pub fn rewind(&mut self) {
        (self.base, self.at, self.kept) = (0, 0, None);
        (self.kinds, self.depth, self.fresh) = (0, 0, false);
        let (line, offset) = self.begins;
        self.place = Place::at_line(line);
        self.counted = (0, offset);
    }

    /// The physical line of the place.
    pub fn line(&self) -> u64 {
        self.place.line
    }

    /// The spot of the place.
    pub fn spot(&self) -> u64 {
        self.base + self.at as u64
    }

    /// The export's byte offset of the place. Never asked of a place before one that it was asked of.
    pub fn offset(&mut self) -> u64 {
        self.count_to(self.spot());
        self.counted.1
    }

    fn count_to(&mut self, spot: u64) {
        let from = self.counted.0.saturating_sub(self.base) as usize;
        let to = spot.saturating_sub(self.base) as usize;
        if let Some(text) = self.text.get(from..to) {
            self.counted = (spot, self.counted.1 + self.feed.bytes_of(text));
        }
    }

    /// Keeps the text from the place on; to be handed to [`Self::release`].
    pub fn keep(&mut self) -> Kept {
        let before = self.kept;
        self.kept = before.or(Some(self.spot()));
        Kept { before, from: self.spot() }
    }

    /// The text kept, up to the place.
    pub fn taken(&self, kept: &Kept) -> Outcome<&str> {
        let from = kept.from.saturating_sub(self.base) as usize;
        match self.text.get(from..self.at).unwrap_or_default() {
            text if text.len() > LARGEST => Err(self.too_large()),
            text => Ok(text),
        }
    }

    /// Keeps what was kept before and no more.
    pub fn release(&mut self, kept: Kept) {
        self.kept = kept.before;
    }

    fn too_large(&self) -> FileFault {
        FileFault::TooLarge(format!(
            "near line {}: one row, key or text takes more than {} MiB; does \"rows\" in the plan name the right place?",
            self.place.line,
            LARGEST >> 20
        ))
    }

    /// Gets more text when all there is has been passed; `false` at the end.
    #[cold]
    fn more(&mut self) -> Outcome<bool> {
        if self.drained {
            return Ok(false);
        }
        self.forget();
        if self.kept.is_some() && self.text.len() > LARGEST {
            return Err(self.too_large());
        }
        match self.feed.more(&mut self.text) {
            Ok(more) => {
                self.drained = !more;
                Ok(more)
            }
            Err(FileFault::Unreadable(what)) => Err(self.wrong(&what)),
            Err(other) => Err(other),
        }
    }

    /// Forgets what has been passed and is not kept.
    fn forget(&mut self) {
        let until = self.kept.unwrap_or(self.spot());
        if until <= self.base {
            return;
        }
        self.count_to(until.max(self.counted.0));
        self.place.forgotten = self.characters_before(until);
        self.text.drain(..(until - self.base) as usize);
        self.at -= (until - self.base) as usize;
        self.base = until;
    }

    /// How many characters of the present line stand before a spot that is not forgotten.
    fn characters_before(&self, spot: u64) -> u64 {
        let (forgotten, from) = match self.place.start.checked_sub(self.base) {
            Some(from) => (0, from as usize),
            None => (self.place.forgotten, 0),
        };
        let text = self.text.get(from..spot.saturating_sub(self.base) as usize);
        forgotten + text.map_or(0, |text| text.chars().count() as u64)
    }

    /// A fault at the place.
    pub fn wrong(&self, what: &str) -> FileFault {
        let column = 1 + self.characters_before(self.spot());
        FileFault::Unreadable(format!("line {}, column {column}: {what}", self.place.line))
    }

    /// The fault that something else stands where `wanted` should.
    fn unexpected(&self, wanted: &str) -> FileFault {
        match self.text.get(self.at..).and_then(|rest| rest.chars().next()) {
            None => self.wrong(&format!("{} ends where {wanted} should stand; it was cut off", F::WHOLE)),
            Some('\0') => self
                .wrong(&format!("a NUL character stands where {wanted} should; it is no text in the encoding taken")),
            Some(character) if character.is_control() => {
                self.wrong(&format!("the character U+{:04X} stands where {wanted} should", u32::from(character)))
            }
            Some(character) => self.wrong(&format!("\"{character}\" stands where {wanted} should")),
        }
    }

    /// The next byte, which is not passed; `None` at the end.
    pub fn peek(&mut self) -> Outcome<Option<u8>> {
        loop {
            if let Some(byte) = self.text.as_bytes().get(self.at) {
                return Ok(Some(*byte));
            }
            if !self.more()? {
                return Ok(None);
            }
        }
    }

    /// Passes the byte `wanted` if it is next.
    fn pass_byte(&mut self, wanted: u8) -> Outcome<bool> {
        let there = self.peek()? == Some(wanted);
        self.at += usize::from(there);
        Ok(there)
    }

    /// Passes white space.
    pub fn space(&mut self) -> Outcome<()> {
        while let Some(byte) = self.peek()? {
            match byte {
                b' ' | b'\t' => self.at += 1,
                b'\n' | b'\r' => self.line_end(byte),
                _ => return Ok(()),
            }
        }
        Ok(())
    }

    fn line_end(&mut self, byte: u8) {
        let continues = byte == b'\n' && self.place.after_cr == Some(self.spot());
        self.at += 1;
        self.place.line += u64::from(!continues);
        self.place.start = self.spot();
        self.place.after_cr = (byte == b'\r').then_some(self.place.start);
    }

    /// Passes the white space that may stand behind the outermost value, and sees that nothing else does.
    pub fn end(&mut self) -> Outcome<()> {
        self.space()?;
        match self.peek()? {
            None => Ok(()),
            Some(0) => Err(self.unexpected("the end")),
            Some(_) => Err(self.wrong(&format!("more text follows, although {} is complete", F::WHOLE))),
        }
    }

    /// Passes white space, and tells by what byte the next value begins.
    pub fn begin(&mut self) -> Outcome<u8> {
        self.space()?;
        match self.peek()? {
            Some(byte @ (b'{' | b'[' | b'"' | b'-' | b'0'..=b'9' | b't' | b'f' | b'n')) => Ok(byte),
            _ => Err(self.unexpected("a value")),
        }
    }

    /// Passes the brace or bracket by which an object or array begins.
    pub fn open(&mut self) -> Outcome<()> {
        if self.depth == DEEPEST {
            return Err(self.wrong(&format!("more than {DEEPEST} objects and arrays lie in each other here")));
        }
        self.depth += 1;
        self.kinds = self.kinds << 1 | u128::from(self.peek()? == Some(b'{'));
        self.fresh = true;
        self.at += 1;
        Ok(())
    }

    /// Goes to the next key or element of what is open; at its end passes that, and gives `false`.
    fn child(&mut self) -> Outcome<bool> {
        let object = self.kinds & 1 == 1;
        let (close, wanted) = if object { (b'}', "\",\" or \"}\"") } else { (b']', "\",\" or \"]\"") };
        let fresh = std::mem::take(&mut self.fresh);
        self.space()?;
        if self.pass_byte(close)? {
            self.depth -= 1;
            self.kinds >>= 1;
            return Ok(false);
        }
        if !fresh {
            if !self.pass_byte(b',')? {
                return Err(self.unexpected(wanted));
            }
            self.space()?;
        }
        if object && self.peek()? != Some(b'"') {
            return Err(self.unexpected("a key in quotes"));
        }
        Ok(true)
    }

    /// Goes to the next element's value of the array that is open, or passes its end and gives `false`.
    pub fn element(&mut self) -> Outcome<bool> {
        self.child()
    }

    /// Adds the next key of the open object to `name`, as keys are compared, and goes to its value; or passes the
    /// object's end and gives `false`.
    pub fn member(&mut self, name: &mut String) -> Outcome<bool> {
        if !self.child()? {
            return Ok(false);
        }
        let kept = self.keep();
        self.string()?;
        push_name(self.taken(&kept)?, name);
        self.release(kept);
        self.colon()?;
        Ok(true)
    }

    fn colon(&mut self) -> Outcome<()> {
        self.space()?;
        if self.pass_byte(b':')? { Ok(()) } else { Err(self.unexpected("\":\"")) }
    }

    /// Passes a value, whatever is in it.
    pub fn pass(&mut self) -> Outcome<()> {
        let outside = self.depth;
        loop {
            match self.begin()? {
                b'{' | b'[' => self.open()?,
                first => self.scalar(first)?,
            }
            loop {
                if self.depth == outside {
                    return Ok(());
                }
                if self.child()? {
                    break;
                }
            }
            if self.kinds & 1 == 1 {
                self.string()?;
                self.colon()?;
            }
        }
    }

    fn scalar(&mut self, first: u8) -> Outcome<()> {
        match first {
            b'"' => self.string(),
            b't' => self.word("true"),
            b'f' => self.word("false"),
            b'n' => self.word("null"),
            _ => self.number(),
        }
    }

    fn word(&mut self, word: &str) -> Outcome<()> {
        for byte in word.bytes() {
            if !self.pass_byte(byte)? {
                return Err(self.unexpected(&format!("the rest of \"{word}\"")));
            }
        }
        Ok(())
    }

    fn number(&mut self) -> Outcome<()> {
        self.pass_byte(b'-')?;
        if !self.pass_byte(b'0')? {
            self.digits()?;
        }
        if self.pass_byte(b'.')? {
            self.digits()?;
        }
        if self.pass_byte(b'e')? || self.pass_byte(b'E')? {
            let _ = self.pass_byte(b'+')? || self.pass_byte(b'-')?;
            self.digits()?;
        }
        Ok(())
    }

    /// Passes at least one digit.
    fn digits(&mut self) -> Outcome<()> {
        if !self.peek()?.is_some_and(|byte| byte.is_ascii_digit()) {
            return Err(self.unexpected("a digit"));
        }
        while self.peek()?.is_some_and(|byte| byte.is_ascii_digit()) {
            self.at += 1;
        }
        Ok(())
    }

    /// Passes a string.
    fn string(&mut self) -> Outcome<()> {
        self.at += 1;
        loop {
            let rest = self.text.as_bytes().get(self.at..).unwrap_or_default();
            self.at += rest.iter().position(|byte| NOT_PLAIN[usize::from(*byte)]).unwrap_or(rest.len());
            match self.peek()? {
                Some(b'"') => {
                    self.at += 1;
                    return Ok(());
                }
                Some(b'\\') => self.escape()?,
                Some(0x20..) => {}
                _ => return Err(self.unexpected("the rest of a text in quotes")),
            }
        }
    }

    fn escape(&mut self) -> Outcome<()> {
        self.at += 1;
        match self.peek()? {
            Some(b'"' | b'\\' | b'/' | b'b' | b'f' | b'n' | b'r' | b't') => self.at += 1,
            Some(b'u') => match self.unit()? {
                0xDC00..=0xDFFF => return Err(self.wrong("half a character is escaped; its first half is absent")),
                0xD800..=0xDBFF => self.second_half()?,
                _ => {}
            },
            _ => return Err(self.unexpected("an escape's letter (one of \"\\/bfnrtu)")),
        }
        Ok(())
    }

    fn second_half(&mut self) -> Outcome<()> {
        let absent = "half a character is escaped; its second half is absent";
        let escaped = self.pass_byte(b'\\')? && self.peek()? == Some(b'u');
        if escaped && matches!(self.unit()?, 0xDC00..=0xDFFF) { Ok(()) } else { Err(self.wrong(absent)) }
    }

    /// Passes the `u` of an escape and its four digits.
    fn unit(&mut self) -> Outcome<u32> {
        self.at += 1;
        let mut unit = 0;
        for _ in 0..4 {
            let digit = self.peek()?.and_then(|byte| char::from(byte).to_digit(16));
            unit = unit * 16 + digit.ok_or_else(|| self.unexpected("a hexadecimal digit"))?;
            self.at += 1;
        }
        Ok(unit)
    }
}

/// Text that is kept, from a spot on.
#[must_use]
pub struct Kept {
    before: Option<u64>,
    from: u64,
}

impl Kept {
    /// The spot from which on it is.
    pub fn from(&self) -> u64 {
        self.from
    }
}

/// The bytes that are not merely passed inside a string.
static NOT_PLAIN: [bool; 256] = {
    let mut table = [false; 256];
    let mut byte = 0;
    while byte < 0x20 {
        table[byte] = true;
        byte += 1;
    }
    table[b'"' as usize] = true;
    table[b'\\' as usize] = true;
    table
};

/// Adds a key in quotes as keys are compared.
fn push_name(quoted: &str, name: &mut String) {
    let inner = quoted.get(1..quoted.len().saturating_sub(1)).unwrap_or_default();
    let plain = inner.bytes().all(|byte| matches!(byte, b' '..=b'~') && byte != b'\\');
    if plain && !inner.starts_with(' ') && !inner.ends_with(' ') {
        name.push_str(inner);
    } else {
        name.push_str(&fold(&unescaped(quoted)));
    }
}

/// The text of a string in quotes, which has been passed before.
pub fn unescaped(quoted: &str) -> std::borrow::Cow<'_, str> {
    let inner = quoted.get(1..quoted.len().saturating_sub(1)).unwrap_or_default();
    if !inner.contains('\\') {
        return inner.into();
    }
    // It cannot fail on what was passed; the text as written is the safe reading.
    serde_json::from_str::<String>(quoted).map_or(inner.into(), Into::into)
}
