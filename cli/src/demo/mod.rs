//! The demo: the invented study of `demo-site/`, the rig that stands in for its instruments, and the real service.
//!
//! Invariants: what the rig does is settled by its seed alone; the service that runs is the one that `revisantd` runs;
//! the study's files are part of the program, so that an installed one needs nothing besides.

pub mod rig;
pub mod service;
mod values;

use std::fs;
use std::io;
use std::path::Path;

/// The roster of the invented study.
pub const ROSTER: &str = include_str!("../../../demo-site/roster.csv");
/// The study's day on which the demo stands; its calendar lies in the past, whenever the demo is run.
pub const TODAY: &str = "2025-06-13";
/// The seed of a demo that is given none.
pub const SEED: u64 = 7;

const FILES: [(&str, &str); 3] = [
    ("study.toml", include_str!("../../../demo-site/study.toml")),
    ("roster.csv", ROSTER),
    ("README.md", include_str!("../../../demo-site/README.md")),
];

/// Writes a fresh copy of the study into a folder, with the instruments' empty export folders.
pub fn write_study(folder: &Path) -> io::Result<()> {
    fs::create_dir_all(folder)?;
    for (name, text) in FILES {
        fs::write(folder.join(name), text)?;
    }
    for instrument in rig::FOLDERS {
        fs::create_dir_all(folder.join(instrument))?;
    }
    Ok(())
}
