//! The way through a document: which elements enclose rows, and which are rows.
//!
//! Invariant: rows are the elements that the plan's path leads to from the root element down, and no others.

use super::document::{Document, Met};
use super::gather::Gather;
use super::grammar::local;
use crate::intake::read::heading::excerpt;
use crate::intake::read::paths::{Step, steps};
use crate::intake::read::{Bytes, FileFault};
use revisant_schema::plan::Encoding;

/// How many names are remembered for a message.
const A_FEW: usize = 6;

/// The path to rows, and how far the open elements lie on it.
#[derive(Debug)]
pub struct Path {
    steps: Vec<Step>,
    /// So many open elements lie on it, from the root down.
    matched: usize,
    /// The most that ever did.
    deepest: usize,
    root: String,
    /// Names that stand where the path went on no further.
    beside: Vec<String>,
}

impl Path {
    /// Takes the plan's path apart; `/` is the root element.
    pub fn parse(rows: &str) -> Self {
        let plain = |step| match step {
            Step::Name(name) => Step::Name(local(name.trim()).into_owned()),
            Step::Any => Step::Any,
        };
        let mut steps: Vec<Step> = steps(rows).into_iter().map(plain).collect();
        if steps.is_empty() {
            steps.push(Step::Any);
        }
        Self { steps, matched: 0, deepest: 0, root: String::new(), beside: vec![] }
    }

    /// The level of rows.
    pub fn rows(&self) -> usize {
        self.steps.len()
    }

    /// Whether a row is open.
    fn in_row(&self) -> bool {
        self.matched == self.steps.len()
    }

    /// An element opens at this depth; whether it lies on the path.
    fn open(&mut self, depth: usize, name: &str) -> bool {
        if depth > self.steps.len() + 1 {
            return false;
        }
        let name = local(name);
        if self.matched + 1 == depth && self.steps.get(self.matched).is_some_and(|step| step.takes(&name)) {
            self.matched = depth;
            if depth > self.deepest {
                self.deepest = depth;
                self.beside.clear();
            }
        } else {
            self.note(depth, &name);
        }
        if depth == 1 {
            name.as_ref().clone_into(&mut self.root);
        }
        self.matched == depth
    }

    /// Remembers a name that may help to mend the path.
    fn note(&mut self, depth: usize, name: &str) {
        let tells = (self.matched == self.deepest && depth == self.deepest + 1) || (self.deepest == 0 && depth == 2);
        if !tells || depth == 1 || self.beside.len() >= A_FEW {
            return;
        }
        let shown = excerpt(name);
        if !self.beside.contains(&shown) {
            self.beside.push(shown);
        }
    }

    fn close(&mut self, depth: usize) {
        self.matched = self.matched.min(depth.saturating_sub(1));
    }

    /// A fault if what encloses rows was never met.
    fn met(&self) -> Result<(), FileFault> {
        if self.deepest + 1 >= self.steps.len() && self.deepest > 0 {
            return Ok(());
        }
        let Some(Step::Name(needed)) = self.steps.get(self.deepest) else {
            return Err(FileFault::Layout(format!("{}; {}", self.lead(), self.found())));
        };
        Err(FileFault::Layout(format!("{}, where there is no element \"{needed}\"; {}", self.lead(), self.found())))
    }

    /// How far the path leads.
    fn lead(&self) -> String {
        let names = |steps: &[Step]| -> String {
            let name = |step: &Step| match step {
                Step::Name(name) => format!("/{name}"),
                Step::Any => "/*".to_owned(),
            };
            steps.iter().map(name).collect()
        };
        let whole = names(&self.steps);
        match self.steps.get(..self.deepest) {
            None | Some([]) => format!("the rows should be at \"{whole}\", from the root element on"),
            Some(reached) => {
                format!("the rows should be at \"{whole}\", and the document goes as far as \"{}\"", names(reached))
            }
        }
    }

    /// What the document has instead.
    fn found(&self) -> String {
        let place = if self.deepest > 0 {
            "what stands there is".to_owned()
        } else {
            format!("the root element is \"{}\", and what stands in it is", excerpt(&self.root))
        };
        if self.beside.is_empty() {
            format!("{place} nothing")
        } else {
            format!("{place} \"{}\"", self.beside.join("\", \""))
        }
    }
}

/// What one step of the way came to.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Walked {
    /// Into the element of this level: a row, or one that encloses rows.
    Into(usize),
    /// Out of it again.
    OutOf(usize),
    /// Anything else.
    On,
    /// To the end of a document that is well-formed.
    End,
}

/// A document on whose way texts are gathered.
pub struct Walk<'a> {
    pub document: Document<'a>,
    pub gather: Gather,
    path: Path,
    keep_rows: bool,
}

impl<'a> Walk<'a> {
    /// Stands before the document. With `keep_rows` the text of a row is kept until the step after its end.
    pub fn open(
        encoding: Encoding,
        bytes: &'a dyn Bytes,
        rows: &str,
        gather: Gather,
        keep_rows: bool,
    ) -> Result<Self, FileFault> {
        Ok(Self { document: Document::open(encoding, bytes)?, gather, path: Path::parse(rows), keep_rows })
    }

    /// Goes on by one tag or text.
    pub fn step(&mut self) -> Result<Walked, FileFault> {
        let keep = (self.keep_rows && self.path.in_row()) || self.gather.is_listening();
        let met = self.document.advance(keep)?;
        let depth = self.document.depth();
        match met {
            Met::Open => {
                let on_path = self.path.open(depth, self.document.tag().name);
                self.gather.open(&self.document, on_path.then_some(depth));
                Ok(if on_path { Walked::Into(depth) } else { Walked::On })
            }
            Met::Close => {
                let on_path = self.path.matched == depth;
                self.gather.close(&self.document);
                self.path.close(depth);
                Ok(if on_path { Walked::OutOf(depth) } else { Walked::On })
            }
            Met::Text => {
                self.gather.text(&self.document);
                Ok(Walked::On)
            }
            Met::Nothing => Ok(Walked::On),
            Met::End => self.path.met().map(|()| Walked::End),
        }
    }
}
