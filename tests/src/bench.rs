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
        let peak = status.lines().find_map(|line| line.strip_prefix("VmHWM:"));
        fs::write(note, peak.unwrap_or_default().trim()).expect("the note of memory");
    }
    Some(code)
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
    let kib = fs::read_to_string(&note).ok().and_then(|note| note.split(' ').next()?.parse::<f64>().ok());
    let stdout = String::from_utf8(output.stdout).expect("results in UTF-8");
    Measured { seconds, mib: kib.map(|kib| kib / 1024.0), stdout }
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
