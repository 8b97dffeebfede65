//! The plan on disk, glanced at often and read seldom.
//!
//! Invariants: a plan is read only once its files have stayed the same for a moment, so that one half written is never
//! taken for a whole; and only when its files, or what stands on the trail about plan and roster, have changed since.

use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::time::{Duration, Instant};

use revisant_schema::plan::{MAIN, reader_files};
use revisant_schema::records::ActNumber;
use revisant_schema::world::World;

/// How long the plan's files must have stayed the same.
const STEADY: Duration = Duration::from_millis(500);

/// Size and time of each of the plan's files; `None`: it is not there.
type Stamp = Vec<Option<(u64, i64)>>;

/// What is known of the plan on disk.
pub struct PlanOnDisk {
    study: PathBuf,
    world: Arc<dyn World>,
    seen: Stamp,
    since: Instant,
    read: Option<(Stamp, ActNumber)>,
}

impl PlanOnDisk {
    /// Nothing is known yet.
    pub fn new(study: PathBuf, world: Arc<dyn World>) -> Self {
        Self { study, world, seen: vec![], since: Instant::now(), read: None }
    }

    /// Looks whether the plan is to be read now; `head` is the newest act on plan or roster.
    pub fn is_to_be_read(&mut self, head: ActNumber) -> bool {
        self.look();
        match &self.read {
            None => true,
            Some(read) => self.is_steady() && (&read.0, read.1) != (&self.seen, head),
        }
    }

    /// Whether its files have stayed the same for long enough.
    pub fn is_steady(&self) -> bool {
        self.since.elapsed() >= STEADY
    }

    /// It is read, as it was last looked at.
    pub fn was_read(&mut self, head: ActNumber) {
        self.read = Some((self.seen.clone(), head));
    }

    /// It is to be read whatever it looks like.
    pub fn read_anew(&mut self) {
        self.read = None;
    }

    fn look(&mut self) {
        let now = self.stamp();
        if now != self.seen {
            self.seen = now;
            self.since = Instant::now();
        }
    }

    fn stamp(&self) -> Stamp {
        let stat = |path: &Path| self.world.stat(path).ok().map(|stat| (stat.size, stat.modified));
        let main = self.study.join(MAIN);
        let named = self.text(&main).map(|text| reader_files(&text)).unwrap_or_default();
        let readers = named.into_iter().map(|name| self.study.join(name));
        std::iter::once(main.clone()).chain(readers).map(|path| stat(&path)).collect()
    }

    fn text(&self, path: &Path) -> Option<String> {
        std::io::read_to_string(self.world.open(path).ok()?).ok()
    }
}
