//! What XML 1.0 asks of markup that a lenient parser lets through: names, attributes, references, declarations.
//!
//! Invariant: nothing is expanded but the five predefined entities and references to characters.
//!
//! Productions are those of XML 1.0, fifth edition, and of Namespaces in XML 1.0.

use std::borrow::Cow;

use memchr::memchr;

use crate::intake::read::heading::{excerpt, fold};

/// What is wrong with a piece of markup, and at which byte of it.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Flaw {
    pub at: usize,
    pub what: String,
}

impl Flaw {
    pub fn new(at: usize, what: impl Into<String>) -> Self {
        Self { at, what: what.into() }
    }
}

/// Goes through a piece of markup.
#[derive(Debug, Clone, Copy)]
struct Cursor<'t> {
    text: &'t str,
    at: usize,
}

impl<'t> Cursor<'t> {
    fn rest(&self) -> &'t str {
        self.text.get(self.at..).unwrap_or_default()
    }

    /// Passes over this, if it comes next.
    fn eat(&mut self, sought: &str) -> bool {
        let found = self.rest().starts_with(sought);
        self.at += if found { sought.len() } else { 0 };
        found
    }

    fn need(&mut self, sought: &str) -> Result<(), Flaw> {
        if self.eat(sought) { Ok(()) } else { Err(Flaw::new(self.at, format!("\"{sought}\" should stand here"))) }
    }

    /// The last of it, which nothing may follow.
    fn end(&mut self, sought: &str) -> Result<(), Flaw> {
        self.need(sought)?;
        if self.rest().is_empty() {
            Ok(())
        } else {
            Err(Flaw::new(self.at, "something follows that does not belong here"))
        }
    }

    /// Passes over white space; whether there was any.
    fn blank(&mut self) -> bool {
        let rest = self.rest();
        let length = rest.len() - rest.trim_start_matches(is_blank).len();
        self.at += length;
        length > 0
    }

    /// Passes over what comes before the first of these characters.
    fn until(&mut self, ends: impl Fn(char) -> bool) -> &'t str {
        let rest = self.rest();
        let length = rest.find(ends).unwrap_or(rest.len());
        self.at += length;
        &rest[..length]
    }

    /// Passes over all up to and including `end`.
    fn pass(&mut self, end: &str) -> Option<&'t str> {
        let rest = self.rest();
        let length = rest.find(end)?;
        self.at += length + end.len();
        Some(&rest[..length])
    }

    fn name(&mut self) -> Result<&'t str, Flaw> {
        let at = self.at;
        let name = leading_name(self.rest());
        self.at += name.len();
        if is_name(name) {
            return Ok(name);
        }
        let what = if name.is_empty() { "a name should stand here".to_owned() } else { misnamed(name) };
        Err(Flaw::new(at, what))
    }

    /// What stands between two quotes.
    fn quoted(&mut self) -> Result<&'t str, Flaw> {
        let quote = match self.rest().as_bytes().first() {
            Some(b'"') => "\"",
            Some(b'\'') => "'",
            _ => return Err(Flaw::new(self.at, "a value between quotes should stand here")),
        };
        let begun = self.at;
        self.at += 1;
        self.pass(quote).ok_or_else(|| Flaw::new(begun, "a quote opens and does not close"))
    }

    /// `name = "value"`: the name, where the value begins, and the value as written.
    fn pair(&mut self) -> Result<(&'t str, usize, &'t str), Flaw> {
        let name = self.name()?;
        self.blank();
        self.need("=")?;
        self.blank();
        let from = self.at + 1;
        Ok((name, from, self.quoted()?))
    }
}

/// What stands before the first character that may follow a name.
fn leading_name(text: &str) -> &str {
    let ends = |byte: &u8| matches!(byte, b' ' | b'\t' | b'\n' | b'\r' | b'=' | b'/' | b'>' | b'?' | b'[' | b'<');
    let length = text.as_bytes().iter().position(ends).unwrap_or(text.len());
    text.get(..length).unwrap_or_default()
}

fn misnamed(name: &str) -> String {
    format!("\"{}\" is no name", excerpt(name))
}

/// White space (production 3).
pub fn is_blank(character: char) -> bool {
    matches!(character, ' ' | '\t' | '\n' | '\r')
}

/// Whether this is a name (production 5) that has at most one prefix (Namespaces, production 7).
fn is_name(name: &str) -> bool {
    let part = |part: &str| {
        let plain = |byte: &u8| byte.is_ascii_alphanumeric() || matches!(byte, b'_' | b'-' | b'.');
        let mut characters = part.chars();
        characters.next().is_some_and(starts_name)
            && (part.as_bytes().iter().all(plain) || characters.all(continues_name))
    };
    match name.split_once(':') {
        Some((prefix, local)) => part(prefix) && part(local),
        None => part(name),
    }
}

/// Production 4, without the colon.
fn starts_name(character: char) -> bool {
    matches!(
        character,
        'a'..='z' | 'A'..='Z' | '_' | '\u{C0}'..='\u{D6}' | '\u{D8}'..='\u{F6}' | '\u{F8}'..='\u{2FF}'
        | '\u{370}'..='\u{37D}' | '\u{37F}'..='\u{1FFF}' | '\u{200C}'..='\u{200D}' | '\u{2070}'..='\u{218F}'
        | '\u{2C00}'..='\u{2FEF}' | '\u{3001}'..='\u{D7FF}' | '\u{F900}'..='\u{FDCF}' | '\u{FDF0}'..='\u{FFFD}'
        | '\u{10000}'..='\u{EFFFF}'
    )
}

/// Production 4a, without the colon.
fn continues_name(character: char) -> bool {
    starts_name(character)
        || matches!(character, '0'..='9' | '-' | '.' | '\u{B7}' | '\u{300}'..='\u{36F}' | '\u{203F}'..='\u{2040}')
}

/// A name as it is compared: without its prefix, folded.
pub fn local(name: &str) -> Cow<'_, str> {
    let bare = name.rsplit_once(':').map_or(name, |(_, local)| local);
    if bare.is_ascii() { Cow::Borrowed(bare) } else { Cow::Owned(fold(bare)) }
}

/// What a reference stands for, given what stands between `&` and `;` (productions 66 and 68).
pub fn resolve(reference: &str) -> Result<char, String> {
    if let Some(number) = reference.strip_prefix('#') {
        let code = match number.strip_prefix('x') {
            Some(digits) => digits_of(digits, 16),
            None => digits_of(number, 10),
        };
        let allowed = |character: &char| {
            matches!(character, '\t' | '\n' | '\r')
                || (*character >= ' ' && !matches!(character, '\u{fffe}' | '\u{ffff}'))
        };
        let character = code.and_then(char::from_u32).filter(allowed);
        return character.ok_or_else(|| format!("\"&{};\" stands for no character", excerpt(reference)));
    }
    match reference {
        "amp" => Ok('&'),
        "lt" => Ok('<'),
        "gt" => Ok('>'),
        "apos" => Ok('\''),
        "quot" => Ok('"'),
        other if is_name(other) => Err(format!(
            "\"&{};\" is an entity that XML itself does not define; such entities are not read",
            excerpt(other)
        )),
        _ => Err("a \"&\" that begins no entity (it should be written \"&amp;\")".to_owned()),
    }
}

/// Nothing but digits, no sign.
fn digits_of(digits: &str, radix: u32) -> Option<u32> {
    let plain = !digits.is_empty() && digits.chars().all(|digit| digit.is_digit(radix));
    if plain { u32::from_str_radix(digits, radix).ok() } else { None }
}

/// Text with each line end as a line feed (section 2.11).
pub fn lines_ended(text: &str) -> Cow<'_, str> {
    if text.contains('\r') { Cow::Owned(text.replace("\r\n", "\n").replace('\r', "\n")) } else { Cow::Borrowed(text) }
}

/// A start tag that has been found sound.
#[derive(Debug, Clone, Copy)]
pub struct Tag<'t> {
    /// As written, with its prefix.
    pub name: &'t str,
    rest: Cursor<'t>,
}

impl<'t> Tag<'t> {
    /// A start tag or an empty element's tag as written (productions 40 and 44); what may be wrong with its attributes
    /// shows when they are gone through.
    pub fn parse(raw: &'t str) -> Result<Self, Flaw> {
        let mut cursor = Cursor { text: raw, at: 0 };
        cursor.need("<")?;
        let name = cursor.name()?;
        Ok(Self { name, rest: cursor })
    }

    /// One that has been found sound before, again.
    pub fn known(raw: &'t str) -> Self {
        let name = leading_name(raw.get(1..).unwrap_or_default());
        Self { name, rest: Cursor { text: raw, at: 1 + name.len() } }
    }

    /// Goes through the attributes.
    pub fn attributes(&self) -> Attributes<'t> {
        Attributes { rest: self.rest, ended: false }
    }

    /// Finds what is wrong with the attributes.
    pub fn check(&self) -> Result<(), Flaw> {
        if self.rest.rest() == ">" {
            return Ok(());
        }
        let mut seen: Vec<(&str, usize)> = Vec::new();
        for attribute in self.attributes() {
            let attribute = attribute?;
            attribute.value()?;
            seen.push((attribute.name, attribute.at));
        }
        seen.sort_unstable();
        match seen.windows(2).find(|pair| pair[0].0 == pair[1].0) {
            Some(pair) => Err(Flaw::new(pair[1].1, format!("the attribute \"{}\" stands twice", excerpt(pair[1].0)))),
            None => Ok(()),
        }
    }
}

/// An attribute of a tag.
#[derive(Debug, Clone, Copy)]
pub struct Attribute<'t> {
    /// As written, with its prefix.
    pub name: &'t str,
    /// Where it stands in the tag.
    at: usize,
    from: usize,
    raw: &'t str,
}

impl<'t> Attribute<'t> {
    /// Whether it only declares a name space.
    pub fn declares_space(&self) -> bool {
        self.name == "xmlns" || self.name.starts_with("xmlns:")
    }

    /// Its value, normalised (section 3.3.3).
    pub fn value(&self) -> Result<Cow<'t, str>, Flaw> {
        let plain = |byte: &u8| !matches!(byte, b'<' | b'&' | b'\t' | b'\n' | b'\r');
        if self.raw.as_bytes().iter().all(plain) {
            return Ok(Cow::Borrowed(self.raw));
        }
        let mut value = String::with_capacity(self.raw.len());
        let mut cursor = Cursor { text: self.raw, at: 0 };
        loop {
            value.push_str(cursor.until(|character| matches!(character, '<' | '&' | '\t' | '\n' | '\r')));
            let at = self.from + cursor.at;
            if cursor.eat("\r\n") || cursor.eat("\r") || cursor.eat("\n") || cursor.eat("\t") {
                value.push(' ');
            } else if cursor.eat("&") {
                let reference = cursor
                    .pass(";")
                    .ok_or_else(|| Flaw::new(at, "a \"&\" that begins no entity (it should be written \"&amp;\")"))?;
                value.push(resolve(reference).map_err(|what| Flaw::new(at, what))?);
            } else if cursor.rest().is_empty() {
                return Ok(Cow::Owned(value));
            } else {
                return Err(Flaw::new(at, "a \"<\" in the value of an attribute (it should be written \"&lt;\")"));
            }
        }
    }
}

/// The attributes of a tag, one after the other.
#[derive(Debug, Clone)]
pub struct Attributes<'t> {
    rest: Cursor<'t>,
    ended: bool,
}

impl<'t> Iterator for Attributes<'t> {
    type Item = Result<Attribute<'t>, Flaw>;

    fn next(&mut self) -> Option<Self::Item> {
        if self.ended {
            return None;
        }
        let apart = self.rest.blank();
        if matches!(self.rest.rest(), ">" | "/>") {
            self.ended = true;
            return None;
        }
        let at = self.rest.at;
        let next = if apart {
            self.rest.pair().map(|(name, from, raw)| Attribute { name, at, from, raw })
        } else {
            Err(Flaw::new(at, "white space should stand here, before the next attribute"))
        };
        self.ended = next.is_err();
        Some(next)
    }
}

/// A comment as written (production 15).
pub fn check_comment(raw: &str) -> Result<(), Flaw> {
    let inner = raw.strip_prefix("<!--").and_then(|rest| rest.strip_suffix("-->"));
    let inner = inner.ok_or_else(|| Flaw::new(0, "a comment that is not one"))?;
    match inner.find("--") {
        Some(at) => Err(Flaw::new(at + 4, "two hyphens inside a comment")),
        None if inner.ends_with('-') => Err(Flaw::new(inner.len() + 3, "two hyphens inside a comment")),
        None => Ok(()),
    }
}

/// A processing instruction as written (productions 16 and 17).
pub fn check_instruction(raw: &str) -> Result<(), Flaw> {
    let mut cursor = Cursor { text: raw, at: 0 };
    cursor.need("<?")?;
    let target = cursor.name()?;
    if target.eq_ignore_ascii_case("xml") {
        return Err(Flaw::new(0, "an XML declaration, which may only stand at the very beginning"));
    }
    if cursor.blank() || cursor.rest() == "?>" { Ok(()) } else { Err(Flaw::new(2, misnamed(target))) }
}

/// What an XML declaration says.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Declaration<'t> {
    pub encoding: Option<&'t str>,
}

impl<'t> Declaration<'t> {
    /// An XML declaration as written (production 23).
    pub fn parse(raw: &'t str) -> Result<Self, Flaw> {
        let mut cursor = Cursor { text: raw, at: 0 };
        cursor.need("<?xml")?;
        let mut encoding = None;
        let mut known = ["version", "encoding", "standalone"].iter();
        let mut first = true;
        while cursor.blank() && cursor.rest() != "?>" {
            let at = cursor.at;
            let (name, _, value) = cursor.pair()?;
            // They come in this order; only the first must be there.
            if !known.any(|known| *known == name) || (first && name != "version") || !says(name, value) {
                let shown = excerpt(&format!("{name}=\"{value}\""));
                return Err(Flaw::new(at, format!("{shown} does not belong here in an XML declaration")));
            }
            first = false;
            encoding = if name == "encoding" { Some(value) } else { encoding };
        }
        if first {
            return Err(Flaw::new(cursor.at, "the XML declaration lacks its version"));
        }
        cursor.end("?>")?;
        Ok(Self { encoding })
    }
}

/// Whether a part of an XML declaration may say this (productions 26, 32 and 81).
fn says(name: &str, value: &str) -> bool {
    match name {
        "version" => value.strip_prefix("1.").is_some_and(|minor| digits_of(minor, 10).is_some()),
        "standalone" => matches!(value, "yes" | "no"),
        _ => {
            let rest = |character: char| character.is_ascii_alphanumeric() || matches!(character, '.' | '_' | '-');
            value.starts_with(|first: char| first.is_ascii_alphabetic()) && value.chars().all(rest)
        }
    }
}

/// A document type declaration as written (production 28); one that could change what the document says is refused.
pub fn check_doctype(raw: &str) -> Result<(), Flaw> {
    let mut cursor = Cursor { text: raw, at: 0 };
    cursor.need("<!DOCTYPE")?;
    if !cursor.blank() {
        return Err(Flaw::new(cursor.at, "white space should stand here"));
    }
    cursor.name()?;
    let apart = cursor.blank();
    let literals = if cursor.eat("SYSTEM") {
        1
    } else if cursor.eat("PUBLIC") {
        2
    } else {
        0
    };
    if literals > 0 && !apart {
        return Err(Flaw::new(cursor.at, "white space should stand before this word"));
    }
    for _ in 0..literals {
        if !cursor.blank() {
            return Err(Flaw::new(cursor.at, "white space should stand here"));
        }
        cursor.quoted()?;
    }
    cursor.blank();
    if cursor.eat("[") {
        check_subset(&mut cursor)?;
        cursor.blank();
    }
    cursor.end(">")
}

/// The document type's own declarations, up to the bracket that ends them. Entities and attributes' defaults would be
/// text that does not stand where it is read.
fn check_subset(cursor: &mut Cursor) -> Result<(), Flaw> {
    loop {
        cursor.blank();
        let at = cursor.at;
        if cursor.eat("]") {
            return Ok(());
        }
        let known = ["<!--", "<?", "<!ELEMENT"].into_iter().find(|begin| cursor.eat(begin));
        let end = match known {
            Some("<!--") => "-->",
            Some("<?") => "?>",
            Some(_) => ">",
            None => {
                let what = "the document type declares entities or attributes, and such documents are not read";
                return Err(Flaw::new(at, what));
            }
        };
        cursor.pass(end).ok_or_else(|| Flaw::new(at, "a declaration that does not end"))?;
        let written = cursor.text.get(at..cursor.at).unwrap_or_default();
        let checked = match end {
            "-->" => check_comment(written),
            "?>" => check_instruction(written),
            _ => Ok(()),
        };
        checked.map_err(|flaw| Flaw { at: at + flaw.at, ..flaw })?;
    }
}

/// Text between tags as written, references aside (production 14).
pub fn check_text(raw: &str) -> Result<(), Flaw> {
    match memchr(b']', raw.as_bytes()).and_then(|_| raw.find("]]>")) {
        Some(at) => Err(Flaw::new(at, "\"]]>\" in text (it should be written \"]]&gt;\")")),
        None => Ok(()),
    }
}
