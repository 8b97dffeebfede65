//! The way through a document from row to row, along the plan's path.
//!
//! Invariants: only what is open along the path is remembered; a key of the path that stands twice in one object is a
//! fault; that the path leads nowhere is a fault, unless all that could lead there is empty.

use super::super::FileFault;
use super::super::heading::excerpt;
use super::super::paths::Step;
use super::scan::{Feed, Scan};
use super::want::{Want, is_number};

/// How many keys a message names.
const SHOWN: usize = 12;

/// A way through a document.
#[derive(Default)]
pub struct Walk {
    frames: Vec<Frame>,
    begun: bool,
    /// Objects met along the path so far.
    objects: usize,
    /// The path leads where rows are, or would be.
    arrived: bool,
    missed: Option<Missed>,
    name: String,
}

/// An object or array that is open along the path.
struct Frame {
    line: u64,
    /// Which of the path's objects it is; `None` for an array.
    object: Option<usize>,
    /// How many children it had so far.
    children: u64,
    /// One of them is the one that the path names.
    taken: bool,
    /// The first few of its keys.
    keys: Vec<String>,
}

/// A place where the path leads no further.
struct Missed {
    level: usize,
    what: String,
}

impl Walk {
    /// Goes to the first byte of the next row, which the caller must then pass; `false` when no more are there.
    pub fn next<F: Feed>(&mut self, scan: &mut Scan<F>, want: &Want) -> Result<bool, FileFault> {
        if !std::mem::replace(&mut self.begun, true) && self.enter(scan, want)? {
            return Ok(true);
        }
        while let Some(level) = self.frames.len().checked_sub(1) {
            match self.child(scan, want.steps.get(level))? {
                Child::Taken if self.enter(scan, want)? => return Ok(true),
                Child::Taken => {}
                Child::Other => scan.pass()?,
                Child::None => self.leave(want),
            }
        }
        Ok(false)
    }

    /// The number of the object that encloses the row, counted outwards from 1.
    pub fn enclosing(&self, up: usize) -> Option<usize> {
        self.frames.iter().rev().filter_map(|frame| frame.object).nth(up.checked_sub(1)?)
    }

    /// At the end, a fault if the path has led nowhere.
    pub fn arrived(&self, want: &Want) -> Result<(), FileFault> {
        match &self.missed {
            Some(missed) if !self.arrived => {
                Err(FileFault::Layout(format!("the rows should be at \"{}\", but {}", want.shown_path(), missed.what)))
            }
            _ => Ok(()),
        }
    }

    /// Goes into a value on the path; whether it is a row, which it then does not.
    fn enter<F: Feed>(&mut self, scan: &mut Scan<F>, want: &Want) -> Result<bool, FileFault> {
        let first = scan.begin()?;
        let level = self.frames.len();
        if level == want.steps.len() {
            self.arrived = true;
            return Ok(true);
        }
        if !matches!(first, b'{' | b'[') {
            self.miss(level, || format!("on line {} there is {} on the way there", scan.line(), kind(first)));
            scan.pass()?;
            return Ok(false);
        }
        self.arrived |= level + 1 == want.steps.len() && want.steps.last() == Some(&Step::Any);
        let object = (first == b'{').then_some(self.objects);
        self.objects += usize::from(object.is_some());
        self.frames.push(Frame { line: scan.line(), object, children: 0, taken: false, keys: vec![] });
        scan.open()?;
        Ok(false)
    }

    /// Goes to the next child of the innermost frame.
    fn child<F: Feed>(&mut self, scan: &mut Scan<F>, step: Option<&Step>) -> Result<Child, FileFault> {
        let (Some(frame), Some(step)) = (self.frames.last_mut(), step) else { return Ok(Child::None) };
        let taken = if frame.object.is_some() {
            self.name.clear();
            if !scan.member(&mut self.name)? {
                return Ok(Child::None);
            }
            if !self.arrived && frame.keys.len() < SHOWN {
                frame.keys.push(format!("\"{}\"", excerpt(&self.name)));
            }
            step.takes(&self.name)
        } else {
            if !scan.element()? {
                return Ok(Child::None);
            }
            takes_number(step, frame.children)
        };
        frame.children += 1;
        if taken && std::mem::replace(&mut frame.taken, true) && *step != Step::Any {
            let what = format!("the key \"{}\" stands twice in one object on the way to the rows", excerpt(&self.name));
            return Err(scan.wrong(&what));
        }
        Ok(if taken { Child::Taken } else { Child::Other })
    }

    /// Leaves the innermost frame, which has ended.
    fn leave(&mut self, want: &Want) {
        let Some(frame) = self.frames.pop() else { return };
        let level = self.frames.len();
        let Some(Step::Name(name)) = want.steps.get(level) else { return };
        if frame.object.is_none() && frame.children == 0 {
            self.arrived |= level + 1 == want.steps.len();
        } else if !frame.taken {
            self.miss(level, || frame.without(name));
        }
    }

    /// Remembers where the path leads no further: the first of the furthest places.
    fn miss(&mut self, level: usize, what: impl FnOnce() -> String) {
        if !self.arrived && self.missed.as_ref().is_none_or(|missed| missed.level < level) {
            self.missed = Some(Missed { level, what: what() });
        }
    }
}

impl Frame {
    /// That it lacks the child of this name.
    fn without(&self, name: &str) -> String {
        let line = self.line;
        let more = if self.children > self.keys.len() as u64 { ", …" } else { "" };
        match self.object {
            None => format!("the list on line {line} has {} elements and no \"{name}\"", self.children),
            Some(_) if self.children == 0 => format!("the object on line {line} has no keys, so no \"{name}\""),
            Some(_) => {
                format!("the object on line {line} has no key \"{name}\"; it has {}{more}", self.keys.join(", "))
            }
        }
    }
}

enum Child {
    /// It lies on the path.
    Taken,
    /// It does not.
    Other,
    /// There are no more.
    None,
}

/// Whether a step means the element of this number.
pub fn takes_number(step: &Step, number: u64) -> bool {
    match step {
        Step::Any => true,
        Step::Name(name) => is_number(name, number),
    }
}

/// What kind of value begins by this byte.
fn kind(first: u8) -> &'static str {
    match first {
        b'{' => "an object",
        b'[' => "a list",
        b'"' => "a text",
        b't' | b'f' => "a truth value",
        b'n' => "null",
        _ => "a number",
    }
}
