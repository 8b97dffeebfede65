//! One study in a folder of its own, and the programs run on it from outside.

use std::fs::{self, File};
use std::path::{Path, PathBuf};
use std::process::{Child, Command, Stdio};
use std::sync::Mutex;
use std::time::{Duration, Instant, SystemTime};

use serde_json::Value as Json;
use tempfile::TempDir;

/// How long ago the first export of a site was written: long before any `rest`, and in the past of every clock.
const AT_REST: Duration = Duration::from_secs(40 * 86_400);

/// How long anything is waited for.
const LONGEST: Duration = Duration::from_secs(300);

/// Where the two programs under test lie.
#[derive(Debug, Clone, Copy)]
pub struct Programs {
    /// The command line.
    pub revisant: &'static str,
    /// The service.
    pub revisantd: &'static str,
}

/// A study under test.
#[derive(Debug)]
pub struct Site {
    programs: Programs,
    folder: TempDir,
    study: PathBuf,
    clock: Mutex<SystemTime>,
}

impl Site {
    /// An empty study folder.
    pub fn new(programs: Programs) -> Self {
        Self::in_folder(programs, TempDir::with_prefix("revisant-").expect("a temporary folder"))
    }

    /// An empty study folder in memory, where the machine has such a place: hundreds of small studies would otherwise
    /// spend their time waiting for the disk.
    pub fn in_memory(programs: Programs) -> Self {
        match TempDir::with_prefix_in("revisant-", "/dev/shm") {
            Ok(folder) => Self::in_folder(programs, folder),
            Err(_) => Self::new(programs),
        }
    }

    fn in_folder(programs: Programs, folder: TempDir) -> Self {
        // By its true name: the program may say it in a message, where it has to be recognised.
        let root = folder.path().canonicalize().expect("the temporary folder's true name");
        let study = root.join("study");
        fs::create_dir(&study).expect("the study's folder");
        let clock = Mutex::new(SystemTime::now() - AT_REST);
        Self { programs, folder, study, clock }
    }

    /// A study with this plan and roster, the roster imported.
    pub fn with(programs: Programs, plan: &str, roster: &str) -> Self {
        Self::new(programs).laid_out(plan, roster)
    }

    /// The same site with this plan and roster, the roster imported.
    pub fn laid_out(self, plan: &str, roster: &str) -> Self {
        self.write("study.toml", plan);
        self.write("roster.csv", roster);
        self.import_roster();
        self
    }

    /// The study's folder.
    pub fn study(&self) -> &Path {
        &self.study
    }

    /// A path in the study's folder.
    pub fn path(&self, name: impl AsRef<Path>) -> PathBuf {
        self.study.join(name)
    }

    /// Writes a file, and the folders above it.
    pub fn write(&self, name: impl AsRef<Path>, bytes: impl AsRef<[u8]>) {
        let path = self.path(name);
        fs::create_dir_all(path.parent().expect("a folder")).expect("the folders above a file");
        fs::write(&path, bytes).unwrap_or_else(|error| panic!("{}: {error}", path.display()));
    }

    /// An export that has rested for long: each is a second younger than the one dropped before. It is there at once
    /// and as a whole, so that a running service cannot see half of it.
    pub fn drop_export(&self, name: impl AsRef<Path>, bytes: impl AsRef<[u8]>) {
        let mut part = name.as_ref().as_os_str().to_owned();
        part.push(".part");
        self.write(&part, bytes);
        self.age(&part);
        fs::rename(self.path(&part), self.path(name)).expect("an export gets its name");
    }

    /// Gives a file the next of the times at which exports were written.
    pub fn age(&self, name: impl AsRef<Path>) {
        let time = self.later(Duration::from_secs(1));
        let file = File::options().write(true).open(self.path(name)).expect("a file that was just written");
        file.set_modified(time).expect("the file's time");
    }

    /// Lets an hour pass before the next export.
    pub fn an_hour_later(&self) {
        self.later(Duration::from_secs(3600));
    }

    fn later(&self, by: Duration) -> SystemTime {
        let mut clock = self.clock.lock().expect("nobody failed while the clock was set");
        *clock += by;
        *clock
    }

    /// A command on this study, in its folder, with nothing of the caller's surroundings that could change its words.
    pub fn command(&self, args: &[&str]) -> Command {
        self.surroundings(self.programs.revisant, args)
    }

    /// The service on this study, not yet started; it logs into `revisantd.log`.
    pub fn service(&self) -> Command {
        let log = File::options().append(true).create(true).open(self.path("revisantd.log")).expect("the log");
        let mut command = self.surroundings(self.programs.revisantd, &["--study", "."]);
        command.stdout(Stdio::null()).stderr(log);
        command
    }

    /// Starts the service with these options, where it must end by itself.
    pub fn service_fails(&self, args: &[&str]) -> Ran {
        Ran { program: "revisantd", ..Ran::of(args, self.surroundings(self.programs.revisantd, args)) }
    }

    /// The service on this study, at work.
    pub fn serve(&self) -> Running {
        let running = Running(self.service().spawn().expect("the service starts"));
        self.wait_until("the service runs", || self.json(&["status"])["service"]["running"] == true);
        running
    }

    /// Waits until so many exports are filed, and nothing waits.
    pub fn wait_until_filed(&self, exports: usize) {
        self.wait_until(&format!("{exports} exports are filed"), || {
            self.json(&["status"])["exports"]["filed"] == exports
        });
    }

    /// Waits until something is so; long, since a slow machine is no failure.
    pub fn wait_until(&self, what: &str, so: impl Fn() -> bool) {
        let start = Instant::now();
        while !so() {
            let log = || fs::read_to_string(self.path("revisantd.log")).unwrap_or_default();
            assert!(start.elapsed() < LONGEST, "waited in vain until {what}\n{}", log());
            std::thread::sleep(Duration::from_millis(50));
        }
    }

    fn surroundings(&self, program: &str, args: &[&str]) -> Command {
        let mut command = Command::new(program);
        command.args(args).current_dir(&self.study).stdin(Stdio::null());
        command.env_clear().env("LC_ALL", "C").env("TZ", "UTC").env("NO_COLOR", "1");
        // Coverage and sanitisers are told by the environment where to write.
        for (name, value) in std::env::vars_os() {
            if name.to_string_lossy().starts_with("LLVM_") {
                command.env(name, value);
            }
        }
        command
    }

    /// Runs a command to its end.
    pub fn run(&self, args: &[&str]) -> Ran {
        Ran::of(args, self.command(args))
    }

    /// Runs a command that must succeed.
    pub fn ok(&self, args: &[&str]) -> Ran {
        let ran = self.run(args);
        assert_eq!(ran.code, Some(0), "{}", ran.shown());
        ran
    }

    /// Runs a command that must succeed, and reads its JSON; `--json` is added.
    pub fn json(&self, args: &[&str]) -> Json {
        let args: Vec<&str> = args.iter().copied().chain(["--json"]).collect();
        self.ok(&args).json()
    }

    /// Imports `roster.csv`.
    pub fn import_roster(&self) {
        self.ok(&["roster", "import", "roster.csv", "--why", "enrolments"]);
    }

    /// Reads once all that waits.
    pub fn collect(&self) -> Json {
        self.json(&["collect"])
    }

    /// All readings, in every state.
    pub fn readings(&self) -> Vec<Json> {
        list(self.json(&["readings"]))
    }

    /// All open holds.
    pub fn holds(&self) -> Vec<Json> {
        list(self.json(&["holds"]))
    }

    /// Text with everything in it that differs from run to run taken out.
    pub fn redact(&self, text: &str) -> String {
        let root = self.study.parent().unwrap_or(&self.study);
        let text = text.replace("-under-test", "").replace(&*root.to_string_lossy(), "FOLDER");
        crate::snapshot::redact(&text.replace(&*self.folder.path().to_string_lossy(), "FOLDER"))
    }

    /// Compares what a command said with the snapshot of this name.
    pub fn check_snapshot(&self, name: &str, ran: &Ran) {
        crate::snapshot::check(name, &self.redact(&ran.shown()));
    }
}

/// A list of JSON.
pub fn list(json: Json) -> Vec<Json> {
    match json {
        Json::Array(list) => list,
        other => panic!("no list: {other}"),
    }
}

/// What a command did.
#[derive(Debug, Clone)]
pub struct Ran {
    /// Which program it was.
    pub program: &'static str,
    /// Its options.
    pub args: Vec<String>,
    /// Its exit status; `None` when a signal ended it.
    pub code: Option<i32>,
    /// Its results.
    pub stdout: String,
    /// Its failures.
    pub stderr: String,
}

impl Ran {
    /// Runs a command to its end.
    pub fn of(args: &[&str], mut command: Command) -> Self {
        command.stdout(Stdio::piped()).stderr(Stdio::piped());
        let child = command.spawn().expect("the program under test starts");
        let process = child.id().to_string();
        let (done, wait) = std::sync::mpsc::channel();
        std::thread::spawn(move || done.send(child.wait_with_output()));
        let output = wait.recv_timeout(LONGEST).unwrap_or_else(|_| {
            // One that never ends must not keep all checks waiting.
            let _ = Command::new("kill").args(["-KILL", &process]).status();
            panic!("it did not end: {args:?}");
        });
        let output = output.expect("the program under test runs");
        Self {
            program: "revisant",
            args: args.iter().map(|arg| (*arg).to_owned()).collect(),
            code: output.status.code(),
            stdout: String::from_utf8(output.stdout).expect("results in UTF-8"),
            stderr: String::from_utf8(output.stderr).expect("failures in UTF-8"),
        }
    }

    /// All of it as one text.
    pub fn shown(&self) -> String {
        let args: Vec<String> = self.args.iter().map(|arg| shell_word(arg)).collect();
        let code = self.code.map_or("ended by a signal".to_owned(), |code| format!("exit status {code}"));
        let part = |name: &str, text: &str| match text {
            "" => String::new(),
            text => format!("--- {name}\n{}\n", text.trim_end_matches('\n')),
        };
        let (stdout, stderr) = (part("standard output", &self.stdout), part("standard error", &self.stderr));
        format!("$ {} {}\n{stdout}{stderr}--- {code}\n", self.program, args.join(" "))
    }

    /// The results as JSON.
    pub fn json(&self) -> Json {
        serde_json::from_str(&self.stdout).unwrap_or_else(|error| panic!("no JSON ({error}): {}", self.shown()))
    }

    /// The failure as JSON, in the one shape that failures have.
    pub fn error(&self) -> Json {
        let error: Json = serde_json::from_str(&self.stderr)
            .unwrap_or_else(|error| panic!("no JSON on standard error ({error}): {}", self.shown()));
        let fields = &error["error"];
        assert!(fields["kind"].is_string(), "no kind: {error}");
        assert!(fields["message"].as_str().is_some_and(|message| !message.is_empty()), "no message: {error}");
        assert!(fields.get("where").is_some_and(|place| place.is_null() || place.is_string()), "no where: {error}");
        fields.clone()
    }
}

fn shell_word(arg: &str) -> String {
    let plain = |c: char| c.is_ascii_alphanumeric() || "-_./:=".contains(c);
    if !arg.is_empty() && arg.chars().all(plain) { arg.to_owned() } else { format!("'{arg}'") }
}

/// A program in the background, which ends with this value.
#[derive(Debug)]
pub struct Running(pub Child);

impl Running {
    /// Asks it to stop (SIGTERM) and waits; it must end well.
    pub fn stop(mut self) {
        let process = self.0.id().to_string();
        let asked = Command::new("kill").args(["-TERM", &process]).status().expect("a signal can be sent");
        assert!(asked.success(), "process {process} was not there to be stopped");
        let ended = self.0.wait().expect("its end");
        assert!(ended.success(), "it ended badly: {ended}");
    }
}

impl Drop for Running {
    fn drop(&mut self) {
        // It may have ended by itself; either way nothing is left behind.
        let _ = self.0.kill();
        let _ = self.0.wait();
    }
}
