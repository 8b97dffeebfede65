//! What encloses the rows of a document, gathered in a pass of its own, since it may stand behind them.
//!
//! Invariant: memory is bounded, however many elements enclose rows.

use super::gather::{Gather, Trouble};
use super::walk::{Walk, Walked};
use crate::intake::read::FileFault;

/// What encloses rows takes no more memory.
const MOST: usize = 64 << 20;
/// Beside its text, a text takes so much of it; and a trouble.
const PLACE: usize = size_of::<usize>();
const TROUBLE: usize = size_of::<(usize, Trouble)>();

/// The texts gathered from all elements of one level, in the document's order.
#[derive(Debug, Default)]
struct Level {
    text: String,
    ends: Vec<usize>,
    /// Which of them are none.
    troubles: Vec<(usize, Trouble)>,
    /// How many belong to one element.
    width: usize,
}

impl Level {
    /// Adds what was gathered from one element.
    fn add<'t>(&mut self, texts: impl Iterator<Item = Result<&'t str, Trouble>>) {
        self.width = 0;
        for text in texts {
            match text {
                Ok(text) => self.text.push_str(text),
                Err(trouble) => self.troubles.push((self.ends.len(), trouble)),
            }
            self.ends.push(self.text.len());
            self.width += 1;
        }
    }

    fn get(&self, element: usize, index: usize) -> Option<Result<&str, Trouble>> {
        let at = element * self.width + index;
        if let Ok(found) = self.troubles.binary_search_by_key(&at, |(at, _)| *at) {
            return self.troubles.get(found).map(|(_, trouble)| Err(*trouble));
        }
        let from = at.checked_sub(1).map_or(Some(0), |before| self.ends.get(before).copied())?;
        self.text.get(from..*self.ends.get(at)?).map(Ok)
    }

    fn size(&self) -> usize {
        self.text.len() + self.ends.len() * PLACE + self.troubles.len() * TROUBLE
    }
}

/// The texts gathered from what encloses rows.
#[derive(Debug, Default)]
pub struct Around {
    levels: Vec<Level>,
}

impl Around {
    /// Goes through the whole document, whose rows are at the level `rows`.
    pub fn gather(mut walk: Walk, rows: usize) -> Result<Self, FileFault> {
        let mut around = Self { levels: (0..rows).map(|_| Level::default()).collect() };
        loop {
            match walk.step()? {
                Walked::OutOf(level) => around.add(level, &walk.gather)?,
                Walked::End => {
                    around.add(0, &walk.gather)?;
                    return Ok(around);
                }
                Walked::Into(_) | Walked::On => {}
            }
        }
    }

    /// What was gathered for one path from the element with this number (from 0) of a level; `None` if there was none.
    pub fn get(&self, level: usize, element: usize, index: usize) -> Option<Result<&str, Trouble>> {
        self.levels.get(level)?.get(element, index)
    }

    fn add(&mut self, level: usize, gather: &Gather) -> Result<(), FileFault> {
        let Some(kept) = self.levels.get_mut(level) else { return Ok(()) };
        kept.add(gather.gathered(level));
        if self.levels.iter().map(Level::size).sum::<usize>() > MOST {
            return Err(FileFault::TooLarge(format!(
                "what encloses the rows and is wanted of it takes more than {} MiB",
                MOST >> 20
            )));
        }
        Ok(())
    }
}
