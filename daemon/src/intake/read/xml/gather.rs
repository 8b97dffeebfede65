//! Gathers the texts that a plan wants from elements as they open and close.
//!
//! Invariants: a wanted text is gathered from exactly one element or attribute, and one that stands twice is a trouble;
//! an element that has elements of its own has no text, and what is handed out for it is its markup.
//!
//! Levels count from the document (0) and its root element (1) down to the row. A path begins at the element of one
//! level, and there is one such element open at a time.

use std::fmt;

use super::document::Document;
use super::grammar::{Tag, is_blank, local};
use crate::intake::read::paths::Inside;

/// Why a wanted text is none.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Trouble {
    /// It stands twice.
    Twice,
    /// It says that it is nil, and is not empty.
    FullNil,
}

impl fmt::Display for Trouble {
    fn fmt(&self, f: &mut fmt::Formatter) -> fmt::Result {
        f.write_str(match self {
            Self::Twice => "stands twice",
            Self::FullNil => "says xsi:nil=\"true\" and is not empty",
        })
    }
}

/// What was gathered for one path.
#[derive(Debug, Default)]
struct Cell {
    text: String,
    met: bool,
    trouble: Option<Trouble>,
    /// Of an element that is open: where its content begins in the text taken.
    open: Option<usize>,
    nil: bool,
    /// It has elements of its own.
    mixed: bool,
}

impl Cell {
    fn clear(&mut self) {
        self.text.clear();
        (self.met, self.trouble, self.open, self.nil, self.mixed) = (false, None, None, false, false);
    }

    /// Whether this is the first one met.
    fn meet(&mut self) -> bool {
        if self.met {
            self.trouble = Some(Trouble::Twice);
        }
        !std::mem::replace(&mut self.met, true)
    }

    /// Ends the element, whose content goes up to `end` in `taken`.
    fn close(&mut self, taken: &str, end: usize) {
        let Some(from) = self.open.take() else { return };
        if self.mixed {
            self.text.clear();
            self.text.push_str(taken.get(from..end).unwrap_or_default());
        }
        if self.nil && !self.text.chars().all(is_blank) {
            self.trouble.get_or_insert(Trouble::FullNil);
        }
    }
}

/// One step of the wanted paths.
#[derive(Debug, Default)]
struct Node {
    children: Vec<(String, usize)>,
    /// The cell that wants its text.
    text: Option<usize>,
    /// The cells that want its attributes.
    attributes: Vec<(String, usize)>,
}

/// The wanted paths, and what was gathered for them.
#[derive(Debug)]
pub struct Gather {
    nodes: Vec<Node>,
    cells: Vec<Cell>,
    /// By level: the node at which its paths begin, and the cells of its paths.
    levels: Vec<(usize, Vec<usize>)>,
    /// The nodes of the elements that are open, each with the element's depth.
    active: Vec<(usize, usize)>,
    /// How many cells' elements are open.
    listening: usize,
}

impl Gather {
    /// Nothing wanted yet, for so many levels.
    pub fn new(levels: usize) -> Self {
        let nodes = (0..levels).map(|_| Node::default()).collect();
        let levels = (0..levels).map(|level| (level, vec![])).collect();
        Self { nodes, cells: vec![], levels, active: vec![(0, 0)], listening: 0 }
    }

    /// Wants what a path leads to from the element of this level; returns its place among the level's cells.
    pub fn want(&mut self, level: usize, path: &Inside) -> usize {
        let mut node = self.levels[level].0;
        for name in &path.down {
            node = self.child(node, &local(name));
        }
        let cell = self.cells.len();
        match &path.attribute {
            Some(name) => self.nodes[node].attributes.push((local(name).into_owned(), cell)),
            None => match self.nodes[node].text {
                Some(known) => return self.levels[level].1.iter().position(|cell| *cell == known).unwrap_or_default(),
                None => self.nodes[node].text = Some(cell),
            },
        }
        self.cells.push(Cell::default());
        self.levels[level].1.push(cell);
        self.levels[level].1.len() - 1
    }

    fn child(&mut self, node: usize, name: &str) -> usize {
        if let Some((_, known)) = self.nodes[node].children.iter().find(|(known, _)| known == name) {
            return *known;
        }
        let new = self.nodes.len();
        self.nodes.push(Node::default());
        self.nodes[node].children.push((name.to_owned(), new));
        new
    }

    /// Whether nothing is wanted.
    pub fn is_idle(&self) -> bool {
        self.cells.is_empty()
    }

    /// Whether the text taken must be kept, since the content of a wanted element is open.
    pub fn is_listening(&self) -> bool {
        self.listening > 0
    }

    /// What was gathered for each path of a level, in the order of [`Self::want`].
    pub fn gathered(&self, level: usize) -> impl Iterator<Item = Result<&str, Trouble>> {
        let cells = self.levels.get(level).map_or(&[][..], |(_, cells)| cells);
        cells.iter().filter_map(|cell| self.cells.get(*cell)).map(|cell| match cell.trouble {
            None => Ok(cell.text.as_str()),
            Some(trouble) => Err(trouble),
        })
    }

    /// What was gathered for one path of a level.
    pub fn get(&self, level: usize, index: usize) -> Result<&str, Trouble> {
        self.gathered(level).nth(index).unwrap_or(Ok(""))
    }

    /// An element opens; `level` if paths begin at it.
    pub fn open(&mut self, document: &Document, level: Option<usize>) {
        let depth = document.depth();
        let first = self.active.len();
        let mut parent = first;
        let name = document.tag().name;
        while let Some(&(above, node)) = parent.checked_sub(1).and_then(|index| self.active.get(index))
            && above + 1 == depth
        {
            parent -= 1;
            self.mix(node);
            let name = local(name);
            let child = self.nodes[node].children.iter().find(|(known, _)| *known == name);
            self.active.extend(child.map(|(_, child)| (depth, *child)));
        }
        if let Some(level) = level {
            self.begin(level);
            self.active.push((depth, self.levels[level].0));
        }
        for index in first..self.active.len() {
            self.meet(self.active[index].1, document);
        }
    }

    /// Forgets what was gathered from the element of this level before.
    fn begin(&mut self, level: usize) {
        for cell in &self.levels[level].1 {
            self.cells[*cell].clear();
        }
    }

    /// The element of this node has an element of its own.
    fn mix(&mut self, node: usize) {
        if let Some(cell) = self.nodes[node].text {
            self.cells[cell].mixed |= self.cells[cell].open.is_some();
        }
    }

    /// Takes what is wanted of an element's start tag.
    fn meet(&mut self, node: usize, document: &Document) {
        let node = &self.nodes[node];
        if let Some(cell) = node.text.and_then(|cell| self.cells.get_mut(cell))
            && cell.meet()
        {
            cell.open = Some(document.taken().len());
            cell.nil = is_nil(&document.tag());
            self.listening += 1;
        }
        if node.attributes.is_empty() {
            return;
        }
        for attribute in document.tag().attributes().flatten() {
            let name = local(attribute.name);
            for (_, cell) in node.attributes.iter().filter(|(known, _)| *known == name && !attribute.declares_space()) {
                let cell = &mut self.cells[*cell];
                if cell.meet() {
                    cell.text.push_str(&attribute.value().unwrap_or_default());
                }
            }
        }
    }

    /// A part of an element's text.
    pub fn text(&mut self, document: &Document) {
        for &(_, node) in self.active.iter().rev().take_while(|(depth, _)| *depth == document.depth()) {
            if let Some(cell) = self.nodes[node].text.and_then(|cell| self.cells.get_mut(cell))
                && cell.open.is_some()
            {
                cell.text.push_str(&document.text());
            }
        }
    }

    /// An element closes.
    pub fn close(&mut self, document: &Document) {
        while let Some(&(depth, node)) = self.active.last()
            && depth == document.depth()
        {
            self.active.pop();
            if let Some(cell) = self.nodes[node].text.and_then(|cell| self.cells.get_mut(cell))
                && cell.open.is_some()
            {
                cell.close(document.taken(), document.from());
                self.listening = self.listening.saturating_sub(1);
            }
        }
    }
}

/// Whether an element says that it has no value (XML Schema, part 1, section 2.6.2).
fn is_nil(tag: &Tag) -> bool {
    let says = |value: &str| matches!(value.trim(), "true" | "1");
    tag.attributes()
        .flatten()
        .any(|attribute| attribute.name == "xsi:nil" && attribute.value().is_ok_and(|value| says(&value)))
}
