//! A small invented study on disk, and the command run on it within this process.

use std::cell::RefCell;
use std::ffi::OsString;
use std::io::{self, Write};
use std::path::Path;
use std::rc::Rc;
use std::sync::Arc;

use revisant::error::Exit;
use revisant::output::Out;
use revisant_schema::world::RealWorld;
use serde_json::Value as Json;
use tempfile::TempDir;

/// A plan with two replicates of two hands at three visits, and one instrument.
pub const PLAN: &str = r#"
[study]
code = "GR-1"
title = "Grip at home"
time_zone = "Europe/London"

[subject]
pattern = 'GR-\d{3}'
normalise = ["trim", "upper", "dash"]
anchor = "enrolment"
attributes = { sex = ["F", "M"], age = "number" }

[[measure]]
code = "grip"
label = "Grip strength"
unit = "kg"
plausible = [2, 95]
replicates = 2
at_least = 2
summary = "max"
conditions = { hand = ["left", "right"] }

[[visit]]
code = "baseline"
day = 0
window = [0, 3]

[[visit]]
code = "week-4"
day = 28
window = [-3, 3]
counts = [-3, 10]

[[visit]]
code = "week-8"
day = 28
after = "week-4"
window = [-3, 3]

[[instrument]]
code = "dyn"
folder = "exports/dyn"
rest = "0s"
[instrument.reader]
format = "delimited"
header = { row = 1 }
subject = { column = "Who" }
taken_at = { column = "When", format = "iso" }
replicate = { column = "Trial" }
[[instrument.reader.value]]
measure = "grip"
column = "Left"
condition = { hand = "left" }
[[instrument.reader.value]]
measure = "grip"
column = "Right"
condition = { hand = "right" }

[[analysis]]
code = "grip-over-visits"
measure = "grip"
method = "repeated-measures"
average = ["hand"]
contrasts = ["pairwise", "polynomial"]

[[analysis]]
code = "grip-on-time"
measure = "grip"
method = "repeated-measures"
average = ["hand"]
off_window = "leave"

[[analysis]]
code = "hands"
measure = "grip"
method = "repeated-measures"
within = ["hand"]
visits = ["baseline"]

[[analysis]]
code = "ranks"
measure = "grip"
method = "friedman"
average = ["hand"]

[[analysis]]
code = "model"
measure = "grip"
method = "mixed-model"
average = ["hand"]

[[analysis]]
code = "by-sex"
measure = "grip"
method = "repeated-measures"
average = ["hand"]
between = ["sex"]
"#;

/// Five subjects, the last of whom was withdrawn in time for nothing after the first visit.
pub const ROSTER: &str = "subject,enrolled,withdrawn,sex,age\n\
                          GR-001,2025-01-06,,F,71\nGR-002,2025-01-06,,M,68\nGR-003,2025-01-06,,F,80\n\
                          GR-004,2025-01-06,,M,77\nGR-005,2025-01-06,2025-01-20,F,66\n";

/// A study's folder.
pub struct Study {
    /// The folder.
    pub folder: TempDir,
}

/// What a command printed, and how it ended.
#[derive(Debug)]
pub struct Ran {
    /// Standard output.
    pub out: String,
    /// Standard error.
    pub err: String,
    /// How it ended.
    pub exit: Exit,
}

impl Ran {
    /// Standard output as JSON.
    pub fn json(&self) -> Json {
        serde_json::from_str(&self.out).unwrap_or_else(|error| panic!("{error}: {self:?}"))
    }

    /// The error on standard error.
    pub fn error(&self) -> Json {
        let json: Json = serde_json::from_str(&self.err).unwrap_or_else(|error| panic!("{error}: {self:?}"));
        json["error"].clone()
    }

    /// The same, which must have gone well.
    pub fn well(self) -> Self {
        assert_eq!(self.exit, Exit::Done, "{self:?}");
        self
    }
}

/// Bytes that several writers share.
#[derive(Clone, Default)]
struct Shared(Rc<RefCell<Vec<u8>>>);

impl Write for Shared {
    fn write(&mut self, bytes: &[u8]) -> io::Result<usize> {
        self.0.borrow_mut().write(bytes)
    }
    fn flush(&mut self) -> io::Result<()> {
        Ok(())
    }
}

impl Study {
    /// A study with this plan and nothing else.
    pub fn bare(plan: &str) -> Self {
        let folder = TempDir::new().unwrap();
        std::fs::create_dir_all(folder.path().join("exports/dyn")).unwrap();
        let study = Self { folder };
        study.write("study.toml", plan);
        study
    }

    /// The study with its roster imported.
    pub fn begun() -> Self {
        let study = Self::bare(PLAN);
        study.write("roster.csv", ROSTER);
        study.run(&["roster", "import", &study.path("roster.csv"), "--why", "first"]).well();
        study
    }

    /// Writes a file of the study.
    pub fn write(&self, name: &str, text: &str) {
        std::fs::write(self.folder.path().join(name), text).unwrap();
    }

    /// The path of a file of the study.
    pub fn path(&self, name: &str) -> String {
        self.folder.path().join(name).to_str().unwrap().to_owned()
    }

    /// Writes an export of rows `GR-001,2025-01-06T09:00,1,30.5,31`.
    pub fn export(&self, name: &str, rows: &str) {
        self.write(&format!("exports/dyn/{name}"), &format!("Who,When,Trial,Left,Right\n{rows}"));
    }

    /// Both replicates of both hands for one subject and day, the higher of which is `value`.
    pub fn session(subject: &str, day: &str, value: f64) -> String {
        let low = value - 1.0;
        format!("{subject},{day}T09:00,1,{low},{low}\n{subject},{day}T09:01,2,{value},{value}\n")
    }

    /// Runs a command on the study.
    pub fn run(&self, args: &[&str]) -> Ran {
        run_in(self.folder.path(), args)
    }
}

/// Runs a command in a folder.
pub fn run_in(folder: &Path, args: &[&str]) -> Ran {
    let (stdout, stderr) = (Shared::default(), Shared::default());
    let mut all: Vec<OsString> = vec!["revisant".into()];
    all.extend(args.iter().map(OsString::from));
    all.extend(["--study".into(), folder.as_os_str().to_owned()]);
    let exit = {
        let mut out = Out::new(Box::new(stdout.clone()), Box::new(stderr.clone()));
        revisant::run(all, &mut out, Arc::new(RealWorld))
    };
    let text = |shared: Shared| String::from_utf8(shared.0.borrow().clone()).unwrap();
    Ran { out: text(stdout), err: text(stderr), exit }
}
