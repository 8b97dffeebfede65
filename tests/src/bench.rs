//! What the benches share: the program in a process of its own, with its time and its greatest memory.
//!
//! A bench is its own program under test: started again with the word `child` it runs the command line and leaves the
//! greatest memory that the kernel saw of it, so that no stale build can be measured.

use std::ffi::OsString;
use std::fs;
use std::path::Path;
use std::process::{Command, ExitCode, Stdio};
use std::time::Instant;

/// What one run of the program took.
#[derive(Debug, Clone, PartialEq)]
pub struct Measured {
    /// Wall time, from the start of the process to its end.
    pub seconds: f64,
    /// Time on the processors, which other programs on the machine change less; `None` where the kernel does not say.
    pub busy: Option<f64>,
    /// The greatest resident memory, in MiB; `None` where the kernel does not say.
    pub mib: Option<f64>,
    /// Its results.
    pub stdout: String,
}

/// As a child: runs the command line that follows, and notes its memory. Otherwise `None`, and the bench goes on.
pub fn child() -> Option<ExitCode> {
    let mut args = std::env::args_os().skip(1);
    if args.next()? != "child" {
        return None;
    }
    let note = args.next()?;
    let code = revisant::main(std::iter::once(OsString::from("revisant")).chain(args));
    if let Ok(status) = fs::read_to_string("/proc/self/status") {
        let peak = status.lines().find_map(|line| line.strip_prefix("VmHWM:")).unwrap_or_default();
        fs::write(note, format!("{}\n{}", peak.trim(), ticks().unwrap_or_default())).expect("the note of memory");
    }
    Some(code)
}

/// This process's time on the processors, in hundredths of a second (proc(5): fields 14 and 15 of stat).
fn ticks() -> Option<u64> {
    let stat = fs::read_to_string("/proc/self/stat").ok()?;
    let fields: Vec<&str> = stat.rsplit_once(')')?.1.split_whitespace().collect();
    Some(fields.get(11)?.parse::<u64>().ok()? + fields.get(12)?.parse::<u64>().ok()?)
}

/// Seconds that this thread was on a processor so far (schedstats of the kernel's documentation, in nanoseconds);
/// `None` where the kernel does not say.
pub fn busy() -> Option<f64> {
    let stat = fs::read_to_string("/proc/thread-self/schedstat").ok()?;
    stat.split(' ').next()?.parse::<f64>().ok().map(|nanos| nanos / 1e9)
}

/// Runs the command line in a process of its own; it must succeed.
pub fn revisant(study: &Path, args: &[&str]) -> Measured {
    let note = study.join("memory.txt");
    let bench = std::env::current_exe().expect("the bench's own name");
    let start = Instant::now();
    let output = Command::new(bench)
        .arg("child")
        .arg(&note)
        .args(args)
        .arg("--study")
        .arg(study)
        .stdin(Stdio::null())
        .output()
        .expect("the bench starts itself");
    let seconds = start.elapsed().as_secs_f64();
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    let note = fs::read_to_string(&note).unwrap_or_default();
    let kib = note.split(' ').next().and_then(|kib| kib.parse::<f64>().ok());
    let busy = note.lines().nth(1).and_then(|ticks| ticks.parse::<f64>().ok()).map(|ticks| ticks / 100.0);
    let stdout = String::from_utf8(output.stdout).expect("results in UTF-8");
    Measured { seconds, busy, mib: kib.map(|kib| kib / 1024.0), stdout }
}

/// The middle one.
pub fn median(mut values: Vec<f64>) -> f64 {
    values.sort_by(f64::total_cmp);
    values[values.len() / 2]
}

/// The machine in one line: cores and what the kernel calls them.
pub fn machine() -> String {
    let cores = std::thread::available_parallelism().map_or(0, usize::from);
    let info = fs::read_to_string("/proc/cpuinfo").unwrap_or_default();
    let model = info.lines().find_map(|line| line.strip_prefix("model name")?.split_once(": "));
    format!("{cores} cores, {}", model.map_or("model not known", |(_, model)| model))
}
