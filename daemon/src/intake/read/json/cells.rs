//! A row's texts.
//!
//! Invariants: a row is read in one pass, in which it is also checked; a key that stands twice in an object that was
//! looked into is found, whether it is wanted or not.

use super::super::text::holds_nul;
use super::super::{FileFault, Row, RowFault};
use super::outer::Outer;
use super::scan::{Feed, Scan, unescaped};
use super::walk::Walk;
use super::want::{Node, Source, Want};

/// What was found in a row. Reused from row to row.
#[derive(Default)]
pub struct Cells {
    /// Where each slot's text stands, by spots.
    spans: Vec<Option<(u64, u64)>>,
    /// The first key that stands twice in its object.
    twice: Option<String>,
    /// The keys of the objects that are open.
    names: String,
    /// Where each of them stands in `names`.
    keys: Vec<(usize, usize)>,
}

impl Cells {
    /// Reads the row that begins at the scan's place into `row`, with its line and bytes.
    ///
    /// A layout fault means that this row does not lie in as many objects as the plan says; it has been passed then.
    pub fn read<F: Feed>(
        &mut self,
        scan: &mut Scan<F>,
        (want, walk, outer): (&Want, &Walk, &Outer),
        row: &mut Row,
    ) -> Result<(), FileFault> {
        row.clear();
        (row.line, row.lines) = (scan.line(), 1);
        let start = scan.offset();
        self.clear(want.sources.len());
        let kept = scan.keep();
        self.look(scan, &want.row)?;
        row.raw.push_str(scan.taken(&kept)?);
        row.bytes = Some((start, scan.offset()));
        let from = kept.from();
        scan.release(kept);
        self.fill(from, (want, walk, outer), row)
    }

    fn clear(&mut self, slots: usize) {
        self.spans.clear();
        self.spans.resize(slots, None);
        self.twice = None;
        self.names.clear();
        self.keys.clear();
    }

    /// Passes a value in which something is wanted.
    fn look<F: Feed>(&mut self, scan: &mut Scan<F>, node: &Node) -> Result<(), FileFault> {
        let first = scan.begin()?;
        let from = scan.spot();
        match first {
            b'{' if !node.below.is_empty() => self.members(scan, node)?,
            b'[' if !node.below.is_empty() => self.elements(scan, node)?,
            _ => scan.pass()?,
        }
        for slot in &node.here {
            if let Some(span) = self.spans.get_mut(*slot) {
                *span = Some((from, scan.spot()));
            }
        }
        Ok(())
    }

    fn members<F: Feed>(&mut self, scan: &mut Scan<F>, node: &Node) -> Result<(), FileFault> {
        let first = self.keys.len();
        scan.open()?;
        loop {
            let from = self.names.len();
            if !scan.member(&mut self.names)? {
                break;
            }
            self.keys.push((from, self.names.len()));
            match node.key(&self.names[from..]) {
                Some(node) => self.look(scan, node)?,
                None => scan.pass()?,
            }
        }
        self.find_twice(first);
        Ok(())
    }

    fn elements<F: Feed>(&mut self, scan: &mut Scan<F>, node: &Node) -> Result<(), FileFault> {
        scan.open()?;
        let mut number = 0;
        while scan.element()? {
            match node.element(number) {
                Some(node) => self.look(scan, node)?,
                None => scan.pass()?,
            }
            number += 1;
        }
        Ok(())
    }

    /// Looks whether a key stands twice among those of the object that has ended, and forgets them.
    fn find_twice(&mut self, first: usize) {
        let Self { names, keys, twice, .. } = self;
        let text = |key: &(usize, usize)| names.get(key.0..key.1).unwrap_or_default();
        let begin = keys.get(first).map_or(names.len(), |key| key.0);
        let own = keys.get_mut(first..).unwrap_or_default();
        own.sort_unstable_by(|one, other| text(one).cmp(text(other)));
        if twice.is_none()
            && let Some(pair) = own.windows(2).find(|pair| text(&pair[0]) == text(&pair[1]))
        {
            *twice = pair.first().map(|key| text(key).to_owned());
        }
        keys.truncate(first);
        names.truncate(begin);
    }

    /// Gives the row its texts, in the order of slots, or its fault.
    fn fill(&mut self, from: u64, (want, walk, outer): (&Want, &Walk, &Outer), row: &mut Row) -> Result<(), FileFault> {
        if let Some(key) = &self.twice {
            row.fault = Some(twice(key, "it"));
            return Ok(());
        }
        let raw = std::mem::take(&mut row.raw);
        let mut fault = None;
        for (source, span) in want.sources.iter().zip(&self.spans) {
            let text = match source {
                Source::Inside => {
                    let place = |spot: u64| spot.saturating_sub(from) as usize;
                    span.and_then(|(start, end)| raw.get(place(start)..place(end)))
                }
                Source::Outside { up, place, column } => {
                    let object = walk.enclosing(*up).ok_or_else(|| not_so_far_out(row, column))?;
                    let text = outer.text(object, *place);
                    text.unwrap_or_else(|()| {
                        fault = Some(twice(column, "what encloses it"));
                        None
                    })
                }
            };
            push(text.unwrap_or("null"), row);
        }
        let nul = (0..want.sources.len()).any(|slot| holds_nul(row.cell(slot)));
        let nul = nul.then(|| RowFault::Unreadable("a NUL character stands in one of its texts".to_owned()));
        if let Some(fault) = fault.or(nul) {
            empty(row, fault);
        }
        row.raw = raw;
        Ok(())
    }
}

/// Takes a row's texts away, for it has a fault.
fn empty(row: &mut Row, fault: RowFault) {
    let (line, lines, bytes) = (row.line, row.lines, row.bytes);
    row.clear();
    (row.line, row.lines, row.bytes) = (line, lines, bytes);
    row.fault = Some(fault);
}

fn twice(key: &str, place: &str) -> RowFault {
    RowFault::Unreadable(format!("the key \"{}\" stands twice in {place}", super::super::heading::excerpt(key)))
}

fn not_so_far_out(row: &Row, column: &str) -> FileFault {
    FileFault::Layout(format!(
        "the plan names \"{column}\", but the row on line {} does not lie in so many objects",
        row.line
    ))
}

/// Adds a JSON value as the next wanted text.
fn push(value: &str, row: &mut Row) {
    match value.bytes().next() {
        Some(b'"') => row.push(unescaped(value).trim()),
        Some(b'-' | b'0'..=b'9') => row.push_number(value),
        Some(b'n') => row.push(""),
        _ => row.push(value),
    }
}
