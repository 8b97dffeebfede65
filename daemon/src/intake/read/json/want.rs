//! What the plan looks for in a document: where the rows are, and which texts of a row and of what encloses it.
//!
//! Invariant: everything is compared folded, as a table's labels are.

use revisant_schema::plan::Reader;

use super::super::heading::fold;
use super::super::ignore::Ignored;
use super::super::paths::{Inside, Step, steps};
use super::super::{FileFault, Row, wanted};

/// What the plan looks for.
pub struct Want<'a> {
    /// The path to the rows, as the plan has it.
    pub path: &'a str,
    /// Its steps.
    pub steps: Vec<Step>,
    /// What is wanted inside a row: by slot.
    pub row: Node,
    /// What is wanted in the objects that enclose a row: by place in [`Source::Outside`].
    pub outer: Node,
    /// Where each slot's text is.
    pub sources: Vec<Source>,
    rules: Ignored<'a>,
}

/// Where a slot's text is.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Source {
    /// In the row.
    Inside,
    /// In an object that encloses it.
    Outside {
        /// Which one, counted outwards from 1.
        up: usize,
        /// Its place among the texts that are outside.
        place: usize,
        /// The column as the plan names it.
        column: String,
    },
}

/// The texts wanted at one place of a tree, and below it.
#[derive(Debug, Default)]
pub struct Node {
    /// Those to which the text here belongs.
    pub here: Vec<usize>,
    /// What is wanted of its children, by folded key or number.
    pub below: Vec<(String, Node)>,
}

impl Node {
    /// What is wanted of a key, folded.
    pub fn key(&self, name: &str) -> Option<&Node> {
        self.below.iter().find(|(known, _)| known == name).map(|(_, node)| node)
    }

    /// What is wanted of an element, by its number from 0.
    pub fn element(&self, number: u64) -> Option<&Node> {
        self.below.iter().find(|(known, _)| is_number(known, number)).map(|(_, node)| node)
    }

    fn add(&mut self, down: &[String], slot: usize) {
        let Some((first, rest)) = down.split_first() else { return self.here.push(slot) };
        let name = fold(first);
        if let Some((_, node)) = self.below.iter_mut().find(|(known, _)| *known == name) {
            return node.add(rest, slot);
        }
        let mut node = Node::default();
        node.add(rest, slot);
        self.below.push((name, node));
    }
}

/// Whether a name is this number, as it is written without a sign or leading zeros.
pub fn is_number(name: &str, number: u64) -> bool {
    let plain = name == "0" || !name.starts_with(['0', '+']);
    plain && name.parse() == Ok(number)
}

impl<'a> Want<'a> {
    /// Takes the reader's paths apart.
    pub fn new(reader: &'a Reader, path: &'a str) -> Result<Self, FileFault> {
        let folded = |step| if let Step::Name(name) = step { Step::Name(fold(&name)) } else { step };
        let steps: Vec<Step> = steps(path).into_iter().map(folded).collect();
        let names = wanted(reader);
        let mut want = Self {
            path,
            steps,
            row: Node::default(),
            outer: Node::default(),
            sources: vec![],
            rules: Ignored::by_slot(reader),
        };
        for (slot, column) in names.iter().enumerate() {
            want.add(slot, column)?;
        }
        Ok(want)
    }

    fn add(&mut self, slot: usize, column: &str) -> Result<(), FileFault> {
        let inside = Inside::parse(column)?;
        let wrong = |what: &str| Err(FileFault::Layout(format!("the plan names \"{column}\"; {what}")));
        if inside.attribute.is_some() {
            return wrong("only XML has attributes, JSON has none");
        }
        if inside.up == 0 {
            self.row.add(&inside.down, slot);
            self.sources.push(Source::Inside);
            return Ok(());
        }
        if inside.down.is_empty() {
            return wrong("that is all of what encloses the row, and no text in it");
        }
        if inside.up > self.steps.len() {
            return wrong(&format!("nothing encloses rows at \"{}\" so far out", self.shown_path()));
        }
        let place = self.outsiders();
        self.outer.add(&inside.down, place);
        self.sources.push(Source::Outside { up: inside.up, place, column: column.to_owned() });
        Ok(())
    }

    /// How many texts are outside the rows.
    pub fn outsiders(&self) -> usize {
        self.sources.iter().filter(|source| **source != Source::Inside).count()
    }

    /// The path to the rows, for a message.
    pub fn shown_path(&self) -> &str {
        if self.path.is_empty() { "/" } else { self.path }
    }

    /// Whether the plan ignores a row by what it holds.
    pub fn ignores(&self, row: &Row) -> bool {
        self.rules.cells(|slot| Some(row.cell(slot)))
    }
}
