//! Notice and settle: which files in the export folders are new or changed, and at rest.
//!
//! Invariants: the walk is the truth, events are only a hint to walk; an export is never touched, moved or locked; a
//! file is read only once it has rested.

use std::collections::{BTreeMap, HashMap};
use std::io;
use std::os::unix::ffi::OsStrExt;
use std::path::{Path, PathBuf};

use chrono::{DateTime, Utc};
use revisant_schema::plan::{Instrument, Plan};
use revisant_schema::records::intake::Noticed;
use revisant_schema::world::{Stat, World};

/// A file in an export folder.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Found {
    /// The instrument's place in the plan.
    pub instrument: usize,
    /// Its path as the records name it: relative to the study's folder where it lies there.
    pub export: String,
    /// Where it is.
    pub path: PathBuf,
    /// Its folder below the instrument's.
    pub below: String,
    /// What the file system says.
    pub stat: Stat,
}

/// What one walk over all export folders saw.
#[derive(Debug, Default)]
pub struct Walk {
    /// Files that are new or changed and at rest, in the order in which they are to be filed.
    pub ready: Vec<Found>,
    /// Files that are new or changed and not yet at rest, and when they will be.
    pub settling: Vec<(Found, Option<DateTime<Utc>>)>,
    /// Files that the plan's glob leaves out.
    pub ignored: Vec<Found>,
    /// Files that cannot be looked at now.
    pub unreachable: Vec<(String, usize, String)>,
    /// Instruments whose folder cannot be looked at now.
    pub lost_folders: BTreeMap<usize, String>,
    /// Paths known before that are no longer there.
    pub gone: Vec<String>,
}

/// Walks over all export folders.
pub fn walk(world: &dyn World, study: &Path, plan: &Plan, known: &HashMap<String, Noticed>) -> Walk {
    let mut walk = Walk::default();
    let mut seen: HashMap<String, bool> = HashMap::new();
    for (index, instrument) in plan.instruments.iter().enumerate() {
        let root = study.join(&instrument.folder);
        if let Err(error) = walk_folder(world, study, &root, &root, index, instrument, known, &mut walk, &mut seen) {
            walk.lost_folders.insert(index, folder_trouble(&error));
        }
    }
    // A file that one instrument's glob leaves out may be another's export.
    walk.ignored.retain(|found| seen.get(&found.export) == Some(&false));
    walk.ignored.dedup_by(|one, other| one.export == other.export);
    walk.ready.sort_by(|one, other| {
        (one.instrument, one.stat.modified, &one.export).cmp(&(other.instrument, other.stat.modified, &other.export))
    });
    let lost: Vec<&str> = walk.lost_folders.keys().map(|at| plan.instruments[*at].code.as_str()).collect();
    let missing = known
        .iter()
        .filter(|(path, seen_before)| !seen.contains_key(*path) && !lost.contains(&seen_before.instrument.as_str()));
    walk.gone = missing.map(|(path, _)| path.clone()).collect();
    walk
}

fn folder_trouble(error: &io::Error) -> String {
    match error.kind() {
        io::ErrorKind::NotFound => "the folder is not there".to_owned(),
        io::ErrorKind::PermissionDenied => "the folder may not be read".to_owned(),
        _ => format!("the folder cannot be read: {error}"),
    }
}

#[expect(clippy::too_many_arguments, reason = "a recursive walk that carries where it is and what it has seen")]
fn walk_folder(
    world: &dyn World,
    study: &Path,
    root: &Path,
    folder: &Path,
    index: usize,
    instrument: &Instrument,
    known: &HashMap<String, Noticed>,
    walk: &mut Walk,
    seen: &mut HashMap<String, bool>,
) -> io::Result<()> {
    for entry in world.list(folder)? {
        let Some(name) = entry.path.file_name().map(|name| name.to_string_lossy().into_owned()) else { continue };
        if is_passing(&name) {
            continue;
        }
        if entry.folder {
            // A sub-folder that vanishes or may not be read does not stop the others.
            let inner = walk_folder(world, study, root, &entry.path, index, instrument, known, walk, seen);
            if let Err(error) = inner
                && error.kind() != io::ErrorKind::NotFound
            {
                walk.unreachable.push((name_of(study, &entry.path), index, folder_trouble(&error)));
            }
            continue;
        }
        let export = name_of(study, &entry.path);
        let stat = match world.stat(&entry.path) {
            Ok(stat) => stat,
            // Neither a file that is gone again nor a pipe or socket is an export.
            Err(error) if matches!(error.kind(), io::ErrorKind::NotFound | io::ErrorKind::InvalidInput) => continue,
            Err(error) => {
                seen.insert(export.clone(), true);
                walk.unreachable.push((export, index, error.to_string()));
                continue;
            }
        };
        let below = entry.path.parent().and_then(|parent| parent.strip_prefix(root).ok());
        let below = below.map(|below| below.to_string_lossy().into_owned()).unwrap_or_default();
        let found = Found { instrument: index, export, path: entry.path, below, stat };
        sort_out(world.now(), instrument, &name, found, known, walk, seen);
    }
    Ok(())
}

fn sort_out(
    now: DateTime<Utc>,
    instrument: &Instrument,
    name: &str,
    found: Found,
    known: &HashMap<String, Noticed>,
    walk: &mut Walk,
    seen: &mut HashMap<String, bool>,
) {
    if seen.get(&found.export) == Some(&true) {
        return;
    }
    if !fits(instrument, name, &found.below) {
        seen.entry(found.export.clone()).or_insert(false);
        walk.ignored.push(found);
        return;
    }
    seen.insert(found.export.clone(), true);
    if known.get(&found.export).is_some_and(|before| before.state == "captured" && before.stat == found.stat) {
        return;
    }
    match at_rest(now, instrument, &found.stat) {
        Rest::Rested => walk.ready.push(found),
        Rest::Until(moment) => walk.settling.push((found, Some(moment))),
        Rest::Empty => walk.settling.push((found, None)),
    }
}

/// Whether an instrument's `files` takes a file of this name, in this folder below the instrument's.
pub fn fits(instrument: &Instrument, name: &str, below: &str) -> bool {
    let whole = if below.is_empty() { name.to_owned() } else { format!("{below}/{name}") };
    match instrument.files.contains('/') {
        true => instrument.files_glob.is_match(whole),
        false => instrument.files_glob.is_match(name),
    }
}

/// Whether a file has rested.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Rest {
    /// It has.
    Rested,
    /// It will have at this moment.
    Until(DateTime<Utc>),
    /// It has no bytes yet.
    Empty,
}

/// Whether a file has rested for as long as its instrument needs. A time in the future says nothing: such a file has
/// rested once its entry has (a clock that is set back would otherwise hold it up for ever).
pub fn at_rest(now: DateTime<Utc>, instrument: &Instrument, stat: &Stat) -> Rest {
    if stat.size == 0 {
        return Rest::Empty;
    }
    let rest = chrono::TimeDelta::from_std(instrument.rest).unwrap_or(chrono::TimeDelta::MAX);
    let modified = DateTime::from_timestamp_nanos(stat.modified);
    let from = if modified > now { DateTime::from_timestamp_nanos(stat.changed).min(now) } else { modified };
    match from.checked_add_signed(rest) {
        Some(until) if until > now => Rest::Until(until),
        _ => Rest::Rested,
    }
}

/// Names of files that pass: locks, hidden and half-written ones. They are no exports.
pub fn is_passing(name: &str) -> bool {
    const ENDS: &[&str] = &[".tmp", ".temp", ".part", ".partial", ".crdownload", ".download", ".filepart", ".swp", "~"];
    const WHOLE: &[&str] = &["thumbs.db", "desktop.ini"];
    let lower = name.to_lowercase();
    name.starts_with("~$")
        || name.starts_with('.')
        || ENDS.iter().any(|end| lower.ends_with(end))
        || WHOLE.contains(&lower.as_str())
}

/// A path as the records name it. Bytes that are no UTF-8 are written as `\xff`, so that two such names stay two.
pub(super) fn name_of(study: &Path, path: &Path) -> String {
    let path = path.strip_prefix(study).unwrap_or(path);
    let mut name = String::new();
    for chunk in path.as_os_str().as_bytes().utf8_chunks() {
        name.push_str(chunk.valid());
        chunk.invalid().iter().for_each(|byte| name.push_str(&format!("\\x{byte:02x}")));
    }
    name
}

#[cfg(test)]
mod tests {
    use std::ffi::OsStr;

    use super::*;

    #[test]
    fn names_that_are_no_text_stay_apart() {
        let name = |bytes: &[u8]| name_of(Path::new("/s"), &Path::new("/s/exports").join(OsStr::from_bytes(bytes)));
        assert_eq!(name(b"a.csv"), "exports/a.csv");
        assert_eq!(name("\u{e9}.csv".as_bytes()), "exports/\u{e9}.csv");
        assert_eq!(name(b"a\xff.csv"), "exports/a\\xff.csv");
        assert_ne!(name(b"a\xff.csv"), name(b"a\xfe.csv"));
    }

    #[test]
    fn passing_names_are_no_exports() {
        for name in ["~$book.xlsx", ".hidden", "a.csv.tmp", "a.PART", "Thumbs.db", "a.csv~"] {
            assert!(is_passing(name), "{name}");
        }
        for name in ["a.csv", "part.csv", "tmp", "a~b.csv"] {
            assert!(!is_passing(name), "{name}");
        }
    }
}
