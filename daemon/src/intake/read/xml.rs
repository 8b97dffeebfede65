//! XML documents.
//!
//! Invariants: rows are handed out while the document is read, and its end is told only if it is well-formed as a
//! whole; a text that stands twice is never chosen among; entities are not expanded; memory does not grow with the
//! document.
//!
//! A document is read as XML 1.0 (fifth edition) says, by a parser that is lenient (`document` adds what it does not
//! look at). Names are compared without their prefixes. What encloses the rows may stand behind them: where the plan
//! wants such texts, a first pass gathers them (`around`), and a second one hands out the rows.

mod around;
mod document;
mod gather;
mod grammar;
mod source;
mod walk;

use revisant_schema::plan::Reader;

use self::around::Around;
use self::gather::{Gather, Trouble};
use self::walk::{Path, Walk, Walked};
use super::ignore::Ignored;
use super::paths::Inside;
use super::{Bytes, FileFault, LineCounts, Row, RowFault, Rows, wanted};

/// Where a wanted text comes from.
#[derive(Debug, Clone, Copy)]
enum Origin {
    /// It stands in the row, or in the start tag of what encloses it: met before the row ends.
    Met { level: usize, index: usize },
    /// It stands anywhere in what encloses the row.
    Around { level: usize, index: usize },
}

/// The rows of an XML document.
pub struct Xml<'a> {
    walk: Walk<'a>,
    around: Around,
    names: Vec<String>,
    /// By slot.
    origins: Vec<Origin>,
    /// Rules for rows to be ignored, by slot.
    rules: Ignored<'a>,
    /// The level of rows.
    rows: usize,
    /// By level, how many elements that enclose rows have opened.
    opened: Vec<usize>,
    /// Where the open row begins: its line and its first byte.
    begun: (u64, u64),
    counts: LineCounts,
    handed_out: u64,
    state: State,
}

#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum State {
    Reading,
    Ended,
    Failed,
}

impl<'a> Xml<'a> {
    /// Settles the encoding, gathers what encloses the rows if it is wanted, and stands before the document.
    pub fn open(reader: &'a Reader, rows: &str, bytes: &'a dyn Bytes) -> Result<Self, FileFault> {
        let names = wanted(reader);
        let level = Path::parse(rows).rows();
        let (mut met, mut far) = (Gather::new(level + 1), Gather::new(level + 1));
        let mut origins = Vec::with_capacity(names.len());
        for name in &names {
            origins.push(find(name, level, &mut met, &mut far)?);
        }
        let around = if far.is_idle() {
            Around::default()
        } else {
            Around::gather(Walk::open(reader.encoding, bytes, rows, far, false)?, level)?
        };
        Ok(Self {
            walk: Walk::open(reader.encoding, bytes, rows, met, true)?,
            around,
            rules: Ignored::by_slot(reader),
            names,
            origins,
            rows: level,
            opened: vec![0; level + 1],
            begun: (0, 0),
            counts: LineCounts::default(),
            handed_out: 0,
            state: State::Reading,
        })
    }

    /// Goes on to the end of the next row that is not ignored.
    fn seek(&mut self, row: &mut Row) -> Result<bool, FileFault> {
        loop {
            match self.walk.step()? {
                Walked::Into(level) if level == self.rows => {
                    self.begun = (self.walk.document.place().line, self.walk.document.bytes().0);
                }
                Walked::Into(level) => self.opened[level] += 1,
                Walked::OutOf(level) if level == self.rows => {
                    self.fill(row)?;
                    if !self.ignores(row) {
                        self.handed_out += 1;
                        return Ok(true);
                    }
                    self.counts.ignored += 1;
                }
                Walked::OutOf(_) | Walked::On => {}
                Walked::End => return Ok(false),
            }
        }
    }

    /// Fills in the row that has just ended.
    fn fill(&self, row: &mut Row) -> Result<(), FileFault> {
        row.clear();
        let (line, first) = self.begun;
        (row.line, row.lines) = (line, 1);
        row.bytes = Some((first, self.walk.document.bytes().1));
        row.raw.push_str(self.walk.document.taken());
        for (slot, origin) in self.origins.iter().enumerate() {
            match self.text(*origin)? {
                Ok(text) => row.push(text.trim()),
                Err(trouble) => {
                    row.push("");
                    row.fault.get_or_insert_with(|| fault(self.names.get(slot), trouble));
                }
            }
        }
        Ok(())
    }

    fn text(&self, origin: Origin) -> Result<Result<&str, Trouble>, FileFault> {
        match origin {
            Origin::Met { level, index } => Ok(self.walk.gather.get(level, index)),
            Origin::Around { level, index } => {
                // The document itself is met once, and never opens.
                let element = self.opened[level].saturating_sub(1);
                self.around.get(level, element, index).ok_or_else(|| {
                    FileFault::Io(std::io::Error::other("they were not the same when they were read again"))
                })
            }
        }
    }

    /// Whether a rule of the plan ignores the row; a text that cannot be told does not make it so.
    fn ignores(&self, row: &Row) -> bool {
        self.rules.cells(|slot| {
            let told = self.origins.get(slot).is_some_and(|origin| matches!(self.text(*origin), Ok(Ok(_))));
            told.then(|| row.cell(slot))
        })
    }
}

impl Rows for Xml<'_> {
    fn preamble(&self, _key: &str) -> Option<&str> {
        None
    }

    fn unit(&self, _slot: usize) -> Option<&str> {
        None
    }

    fn next_row(&mut self, row: &mut Row) -> Result<bool, FileFault> {
        match self.state {
            State::Reading => {}
            State::Ended => return Ok(false),
            State::Failed => return Err(FileFault::Unreadable("what stands before cannot be read".into())),
        }
        let found = self.seek(row);
        self.state = match found {
            Ok(true) => State::Reading,
            Ok(false) => State::Ended,
            Err(_) => State::Failed,
        };
        found
    }

    fn counts(&self) -> LineCounts {
        self.counts
    }

    fn lines(&self) -> u64 {
        self.counts.total() + self.handed_out
    }
}

/// Where the text of a column comes from, given the level of rows.
fn find(column: &str, rows: usize, met: &mut Gather, far: &mut Gather) -> Result<Origin, FileFault> {
    let path = Inside::parse(column)?;
    let Some(level) = rows.checked_sub(path.up) else {
        return Err(outside(column, "it leads out of the document"));
    };
    match (path.up, path.down.is_empty(), &path.attribute) {
        (0, _, _) => Ok(Origin::Met { level, index: met.want(level, &path) }),
        (_, false, _) => Ok(Origin::Around { level, index: far.want(level, &path) }),
        (_, true, Some(_)) if level > 0 => Ok(Origin::Met { level, index: met.want(level, &path) }),
        (_, true, _) => Err(outside(column, "what encloses rows has no text of its own")),
    }
}

fn outside(column: &str, why: &str) -> FileFault {
    FileFault::Layout(format!("the plan names \"{column}\", which leads to no text: {why}"))
}

fn fault(name: Option<&String>, trouble: Trouble) -> RowFault {
    let name = name.map_or("", String::as_str);
    RowFault::Unreadable(format!("\"{name}\" {trouble}, so it cannot be told what it means"))
}
