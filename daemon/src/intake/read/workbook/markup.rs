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

    /// The next event, and how many elements lie around what it is about; an element without content is its start
    /// and its end.
    pub fn advance(&mut self) -> Result<(usize, Event<'_>), FileFault> {
        let Self { reader, buffer, depth, part } = self;
        buffer.clear();
        reader.get_mut().left = LONGEST_EVENT;
        let event = match reader.read_event_into(buffer) {
            Ok(event) => event,
            Err(quick_xml::Error::Io(error)) => return Err(fault_of(&error, part)),
            Err(error) => return Err(no_xml(part, &error.to_string())),
        };
        let around = match &event {
            Event::Start(_) if *depth == DEEPEST => {
                let what = format!("the elements of the workbook's part {} lie too deep in each other", excerpt(part));
                return Err(FileFault::TooLarge(what));
            }
            Event::Start(_) => *depth,
            Event::End(_) => depth.saturating_sub(1),
            Event::Eof if *depth > 0 => return Err(no_xml(part, "it ends inside an element")),
            Event::DocType(_) => return Err(no_xml(part, "it declares a document type, as no workbook does")),
            Event::Decl(declared) if !is_utf8(declared) => return Err(no_xml(part, "it is not in UTF-8")),
            _ => *depth,
        };
        *depth = around + usize::from(matches!(event, Event::Start(_)));
        Ok((around, event))
    }

    /// A fault of this part.
    pub fn fault(&self, what: &str) -> FileFault {
        no_xml(&self.part, what)
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
    fn fill_buf(&mut self) -> io::Result<&[u8]> {
        if self.left == 0 {
            let what = format!("a cell or tag of the workbook takes more than {LONGEST_EVENT} bytes");
            return Err(io::Error::other(Excess(what)));
        }
        self.bytes.fill_buf()
    }

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
