//! What can go wrong with an intake, as people meet it.

use revisant_schema::plan::{Faults, LoadError};
use revisant_schema::records::RecordsError;
use thiserror::Error;

/// A failure of the intake.
#[derive(Debug, Error)]
pub enum IntakeError {
    /// The plan cannot be read or is unsound; the last sound one stays in force.
    #[error(transparent)]
    Plan(#[from] LoadError),
    /// The plan of now would give filed readings another meaning.
    #[error("{}", refusal(.0))]
    Meaning(Vec<String>),
    /// The plan of now would read or place filed rows differently.
    #[error("{}", differently(.0))]
    Differently(Vec<WouldChange>),
    /// Another program collects at this moment.
    #[error(
        "another program is filing exports of this study at this moment ({0}). It will see them; or stop it first and \
         try again"
    )]
    Locked(String),
    /// The records failed.
    #[error(transparent)]
    Records(#[from] RecordsError),
}

/// An export whose filed rows a changed plan would read or place differently.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct WouldChange {
    /// Its path.
    pub export: String,
    /// The number of its capture.
    pub capture: i64,
    /// How many lines would come out differently.
    pub lines: u64,
    /// One of them, in words.
    pub example: String,
}

fn refusal(touched: &[String]) -> String {
    format!(
        "the changed plan is refused, since it would give filed readings another meaning: {}. The last sound plan stays \
         in force; take the change back, or give what is new a code of its own",
        touched.join("; ")
    )
}

fn differently(changes: &[WouldChange]) -> String {
    let lines: u64 = changes.iter().map(|change| change.lines).sum();
    let first = changes.first().map(|change| format!(" (in {}: {})", change.export, change.example)).unwrap_or_default();
    format!(
        "the changed plan would read or place {lines} filed lines of {} exports differently{first}. The last sound plan \
         stays in force. `revisant check` lists what would change; if the old reader was wrong, \
         `revisant collect --adopt --why TEXT` reads those exports again and supersedes their readings",
        changes.len()
    )
}

impl IntakeError {
    /// A word for the kind, for machines.
    pub fn kind(&self) -> &'static str {
        match self {
            Self::Plan(_) => "plan",
            Self::Meaning(_) => "meaning",
            Self::Differently(_) => "differently",
            Self::Locked(_) => "locked",
            Self::Records(error) => error.kind(),
        }
    }

    /// The faults of an unsound plan.
    pub fn faults(&self) -> Option<&Faults> {
        match self {
            Self::Plan(LoadError::Unsound(faults)) => Some(faults),
            _ => None,
        }
    }
}

/// What a function of the intake gives.
pub type Result<T> = std::result::Result<T, IntakeError>;
