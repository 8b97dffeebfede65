//! The XML of a workbook's parts.
//!
//! Invariants: memory is bounded by [`LONGEST_EVENT`] and [`DEEPEST`] whatever the XML is; a part that ends before
//! its elements do, declares its own entities, or is not UTF-8 is a fault; nothing is resolved from elsewhere.

use std::borrow::Cow;
use std::io::{self, BufRead, Read};

use quick_xml::events::attributes::Attribute;
use quick_xml::events::{BytesDecl, BytesRef, BytesStart, Event};
use quick_xml::{Reader, XmlVersion};

use super::super::FileFault;
use super::super::heading::excerpt;
use super::package::{Excess, fault_of};

/// A longer tag or stretch of text stands in no workbook: a cell holds 32,767 characters.
const LONGEST_EVENT: usize = 4 << 20;
/// How deep elements may lie in each other.
const DEEPEST: usize = 256;
/// How many attributes a tag that is looked into may have.
const MOST_ATTRIBUTES: usize = 100;

/// The events of one part.
pub struct Markup<R> {
    reader: Reader<Metered<R>>,
    buffer: Vec<u8>,
    depth: usize,
    part: String,
}

impl<R: BufRead> Markup<R> {
    /// Stands before the first event.
    pub fn new(part: &str, bytes: R) -> Self {
        let mut reader = Reader::from_reader(Metered { bytes, left: LONGEST_EVENT });
        reader.config_mut().expand_empty_elements = true;
        Self { reader, buffer: vec![], depth: 0, part: part.to_owned() }
    }

    /// Lets `take` see the next event, and how many elements lie around what it is about; an element without content
    /// is its start and its end. What `take` finds wrong becomes a fault of this part.
    ///
    /// The event is seen where it was made, because moving it on took as long as reading it.
    pub fn advance<T>(&mut self, take: impl FnOnce(usize, &Event<'_>) -> Result<T, String>) -> Result<T, FileFault> {
        let Self { reader, buffer, depth, part } = self;
        buffer.clear();
        reader.get_mut().left = LONGEST_EVENT;
        match &reader.read_event_into(buffer) {
            Ok(event) => {
                let around = around(event, *depth).map_err(|wrong| wrong.fault(part))?;
                *depth = around + usize::from(matches!(event, Event::Start(_)));
                take(around, event).map_err(|what| no_xml(part, &what))
            }
            Err(quick_xml::Error::Io(error)) => Err(fault_of(error, part)),
            Err(error) => Err(no_xml(part, &error.to_string())),
        }
    }
}

/// What is wrong with an event whatever the part is.
enum Wrong {
    TooDeep,
    NoXml(&'static str),
}

impl Wrong {
    fn fault(&self, part: &str) -> FileFault {
        match self {
            Self::NoXml(what) => no_xml(part, what),
            Self::TooDeep => {
                let part = excerpt(part);
                FileFault::TooLarge(format!("the elements of the workbook's part {part} lie too deep in each other"))
            }
        }
    }
}

/// How many elements lie around what an event is about, when `depth` are open.
#[inline]
fn around(event: &Event<'_>, depth: usize) -> Result<usize, Wrong> {
    match event {
        Event::Start(_) if depth == DEEPEST => Err(Wrong::TooDeep),
        Event::End(_) => Ok(depth.saturating_sub(1)),
        Event::Eof if depth > 0 => Err(Wrong::NoXml("it ends inside an element")),
        Event::DocType(_) => Err(Wrong::NoXml("it declares a document type, as no workbook does")),
        Event::Decl(declared) if !is_utf8(declared) => Err(Wrong::NoXml("it is not in UTF-8")),
        _ => Ok(depth),
    }
}

/// What to say of a part that is not as it should be.
pub fn no_xml(part: &str, what: &str) -> FileFault {
    FileFault::Unreadable(format!("the workbook's part {} cannot be read: {what}", excerpt(part)))
}

/// The value of an attribute by its whole name.
pub fn attribute<'t>(tag: &'t BytesStart<'_>, name: &str) -> Result<Option<Cow<'t, str>>, String> {
    attribute_where(tag, |attribute| attribute.key.as_ref() == name)
}

/// The value of the first attribute that is meant.
pub fn attribute_where<'t>(
    tag: &'t BytesStart<'_>,
    meant: impl Fn(&Attribute<'_>) -> bool,
) -> Result<Option<Cow<'t, str>>, String> {
    for (index, attribute) in tag.attributes().enumerate() {
        let attribute = attribute.map_err(|error| error.to_string())?;
        // Each is compared with all before it, which hostile tags would make endless.
        if index == MOST_ATTRIBUTES {
            return Err("a tag has too many attributes".to_owned());
        }
        if meant(&attribute) {
            let value = attribute.normalized_value(XmlVersion::Implicit1_0);
            return value.map(Some).map_err(|error| error.to_string());
        }
    }
    Ok(None)
}

/// Calls `take` for each attribute, by its whole name and its value as written, which are plain wherever this is used.
#[inline]
pub fn plain_attributes(
    tag: &BytesStart<'_>,
    mut take: impl FnMut(&str, &str) -> Result<(), String>,
) -> Result<(), String> {
    const UNQUOTED: &str = "an attribute has no value in quotes";
    let mut rest = tag.attributes_raw().trim_ascii_start();
    while !rest.is_empty() {
        // Bytes, because names and values are a few characters each and this is done for every cell.
        let equals = rest.bytes().position(|byte| byte == b'=').ok_or(UNQUOTED)?;
        let (name, value) = (rest[..equals].trim_ascii_end(), rest[equals + 1..].trim_ascii_start());
        let quote = value.bytes().next().filter(|quote| matches!(quote, b'"' | b'\'')).ok_or(UNQUOTED)?;
        let value = &value[1..];
        let end = value.bytes().position(|byte| byte == quote).ok_or(UNQUOTED)?;
        take(name, &value[..end])?;
        rest = value[end + 1..].trim_ascii_start();
    }
    Ok(())
}

fn is_utf8(declared: &BytesDecl<'_>) -> bool {
    match declared.encoding() {
        None => true,
        Some(name) => name.is_ok_and(|name| name.eq_ignore_ascii_case("utf-8")),
    }
}

/// The characters that an event stands for; `None` if it stands for none.
pub fn characters<'e>(event: &'e Event<'_>) -> Result<Option<Cow<'e, str>>, String> {
    Ok(match event {
        Event::Text(text) => Some(text.xml10_content()),
        Event::CData(text) => Some(text.xml10_content()),
        Event::GeneralRef(reference) => Some(Cow::Owned(referred(reference)?.to_string())),
        _ => None,
    })
}

/// The character that a reference stands for: one of the five of XML itself, or one by its number.
fn referred(reference: &BytesRef<'_>) -> Result<char, String> {
    match reference.as_ref() {
        "amp" => Ok('&'),
        "lt" => Ok('<'),
        "gt" => Ok('>'),
        "quot" => Ok('"'),
        "apos" => Ok('\''),
        name => match reference.resolve_char_ref() {
            Ok(Some(character)) => Ok(character),
            _ => Err(format!("nothing says what &{}; stands for", excerpt(name))),
        },
    }
}

/// Bytes of which one event may take so many.
struct Metered<R> {
    bytes: R,
    left: usize,
}

impl<R: BufRead> BufRead for Metered<R> {
    #[inline]
    fn fill_buf(&mut self) -> io::Result<&[u8]> {
        if self.left == 0 {
            let what = format!("a cell or tag of the workbook takes more than {LONGEST_EVENT} bytes");
            return Err(io::Error::other(Excess(what)));
        }
        self.bytes.fill_buf()
    }

    #[inline]
    fn consume(&mut self, count: usize) {
        self.left = self.left.saturating_sub(count);
        self.bytes.consume(count);
    }
}

impl<R: BufRead> Read for Metered<R> {
    fn read(&mut self, into: &mut [u8]) -> io::Result<usize> {
        let count = self.fill_buf()?.read(into)?;
        self.consume(count);
        Ok(count)
    }
}
