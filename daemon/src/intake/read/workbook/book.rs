//! What a workbook holds: its sheets in their order, where each stands, and from when its days are counted.
//!
//! Invariants: parts are found by the relations that the workbook states, never by customary names; a sheet is a
//! worksheet by the kind of its relation.

use std::collections::HashMap;
use std::io::BufReader;

use quick_xml::events::{BytesStart, Event};
use revisant_schema::plan::Sheet;
use unicode_normalization::UnicodeNormalization;

use super::super::FileFault;
use super::super::heading::excerpt;
use super::markup::{Markup, attribute, attribute_where, no_xml};
use super::package::{Package, other_kind};

/// No message names more sheets.
const MOST_NAMED: usize = 10;

/// A workbook's contents.
pub struct Book {
    /// The worksheets in the workbook's order, hidden ones too.
    pub sheets: Vec<Worksheet>,
    /// Whether day numbers count from 1904.
    pub since_1904: bool,
    /// The part that holds the texts that cells share.
    pub texts: Option<String>,
}

/// One worksheet.
pub struct Worksheet {
    /// Its name.
    pub name: String,
    /// Its part.
    pub part: String,
}

/// A relation of a part to another one.
struct Relation {
    id: String,
    /// The last word of its kind, which is the same in both editions of the standard.
    kind: String,
    /// The other part, from the archive's root.
    target: String,
}

impl Book {
    /// Reads what the workbook says of itself.
    pub fn read(package: &mut Package) -> Result<Self, FileFault> {
        let Some(relations) = relations(package, "")? else { return Err(no_workbook(package)) };
        let Some(main) = relations.into_iter().find(|relation| relation.kind == "officeDocument") else {
            return Err(no_workbook(package));
        };
        let main = main.target;
        if main.to_ascii_lowercase().ends_with(".bin") {
            return Err(other_kind(".xlsb"));
        }
        let relations = self::relations(package, &main)?.unwrap_or_default();
        let texts = relations.iter().find(|relation| relation.kind == "sharedStrings");
        let texts = texts.map(|relation| relation.target.clone());
        let mut book = Self { sheets: vec![], since_1904: false, texts };
        book.read_main(package, &main, &relations)?;
        Ok(book)
    }

    fn read_main(&mut self, package: &mut Package, main: &str, relations: &[Relation]) -> Result<(), FileFault> {
        let most = package.limits.small;
        let Some(part) = package.part(main, most)? else { return Err(no_xml(main, "there is no such part")) };
        let mut markup = Markup::new(main, BufReader::new(part));
        let relations = relations.iter().map(|relation| (relation.id.as_str(), relation)).collect();
        let mut in_sheets = false;
        let mut more = true;
        while more {
            more = markup.advance(|depth, event| match event {
                Event::Start(tag) => {
                    in_sheets = depth > 1 && in_sheets || depth == 1 && tag.local_name().as_ref() == "sheets";
                    self.take(depth, tag, in_sheets, &relations).map(|()| true)
                }
                event => Ok(!matches!(event, Event::Eof)),
            })?;
        }
        Ok(())
    }

    /// Takes what an element of the workbook's main part says.
    fn take(
        &mut self,
        depth: usize,
        tag: &BytesStart<'_>,
        in_sheets: bool,
        relations: &HashMap<&str, &Relation>,
    ) -> Result<(), String> {
        match (depth, tag.local_name().as_ref()) {
            (0, "workbook") => {}
            (0, other) => return Err(format!("it holds no workbook but \"{}\"", excerpt(other))),
            (1, "workbookPr") => self.since_1904 = since_1904(tag)?,
            (2, "sheet") if in_sheets => self.sheets.extend(worksheet(tag, relations)?),
            _ => {}
        }
        Ok(())
    }

    /// The sheet that the plan names.
    pub fn choose(&self, sheet: &Sheet) -> Result<&Worksheet, FileFault> {
        let (found, sought) = match sheet {
            Sheet::Number(number) => {
                (number.checked_sub(1).and_then(|index| self.sheets.get(index)), format!("sheet number {number}"))
            }
            Sheet::Named(name) => {
                let same = |sheet: &&Worksheet| sheet.name.nfc().eq(name.nfc());
                (self.sheets.iter().find(same), format!("sheet \"{name}\""))
            }
        };
        found.ok_or_else(|| {
            let named = self.sheets.iter().take(MOST_NAMED).map(|sheet| format!("\"{}\"", excerpt(&sheet.name)));
            let more = if self.sheets.len() > MOST_NAMED { ", …" } else { "" };
            let has = match self.sheets.len() {
                0 => "no worksheet at all".to_owned(),
                _ => format!("{}{more}", named.collect::<Vec<_>>().join(", ")),
            };
            FileFault::Layout(format!("there is no {sought}; the workbook has {has}"))
        })
    }
}

fn no_workbook(package: &mut Package) -> FileFault {
    let mut kind = String::new();
    // Workbooks of the other open standard say first what they are.
    let said = package.part("mimetype", 128).ok().flatten().map(std::io::read_to_string);
    if let Some(Ok(said)) = said {
        kind = said;
    }
    if kind.starts_with("application/vnd.oasis.opendocument.spreadsheet") {
        return other_kind(".ods");
    }
    FileFault::Unreadable("there is no workbook in it".to_owned())
}

/// Whether days count from 1904.
fn since_1904(tag: &BytesStart<'_>) -> Result<bool, String> {
    match attribute(tag, "date1904")?.as_deref().map(str::trim) {
        None | Some("0" | "false") => Ok(false),
        Some("1" | "true") => Ok(true),
        Some(other) => Err(format!("date1904 says \"{}\"", excerpt(other))),
    }
}

/// The worksheet that an entry of the list of sheets names; `None` for sheets of other kinds.
fn worksheet(tag: &BytesStart<'_>, relations: &HashMap<&str, &Relation>) -> Result<Option<Worksheet>, String> {
    let name = attribute(tag, "name")?.ok_or("a sheet has no name")?.into_owned();
    let prefixed = |key: &str| key.split_once(':').is_some_and(|(_, local)| local == "id");
    let id = attribute_where(tag, |attribute| prefixed(attribute.key.as_ref()))?;
    let relation = id.as_deref().and_then(|id| relations.get(id));
    let relation = relation.ok_or_else(|| format!("nothing says where the sheet \"{}\" stands", excerpt(&name)))?;
    Ok((relation.kind == "worksheet").then(|| Worksheet { name, part: relation.target.clone() }))
}

/// The relations of a part (of the whole package, for an empty name); `None` if it states none.
fn relations(package: &mut Package, of: &str) -> Result<Option<Vec<Relation>>, FileFault> {
    let (folder, name) = of.rsplit_once('/').map_or(("", of), |(_, name)| (&of[..of.len() - name.len()], name));
    let stated = format!("{folder}_rels/{name}.rels");
    let most = package.limits.small;
    let Some(part) = package.part(&stated, most)? else { return Ok(None) };
    let mut markup = Markup::new(&stated, BufReader::new(part));
    let mut relations = Vec::new();
    let mut more = true;
    while more {
        more = markup.advance(|depth, event| match event {
            Event::Start(tag) if depth == 1 && tag.local_name().as_ref() == "Relationship" => {
                relations.extend(relation(tag, folder)?);
                Ok(true)
            }
            event => Ok(!matches!(event, Event::Eof)),
        })?;
    }
    Ok(Some(relations))
}

/// One relation; `None` for one to something outside the workbook.
fn relation(tag: &BytesStart<'_>, folder: &str) -> Result<Option<Relation>, String> {
    if attribute(tag, "TargetMode")?.as_deref() == Some("External") {
        return Ok(None);
    }
    let said = |name| Ok::<_, String>(attribute(tag, name)?.unwrap_or_default().into_owned());
    let kind = said("Type")?;
    let kind = kind.rsplit('/').next().unwrap_or_default().to_owned();
    Ok(Some(Relation { id: said("Id")?, kind, target: resolve(folder, &said("Target")?) }))
}

/// A target as a name from the archive's root.
fn resolve(folder: &str, target: &str) -> String {
    let whole = if target.starts_with('/') { target.to_owned() } else { format!("{folder}{target}") };
    let mut steps: Vec<&str> = Vec::new();
    for step in whole.split('/') {
        match step {
            "" | "." => {}
            ".." => drop(steps.pop()),
            other => steps.push(other),
        }
    }
    steps.join("/")
}

#[cfg(test)]
mod tests {
    use super::resolve;

    #[test]
    fn targets_are_taken_from_the_part_s_folder() {
        for (target, name) in [
            ("worksheets/sheet1.xml", "xl/worksheets/sheet1.xml"),
            ("/xl/worksheets/sheet1.xml", "xl/worksheets/sheet1.xml"),
            ("../other/sheet1.xml", "other/sheet1.xml"),
            ("./sheet1.xml", "xl/sheet1.xml"),
            ("../../../sheet1.xml", "sheet1.xml"),
        ] {
            assert_eq!(resolve("xl/", target), name);
        }
    }
}
