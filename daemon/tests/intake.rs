//! The intake as a whole, by what it does to records: holds and their answers, re-exports, paths that change, readers
//! that were wrong. Every study here is invented.

#![allow(clippy::unwrap_used, clippy::panic, reason = "a test says what went wrong by failing")]

use std::fs;
use std::path::Path;
use std::sync::Arc;

use revisant_daemon::intake::collect::{How, Report, collect};
use revisant_daemon::intake::error::IntakeError;
use revisant_daemon::intake::file::add_hold;
use revisant_daemon::intake::place::resolve::Held;
use revisant_daemon::intake::{plan, replace};
use revisant_schema::hold::{Answer, HoldState, Reason};
use revisant_schema::reading::ReadingState;
use revisant_schema::records::exports::ExportState;
use revisant_schema::records::view::{HoldRow, ReadingFilter, ReadingRow};
use revisant_schema::records::{ActKind, Cell, Doer, Records};
use revisant_schema::roster;
use revisant_schema::world::RealWorld;

/// One study in a folder of its own.
struct Study {
    folder: tempfile::TempDir,
    records: Records,
    doer: Doer,
}

const PLAN: &str = r#"
[study]
code = "IN-1"
title = "Stride length"
time_zone = "Europe/London"
[subject]
pattern = 'IN-\d{2}'
normalise = ["trim", "upper", "dash"]
anchor = "first"
[[measure]]
code = "stride"
unit = "cm"
plausible = [20, 200]
replicates = 2
[[visit]]
code = "first"
day = 0
[[visit]]
code = "second"
day = 28
window = [-3, 3]
[[instrument]]
code = "mat"
folder = "exports/mat"
rest = "0s"
RE_EXPORT
[instrument.reader]
format = "delimited"
delimiter = ","
header = { row = 1 }
missing = [""]
subject = { column = "who" }
taken_at = { column = "at", format = "%Y-%m-%d %H:%M" }
visit = { column = "visit" }
REPLICATE
[[instrument.reader.value]]
measure = "stride"
column = "length"
"#;

const LABELLED: &str = "replicate = { column = \"n\" }";

impl Study {
    fn new(re_export: &str, replicate: &str) -> Self {
        let folder = tempfile::tempdir().unwrap();
        fs::create_dir_all(folder.path().join("exports/mat")).unwrap();
        let records = Records::open_or_create(folder.path(), Arc::new(RealWorld)).unwrap();
        let doer = Doer { who: "tester".into(), program: "test 0".into(), why: Some("a test".into()) };
        let mut study = Self { folder, records, doer };
        study.plan(&PLAN.replace("RE_EXPORT", re_export).replace("REPLICATE", replicate));
        study.enforce(false).unwrap();
        study.roster("subject,enrolled,withdrawn\nIN-01,2025-03-01,\nIN-02,2025-03-01,\n");
        study
    }

    fn path(&self) -> &Path {
        self.folder.path()
    }

    fn plan(&self, text: &str) {
        fs::write(self.path().join("study.toml"), text).unwrap();
    }

    fn plan_text(&self) -> String {
        fs::read_to_string(self.path().join("study.toml")).unwrap()
    }

    fn enforce(&mut self, adopt: bool) -> Result<i64, IntakeError> {
        let path = self.path().to_path_buf();
        plan::bring_into_force(&mut self.records, &path, &self.doer, adopt).map(|rules| rules.version)
    }

    fn roster(&mut self, text: &str) {
        let rules = plan::in_force(&self.records).unwrap();
        let changes = rules.roster.changes(&rules.plan, text).unwrap();
        let doer = self.doer.clone();
        self.records.act(ActKind::Roster, &doer, |act| roster::write(act, &changes)).unwrap();
    }

    /// Writes an export and gives it a time of its own, so that the order of filing is that of writing.
    fn export(&self, name: &str, text: &str) {
        let path = self.path().join("exports/mat").join(name);
        fs::create_dir_all(path.parent().unwrap()).unwrap();
        fs::write(path, text).unwrap();
        std::thread::sleep(std::time::Duration::from_millis(3));
    }

    fn rows(&self, name: &str, rows: &[&str]) {
        self.export(name, &format!("who,at,visit,n,length\n{}\n", rows.join("\n")));
    }

    fn collect(&mut self) -> Report {
        let path = self.path().to_path_buf();
        self.enforce(false).unwrap();
        let report =
            collect(&mut self.records, &path, &self.doer, How { wait: true, progress: &mut |_| {}, stop: &|| false })
                .unwrap();
        let verified = self.records.verify(&mut |_, _| {}).unwrap();
        assert_eq!(verified.faults, [], "the records verify after every collect");
        report
    }

    fn open(&self) -> Vec<HoldRow> {
        self.records.view().unwrap().holds(true).unwrap()
    }

    fn one(&self, reason: Reason) -> HoldRow {
        let open = self.open();
        assert_eq!(open.len(), 1, "{open:?}");
        assert_eq!(open[0].reason, reason);
        open[0].clone()
    }

    fn decide(&mut self, hold: &HoldRow, answer: Answer) -> replace::Decision {
        let done = replace::decide(&mut self.records, std::slice::from_ref(hold), &answer, &self.doer).unwrap();
        assert_eq!(self.records.verify(&mut |_, _| {}).unwrap().faults, []);
        done
    }

    fn dismiss(&mut self, hold: &HoldRow) {
        replace::dismiss(&mut self.records, std::slice::from_ref(hold), &self.doer).unwrap();
    }

    fn all(&self) -> Vec<ReadingRow> {
        self.records.view().unwrap().readings(&ReadingFilter::default()).unwrap()
    }

    /// Current readings as `subject day #replicate value`, sorted.
    fn current(&self) -> Vec<String> {
        let current = self.all().into_iter().filter(|reading| reading.state == ReadingState::Current);
        let mut texts: Vec<String> = current
            .map(|reading| {
                let number = reading.number.unwrap();
                format!("{} {} #{} {number}", reading.session.subject, reading.session.day, reading.replicate)
            })
            .collect();
        texts.sort();
        texts
    }

    fn state(&self, name: &str) -> ExportState {
        let exports = self.records.view().unwrap().exports().unwrap();
        exports.iter().find(|row| row.export == format!("exports/mat/{name}")).unwrap().state
    }

    fn account(&self, name: &str) -> serde_json::Value {
        let exports = self.records.view().unwrap().exports().unwrap();
        exports.iter().find(|row| row.export == format!("exports/mat/{name}")).unwrap().lines.clone().unwrap()
    }

    fn strike(&mut self, reading: i64) {
        let doer = self.doer.clone();
        self.records
            .act(ActKind::Strike, &doer, |act| {
                act.add("reading_event", &[Cell::Int(reading), Cell::Text("struck")]).map(|_| ())
            })
            .unwrap();
    }
}

#[test]
fn a_decided_subject_files_the_row_and_is_not_asked_again() {
    let mut study = Study::new("re_export = \"grows\"", LABELLED);
    study.rows("log.csv", &["IN-01,2025-03-03 09:00,first,1,70.1", "IN-20,2025-03-03 09:05,first,1,61"]);
    study.collect();
    let hold = study.one(Reason::UnknownSubject);
    assert_eq!(hold.likely[0], "IN-02", "two figures swapped: one edit away");
    assert_eq!(study.state("log.csv"), ExportState::PartFiled);
    let done = study.decide(&hold, Answer::Subject("in_02".into()));
    assert_eq!((done.filed, done.held), (1, 0));
    assert_eq!(study.state("log.csv"), ExportState::Filed);
    assert_eq!(study.account("log.csv")["filed"], 2);
    assert_eq!(study.current(), ["IN-01 2025-03-03 #1 70.1", "IN-02 2025-03-03 #1 61"]);
    // The same row in the next cumulative export, under another name.
    let again = [
        "IN-01,2025-03-03 09:00,first,1,70.1",
        "IN-20,2025-03-03 09:05,first,1,61",
        "IN-02,2025-03-31 09:05,second,1,64",
    ];
    study.rows("log-2.csv", &again);
    let report = study.collect();
    assert_eq!((report.filed, report.already, report.held), (1, 2, 0));
    assert_eq!(study.open().len(), 0);
}

#[test]
fn a_row_with_two_faults_is_asked_about_one_after_the_other() {
    let mut study = Study::new("", LABELLED);
    study.rows("a.csv", &["IN-20,31.03.2025,first,1,61"]);
    study.collect();
    let hold = study.one(Reason::UnknownSubject);
    let done = study.decide(&hold, Answer::Subject("IN-02".into()));
    assert_eq!((done.filed, done.held), (0, 1));
    let hold = study.one(Reason::UnreadableStamp);
    let done = study.decide(&hold, Answer::Moment("2025-03-31T09:30".into()));
    assert_eq!((done.filed, done.held), (1, 0));
    // British summer time: the centre's local time is an hour ahead of UTC.
    assert_eq!(study.all()[0].moment.unwrap().to_rfc3339(), "2025-03-31T08:30:00+00:00");
    assert_eq!(study.open().len(), 0);
}

#[test]
fn every_kind_of_answer_files_what_it_says() {
    let mut study = Study::new("re_export = \"grows\"", LABELLED);
    study.rows(
        "a.csv",
        &[
            "IN-01,2025-03-03 09:00,first,1,7o",
            "IN-01,2025-03-03 09:01,first,2,700",
            "IN-02,,first,1,61",
            "IN-02,2025-03-03 09:01,first,3,62",
            "IN-02,2025-03-30 09:01,third,1,63",
        ],
    );
    study.collect();
    let by = |study: &Study, reason| study.open().into_iter().find(|hold| hold.reason == reason).unwrap();
    let hold = by(&study, Reason::UnreadableValue);
    study.decide(&hold, Answer::Value("70".into()));
    let hold = by(&study, Reason::ImplausibleValue);
    study.decide(&hold, Answer::AsItStands);
    let hold = by(&study, Reason::NoStamp);
    study.decide(&hold, Answer::Date("2025-03-03".parse().unwrap()));
    let hold = by(&study, Reason::ExtraReplicate);
    study.decide(&hold, Answer::Replicate(2));
    let hold = by(&study, Reason::UnknownVisit);
    study.decide(&hold, Answer::Visit("unscheduled".into()));
    assert_eq!(study.open().len(), 0);
    assert_eq!(
        study.current(),
        [
            "IN-01 2025-03-03 #1 70",
            "IN-01 2025-03-03 #2 700",
            "IN-02 2025-03-03 #1 61",
            "IN-02 2025-03-03 #2 62",
            "IN-02 2025-03-30 #1 63",
        ]
    );
    let unscheduled = study.all().into_iter().find(|reading| reading.number == Some(63.0)).unwrap();
    assert_eq!(unscheduled.session.label.as_deref(), Some("unscheduled"));
    // All five again, with one more: only that one is filed.
    let text = fs::read_to_string(study.path().join("exports/mat/a.csv")).unwrap();
    study.export("b.csv", &format!("{text}IN-01,2025-03-31 10:00,second,1,71\n"));
    let report = study.collect();
    assert_eq!((report.filed, report.held), (1, 0));
    assert_eq!(study.account("b.csv")["already"], 5);
}

#[test]
fn an_answer_of_the_wrong_kind_or_to_an_ended_hold_is_refused() {
    let mut study = Study::new("", LABELLED);
    study.rows("a.csv", &["IN-20,2025-03-03 09:00,first,1,61"]);
    study.collect();
    let hold = study.one(Reason::UnknownSubject);
    let refuse = |study: &mut Study, answer| {
        replace::decide(&mut study.records, std::slice::from_ref(&hold), &answer, &study.doer).unwrap_err().to_string()
    };
    assert!(refuse(&mut study, Answer::TakeNew).contains("--subject CODE"));
    assert!(refuse(&mut study, Answer::Subject("IN-77".into())).contains("no subject"));
    assert_eq!(study.open().len(), 1);
    study.dismiss(&hold);
    let hold = study.records.view().unwrap().hold(hold.hold).unwrap();
    assert_eq!(hold.state, HoldState::Dismissed);
    let error = replace::decide(&mut study.records, &[hold], &Answer::Subject("IN-02".into()), &study.doer);
    assert!(error.unwrap_err().to_string().contains("dismissed already"));
}

#[test]
fn a_dismissed_row_is_not_held_again() {
    let mut study = Study::new("re_export = \"grows\"", LABELLED);
    study.rows("a.csv", &["IN-20,2025-03-03 09:00,first,1,61"]);
    study.collect();
    let hold = study.one(Reason::UnknownSubject);
    assert_eq!(study.state("a.csv"), ExportState::Held);
    study.dismiss(&hold);
    study.rows("b.csv", &["IN-20,2025-03-03 09:00,first,1,61", "IN-01,2025-03-03 09:00,first,1,70"]);
    let report = study.collect();
    assert_eq!((report.filed, report.held), (1, 0));
    assert_eq!(study.state("b.csv"), ExportState::Filed);
}

#[test]
fn a_changed_value_is_held_and_the_decision_sticks_either_way() {
    for (answer, value) in [(Answer::KeepOld, "70"), (Answer::TakeNew, "75")] {
        let mut study = Study::new("re_export = \"grows\"", LABELLED);
        study.rows("a.csv", &["IN-01,2025-03-03 09:00,first,1,70"]);
        study.collect();
        study.rows("b.csv", &["IN-01,2025-03-03 09:00,first,1,75"]);
        study.collect();
        let hold = study.one(Reason::ChangedValue);
        study.decide(&hold, answer);
        assert_eq!(study.current(), [format!("IN-01 2025-03-03 #1 {value}")]);
        study.rows("c.csv", &["IN-01,2025-03-03 09:00,first,1,75", "IN-02,2025-03-03 09:00,first,1,60"]);
        let report = study.collect();
        assert_eq!((report.filed, report.held), (1, 0), "{value}");
        assert_eq!(study.current()[0], format!("IN-01 2025-03-03 #1 {value}"));
    }
}

#[test]
fn a_struck_reading_stays_struck_and_a_new_value_for_it_is_held() {
    let mut study = Study::new("re_export = \"grows\"\nchanged = \"supersede\"", LABELLED);
    study.rows("a.csv", &["IN-01,2025-03-03 09:00,first,1,70"]);
    study.collect();
    let reading = study.all()[0].reading;
    study.strike(reading);
    study.rows("b.csv", &["IN-01,2025-03-03 09:00,first,1,70", "IN-02,2025-03-03 09:00,first,1,60"]);
    let report = study.collect();
    assert_eq!((report.filed, report.already, report.held), (1, 1, 0));
    study.rows("c.csv", &["IN-01,2025-03-03 09:00,first,1,72", "IN-02,2025-03-03 09:00,first,1,60"]);
    study.collect();
    let hold = study.one(Reason::ChangedValue);
    assert!(hold.wrong.contains("struck"));
    assert_eq!(study.current(), ["IN-02 2025-03-03 #1 60"]);
}

#[test]
fn a_path_that_goes_back_to_older_bytes_means_them() {
    let mut study = Study::new("re_export = \"replaces\"\nchanged = \"supersede\"", LABELLED);
    for value in ["70", "75", "70"] {
        study.rows("a.csv", &[&format!("IN-01,2025-03-03 09:00,first,1,{value}")]);
        study.collect();
        assert_eq!(study.current(), [format!("IN-01 2025-03-03 #1 {value}")]);
    }
    assert_eq!(study.state("a.csv"), ExportState::Filed);
    // A copy under another name is a repeat; touching a file is nothing.
    let text = fs::read_to_string(study.path().join("exports/mat/a.csv")).unwrap();
    study.export("copy of a.csv", &text);
    study.export("a.csv", &text);
    let report = study.collect();
    assert_eq!(report.exports.get("repeat"), Some(&1));
    assert_eq!(study.state("copy of a.csv"), ExportState::Repeat);
    assert_eq!(study.all().len(), 3);
}

#[test]
fn an_equal_reading_of_another_export_is_held_where_equality_is_no_proof() {
    let mut study = Study::new("", "");
    study.rows("a.csv", &["IN-01,2025-03-03 09:00,first,,70"]);
    study.collect();
    study.rows("b.csv", &["IN-01,2025-03-03 09:00,first,,70", "IN-01,2025-03-03 09:00,first,,71"]);
    study.collect();
    let hold = study.one(Reason::ExtraReplicate);
    assert_eq!(hold.line, Some(2));
    assert_eq!(study.current(), ["IN-01 2025-03-03 #1 70", "IN-01 2025-03-03 #2 71"]);
    study.decide(&hold, Answer::InsteadOf(1));
    let states: Vec<_> = study.all().iter().map(|reading| reading.state).collect();
    assert_eq!(states, [ReadingState::Superseded, ReadingState::Current, ReadingState::Current]);
}

#[test]
fn a_file_that_is_appended_to_files_only_what_is_new() {
    let mut study = Study::new("", "");
    let first = "who,at,visit,n,length\nIN-01,2025-03-03 09:00,first,,70\nIN-20,2025-03-03 09:00,first,,66\n";
    study.export("a.csv", first);
    study.collect();
    study.export("a.csv", &format!("{first}IN-02,2025-03-03 09:10,first,,6"));
    study.collect();
    let open: Vec<Reason> = study.open().iter().map(|hold| hold.reason).collect();
    assert_eq!(open, [Reason::UnknownSubject, Reason::UnfinishedRow]);
    study.export("a.csv", &format!("{first}IN-02,2025-03-03 09:10,first,,61\nIN-02,2025-03-03 09:11,first,,62\n"));
    let report = study.collect();
    assert_eq!((report.filed, report.held, report.settled), (2, 0, 1));
    assert_eq!(study.one(Reason::UnknownSubject).line, Some(3));
    assert_eq!(study.current(), ["IN-01 2025-03-03 #1 70", "IN-02 2025-03-03 #1 61", "IN-02 2025-03-03 #2 62"]);
    assert_eq!(study.state("a.csv"), ExportState::PartFiled);
    // The old hold is answered: the newest bytes' account knows it.
    let hold = study.one(Reason::UnknownSubject);
    study.decide(&hold, Answer::Subject("IN-02".into()));
    assert_eq!(study.state("a.csv"), ExportState::Filed);
}

#[test]
fn rows_that_a_later_export_leaves_out_are_kept_and_reported() {
    let mut study = Study::new("re_export = \"grows\"", LABELLED);
    study.rows("a.csv", &["IN-01,2025-03-03 09:00,first,1,70", "IN-01,2025-03-03 09:01,first,2,71"]);
    study.collect();
    study.rows("b.csv", &["IN-01,2025-03-03 09:00,first,1,70", "IN-02,2025-03-03 09:01,first,1,61"]);
    study.collect();
    assert_eq!(study.records.view().unwrap().gone().unwrap().len(), 1);
    assert_eq!(study.current().len(), 3);
}

#[test]
fn a_wrong_reader_is_adopted_by_superseding() {
    let mut study = Study::new("re_export = \"grows\"", LABELLED);
    study.rows("a.csv", &["IN-01,2025-03-03 09:00,first,1,70", "IN-02,2025-03-03 09:01,first,1,61"]);
    study.collect();
    // The instrument had written inches all along.
    let mended = study.plan_text().replace("column = \"length\"", "column = \"length\"\nunit = { code = \"[in_i]\" }");
    study.plan(&mended);
    let error = study.enforce(false).unwrap_err();
    let IntakeError::Differently(changes) = &error else { panic!("{error}") };
    assert_eq!((changes.len(), changes[0].lines), (1, 2));
    assert_eq!(study.current(), ["IN-01 2025-03-03 #1 70", "IN-02 2025-03-03 #1 61"], "the old plan stays in force");
    let path = study.path().to_path_buf();
    let (_, report) = replace::adopt(&mut study.records, &path, &study.doer).unwrap();
    assert_eq!(report.filed, 2);
    assert_eq!(study.records.verify(&mut |_, _| {}).unwrap().faults, []);
    assert_eq!(study.current(), ["IN-01 2025-03-03 #1 177.8", "IN-02 2025-03-03 #1 154.94"]);
    assert_eq!(study.all().len(), 4, "the old readings stay, superseded");
    // The next cumulative export holds them again: nothing more to file but what is new.
    study.rows(
        "b.csv",
        &[
            "IN-01,2025-03-03 09:00,first,1,70",
            "IN-02,2025-03-03 09:01,first,1,61",
            "IN-02,2025-03-03 09:02,first,2,62",
        ],
    );
    let report = study.collect();
    assert_eq!((report.filed, report.already, report.held), (1, 2, 0));
}

#[test]
fn a_change_of_meaning_is_refused_with_what_it_touches() {
    let mut study = Study::new("", LABELLED);
    study.rows("a.csv", &["IN-01,2025-03-03 09:00,first,1,70"]);
    study.collect();
    study.plan(&study.plan_text().replace("unit = \"cm\"", "unit = \"mm\""));
    let error = study.enforce(true).unwrap_err();
    assert!(matches!(error, IntakeError::Meaning(_)), "{error}");
    assert!(error.to_string().contains("stride") && error.to_string().contains("1 readings"), "{error}");
    study.plan(
        &study.plan_text().replace("unit = \"mm\"", "unit = \"cm\"").replace("code = \"second\"", "code = \"third\""),
    );
    study.enforce(false).unwrap();
}

#[test]
fn another_serial_number_is_held_as_a_file_and_may_be_accepted() {
    let mut study = Study::new("serial = { preamble = \"Serial\", is = \"A1\" }", LABELLED);
    study.plan(&study.plan_text().replace("header = { row = 1 }", "header = { starts_with = \"who\" }"));
    study.enforce(true).unwrap();
    study.export("a.csv", "Serial: B2\nwho,at,visit,n,length\nIN-01,2025-03-03 09:00,first,1,70\n");
    study.collect();
    let hold = study.one(Reason::OtherInstrument);
    assert_eq!((hold.line, study.state("a.csv")), (None, ExportState::Held));
    let done = study.decide(&hold, Answer::AsItStands);
    assert_eq!(done.filed, 1);
    assert_eq!(study.state("a.csv"), ExportState::Filed);
}

#[test]
fn a_file_held_for_its_layout_is_filed_when_the_plan_knows_it() {
    let mut study = Study::new("", LABELLED);
    study.export("a.csv", "who,when,visit,n,length\nIN-01,2025-03-03 09:00,first,1,70\n");
    study.collect();
    let hold = study.one(Reason::UnknownLayout);
    assert!(hold.wrong.contains("at"), "{}", hold.wrong);
    study.plan(&study.plan_text().replace("column = \"at\"", "column = \"when\""));
    let report = study.collect();
    assert_eq!((report.filed, report.settled), (1, 1));
    assert_eq!(study.state("a.csv"), ExportState::Filed);
}

#[test]
fn a_file_too_large_is_held_and_its_bytes_are_kept() {
    let mut study = Study::new("largest = \"1KiB\"", LABELLED);
    let row = "IN-01,2025-03-03 09:00,first,1,70\n";
    let text = format!("who,at,visit,n,length\n{}", row.repeat(3000));
    study.export("a.csv", &text);
    study.collect();
    study.one(Reason::TooLarge);
    let hash = study.records.view().unwrap().captures().unwrap()[0].sha256;
    let mut kept = String::new();
    std::io::Read::read_to_string(&mut study.records.open_raw(&hash).unwrap(), &mut kept).unwrap();
    assert_eq!(kept, text);
    study.plan(&study.plan_text().replace("1KiB", "1MiB"));
    study.collect();
    assert_eq!(study.current(), ["IN-01 2025-03-03 #1 70"]);
}

#[test]
fn a_row_filed_before_a_withdrawal_was_known_is_not_held_when_it_comes_again() {
    let mut study = Study::new("re_export = \"grows\"", LABELLED);
    study.rows("a.csv", &["IN-01,2025-03-03 09:00,first,1,70", "IN-01,2025-03-31 09:00,second,1,71"]);
    study.collect();
    study.roster("subject,enrolled,withdrawn\nIN-01,2025-03-01,2025-03-20\n");
    study.rows(
        "b.csv",
        &[
            "IN-01,2025-03-03 09:00,first,1,70",
            "IN-01,2025-03-31 09:00,second,1,71",
            "IN-01,2025-03-31 09:05,second,2,72",
        ],
    );
    let report = study.collect();
    assert_eq!((report.filed, report.already, report.held), (0, 2, 1));
    assert_eq!(study.one(Reason::AfterWithdrawal).line, Some(4));
    assert_eq!(study.current().len(), 2);
}

#[test]
fn adopting_leaves_what_a_person_has_seen_to_and_holds_its_new_value() {
    let mut study = Study::new("re_export = \"grows\"", LABELLED);
    study.rows("a.csv", &["IN-01,2025-03-03 09:00,first,1,70", "IN-02,2025-03-03 09:01,first,1,61"]);
    study.collect();
    let reading = study.all()[0].reading;
    study.strike(reading);
    study.plan(&study.plan_text().replace("column = \"length\"", "column = \"length\"\nunit = { code = \"[in_i]\" }"));
    let path = study.path().to_path_buf();
    let (_, report) = replace::adopt(&mut study.records, &path, &study.doer).unwrap();
    assert_eq!((report.filed, report.held), (1, 1));
    assert_eq!(study.current(), ["IN-02 2025-03-03 #1 154.94"]);
    let hold = study.one(Reason::ChangedValue);
    assert_eq!((hold.line, hold.about), (Some(2), Some(reading)));
    assert_eq!(study.account("a.csv")["held"], 1);
    study.decide(&hold, Answer::TakeNew);
    assert_eq!(study.current(), ["IN-01 2025-03-03 #1 177.8", "IN-02 2025-03-03 #1 154.94"]);
    assert_eq!(study.account("a.csv")["held"], 0);
}

/// A file that an older program could not read is read once a newer one is there, and not before.
#[test]
fn a_file_held_by_an_older_program_is_tried_again() {
    let mut study = Study::new("", LABELLED);
    study.collect();
    let text = "who,at,visit,n,length\nIN-01,2025-03-03 09:00,first,1,70\n";
    let doer = study.doer.clone();
    // As an older program left it: the bytes are kept, and the file is held since nobody could read it.
    let kept = study.records.keep_small(text.as_bytes().to_vec()).unwrap();
    let capture = study.records.next_capture().unwrap();
    let mut filing = study.records.new_filing(Some(capture)).unwrap();
    let held = Held::row(Reason::UnknownLayout, "exports of this format cannot be read by this version");
    add_hold(&mut study.records, &mut filing, None, &held, &[0; 24]).unwrap();
    let add = |act: &mut revisant_schema::records::Act<'_>| {
        act.add_raw(&kept)?;
        let cells = [
            Cell::Term("mat"),
            Cell::Text("exports/mat/a.csv"),
            Cell::Int(0),
            Cell::Int(text.len() as i64),
            Cell::Bytes(&kept.sha256),
            Cell::Int(1),
            Cell::Null,
            Cell::Null,
        ];
        act.add("capture", &cells)?;
        act.publish(filing)?;
        Ok(())
    };
    study.records.act(ActKind::File, &doer, add).unwrap();
    study.collect();
    assert_eq!((study.open().len(), study.all().len()), (1, 0), "the same program does not try again");
    study.records.set_working(replace::READ_BY, "an older one").unwrap();
    study.collect();
    assert_eq!((study.open().len(), study.all().len()), (0, 1));
    assert!(study.records.verify(&mut |_, _| {}).unwrap().faults.is_empty());
}

#[test]
fn an_export_that_breaks_off_says_nothing_about_day_0() {
    let mut study = Study::new("", "");
    let reader = study
        .plan_text()
        .replace("format = \"delimited\"\ndelimiter = \",\"\nheader = { row = 1 }", "format = \"json\"\nrows = \"/*\"");
    study.plan(&reader);
    study.enforce(false).unwrap();
    let row = |day: &str| format!(r#"{{"who":"IN-01","at":"2025-{day} 09:00","visit":"first","length":"70"}}"#);
    // Had the broken one been heard, day 0 were 28 days before the good one, whose label would then disagree.
    study.export("broken.json", &format!("[{},", row("03-02")));
    study.export("good.json", &format!("[{}]", row("03-30")));
    study.collect();
    assert_eq!(study.one(Reason::UnreadableFile).export, "exports/mat/broken.json");
    assert_eq!(study.open().len(), 1);
    assert_eq!(study.state("good.json"), ExportState::Filed);
}
