//! `[[instrument]]`

use std::path::PathBuf;
use std::time::Duration;

use chrono::{NaiveDate, TimeDelta};
use chrono_tz::Tz;

use super::forms::{self, Form};
use super::keys::{Bounds, Check, Kind, Tab, Table, join, key, needed, words};
use super::model::{Changed, ClockError, Correction, Instrument, Measure, ReExport, Serial, Visit};
use super::reader::{self, READER};
use super::written::{Node, Value};

words!(RE_EXPORT: ReExport { "new" = ReExport::New, "grows" = ReExport::Grows, "replaces" = ReExport::Replaces });
words!(CHANGED: Changed { "hold" = Changed::Hold, "supersede" = Changed::Supersede });

pub(crate) static INSTRUMENT: Table = Table {
    name: "[[instrument]]",
    doc: "A source of exports.",
    keys: &[
        needed("code", Kind::Text(Form::Code), "The instrument's code"),
        key("label", Kind::Text(Form::Any), "the code", "What people read"),
        needed(
            "folder",
            Kind::Text(Form::Filled),
            "The export folder, absolute or relative to the plan; sub-folders are read too",
        ),
        key("files", Kind::Text(Form::Glob), "\"*\"", "Which files are exports; upper and lower case differ"),
        key("rest", Kind::Text(Form::Duration), "\"2s\"", "How long a file must have rested before it is read"),
        key("used", Kind::Table(&USED), "always", "When it is in use; outside, it is not flagged as quiet"),
        key("serial", Kind::Table(&SERIAL), "none", "The serial number that its exports must bear"),
        key("largest", Kind::Text(Form::Size), "\"1GiB\"", "A larger export is held"),
        key(
            "correct",
            Kind::List(&Kind::Table(&CORRECT), 0),
            "none",
            "Known errors of its values; the value as exported stays beside",
        ),
        key(
            "silent",
            Kind::Text(Form::Duration),
            "never flagged",
            "It is flagged when it exports nothing for so long while sessions take place",
        ),
        key(
            "re_export",
            Kind::Word(&RE_EXPORT.words),
            "new",
            "What another export means: new rows, the same and more, or the whole truth",
        ),
        key("changed", Kind::Word(&CHANGED.words), "hold", "What becomes of a re-exported value that differs"),
        key("time_zone", Kind::Text(Form::Zone), "the study's", "The IANA zone of its clock"),
        key("clock", Kind::List(&Kind::Table(&CLOCK), 0), "none", "Known errors of its clock"),
        needed(
            "reader",
            Kind::Either(&[Kind::Table(&READER), Kind::Text(Form::Filled)]),
            "How its exports are read: a table, or the path of a file that holds it",
        ),
    ],
    one_of: &[],
};

static USED: Table = Table {
    name: "used",
    doc: "When an instrument is in use.",
    keys: &[
        key("from", Kind::Date, "from the start", "The first day of use"),
        key("until", Kind::Date, "to the end", "The last day of use"),
    ],
    one_of: &[],
};

static SERIAL: Table = Table {
    name: "serial",
    doc: "The serial number that exports must bear.",
    keys: &[
        needed("preamble", Kind::Text(Form::Filled), "The preamble's key"),
        needed("is", Kind::Text(Form::Filled), "The number expected"),
    ],
    one_of: &[],
};

static CORRECT: Table = Table {
    name: "correct",
    doc: "A known error of an instrument's values: number × times + plus is used.",
    keys: &[
        key("measure", Kind::Text(Form::Filled), "all", "The measure that is corrected"),
        needed("from", Kind::Date, "The first local day on which it holds"),
        key("times", Kind::Number(Bounds::ANY), "1", "The factor"),
        key("plus", Kind::Number(Bounds::ANY), "0", "What is added, in the measure's unit"),
    ],
    one_of: &[],
};

static CLOCK: Table = Table {
    name: "clock",
    doc: "A known error of an instrument's clock.",
    keys: &[
        needed("from", Kind::Date, "The first day, by the instrument's own clock, on which it holds"),
        needed("add", Kind::Text(Form::ClockShift), "What is added to the moment; it may be negative"),
    ],
    one_of: &[],
};

/// What an instrument may refer to.
pub(crate) struct Known<'a> {
    pub measures: &'a [Measure],
    pub visits: &'a [Visit],
    pub zone: Tz,
    /// The reader files: the path as written, and the file's table when it could be found.
    pub readers: &'a [(String, Node)],
}

/// `[[instrument]]`
pub(crate) fn instruments(check: &mut Check<'_>, tabs: &[Tab<'_>], known: &Known<'_>) -> Vec<Instrument> {
    check.unique(tabs, "code");
    same_exports(check, tabs);
    tabs.iter().filter_map(|tab| instrument(check, tab, known)).collect()
}

/// Two instruments that read the same files would file everything twice.
fn same_exports(check: &mut Check<'_>, tabs: &[Tab<'_>]) {
    let files = |tab: &Tab<'_>| {
        let folder = tab.text("folder")?.trim_end_matches('/').trim_start_matches("./").to_owned();
        Some((folder, tab.text("files").unwrap_or("*").to_owned()))
    };
    for (index, tab) in tabs.iter().enumerate() {
        let twin = tabs[..index].iter().find(|earlier| files(tab).is_some() && files(earlier) == files(tab));
        if let Some(twin) = twin {
            let wrong = format!("\"{}\" reads the same files.", twin.text("code").unwrap_or_default());
            check.warn(
                &tab.spot_of("folder"),
                &tab.path_of("folder"),
                wrong,
                "another folder or glob for each instrument",
            );
        }
    }
}

/// `None` only where the reader cannot be found at all, which has been said.
fn instrument(check: &mut Check<'_>, tab: &Tab<'_>, known: &Known<'_>) -> Option<Instrument> {
    let code = tab.text("code").unwrap_or_default().to_owned();
    let reader = reader_tab(tab, known).map(|tab| reader::reader(check, &tab, known));
    let used = tab.table("used", &USED).map(|tab| used(check, &tab));
    let serial = tab.table("serial", &SERIAL).map(|tab| Serial {
        preamble: tab.text("preamble").unwrap_or_default().to_owned(),
        is: tab.text("is").unwrap_or_default().to_owned(),
    });
    let correct = corrections(check, &tab.tables("correct", &CORRECT), known.measures);
    let clock = clock(check, &tab.tables("clock", &CLOCK));
    let files = tab.text("files").unwrap_or("*");
    let silent = tab.formed("silent", forms::duration).and_then(|it| TimeDelta::from_std(it).ok());
    Some(Instrument {
        label: tab.text("label").map_or_else(|| code.clone(), str::to_owned),
        code,
        folder: PathBuf::from(tab.text("folder").unwrap_or_default()),
        files: files.to_owned(),
        files_glob: forms::glob(files).or_else(|_| forms::glob("*")).ok()?,
        rest: tab.formed("rest", forms::duration).unwrap_or(Duration::from_secs(2)),
        used,
        serial,
        largest: tab.formed("largest", forms::size).unwrap_or(1 << 30),
        correct,
        silent,
        re_export: tab.word("re_export", &RE_EXPORT).unwrap_or(ReExport::New),
        changed: tab.word("changed", &CHANGED).unwrap_or(Changed::Hold),
        time_zone: tab.formed("time_zone", forms::zone).unwrap_or(known.zone),
        clock,
        reader: reader?,
    })
}

/// The reader's table, here or in its own file.
fn reader_tab<'a>(tab: &Tab<'a>, known: &Known<'a>) -> Option<Tab<'a>> {
    let node = tab.node("reader")?;
    let node = match &node.value {
        Value::Text(path) => &known.readers.iter().find(|(name, _)| name == path)?.1,
        _ => node,
    };
    Tab::new(&READER, node, join(&tab.path, "reader"))
}

fn used(check: &mut Check<'_>, tab: &Tab<'_>) -> (Option<NaiveDate>, Option<NaiveDate>) {
    let (from, until) = (tab.date("from"), tab.date("until"));
    if from.zip(until).is_some_and(|(from, until)| until < from) {
        check.at(tab, "until", "Its use ends before it begins.", "a date not before \"from\"");
    }
    (from, until)
}

fn corrections(check: &mut Check<'_>, tabs: &[Tab<'_>], measures: &[Measure]) -> Vec<Correction> {
    let codes: Vec<&str> = measures.iter().map(|measure| measure.code.as_str()).collect();
    for (index, tab) in tabs.iter().enumerate() {
        if !tab.has("times") && !tab.has("plus") {
            check.error(&tab.spot, &tab.path, "This corrects nothing.", "times = … or plus = …, or both");
        }
        if tab.number("times") == Some(0.0) {
            check.at(tab, "times", "Times 0 would make every value the same.", "a factor other than 0");
        }
        let same =
            |other: &Tab<'_>| other.date("from") == tab.date("from") && other.text("measure") == tab.text("measure");
        if tab.date("from").is_some() && tabs[..index].iter().any(same) {
            check.at(
                tab,
                "from",
                "Another correction of the same begins on this day.",
                "one correction a day for each measure",
            );
        }
    }
    let correction = |tab: &Tab<'_>| {
        let (spot, path) = (tab.spot_of("measure"), tab.path_of("measure"));
        let measure = tab.text("measure").map(|code| check.refer(&spot, &path, code, "measure", &codes));
        Some(Correction {
            measure: measure.flatten(),
            from: tab.date("from")?,
            times: tab.number("times").unwrap_or(1.0),
            plus: tab.number("plus").unwrap_or(0.0),
        })
    };
    tabs.iter().filter_map(correction).collect()
}

fn clock(check: &mut Check<'_>, tabs: &[Tab<'_>]) -> Vec<ClockError> {
    for (index, tab) in tabs.iter().enumerate() {
        if tab.date("from").is_some() && tabs[..index].iter().any(|other| other.date("from") == tab.date("from")) {
            check.at(tab, "from", "Another error of the clock begins on this day.", "one a day");
        }
    }
    let error =
        |tab: &Tab<'_>| Some(ClockError { from: tab.date("from")?, add: tab.formed("add", forms::clock_shift)? });
    let mut errors: Vec<ClockError> = tabs.iter().filter_map(error).collect();
    errors.sort_by_key(|error| error.from);
    errors
}
