//! Watching folders for hints that something happened.
//!
//! Invariant: nothing depends on an event coming: a folder that cannot be watched is walked through like any other.

use std::collections::HashMap;
use std::os::unix::fs::MetadataExt;
use std::path::{Path, PathBuf};
use std::sync::mpsc::Sender;

use notify::{Event, EventKind, RecommendedWatcher, RecursiveMode, Watcher};
use revisant_schema::plan::Plan;
use tracing::warn;

use super::Wake;

/// The watches of one study.
pub struct Watches {
    study: PathBuf,
    watcher: Option<RecommendedWatcher>,
    /// Folders watched, each by what it was when the watch was set: a folder that was made anew needs a new one.
    set: HashMap<PathBuf, (u64, u64)>,
}

impl Watches {
    /// No watch yet.
    pub fn new(study: PathBuf, wake: Sender<Wake>) -> Self {
        let watcher = notify::recommended_watcher(move |event: notify::Result<Event>| {
            // An error or an overflow is a hint like any other; only reading a file is none.
            if !event.is_ok_and(|event| matches!(event.kind, EventKind::Access(_))) {
                // A worker that is gone needs no hint.
                let _ = wake.send(Wake::Files);
            }
        });
        let watcher = watcher.map_err(|error| warn!("folders cannot be watched, only walked through: {error}")).ok();
        Self { study, watcher, set: HashMap::new() }
    }

    /// Sees that every folder of the plan that is there is watched, and the study's own for its plan.
    pub fn refresh(&mut self, plan: &Plan) {
        let study = self.study.clone();
        self.watch(&study, RecursiveMode::NonRecursive);
        for instrument in &plan.instruments {
            self.watch(&study.join(&instrument.folder), RecursiveMode::Recursive);
        }
    }

    fn watch(&mut self, folder: &Path, mode: RecursiveMode) {
        let Some(watcher) = &mut self.watcher else { return };
        let now = std::fs::metadata(folder).ok().filter(|meta| meta.is_dir()).map(|meta| (meta.dev(), meta.ino()));
        if self.set.get(folder).copied() == now {
            return;
        }
        if self.set.remove(folder).is_some() {
            // The folder it was set on may be gone, and the watch with it.
            let _ = watcher.unwatch(folder);
        }
        if let Some(now) = now {
            match watcher.watch(folder, mode) {
                Ok(()) => drop(self.set.insert(folder.to_path_buf(), now)),
                Err(error) => warn!("{} cannot be watched, only walked through: {error}", folder.display()),
            }
        }
    }
}
