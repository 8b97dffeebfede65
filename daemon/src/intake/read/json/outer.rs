//! The texts of what encloses rows. They may stand behind the rows in the document, so they are gathered beforehand.
//!
//! Invariant: what is gathered is bounded, whatever the document holds.

use super::super::FileFault;
use super::scan::{Feed, Scan};
use super::walk::takes_number;
use super::want::{Node, Want};

/// How much memory the texts may take.
const MOST: usize = 64 << 20;

/// A text as it stands in the export.
#[derive(Debug, Clone, Copy, Default, PartialEq, Eq)]
enum Cell {
    #[default]
    Absent,
    /// From here to there in [`Outer::texts`].
    Stands(usize, usize),
    /// A key on the way to it stands twice in one object.
    Twice,
}

/// The wanted texts of all objects that lie on the path to rows.
#[derive(Default)]
pub struct Outer {
    texts: String,
    /// By object, in the order in which they begin, then by place.
    cells: Vec<Cell>,
    /// Texts wanted of each object.
    width: usize,
}

/// What is wanted here for an object that has been entered.
type Active<'w> = Vec<(usize, &'w Node)>;

impl Outer {
    /// Reads a document to its end.
    pub fn gather<F: Feed>(&mut self, scan: &mut Scan<F>, want: &Want) -> Result<(), FileFault> {
        self.texts.clear();
        self.cells.clear();
        self.width = want.outsiders();
        self.value(scan, want, Some(0), &vec![])?;
        scan.end()
    }

    /// The JSON text at a place of an object; `None` when it is absent, and a fault when it stands twice.
    pub fn text(&self, object: usize, place: usize) -> Result<Option<&str>, ()> {
        match self.cells.get(object * self.width + place) {
            Some(Cell::Stands(from, to)) => Ok(self.texts.get(*from..*to)),
            Some(Cell::Twice) => Err(()),
            Some(Cell::Absent) | None => Ok(None),
        }
    }

    /// Passes a value that lies on the path (`level` steps along it) or in which something is wanted.
    fn value<'w, F: Feed>(
        &mut self,
        scan: &mut Scan<F>,
        want: &'w Want,
        level: Option<usize>,
        active: &Active<'w>,
    ) -> Result<(), FileFault> {
        let first = scan.begin()?;
        let level = level.filter(|level| *level < want.steps.len());
        let kept = active.iter().any(|(_, node)| !node.here.is_empty()).then(|| scan.keep());
        let deeper = level.is_some() || active.iter().any(|(_, node)| !node.below.is_empty());
        match first {
            b'{' if deeper => self.members(scan, want, level, active)?,
            b'[' if deeper => self.elements(scan, want, level, active)?,
            _ => scan.pass()?,
        }
        let Some(kept) = kept else { return Ok(()) };
        let text = scan.taken(&kept)?;
        for (object, node) in active {
            self.put(*object, node, text)?;
        }
        scan.release(kept);
        Ok(())
    }

    fn members<'w, F: Feed>(
        &mut self,
        scan: &mut Scan<F>,
        want: &'w Want,
        level: Option<usize>,
        active: &Active<'w>,
    ) -> Result<(), FileFault> {
        let mut active = active.clone();
        if level.is_some() {
            active.push((self.begin()?, &want.outer));
        }
        let mut seen: Active = vec![];
        let mut name = String::new();
        scan.open()?;
        while scan.member(&mut name)? {
            let next = level.filter(|level| want.steps.get(*level).is_some_and(|step| step.takes(&name)));
            let below = active.iter().filter_map(|(object, node)| Some((*object, node.key(&name)?))).collect();
            self.mark_twice(&mut seen, &below);
            self.child(scan, want, next, &below)?;
            name.clear();
        }
        Ok(())
    }

    fn elements<'w, F: Feed>(
        &mut self,
        scan: &mut Scan<F>,
        want: &'w Want,
        level: Option<usize>,
        active: &Active<'w>,
    ) -> Result<(), FileFault> {
        scan.open()?;
        let mut number = 0;
        while scan.element()? {
            let next = level.filter(|level| want.steps.get(*level).is_some_and(|step| takes_number(step, number)));
            let below = active.iter().filter_map(|(object, node)| Some((*object, node.element(number)?))).collect();
            self.child(scan, want, next, &below)?;
            number += 1;
        }
        Ok(())
    }

    fn child<'w, F: Feed>(
        &mut self,
        scan: &mut Scan<F>,
        want: &'w Want,
        on_path: Option<usize>,
        below: &Active<'w>,
    ) -> Result<(), FileFault> {
        if on_path.is_none() && below.is_empty() {
            return scan.pass();
        }
        self.value(scan, want, on_path.map(|level| level + 1), below)
    }

    /// Begins the next object; its number.
    fn begin(&mut self) -> Result<usize, FileFault> {
        let object = self.cells.len() / self.width.max(1);
        self.cells.resize(self.cells.len() + self.width, Cell::Absent);
        self.bounded()?;
        Ok(object)
    }

    fn put(&mut self, object: usize, node: &Node, text: &str) -> Result<(), FileFault> {
        let twice = |place: &usize| self.cells.get(object * self.width + place) == Some(&Cell::Twice);
        if node.here.iter().all(twice) {
            return Ok(());
        }
        let from = self.texts.len();
        self.texts.push_str(text);
        for place in &node.here {
            self.set(object, *place, Cell::Stands(from, from + text.len()));
        }
        self.bounded()
    }

    fn bounded(&self) -> Result<(), FileFault> {
        if self.texts.len() + self.cells.len() * size_of::<Cell>() <= MOST {
            return Ok(());
        }
        Err(FileFault::TooLarge(format!("the texts of what encloses the rows take more than {} MiB", MOST >> 20)))
    }

    /// Remembers what is wanted of a key in `seen`, and marks what was so before.
    fn mark_twice<'w>(&mut self, seen: &mut Active<'w>, below: &Active<'w>) {
        for (object, node) in below {
            if seen.iter().any(|(known, other)| known == object && std::ptr::eq(*other, *node)) {
                self.spoil(*object, node);
            } else {
                seen.push((*object, node));
            }
        }
    }

    fn spoil(&mut self, object: usize, node: &Node) {
        node.here.iter().for_each(|place| self.set(object, *place, Cell::Twice));
        node.below.iter().for_each(|(_, node)| self.spoil(object, node));
    }

    /// What stands twice stays so.
    fn set(&mut self, object: usize, place: usize, cell: Cell) {
        if let Some(known) = self.cells.get_mut(object * self.width + place)
            && *known != Cell::Twice
        {
            *known = cell;
        }
    }
}
