//! The audit trail: one row an act, each bound to the one before by its hash.
//!
//! Invariants: an act's rows and its trail row are committed together or not at all; a trail row's hash covers all of
//! its other fields and the hash before it, and its digest covers every row that belongs to the act.
//!
//! **Canonical form.** A row's hash is SHA-256 over these values, each written as in [`super::codec`]: number, at, who,
//! program, act, objects, before, after, reason, digest (bytes), previous (bytes). The first row's `previous` is 32
//! zero bytes. How digests of rows, filings and acts are made stands in [`super::codec`].

use std::fmt;

use chrono::{DateTime, Utc};

use super::codec::{Canon, Hash, hex};

/// The number of an act on the trail, from 1.
pub type ActNumber = i64;

macro_rules! acts {
    ($($name:ident = $code:literal, $doc:literal;)+) => {
        /// What was done.
        #[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
        pub enum ActKind { $(#[doc = $doc] $name,)+ }

        impl ActKind {
            /// The code on the trail.
            pub fn code(self) -> &'static str { match self { $(Self::$name => $code,)+ } }
            /// All of them.
            pub const ALL: &[ActKind] = &[$(ActKind::$name,)+];
        }
    };
}

acts! {
    Plan = "plan", "A plan version came into force.";
    Roster = "roster", "The roster changed.";
    File = "file", "An export was filed or held.";
    Replace = "replace", "Held rows were placed again after a change of plan or roster.";
    Adopt = "adopt", "An export was read again with a mended reader.";
    Decide = "decide", "A person decided a hold.";
    Dismiss = "dismiss", "A person dismissed a hold.";
    Enter = "enter", "A reading was entered by hand.";
    Amend = "amend", "A reading or session was amended.";
    Strike = "strike", "A reading was struck.";
    Restore = "restore", "A struck reading was restored.";
    Account = "account", "It was said why a planned reading will not come.";
    Cut = "cut", "A cut was made.";
    Analyse = "analyse", "An analysis was run.";
    Start = "start", "The service started.";
    Stop = "stop", "The service stopped.";
}

impl fmt::Display for ActKind {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(self.code())
    }
}

/// Who does something, with what, and why.
#[derive(Debug, Clone)]
pub struct Doer {
    /// The system account or signed-in person.
    pub who: String,
    /// Name and version of the program.
    pub program: String,
    /// The person's reason.
    pub why: Option<String>,
}

impl Doer {
    /// The account that runs this process.
    pub fn this_account(program: &str) -> Self {
        Self { who: account(), program: program.to_owned(), why: None }
    }

    /// The same, with a reason.
    pub fn because(mut self, why: Option<&str>) -> Self {
        self.why = why.map(str::to_owned);
        self
    }
}

/// The name of the account that runs this process, from the system's list of accounts; else its number.
fn account() -> String {
    let uid = rustix::process::getuid().as_raw();
    let list = std::fs::read_to_string("/etc/passwd").unwrap_or_default();
    let name = list.lines().find_map(|line| {
        let mut fields = line.split(':');
        let name = fields.next()?;
        (fields.nth(1)?.parse() == Ok(uid)).then(|| name.to_owned())
    });
    name.unwrap_or_else(|| format!("account {uid}"))
}

/// One row of the trail.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct TrailRow {
    /// From 1, without gaps.
    pub number: ActNumber,
    /// UTC, RFC 3339 with milliseconds.
    pub at: String,
    /// Who did it.
    pub who: String,
    /// With which program.
    pub program: String,
    /// The act's code.
    pub act: String,
    /// What it was done to (JSON).
    pub objects: String,
    /// How it was (JSON).
    pub before: Option<String>,
    /// How it is (JSON).
    pub after: Option<String>,
    /// Why.
    pub reason: Option<String>,
    /// Over the act's rows.
    pub digest: Hash,
    /// The hash of the row before.
    pub previous: Hash,
    /// Over all of the above.
    pub hash: Hash,
}

impl TrailRow {
    /// The hash that the row should have.
    pub fn expected_hash(&self) -> Hash {
        let mut canon = Canon::default();
        canon.start(&[]);
        canon.integer(self.number);
        for text in [&self.at, &self.who, &self.program, &self.act, &self.objects] {
            canon.text(text);
        }
        for text in [&self.before, &self.after, &self.reason] {
            canon.text_or_null(text.as_deref());
        }
        canon.bytes(&self.digest);
        canon.bytes(&self.previous);
        canon.digest()
    }
}

/// A moment as the trail writes it.
pub fn write_moment(moment: DateTime<Utc>) -> String {
    moment.format("%Y-%m-%dT%H:%M:%S%.3fZ").to_string()
}

/// A head hash short enough for a paper notebook: its first 80 bits in groups of four.
pub fn short(hash: &[u8]) -> String {
    let digits = hex(&hash[..hash.len().min(10)]);
    digits.as_bytes().chunks(4).map(|group| String::from_utf8_lossy(group).into_owned()).collect::<Vec<_>>().join("-")
}
