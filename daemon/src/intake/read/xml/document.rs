//! A document as a sequence of tags and texts.
//!
//! Invariants: what is handed out belongs to a document that is well-formed so far, and the end is only told of one
//! that is well-formed as a whole (XML 1.0, section 2.1); depth is bounded.

use std::borrow::Cow;

use quick_xml::Reader;
use quick_xml::errors::{IllFormedError, SyntaxError};
use quick_xml::events::Event;
use revisant_schema::plan::Encoding;

use super::grammar::{
    Declaration, Flaw, Tag, check_comment, check_doctype, check_instruction, check_text, is_blank, lines_ended, resolve,
};
use super::source::{LARGEST, Place, Source, too_large};
use crate::intake::read::heading::excerpt;
use crate::intake::read::{Bytes, FileFault};

/// Elements are nested no deeper.
const DEEPEST: usize = 256;

/// What was met.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Met {
    /// A start tag: [`Document::tag`].
    Open,
    /// An end tag, also that of an element written as one tag.
    Close,
    /// A part of an element's text: [`Document::text`].
    Text,
    /// A comment, a processing instruction, a declaration.
    Nothing,
    /// The document's end.
    End,
}

/// Each kind of markup.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Kind {
    Start,
    End,
    Text,
    Section,
    Reference,
    Comment,
    Declaration,
    Instruction,
    Doctype,
    Eof,
}

impl Kind {
    fn of(event: &Event) -> Self {
        match event {
            Event::Start(_) | Event::Empty(_) => Self::Start,
            Event::End(_) => Self::End,
            Event::Text(_) => Self::Text,
            Event::CData(_) => Self::Section,
            Event::GeneralRef(_) => Self::Reference,
            Event::Comment(_) => Self::Comment,
            Event::Decl(_) => Self::Declaration,
            Event::PI(_) => Self::Instruction,
            Event::DocType(_) => Self::Doctype,
            Event::Eof => Self::Eof,
        }
    }
}

/// Which part of the document it stands in (production 1).
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Part {
    /// Nothing has been met.
    Start,
    /// Above the root element.
    Above {
        /// A document type declaration was met.
        doctype: bool,
    },
    /// In the root element or behind it.
    Root,
}

/// A document that is being read.
pub struct Document<'a> {
    parser: Reader<Source<'a>>,
    buffer: Vec<u8>,
    part: Part,
    depth: usize,
    kind: Kind,
    /// Where the markup met last begins: in the text taken, as a place, and in the export.
    from: usize,
    place: Place,
    offset: u64,
}

impl<'a> Document<'a> {
    /// Stands before the document.
    pub fn open(encoding: Encoding, bytes: &'a dyn Bytes) -> Result<Self, FileFault> {
        let source = Source::open(encoding, bytes)?;
        let (place, offset) = (source.place(), source.offset());
        let mut parser = Reader::from_reader(source);
        parser.config_mut().expand_empty_elements = true;
        Ok(Self { parser, buffer: vec![], part: Part::Start, depth: 0, kind: Kind::Eof, from: 0, place, offset })
    }

    /// Goes to the next tag or text. Unless `keep`, what was taken before is forgotten.
    pub fn advance(&mut self, keep: bool) -> Result<Met, FileFault> {
        let source = self.parser.get_mut();
        if !keep {
            source.forget();
        }
        (self.from, self.place, self.offset) = (source.taken().len(), source.place(), source.offset());
        self.buffer.clear();
        self.kind = match self.parser.read_event_into(&mut self.buffer) {
            Ok(event) => Kind::of(&event),
            Err(error) => return Err(self.explain(error)),
        };
        if self.taken().len() > LARGEST {
            return Err(too_large(self.place));
        }
        self.check().map_err(|flaw| {
            let before = self.raw().get(..flaw.at).unwrap_or_default();
            self.place.after(before).unreadable(flaw.what)
        })?;
        Ok(self.met())
    }

    /// How deep the element met last lies, or the one that encloses what was met; 1 for the root, also at its end tag.
    pub fn depth(&self) -> usize {
        self.depth + usize::from(self.kind == Kind::End)
    }

    /// The start tag met last.
    pub fn tag(&self) -> Tag<'_> {
        Tag::known(self.raw())
    }

    /// The text met last.
    pub fn text(&self) -> Cow<'_, str> {
        let raw = self.raw();
        match self.kind {
            Kind::Reference => {
                resolve(reference(raw)).map_or(Cow::Borrowed(""), |character| character.to_string().into())
            }
            Kind::Section => lines_ended(section(raw)),
            _ => lines_ended(raw),
        }
    }

    /// All text that was kept, up to the end of what was met last.
    pub fn taken(&self) -> &str {
        self.parser.get_ref().taken()
    }

    /// Where what was met last begins: in [`Self::taken`].
    pub fn from(&self) -> usize {
        self.from
    }

    /// Where what was met last begins: in the lines.
    pub fn place(&self) -> Place {
        self.place
    }

    /// Where what was met last begins and ends: in the export's bytes.
    pub fn bytes(&self) -> (u64, u64) {
        (self.offset, self.parser.get_ref().offset())
    }

    /// What was met last, as written.
    fn raw(&self) -> &str {
        self.taken().get(self.from..).unwrap_or_default()
    }

    fn met(&mut self) -> Met {
        match self.kind {
            Kind::Start => {
                self.depth += 1;
                self.part = Part::Root;
                Met::Open
            }
            Kind::End => {
                self.depth = self.depth.saturating_sub(1);
                Met::Close
            }
            Kind::Text | Kind::Section | Kind::Reference if self.depth > 0 => Met::Text,
            Kind::Eof => Met::End,
            kind => {
                let doctype = kind == Kind::Doctype || self.part == Part::Above { doctype: true };
                self.part = if self.part == Part::Root { Part::Root } else { Part::Above { doctype } };
                Met::Nothing
            }
        }
    }

    /// Finds what is wrong with what was met, or with its being met here.
    fn check(&self) -> Result<(), Flaw> {
        let raw = self.raw();
        match self.kind {
            Kind::Start => self.check_start(raw),
            Kind::Text if self.depth == 0 => self.check_outside(raw),
            Kind::Text => check_text(raw),
            Kind::Section | Kind::Reference if self.depth == 0 => Err(self.outside(0)),
            Kind::Reference => resolve(reference(raw)).map(drop).map_err(|what| Flaw::new(0, what)),
            Kind::Comment => check_comment(raw),
            Kind::Declaration if self.part == Part::Start => self.check_declaration(raw),
            Kind::Declaration | Kind::Instruction => check_instruction(raw),
            Kind::Doctype => self.check_doctype(raw),
            Kind::Eof => self.check_end(),
            Kind::End | Kind::Section => Ok(()),
        }
    }

    fn check_start(&self, raw: &str) -> Result<(), Flaw> {
        if self.depth == 0 && self.part == Part::Root {
            return Err(Flaw::new(0, "a second root element; a document has one"));
        }
        if self.depth >= DEEPEST {
            return Err(Flaw::new(0, format!("elements are nested deeper than {DEEPEST}")));
        }
        Tag::parse(raw)?.check()
    }

    fn check_outside(&self, raw: &str) -> Result<(), Flaw> {
        raw.find(|character| !is_blank(character)).map_or(Ok(()), |at| Err(self.outside(at)))
    }

    fn outside(&self, at: usize) -> Flaw {
        let side = if self.part == Part::Root { "behind" } else { "before" };
        Flaw::new(at, format!("text {side} the root element"))
    }

    fn check_declaration(&self, raw: &str) -> Result<(), Flaw> {
        match Declaration::parse(raw)?.encoding {
            Some(encoding) => self.parser.get_ref().agree(encoding).map_err(|what| Flaw::new(0, what)),
            None => Ok(()),
        }
    }

    fn check_doctype(&self, raw: &str) -> Result<(), Flaw> {
        match self.part {
            Part::Start | Part::Above { doctype: false } => check_doctype(raw),
            Part::Above { doctype: true } => Err(Flaw::new(0, "a second document type declaration")),
            Part::Root => Err(Flaw::new(0, "a document type declaration that does not stand above the root element")),
        }
    }

    fn check_end(&self) -> Result<(), Flaw> {
        match (self.depth, self.part) {
            (0, Part::Root) => Ok(()),
            (0, _) => Err(Flaw::new(0, "the export ends, and there is no element in it")),
            (1, _) => Err(Flaw::new(0, "the export ends, and the root element is not closed")),
            (open, _) => Err(Flaw::new(0, format!("the export ends, and {open} elements are not closed"))),
        }
    }

    /// What the parser found, in plain words.
    fn explain(&mut self, error: quick_xml::Error) -> FileFault {
        if let Some(fault) = self.parser.get_mut().fault() {
            return fault;
        }
        let what = match error {
            quick_xml::Error::Syntax(fault) => syntax(&fault).to_owned(),
            quick_xml::Error::IllFormed(IllFormedError::MismatchedEndTag { expected, found }) => {
                format!("the end tag \"{}\" stands where \"{}\" should be closed", excerpt(&found), excerpt(&expected))
            }
            quick_xml::Error::IllFormed(IllFormedError::UnmatchedEndTag(found)) => {
                format!("the end tag \"{}\" closes nothing", excerpt(&found))
            }
            quick_xml::Error::IllFormed(IllFormedError::UnclosedReference) => {
                "a \"&\" that begins no entity (it should be written \"&amp;\")".to_owned()
            }
            quick_xml::Error::IllFormed(IllFormedError::MissingDoctypeName) => {
                "a document type declaration without a name".to_owned()
            }
            other => format!("this is no XML ({other})"),
        };
        self.place.unreadable(what)
    }
}

/// What is between `&` and `;`.
fn reference(raw: &str) -> &str {
    raw.strip_prefix('&').and_then(|rest| rest.strip_suffix(';')).unwrap_or_default()
}

/// What is in a CDATA section.
fn section(raw: &str) -> &str {
    raw.strip_prefix("<![CDATA[").and_then(|rest| rest.strip_suffix("]]>")).unwrap_or_default()
}

fn syntax(fault: &SyntaxError) -> &'static str {
    match fault {
        SyntaxError::InvalidBangMarkup => "\"<!\" begins neither a comment nor anything else that XML knows",
        SyntaxError::UnclosedPI => "a processing instruction does not end before the export does",
        SyntaxError::UnclosedXmlDecl => "the XML declaration does not end before the export does",
        SyntaxError::UnclosedComment => "a comment does not end before the export does",
        SyntaxError::UnclosedDoctype => "a document type declaration does not end before the export does",
        SyntaxError::UnclosedCData => "a CDATA section does not end before the export does",
        SyntaxError::UnclosedTag => "a tag does not end before the export does",
        SyntaxError::UnclosedSingleQuotedAttributeValue | SyntaxError::UnclosedDoubleQuotedAttributeValue => {
            "the value of an attribute does not end before the export does"
        }
    }
}
