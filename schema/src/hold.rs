//! Holds: rows and files that wait for a person, why, and what the person may answer.
//!
//! Invariant: every reason has its answers here, and an [`Answer`] that does not belong to a reason cannot be made
//! for it ([`Reason::accepts`]).

use std::collections::BTreeMap;
use std::fmt;
use std::str::FromStr;

use serde::{Deserialize, Serialize};

macro_rules! reasons {
    ($($name:ident = $code:literal, $meaning:literal;)+) => {
        /// Why something is held.
        #[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, PartialOrd, Ord, Serialize)]
        #[serde(rename_all = "kebab-case")]
        pub enum Reason {
            $(#[doc = $meaning] $name,)+
        }

        impl Reason {
            /// All of them, in the order in which they are looked for.
            pub const ALL: &[Reason] = &[$(Reason::$name,)+];

            /// The code that people and files use.
            pub fn code(self) -> &'static str {
                match self { $(Reason::$name => $code,)+ }
            }

            /// What it means, in a few words.
            pub fn meaning(self) -> &'static str {
                match self { $(Reason::$name => $meaning,)+ }
            }
        }
    };
}

reasons! {
    UnreadableFile = "unreadable-file", "the file cannot be read as the plan says";
    UnknownLayout = "unknown-layout", "the file's layout is not the one of the plan";
    TooLarge = "too-large", "the file is larger than the plan allows";
    OtherInstrument = "other-instrument", "the file bears another serial number";
    AfterClosing = "after-closing", "the file came after the study's close";
    UnreadableRow = "unreadable-row", "the row cannot be read";
    UnfinishedRow = "unfinished-row", "the last row has no line end and may have been cut";
    NoSubject = "no-subject", "no subject is named";
    UnknownSubject = "unknown-subject", "the subject is not on the roster";
    NoStamp = "no-stamp", "no time is said";
    UnreadableStamp = "unreadable-stamp", "the time cannot be read";
    ClockGap = "clock-gap", "the time does not exist: clocks went forward over it";
    ClockFold = "clock-fold", "the time exists twice: clocks went back over it";
    FutureStamp = "future-stamp", "the time lies in the future";
    BeforeEnrolment = "before-enrolment", "the day lies before the subject's enrolment";
    AfterWithdrawal = "after-withdrawal", "the day lies after the subject's withdrawal";
    UnknownVisit = "unknown-visit", "the visit's label is not in the plan";
    VisitDisagrees = "visit-disagrees", "label and date point to different visits";
    UnknownReplicate = "unknown-replicate", "the replicate's label is not a number";
    UnknownMeasure = "unknown-measure", "the measure is not in the plan";
    UnknownCondition = "unknown-condition", "the condition is not in the plan";
    UnknownUnit = "unknown-unit", "the unit does not convert to the plan's";
    UnreadableValue = "unreadable-value", "the value is no number";
    BelowLimit = "below-limit", "the value lies below a limit of detection";
    AboveLimit = "above-limit", "the value lies above a limit of detection";
    ImplausibleValue = "implausible-value", "the value lies outside the plausible bounds";
    ChangedValue = "changed-value", "a value filed before is now another";
    ExtraReplicate = "extra-replicate", "one replicate more than planned, or its number is taken";
}

impl fmt::Display for Reason {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(self.code())
    }
}

impl FromStr for Reason {
    type Err = String;
    fn from_str(text: &str) -> Result<Self, Self::Err> {
        Self::ALL
            .iter()
            .copied()
            .find(|reason| reason.code() == text)
            .ok_or_else(|| format!("\"{text}\" is no reason for a hold"))
    }
}

/// What a likely answer begins with that takes the place of a replicate, before its number.
pub const INSTEAD_OF: &str = "instead of";

/// A person's answer to a hold. Binds to the row as written.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Answer {
    /// Whose row it is.
    Subject(String),
    /// When it was taken: a local time or one with offset.
    Moment(String),
    /// On which day; the time is not known.
    Date(chrono::NaiveDate),
    /// Which visit, by its code, or `unscheduled`.
    Visit(String),
    /// Which measure.
    Measure(String),
    /// Which levels of conditions.
    Condition(BTreeMap<String, String>),
    /// Which unit.
    Unit(String),
    /// The value, in the unit as exported.
    Value(String),
    /// It is right as it stands.
    AsItStands,
    /// The old value stays.
    KeepOld,
    /// The new value supersedes the old.
    TakeNew,
    /// The replicate's number.
    Replicate(u32),
    /// It takes the place of the replicate with this number.
    InsteadOf(u32),
}

impl Answer {
    /// What the answer says, for people.
    pub fn say(&self) -> String {
        match self {
            Self::Subject(code) => format!("subject {code}"),
            Self::Moment(text) => format!("taken at {text}"),
            Self::Date(day) => format!("taken on {day}, time not known"),
            Self::Visit(code) => format!("visit {code}"),
            Self::Measure(code) => format!("measure {code}"),
            Self::Condition(levels) => {
                let levels: Vec<_> = levels.iter().map(|(factor, level)| format!("{factor}={level}")).collect();
                format!("condition {}", levels.join(", "))
            }
            Self::Unit(code) => format!("unit {code}"),
            Self::Value(text) => format!("value {text}"),
            Self::AsItStands => "right as it stands".to_owned(),
            Self::KeepOld => "keep the old value".to_owned(),
            Self::TakeNew => "take the new value".to_owned(),
            Self::Replicate(number) => format!("replicate {number}"),
            Self::InsteadOf(number) => format!("instead of replicate {number}"),
        }
    }
}

impl Reason {
    /// Whether the hold is on a whole file.
    pub fn of_file(self) -> bool {
        use Reason::*;
        matches!(self, UnreadableFile | UnknownLayout | TooLarge | OtherInstrument | AfterClosing)
    }

    /// Whether the hold is on one value of a row rather than the row.
    pub fn of_value(self) -> bool {
        self >= Reason::UnknownMeasure
    }

    /// Whether no answer mends it: only another plan or other bytes do.
    pub fn accepts_nothing(self) -> bool {
        matches!(self, Self::UnreadableFile | Self::UnknownLayout | Self::TooLarge)
    }

    /// Whether a person may give this answer to a hold with this reason.
    pub fn accepts(self, answer: &Answer) -> bool {
        use Reason::*;
        match self {
            NoSubject | UnknownSubject | BeforeEnrolment | AfterWithdrawal => matches!(answer, Answer::Subject(_)),
            NoStamp | UnreadableStamp | ClockGap | ClockFold | FutureStamp => {
                matches!(answer, Answer::Moment(_) | Answer::Date(_))
            }
            UnknownVisit | VisitDisagrees => matches!(answer, Answer::Visit(_)),
            UnknownMeasure => matches!(answer, Answer::Measure(_)),
            UnknownCondition => matches!(answer, Answer::Condition(_)),
            UnknownUnit => matches!(answer, Answer::Unit(_)),
            UnreadableValue => matches!(answer, Answer::Value(_)),
            BelowLimit | AboveLimit | ImplausibleValue => matches!(answer, Answer::Value(_) | Answer::AsItStands),
            ChangedValue => matches!(answer, Answer::KeepOld | Answer::TakeNew),
            ExtraReplicate | UnknownReplicate => matches!(answer, Answer::Replicate(_) | Answer::InsteadOf(_)),
            UnreadableRow | UnfinishedRow | OtherInstrument | AfterClosing => matches!(answer, Answer::AsItStands),
            UnreadableFile | UnknownLayout | TooLarge => false,
        }
    }

    /// The answers that a person may give, as the options of `revisant holds decide`.
    pub fn answers(self) -> &'static str {
        use Reason::*;
        match self {
            NoSubject | UnknownSubject | BeforeEnrolment | AfterWithdrawal => "--subject CODE",
            NoStamp | UnreadableStamp | ClockGap | ClockFold | FutureStamp => "--moment MOMENT or --date DAY",
            UnknownVisit | VisitDisagrees => "--visit CODE or --visit unscheduled",
            UnknownMeasure => "--measure CODE",
            UnknownCondition => "--condition FACTOR=LEVEL",
            UnknownUnit => "--unit CODE",
            UnreadableValue => "--value NUMBER",
            BelowLimit | AboveLimit | ImplausibleValue => "--value NUMBER or --as-it-stands",
            ChangedValue => "--keep-old or --take-new",
            ExtraReplicate | UnknownReplicate => "--replicate NUMBER or --instead-of NUMBER",
            UnreadableRow | UnfinishedRow | OtherInstrument | AfterClosing => "--as-it-stands",
            UnreadableFile | UnknownLayout | TooLarge => "none: mend the plan, or export the file again, or dismiss it",
        }
    }
}

/// What has become of a hold.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum HoldState {
    /// Waits for a person.
    Open,
    /// Answered by a person, or settled by a change of plan or roster or by newer bytes.
    Decided,
    /// Left out by a person, with a reason.
    Dismissed,
}

impl HoldState {
    /// The code that people and files use.
    pub fn code(self) -> &'static str {
        match self {
            Self::Open => "open",
            Self::Decided => "decided",
            Self::Dismissed => "dismissed",
        }
    }
}
