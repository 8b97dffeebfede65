//! Texts of cells: the ones that cells share, and what both those and a cell's own may be made of.
//!
//! Invariants: a text is all its runs and no reading aid; where a text stands is known by its number alone, and a
//! number without a text is a fault, never another text.

use std::io::BufReader;

use quick_xml::events::{BytesStart, Event};

use super::super::FileFault;
use super::super::text::LONGEST_LINE;
use super::markup::{Markup, attribute, characters, no_xml};
use super::package::Package;

/// The texts that cells share, one after the other in one buffer.
#[derive(Default)]
pub struct Texts {
    text: String,
    ends: Vec<u32>,
}

impl Texts {
    /// Reads them all.
    pub fn read(package: &mut Package, part: &str) -> Result<Self, FileFault> {
        let limits = package.limits;
        let Some(bytes) = package.part(part, limits.texts)? else { return Err(no_xml(part, "there is no such part")) };
        let mut markup = Markup::new(part, BufReader::with_capacity(1 << 16, bytes));
        let mut texts = Self::default();
        let mut rich = Rich::default();
        loop {
            match markup.advance(|depth, event| rich.step(depth, event, &mut texts.text))? {
                Step::More => {}
                Step::Text => texts.ends_here(limits.text_count)?,
                Step::End => return Ok(texts),
            }
        }
    }

    /// The text read last is complete.
    fn ends_here(&mut self, most: usize) -> Result<(), FileFault> {
        let start = self.ends.last().map_or(0, |&end| end as usize);
        if self.text.len() - start > LONGEST_LINE {
            let what = format!("a text that cells share has more than {LONGEST_LINE} bytes");
            return Err(FileFault::TooLarge(what));
        }
        let end = u32::try_from(self.text.len()).ok().filter(|_| self.ends.len() < most);
        let end = end.ok_or_else(|| FileFault::TooLarge(format!("the cells share more than {most} texts")))?;
        self.ends.push(end);
        Ok(())
    }

    /// A text by its number, from 0.
    pub fn get(&self, index: usize) -> Option<&str> {
        let end = *self.ends.get(index)? as usize;
        let start = if index == 0 { 0 } else { self.ends[index - 1] as usize };
        Some(&self.text[start..end])
    }
}

/// What an event of the list of texts comes to.
enum Step {
    More,
    /// A text is complete.
    Text,
    /// The list ends.
    End,
}

/// Where in a text's markup one stands.
#[derive(Debug, Clone, Copy, Default, PartialEq, Eq)]
enum Inside {
    /// The text's element itself, or one of its runs.
    #[default]
    Text,
    /// Characters of the text, the first of which stands there.
    Characters { from: usize, keep: bool },
    /// So deep in something that is no part of the text.
    Passed(usize),
}

/// The markup of one text: its characters, or runs of them, with formats and reading aids between.
#[derive(Default)]
pub struct Rich {
    inside: Inside,
}

impl Rich {
    /// Takes an event of the list of texts.
    fn step(&mut self, depth: usize, event: &Event<'_>, text: &mut String) -> Result<Step, String> {
        match (depth, event) {
            (0, Event::Start(tag)) if tag.local_name().as_ref() != "sst" => return Err("it is no list of texts".into()),
            (0, Event::Start(_) | Event::End(_)) => {}
            (1, Event::Start(tag)) => self.begin(tag.local_name().as_ref() == "si"),
            (1, Event::End(tag)) if tag.local_name().as_ref() == "si" => return Ok(Step::Text),
            (_, Event::Start(tag)) => self.start(tag)?,
            (_, Event::End(_)) => self.end(text),
            (_, Event::Eof) => return Ok(Step::End),
            _ => self.take(event, text)?,
        }
        Ok(Step::More)
    }

    /// An element begins that is a text, or else is to be passed over.
    pub fn begin(&mut self, is_text: bool) {
        self.inside = if is_text { Inside::Text } else { Inside::Passed(1) };
    }

    /// An element begins inside it.
    pub fn start(&mut self, tag: &BytesStart<'_>) -> Result<(), String> {
        self.inside = match self.inside {
            Inside::Passed(depth) => Inside::Passed(depth + 1),
            Inside::Characters { .. } => return Err("a text holds an element".to_owned()),
            Inside::Text => match tag.local_name().as_ref() {
                "t" => {
                    let keep = attribute(tag, "xml:space")?.as_deref() == Some("preserve");
                    Inside::Characters { from: usize::MAX, keep }
                }
                "r" => Inside::Text,
                _ => Inside::Passed(1),
            },
        };
        Ok(())
    }

    /// What stands between elements; characters of the text are added to `text`.
    pub fn take(&mut self, event: &Event<'_>, text: &mut String) -> Result<(), String> {
        if let Some(characters) = characters(event)? {
            self.add(&characters, text);
        }
        Ok(())
    }

    /// Characters; those of the text are added to `text`.
    pub fn add(&mut self, characters: &str, text: &mut String) {
        if let Inside::Characters { from, .. } = &mut self.inside {
            *from = (*from).min(text.len());
            text.push_str(characters);
        }
    }

    /// An element inside it ends.
    pub fn end(&mut self, text: &mut String) {
        self.inside = match self.inside {
            Inside::Passed(depth) if depth > 1 => Inside::Passed(depth - 1),
            Inside::Characters { from, keep } => {
                if from < text.len() {
                    finish(text, from, keep);
                }
                Inside::Text
            }
            Inside::Passed(_) | Inside::Text => Inside::Text,
        };
    }
}

/// What is done to characters when they are complete: blanks around them go unless they are to be kept, and `_x000D_`
/// and its like stand for characters that XML does not allow.
fn finish(text: &mut String, from: usize, keep: bool) {
    const BLANKS: [char; 4] = [' ', '\t', '\r', '\n'];
    if !keep && text[from..].starts_with(BLANKS) {
        let blanks = text.len() - from - text[from..].trim_start_matches(BLANKS).len();
        text.drain(from..from + blanks);
    }
    if !keep {
        text.truncate(from + text[from..].trim_end_matches(BLANKS).len());
    }
    unescape(text, from);
}

/// Resolves `_xHHHH_`, a UTF-16 code unit, from `from` on (ECMA-376 part 1, 22.9.2.19, ST_Xstring).
pub fn unescape(text: &mut String, from: usize) {
    if !text[from..].contains("_x") {
        return;
    }
    let escaped = text.split_off(from);
    let mut rest = escaped.as_str();
    while let Some(at) = rest.find("_x") {
        text.push_str(&rest[..at]);
        rest = &rest[at..];
        let units = [unit(rest), rest.get(LENGTH..).and_then(unit)];
        let (character, length) = match units {
            [Some(high @ 0xD800..0xDC00), Some(low @ 0xDC00..0xE000)] => {
                (char::decode_utf16([high, low]).next().and_then(Result::ok), 2 * LENGTH)
            }
            [Some(single @ 1..), _] => (char::from_u32(u32::from(single)), LENGTH),
            _ => (None, 0),
        };
        match character {
            Some(character) => {
                text.push(character);
                rest = &rest[length..];
            }
            None => {
                text.push('_');
                rest = &rest[1..];
            }
        }
    }
    text.push_str(rest);
}

/// The length of `_xHHHH_`.
const LENGTH: usize = 7;

/// The code unit that `text` begins with, written `_xHHHH_`.
fn unit(text: &str) -> Option<u16> {
    let digits = text.get(..LENGTH)?.strip_prefix("_x")?.strip_suffix('_')?;
    let hexadecimal = digits.bytes().all(|byte| byte.is_ascii_hexdigit());
    hexadecimal.then(|| u16::from_str_radix(digits, 16).ok()).flatten()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn escapes_are_resolved() {
        for (written, meant) in [
            ("a_x000D_b", "a\rb"),
            ("_x005F_x000D_", "_x000D_"),
            ("_xD83D__xDE00_", "\u{1f600}"),
            ("_xD83D_", "_xD83D_"),
            ("_x0000_", "_x0000_"),
            ("_x12_ _xyzäö_ _x", "_x12_ _xyzäö_ _x"),
            ("_x+041_", "_x+041_"),
        ] {
            let mut text = format!("_x0041_{written}");
            unescape(&mut text, LENGTH);
            assert_eq!(text, format!("_x0041_{meant}"));
        }
    }
}
