//! Failures, as people and programs meet them.
//!
//! Invariant: a failure says what happened, where, and what next, in plain words; there is no other way for a command
//! to end badly.

use revisant_schema::plan::{Faults, LoadError};
use revisant_schema::records::RecordsError;
use serde_json::{Value as Json, json};

/// How a command ended.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Exit {
    /// All done.
    Done,
    /// It failed.
    Failed,
    /// A usage error, or an unsound plan.
    Usage,
    /// A check found something.
    Found,
}

impl Exit {
    /// The process's exit status.
    pub fn code(self) -> u8 {
        match self {
            Self::Done => 0,
            Self::Failed => 1,
            Self::Usage => 2,
            Self::Found => 3,
        }
    }
}

/// Why a command could not do what was asked.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
#[error("{}", self.message())]
pub struct Failure {
    /// The exit status that it means.
    pub exit: Exit,
    /// A word for the kind, for machines.
    pub kind: &'static str,
    /// What happened.
    pub what: String,
    /// Where.
    pub place: Option<String>,
    /// What to do next.
    pub next: Option<String>,
    /// Every fault by itself, where there are several: text for people, the same for machines.
    pub faults: Option<Box<(String, Json)>>,
}

impl Failure {
    /// A failure of this kind.
    pub fn new(kind: &'static str, what: impl Into<String>) -> Self {
        Self { exit: Exit::Failed, kind, what: what.into(), place: None, next: None, faults: None }
    }

    /// The command line was not understood, or what it asks for cannot be.
    pub fn usage(what: impl Into<String>) -> Self {
        Self { exit: Exit::Usage, ..Self::new("usage", what) }
    }

    /// Something that this version cannot do yet.
    pub fn not_yet(what: impl Into<String>) -> Self {
        Self { exit: Exit::Usage, ..Self::new("not-yet", what) }
    }

    /// What is asked for cannot be done as asked.
    pub fn refused(what: impl Into<String>) -> Self {
        Self::new("refused", what)
    }

    /// The same, and where.
    pub fn at(mut self, place: impl Into<String>) -> Self {
        self.place = Some(place.into());
        self
    }

    /// The same, and what to do next.
    pub fn then(mut self, next: impl Into<String>) -> Self {
        self.next = Some(next.into());
        self
    }

    /// The same, with every fault by itself.
    pub fn with_faults(mut self, text: String, faults: Json) -> Self {
        self.faults = Some(Box::new((text, faults)));
        self
    }

    /// What happened, and what next, as one text.
    pub fn message(&self) -> String {
        match &self.next {
            Some(next) => format!("{}; {next}", self.what.trim_end_matches('.')),
            None => self.what.clone(),
        }
    }

    /// For machines.
    pub fn json(&self) -> Json {
        let mut error = json!({ "kind": self.kind, "message": self.message(), "where": self.place });
        if let (Some(faults), Some(fields)) = (&self.faults, error.as_object_mut()) {
            fields.insert("faults".to_owned(), faults.1.clone());
        }
        json!({ "error": error })
    }
}

impl From<RecordsError> for Failure {
    fn from(error: RecordsError) -> Self {
        Self::new(error.kind(), error.to_string())
    }
}

impl From<LoadError> for Failure {
    fn from(error: LoadError) -> Self {
        match error {
            LoadError::Unreadable { path, source } => {
                let what = format!("the plan {} cannot be read ({source})", path.display());
                let next = "name the study's folder with --study DIR, or write a plan with `revisant new`";
                Self { exit: Exit::Usage, ..Self::new("no-plan", what).at(path.display().to_string()).then(next) }
            }
            LoadError::Unsound(faults) => unsound(&faults),
        }
    }
}

/// The failure that a plan's faults are.
pub fn unsound(faults: &Faults) -> Failure {
    let count = faults.0.len();
    let place = faults.0.first().map(|fault| format!("{}:{}:{}", fault.file, fault.line, fault.column));
    let what = match count {
        1 => "the plan is unsound: it has one fault".to_owned(),
        _ => format!("the plan is unsound: it has {count} faults"),
    };
    let failure = Failure { exit: Exit::Usage, ..Failure::new("unsound-plan", what) };
    let failure = Failure { place, ..failure };
    let list = serde_json::to_value(faults).unwrap_or(Json::Null);
    failure.then("mend it and run `revisant check` again").with_faults(faults.to_string(), list)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_failure_has_one_shape_for_machines() {
        let failure = Failure::refused("there is no hold 9").at("hold 9").then("see `revisant holds`");
        let expected = json!({ "error": {
            "kind": "refused", "message": "there is no hold 9; see `revisant holds`", "where": "hold 9"
        }});
        assert_eq!(failure.json(), expected);
    }
}
