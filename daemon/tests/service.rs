//! The service from outside: real files, the built program, real signals. Every study here is invented.

#![allow(clippy::unwrap_used, clippy::panic, reason = "a test says what went wrong by failing")]

use std::fs;
use std::io::Write;
use std::os::unix::net::UnixDatagram;
use std::path::Path;
use std::process::{Child, Command, Stdio};
use std::sync::Arc;
use std::time::{Duration, Instant};

use revisant_daemon::intake::collect::IntakeLock;
use revisant_daemon::intake::plan;
use revisant_daemon::service::{Options, run, spawn};
use revisant_schema::records::view::ReadingFilter;
use revisant_schema::records::{ActKind, Doer, Records};
use revisant_schema::roster;
use revisant_schema::world::RealWorld;

/// Few enough to come again soon, many enough for 300,000 rows within the replicates that a plan may allow.
const SUBJECTS: usize = 40;

const PLAN: &str = r#"
[study]
code = "SV-1"
title = "Pulse at rest"
time_zone = "Europe/London"
[subject]
pattern = 'SV\d{4}'
normalise = ["trim", "upper"]
anchor = "enrolment"
[[measure]]
code = "pulse"
unit = "/min"
replicates = 10000
[[visit]]
code = "only"
day = 0
window = [0, 400]
[[instrument]]
code = "belt"
folder = "exports/belt"
files = "*.csv"
rest = "0s"
[instrument.reader]
format = "delimited"
delimiter = ","
header = { row = 1 }
subject = { column = "who" }
taken_at = { column = "at", format = "iso" }
[[instrument.reader.value]]
measure = "pulse"
column = "pulse"
"#;

struct Site {
    folder: tempfile::TempDir,
}

impl Site {
    fn new() -> Self {
        let site = Self { folder: tempfile::tempdir().unwrap() };
        fs::create_dir_all(site.path().join("exports/belt")).unwrap();
        site.plan(PLAN);
        let mut records = Records::open_or_create(site.path(), Arc::new(RealWorld)).unwrap();
        let doer = Doer { who: "tester".into(), program: "test 0".into(), why: None };
        let rules = plan::bring_into_force(&mut records, site.path(), &doer, false).unwrap();
        let lines: Vec<String> = (0..SUBJECTS).map(|at| format!("SV{at:04},2025-01-01,")).collect();
        let text = format!("subject,enrolled,withdrawn\n{}\n", lines.join("\n"));
        let changes = rules.roster.changes(&rules.plan, &text).unwrap();
        records.act(ActKind::Roster, &doer, |act| roster::write(act, &changes)).unwrap();
        site
    }

    fn path(&self) -> &Path {
        self.folder.path()
    }

    fn plan(&self, text: &str) {
        fs::write(self.path().join("study.toml"), text).unwrap();
    }

    fn belt(&self, name: &str) -> std::path::PathBuf {
        self.path().join("exports/belt").join(name)
    }

    fn start(&self) -> Service {
        self.start_with(|_| {})
    }

    fn start_with(&self, with: impl FnOnce(&mut Command)) -> Service {
        let mut command = Command::new(env!("CARGO_BIN_EXE_revisantd"));
        with(&mut command);
        let before = self.log().matches("started").count();
        let child = command
            .arg("--study")
            .arg(self.path())
            .stderr(fs::File::options().create(true).append(true).open(self.path().join("log")).unwrap())
            .stdout(Stdio::null())
            .spawn()
            .unwrap();
        let service = Service(child);
        self.until("the service has started", || self.log().matches("started").count() > before);
        service
    }

    fn log(&self) -> String {
        fs::read_to_string(self.path().join("log")).unwrap_or_default()
    }

    fn records(&self) -> Records {
        Records::open(self.path(), Arc::new(RealWorld)).unwrap()
    }

    fn readings(&self) -> usize {
        self.records().view().unwrap().readings(&ReadingFilter::default()).unwrap().len()
    }

    /// Waits, with a deadline that only a failure reaches.
    fn until(&self, what: &str, mut done: impl FnMut() -> bool) {
        let deadline = Instant::now() + Duration::from_secs(60);
        while !done() {
            assert!(Instant::now() < deadline, "not within a minute: {what}\n{}", self.log());
            std::thread::sleep(Duration::from_millis(20));
        }
    }

    /// The same, for what must not wait for the minute's walk.
    fn until_soon(&self, what: &str, mut done: impl FnMut() -> bool) {
        let deadline = Instant::now() + Duration::from_secs(20);
        while !done() {
            assert!(Instant::now() < deadline, "not within twenty seconds: {what}\n{}", self.log());
            std::thread::sleep(Duration::from_millis(20));
        }
    }

    fn until_readings(&self, count: usize) {
        self.until(&format!("{count} readings"), || self.readings() >= count);
        assert_eq!(self.readings(), count);
    }

    /// Whether some reading came from each of so many exports, and none twice.
    fn filed_once(&self, readings: usize) {
        let records = self.records();
        let rows = records.view().unwrap().readings(&ReadingFilter::default()).unwrap();
        let places: std::collections::HashSet<_> = rows.iter().map(|row| (row.export.clone(), row.line)).collect();
        assert_eq!((rows.len(), places.len()), (readings, readings));
    }

    fn sound(&self) {
        assert_eq!(self.records().verify(&mut |_, _| {}).unwrap().faults, []);
    }
}

/// A running service, killed when it goes out of sight.
struct Service(Child);

impl Service {
    fn signal(&self, name: &str) {
        let done = Command::new("kill").arg(format!("-{name}")).arg(self.0.id().to_string()).status().unwrap();
        assert!(done.success());
    }

    /// Stops it, and gives how long that took.
    fn stop(self) -> Duration {
        let start = Instant::now();
        self.signal("TERM");
        assert_eq!(self.code(), Some(0));
        start.elapsed()
    }

    /// How it ended.
    fn code(mut self) -> Option<i32> {
        self.0.wait().unwrap().code()
    }
}

impl Drop for Service {
    fn drop(&mut self) {
        let _ = self.0.kill();
        let _ = self.0.wait();
    }
}

fn rows(from: usize, count: usize) -> String {
    let row = |at: usize| {
        let seconds = at / SUBJECTS;
        let (minute, second) = (seconds / 60, seconds % 60);
        let (day, hour, minute) = (1 + minute / 1440, minute / 60 % 24, minute % 60);
        format!("SV{:04},2025-01-{day:02}T{hour:02}:{minute:02}:{second:02},{}\n", at % SUBJECTS, 50 + at % 60)
    };
    (from..from + count).map(row).collect()
}

#[test]
fn what_arrives_is_filed_whole_or_in_parts_and_in_any_folder() {
    let site = Site::new();
    let service = site.start();
    let header = "who,at,pulse\n";
    fs::write(site.belt("a.csv"), format!("{header}{}", rows(0, 10))).unwrap();
    site.until_readings(10);
    // A file that is written in parts: each part is new bytes of the same path.
    let mut file = fs::File::create(site.belt("b.csv")).unwrap();
    for part in 0..5 {
        if part == 0 {
            file.write_all(header.as_bytes()).unwrap();
        }
        file.write_all(rows(100 + part * 4, 4).as_bytes()).unwrap();
        file.sync_all().unwrap();
        std::thread::sleep(Duration::from_millis(120));
    }
    drop(file);
    site.until_readings(30);
    // Nested folders, moved in as a whole: no event tells of their files.
    let outside = site.path().join("outside/2025/03");
    fs::create_dir_all(&outside).unwrap();
    fs::write(outside.join("c.csv"), format!("{header}{}", rows(200, 5))).unwrap();
    fs::rename(site.path().join("outside"), site.belt("inside")).unwrap();
    site.until_readings(35);
    // Written under a passing name, then renamed.
    fs::write(site.belt("d.csv.part"), format!("{header}{}", rows(300, 5))).unwrap();
    fs::rename(site.belt("d.csv.part"), site.belt("d.csv")).unwrap();
    site.until_readings(40);
    service.stop();
    site.sound();
    let records = site.records();
    let acts = records.view().unwrap();
    assert_eq!(acts.acts_on(ActKind::Start, "process").unwrap().len(), 1);
    assert_eq!(acts.acts_on(ActKind::Stop, "process").unwrap().len(), 1);
}

#[test]
fn folders_that_are_lost_and_come_back_are_read_again() {
    let site = Site::new();
    fs::remove_dir_all(site.path().join("exports")).unwrap();
    let service = site.start();
    site.until("the loss is told", || site.log().contains("unreachable"));
    fs::create_dir_all(site.path().join("exports/belt")).unwrap();
    fs::write(site.belt("a.csv"), format!("who,at,pulse\n{}", rows(0, 10))).unwrap();
    site.until_readings(10);
    fs::remove_dir_all(site.path().join("exports/belt")).unwrap();
    fs::create_dir_all(site.path().join("exports/belt")).unwrap();
    fs::write(site.belt("b.csv"), format!("who,at,pulse\n{}", rows(50, 10))).unwrap();
    site.until_readings(20);
    service.stop();
    assert_eq!(site.log().matches("is unreachable").count(), 1, "a trouble is told once\n{}", site.log());
}

#[test]
fn a_changed_plan_and_roster_are_taken_up_and_an_unsound_plan_is_not() {
    let site = Site::new();
    let service = site.start();
    fs::write(site.belt("a.csv"), "who,at,pulse\nSV0001,2025-01-01T10:00:00,60\nSV0099,2025-01-01T10:00:00,61\n")
        .unwrap();
    site.until_readings(1);
    // The roster learns a subject: the held row files itself.
    let doer = Doer { who: "tester".into(), program: "test 0".into(), why: None };
    {
        let mut records = site.records();
        let rules = plan::in_force(&records).unwrap();
        let changes = rules.roster.changes(&rules.plan, "subject,enrolled,withdrawn\nSV0099,2025-01-01,\n").unwrap();
        records.act(ActKind::Roster, &doer, |act| roster::write(act, &changes)).unwrap();
    }
    site.until_readings(2);
    site.plan(&PLAN.replace("code = \"belt\"", "cod = \"belt\""));
    site.until("the fault is told", || site.log().contains("not in force"));
    fs::write(site.belt("b.csv"), "who,at,pulse\nSV0002,2025-01-01T10:00:00,62\n").unwrap();
    site.until_readings(3);
    site.plan(&PLAN.replace("title = \"Pulse at rest\"", "title = \"Pulse\""));
    site.until("the plan is in force", || site.records().view().unwrap().plan().unwrap().unwrap().version == 2);
    service.stop();
    site.sound();
}

#[test]
fn two_services_do_not_serve_one_study() {
    let site = Site::new();
    let _service = site.start();
    let second = Command::new(env!("CARGO_BIN_EXE_revisantd")).arg("--study").arg(site.path()).output().unwrap();
    assert_eq!(second.status.code(), Some(1));
    let text = String::from_utf8(second.stderr).unwrap();
    assert!(text.contains("revisantd") && text.contains("process"), "{text}");
    let nowhere = Command::new(env!("CARGO_BIN_EXE_revisantd")).args(["--study", "/nowhere"]).output().unwrap();
    assert_eq!(nowhere.status.code(), Some(1));
    assert!(String::from_utf8(nowhere.stderr).unwrap().contains("no study in /nowhere"));
}

#[test]
fn a_stop_in_the_middle_of_a_large_export_is_quick_and_loses_nothing() {
    const ROWS: usize = 120_000;
    let site = Site::new();
    let service = site.start();
    fs::write(site.belt("large.tmp"), format!("who,at,pulse\n{}", rows(0, ROWS))).unwrap();
    fs::rename(site.belt("large.tmp"), site.belt("large.csv")).unwrap();
    site.until("a part is staged", || site.records().staged().unwrap() > 0 || site.readings() > 0);
    let took = service.stop();
    // How long that may take is promised for a machine that is not busy otherwise: it is told, not judged.
    eprintln!("the stop took {took:?}");
    assert!([0, ROWS].contains(&site.readings()), "wholly filed or not at all");
    let service = site.start();
    site.until_readings(ROWS);
    service.stop();
    site.filed_once(ROWS);
    site.sound();
}

#[test]
fn killed_at_any_moment_it_goes_on_where_it_was() {
    let site = Site::new();
    let mut state = 7_u64;
    let mut written = 0;
    for _ in 0..10 {
        let service = site.start();
        for _ in 0..25 {
            fs::write(site.belt("next.part"), format!("who,at,pulse\n{}", rows(written * 5, 5))).unwrap();
            fs::rename(site.belt("next.part"), site.belt(&format!("{written:05}.csv"))).unwrap();
            written += 1;
        }
        state = state.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
        std::thread::sleep(Duration::from_millis((state >> 33) % 150));
        service.signal("KILL");
        drop(service);
    }
    let service = site.start();
    site.until_readings(written * 5);
    service.stop();
    site.filed_once(written * 5);
    site.sound();
}

#[test]
fn files_in_folders_made_meanwhile_do_not_wait_for_the_minute() {
    let site = Site::new();
    let service = site.start();
    let mut written = 0;
    // Each folder is filled the moment it is made, before anyone can watch it.
    for at in 0..30 {
        let folder = site.belt(&format!("{at:02}/a/b/c"));
        fs::create_dir_all(&folder).unwrap();
        for _ in 0..4 {
            fs::write(folder.join(format!("{written}.csv")), format!("who,at,pulse\n{}", rows(written * 3, 3)))
                .unwrap();
            written += 1;
        }
    }
    site.until_soon("all of them are filed", || site.readings() == written * 3);
    service.stop();
    site.sound();
}

#[test]
fn a_folder_that_is_made_anew_again_and_again_is_watched_each_time() {
    let site = Site::new();
    let service = site.start();
    for at in 0..6 {
        fs::remove_dir_all(site.path().join("exports/belt")).unwrap();
        fs::create_dir_all(site.path().join("exports/belt")).unwrap();
        fs::write(site.belt("first.csv"), format!("who,at,pulse\n{}", rows(at * 20, 5))).unwrap();
        site.until_soon("the first file is filed", || site.readings() == at * 10 + 5);
        // Long after the change was noticed: only a watch on the new folder tells of this one.
        std::thread::sleep(Duration::from_millis(1500));
        fs::write(site.belt("second.csv"), format!("who,at,pulse\n{}", rows(at * 20 + 10, 5))).unwrap();
        site.until_soon("the second file is filed", || site.readings() == at * 10 + 10);
    }
    service.stop();
    assert_eq!(site.log().matches("unreachable").count(), site.log().matches("there again").count());
}

#[test]
fn a_stop_during_the_first_walk_is_quick_too() {
    // Unoptimised, each row costs thirty times as much.
    const ROWS: usize = if cfg!(debug_assertions) { 40_000 } else { 300_000 };
    let site = Site::new();
    fs::write(site.belt("large.csv"), format!("who,at,pulse\n{}", rows(0, ROWS))).unwrap();
    let service = site.start();
    site.until("a part is staged", || site.records().staged().unwrap() > 0 || site.readings() > 0);
    let took = service.stop();
    println!("stopped within {took:?}");
    assert!([0, ROWS].contains(&site.readings()), "wholly filed or not at all");
    let service = site.start();
    site.until_readings(ROWS);
    service.stop();
    site.filed_once(ROWS);
    site.sound();
}

#[test]
fn a_level_that_does_not_exist_is_refused() {
    let done =
        Command::new(env!("CARGO_BIN_EXE_revisantd")).args(["--study", "/nowhere", "--log-level", "inof"]).output();
    assert_eq!(done.unwrap().status.code(), Some(2));
}

#[test]
fn a_study_that_cannot_be_served_ends_the_others_in_order() {
    let site = Site::new();
    let done = Command::new(env!("CARGO_BIN_EXE_revisantd"))
        .arg("--study")
        .arg(site.path())
        .args(["--study", "/nowhere"])
        .output();
    assert_eq!(done.unwrap().status.code(), Some(1));
    let records = site.records();
    let acts = records.view().unwrap();
    assert_eq!(acts.acts_on(ActKind::Start, "process").unwrap().len(), 1);
    assert_eq!(acts.acts_on(ActKind::Stop, "process").unwrap().len(), 1);
}

#[test]
fn a_file_without_bytes_costs_nothing() {
    let site = Site::new();
    fs::write(site.belt("empty.csv"), "").unwrap();
    let service = site.start();
    let seen = || site.records().working("service_seen").unwrap();
    site.until("the first cycle is over", || seen().is_some());
    std::thread::sleep(Duration::from_millis(1500));
    let before = seen();
    std::thread::sleep(Duration::from_millis(4000));
    assert_eq!(seen(), before, "nothing happened, and it walked");
    service.stop();
}

#[test]
fn a_file_is_read_once_it_has_rested_and_then_without_delay() {
    let site = Site::new();
    site.plan(&PLAN.replace("rest = \"0s\"", "rest = \"2s\""));
    let service = site.start();
    let mut file = fs::File::create(site.belt("slow.csv")).unwrap();
    file.write_all(b"who,at,pulse\n").unwrap();
    for part in 0..8 {
        file.write_all(rows(part * 4, 4).as_bytes()).unwrap();
        assert_eq!(site.readings(), 0, "read before it was finished");
        std::thread::sleep(Duration::from_millis(400));
    }
    drop(file);
    let written = fs::metadata(site.belt("slow.csv")).unwrap().modified().unwrap();
    site.until_readings(32);
    service.stop();
    let view = site.records();
    let acts = view.view().unwrap().acts_on(ActKind::File, "export").unwrap();
    assert_eq!(acts.len(), 1, "it was filed in one piece");
    let filed = chrono::DateTime::parse_from_rfc3339(&acts[0].1).unwrap();
    let took = (filed.to_utc() - chrono::DateTime::<chrono::Utc>::from(written)).to_std().unwrap();
    // Its two seconds, one more, and what a busy machine may take.
    assert!(took >= Duration::from_millis(1990), "{took:?}");
}

#[test]
fn a_plan_that_is_half_written_is_not_taken_for_a_whole() {
    let site = Site::new();
    let service = site.start();
    // The first half is a sound plan of its own; it is written on before anyone should believe in it.
    let other = PLAN[PLAN.find("[[instrument]]").unwrap()..].replace("belt", "watch");
    fs::create_dir_all(site.path().join("exports/watch")).unwrap();
    let mut file = fs::File::create(site.path().join("study.toml")).unwrap();
    file.write_all(PLAN.as_bytes()).unwrap();
    let (mut written, mut longest) = (Instant::now(), Duration::ZERO);
    for part in other.as_bytes().chunks(other.len() / 15) {
        std::thread::sleep(Duration::from_millis(120));
        file.write_all(part).unwrap();
        longest = longest.max(written.elapsed());
        written = Instant::now();
    }
    drop(file);
    fs::write(site.path().join("exports/watch/a.csv"), format!("who,at,pulse\n{}", rows(0, 10))).unwrap();
    site.until_readings(10);
    service.stop();
    if longest > Duration::from_millis(450) {
        // The machine is too busy to write without a rest, and a rest is what the service goes by.
        return;
    }
    assert_eq!(site.records().view().unwrap().plan().unwrap().unwrap().version, 2, "{}", site.log());
    assert!(!site.log().contains("not in force"), "{}", site.log());
}

#[test]
fn a_refused_plan_is_noted_until_a_sound_one_takes_its_place() {
    let site = Site::new();
    let note = || site.records().working("plan_refused").unwrap().unwrap_or_default();
    let service = site.start();
    site.plan("[study]\n");
    site.until("the refusal is noted", || !note().is_empty());
    service.stop();
    // Mended while nobody looked.
    site.plan(PLAN);
    let service = site.start();
    site.until("the note is cleared", || note().is_empty());
    service.stop();
    assert_eq!(site.log().matches("not in force").count(), 1, "{}", site.log());
}

#[test]
fn the_service_manager_is_told_and_signals_are_heeded() {
    let site = Site::new();
    let socket = site.path().join("manager");
    let manager = UnixDatagram::bind(&socket).unwrap();
    manager.set_read_timeout(Some(Duration::from_secs(30))).unwrap();
    let service = site.start_with(|command| {
        command.env("NOTIFY_SOCKET", &socket).env("WATCHDOG_USEC", "2000000").args(["--log", "json", "--every", "1h"]);
    });
    let told = || {
        let mut bytes = [0; 256];
        let count = manager.recv(&mut bytes).unwrap();
        String::from_utf8_lossy(&bytes[..count]).trim().to_owned()
    };
    let mut heard = vec![];
    while !heard.contains(&"READY=1".to_owned()) || !heard.contains(&"WATCHDOG=1".to_owned()) {
        heard.push(told());
    }
    let seen = || site.records().working("service_seen").unwrap();
    let before = seen();
    service.signal("HUP");
    site.until_soon("it looks when told to", || seen() != before);
    service.signal("TERM");
    while told() != "STOPPING=1" {}
    assert_eq!(service.code(), Some(0));
    for line in site.log().lines() {
        assert!(line.starts_with('{') && line.ends_with('}'), "{line}");
    }
}

#[test]
fn a_disturbed_service_says_so_once_and_goes_on() {
    let site = Site::new();
    let service = site.start();
    fs::write(site.belt("a.csv"), format!("who,at,pulse\n{}", rows(0, 10))).unwrap();
    site.until_readings(10);
    // A copy of bytes that are too large for the database has to be written where nothing can be.
    let raw = site.path().join("records/raw");
    fs::rename(&raw, site.path().join("records/away")).unwrap();
    fs::write(&raw, "in the way").unwrap();
    fs::write(site.belt("b.csv"), format!("who,at,pulse\n{}", rows(100, 8000))).unwrap();
    site.until("the trouble is told", || site.log().contains("filing waits"));
    std::thread::sleep(Duration::from_millis(4500));
    assert_eq!(site.log().matches("filing waits").count(), 1, "{}", site.log());
    fs::remove_file(&raw).unwrap();
    fs::rename(site.path().join("records/away"), &raw).unwrap();
    site.until_readings(8010);
    assert_eq!(site.log().matches("filing goes on").count(), 1, "{}", site.log());
    service.stop();
    site.sound();
}

#[test]
fn a_collect_is_refused_while_it_runs_and_looking_at_the_lock_disturbs_nobody() {
    let site = Site::new();
    let service = site.start();
    let refused = IntakeLock::take(&site.records(), "revisant test").unwrap_err().to_string();
    assert!(refused.contains("revisantd"), "{refused}");
    service.stop();
    let folder = Records::folder_of(site.path());
    let looking = Arc::new(std::sync::atomic::AtomicBool::new(true));
    let on = looking.clone();
    let looker = std::thread::spawn(move || {
        while on.load(std::sync::atomic::Ordering::Relaxed) {
            IntakeLock::holder(&folder);
        }
    });
    let records = site.records();
    for _ in 0..300 {
        drop(IntakeLock::take(&records, "revisant test").unwrap());
    }
    looking.store(false, std::sync::atomic::Ordering::Relaxed);
    looker.join().unwrap();
}

#[test]
fn a_service_inside_a_program_tells_of_each_cycle_and_stops() {
    let site = Site::new();
    fs::write(site.belt("a.csv"), format!("who,at,pulse\n{}", rows(0, 10))).unwrap();
    let (tell, told) = std::sync::mpsc::channel();
    let options =
        || Options { study: site.path().to_path_buf(), every: Duration::from_secs(60), world: Arc::new(RealWorld) };
    let handle = spawn(options(), Box::new(move |report| tell.send(report.filed).unwrap_or_default())).unwrap();
    assert_eq!(told.recv_timeout(Duration::from_secs(30)), Ok(10));
    assert!(spawn(options(), Box::new(|_| {})).is_err(), "one at a time");
    handle.stop().unwrap();
    let (tell, told) = std::sync::mpsc::channel();
    let runtime = tokio::runtime::Builder::new_current_thread().enable_all().build().unwrap();
    let enough = async move {
        tokio::task::spawn_blocking(move || told.recv_timeout(Duration::from_secs(30)).unwrap()).await.unwrap();
    };
    let observer = Box::new(move |_: &_| tell.send(()).unwrap_or_default());
    runtime.block_on(run(options(), observer, enough)).unwrap();
    let records = site.records();
    assert_eq!(records.view().unwrap().acts_on(ActKind::Stop, "process").unwrap().len(), 2);
}

#[test]
fn a_stop_is_quick_while_somebody_else_writes_and_a_second_signal_quicker() {
    let site = Site::new();
    let mut other = site.records();
    let service = site.start();
    site.until("the first cycle is over", || site.records().working("service_seen").unwrap().is_some());
    other.begin().unwrap();
    // The worker waits for its turn to file this.
    fs::write(site.belt("a.csv"), format!("who,at,pulse\n{}", rows(0, 10))).unwrap();
    std::thread::sleep(Duration::from_millis(700));
    // It ends although the other holds on; how quickly is told, not judged.
    eprintln!("stopped within {:?}", service.stop());
    other.roll_back();
    let service = site.start();
    site.until_readings(10);
    other.begin().unwrap();
    service.signal("TERM");
    site.until("it is stopping", || site.log().matches("stopping").count() == 2);
    service.signal("TERM");
    assert!(service.code().is_some());
    other.roll_back();
    site.start().stop();
    site.filed_once(10);
    site.sound();
}

/// Milliseconds from the last byte of each of `count` single files to its act on the trail, in order.
fn latencies(site: &Site, name: &str, from: usize, count: usize) -> Vec<i64> {
    let before = site.readings();
    for at in 0..count {
        fs::write(site.belt("next.part"), format!("who,at,pulse\n{}", rows(from + at, 1))).unwrap();
        fs::rename(site.belt("next.part"), site.belt(&format!("{name}-{at}.csv"))).unwrap();
        // Past the walk that follows every event, so that each file comes to a service at rest.
        std::thread::sleep(Duration::from_millis(1800));
        site.until_readings(before + at + 1);
    }
    let records = site.records();
    let acts = records.view().unwrap().acts_on(ActKind::File, &format!("{name}-")).unwrap();
    let files = (0..count).map(|at| fs::metadata(site.belt(&format!("{name}-{at}.csv"))).unwrap().modified().unwrap());
    let mut took: Vec<i64> = files
        .zip(&acts)
        .map(|(written, act)| {
            let filed = chrono::DateTime::parse_from_rfc3339(&act.1).unwrap().to_utc();
            (filed - chrono::DateTime::<chrono::Utc>::from(written)).num_milliseconds()
        })
        .collect();
    took.sort_unstable();
    took
}

/// Processor time of a process, in hundredths of a second.
fn ticks(service: &Service) -> u64 {
    let stat = fs::read_to_string(format!("/proc/{}/stat", service.0.id())).unwrap();
    stat.rsplit(')').next().unwrap().split_whitespace().skip(11).take(2).map(|it| it.parse::<u64>().unwrap()).sum()
}

#[test]
#[ignore = "a measurement, not a check"]
fn arrival_and_idleness() {
    let site = Site::new();
    let service = site.start();
    let show = |what: &str, took: &[i64]| {
        println!("{what}: median {} ms, worst {} ms", took[took.len() / 2], took[took.len() - 1]);
    };
    show("arrival to trail, few files", &latencies(&site, "few", 0, 30));
    for folder in 0..20 {
        fs::create_dir(site.belt(&format!("{folder}"))).unwrap();
        for at in 0..1000 {
            let name = site.belt(&format!("{folder}/{at}.csv"));
            fs::write(name, format!("who,at,pulse\n{}", rows(1000 + folder * 1000 + at, 1))).unwrap();
        }
    }
    let start = Instant::now();
    site.until_readings(20_030);
    println!("20,000 small files are filed {:?} after the last was written", start.elapsed());
    std::thread::sleep(Duration::from_secs(5));
    let before = ticks(&service);
    std::thread::sleep(Duration::from_secs(120));
    println!("idle with 20,030 files in 20 folders: {:.3} % of a processor", (ticks(&service) - before) as f64 / 120.0);
    show("arrival to trail, 20,000 old files", &latencies(&site, "many", 50_000, 20));
    service.stop();
}
