//! Watching folders for hints that something happened.
//!
//! Invariants: nothing depends on an event coming: a folder that cannot be watched is walked through like any other; a
//! watch that may have died with its folder is set anew.

use std::collections::{HashMap, HashSet};
use std::os::unix::fs::MetadataExt;
use std::path::{Path, PathBuf};
use std::sync::mpsc::Sender;

use notify::event::{AccessKind, AccessMode, ModifyKind, RemoveKind, RenameMode};
use notify::{Event, EventKind, RecommendedWatcher, RecursiveMode, Watcher};
use revisant_schema::plan::Plan;
use tracing::warn;

use super::Wake;

/// Which folder stands under a path: device and number.
type Identity = (u64, u64);

/// The watches of one study.
pub struct Watches {
    watcher: Option<RecommendedWatcher>,
    set: HashMap<PathBuf, Identity>,
    /// Folders of which it was told that they cannot be watched.
    told: HashSet<PathBuf>,
}

impl Watches {
    /// No watch yet. `quiet` is the folder in which the service itself writes: what happens there is no hint.
    pub fn new(quiet: PathBuf, wake: Sender<Wake>) -> Self {
        // The channel is unbounded: a handler that waits loses events.
        let watcher = notify::recommended_watcher(move |event: notify::Result<Event>| {
            if let Some(hint) = hint(event, &quiet) {
                // A worker that is gone needs no hint.
                let _ = wake.send(hint);
            }
        });
        let watcher = watcher.map_err(|error| warn!("folders cannot be watched, only walked through: {error}")).ok();
        Self { watcher, set: HashMap::new(), told: HashSet::new() }
    }

    /// Sees that every export folder of the plan that is there is watched, and nothing else.
    pub fn refresh(&mut self, study: &Path, plan: &Plan) {
        let wanted: Vec<PathBuf> = plan.instruments.iter().map(|instrument| study.join(&instrument.folder)).collect();
        let unwanted: Vec<PathBuf> = self.set.keys().filter(|folder| !wanted.contains(folder)).cloned().collect();
        unwanted.iter().for_each(|folder| self.end(folder));
        wanted.iter().for_each(|folder| self.watch(folder));
    }

    /// A folder is gone from its place: a watch on it may be dead, even if another folder with the same number (which
    /// file systems give out again) stands there now.
    pub fn forget(&mut self, folder: &Path) {
        if self.set.contains_key(folder) {
            self.end(folder);
        }
    }

    /// Events were lost, and with them news of folders that want watching.
    pub fn forget_all(&mut self) {
        let all: Vec<PathBuf> = self.set.keys().cloned().collect();
        all.iter().for_each(|folder| self.end(folder));
    }

    /// Whether another folder, or none, stands now where one is watched.
    pub fn is_out_of_date(&self) -> bool {
        self.set.iter().any(|(folder, then)| identity(folder) != Some(*then))
    }

    fn end(&mut self, folder: &Path) {
        self.set.remove(folder);
        if let Some(watcher) = &mut self.watcher {
            // The folder may be gone, and the watch with it.
            let _ = watcher.unwatch(folder);
        }
    }

    fn watch(&mut self, folder: &Path) {
        let now = identity(folder);
        if self.set.get(folder).copied() == now {
            return;
        }
        self.end(folder);
        let (Some(now), Some(watcher)) = (now, &mut self.watcher) else { return };
        match watcher.watch(folder, RecursiveMode::Recursive) {
            Ok(()) => {
                self.told.remove(folder);
                self.set.insert(folder.to_path_buf(), now);
            }
            Err(error) => {
                if self.told.insert(folder.to_path_buf()) {
                    warn!("{} cannot be watched, only walked through: {error}", folder.display());
                }
            }
        }
    }
}

fn identity(folder: &Path) -> Option<Identity> {
    std::fs::metadata(folder).ok().filter(|meta| meta.is_dir()).map(|meta| (meta.dev(), meta.ino()))
}

/// What an event hints at, if at anything.
fn hint(event: notify::Result<Event>, quiet: &Path) -> Option<Wake> {
    // What was lost when something failed is not known.
    let Ok(event) = event else { return Some(Wake::Lost) };
    if event.need_rescan() {
        return Some(Wake::Lost);
    }
    if !event.paths.is_empty() && event.paths.iter().all(|path| path.starts_with(quiet)) {
        return None;
    }
    match event.kind {
        EventKind::Access(AccessKind::Close(AccessMode::Write)) => Some(Wake::Files),
        // Everybody may read, the walk does so itself.
        EventKind::Access(_) => None,
        EventKind::Remove(RemoveKind::Folder | RemoveKind::Other)
        | EventKind::Modify(ModifyKind::Name(RenameMode::From)) => {
            Some(event.paths.into_iter().next().map_or(Wake::Files, Wake::Gone))
        }
        _ => Some(Wake::Files),
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use notify::event::{CreateKind, DataChange, Flag};

    fn event(kind: EventKind, path: &str) -> notify::Result<Event> {
        Ok(Event::new(kind).add_path(PathBuf::from(path)))
    }

    #[test]
    fn what_is_read_and_what_the_service_writes_is_no_hint() {
        let quiet = Path::new("/s/records");
        let hint = |kind, path| hint(event(kind, path), quiet);
        let written = EventKind::Modify(ModifyKind::Data(DataChange::Any));
        assert_eq!(hint(written, "/s/exports/a.csv"), Some(Wake::Files));
        assert_eq!(hint(written, "/s/records/records.sqlite-wal"), None);
        assert_eq!(hint(EventKind::Access(AccessKind::Open(AccessMode::Any)), "/s/exports"), None);
        assert_eq!(
            hint(EventKind::Access(AccessKind::Close(AccessMode::Write)), "/s/exports/a.csv"),
            Some(Wake::Files)
        );
        assert_eq!(hint(EventKind::Create(CreateKind::Folder), "/s/exports/a"), Some(Wake::Files));
    }

    #[test]
    fn what_was_lost_is_told() {
        let quiet = Path::new("/s/records");
        let gone = event(EventKind::Remove(RemoveKind::Folder), "/s/exports");
        assert_eq!(hint(gone, quiet), Some(Wake::Gone(PathBuf::from("/s/exports"))));
        let overflow = Ok(Event::new(EventKind::Other).set_flag(Flag::Rescan));
        assert_eq!(hint(overflow, quiet), Some(Wake::Lost));
        assert_eq!(hint(Err(notify::Error::generic("no more watches")), quiet), Some(Wake::Lost));
    }
}
