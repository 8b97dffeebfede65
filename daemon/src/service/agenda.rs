//! When the next cycle is due.
//!
//! Invariants: the walk by the clock always stands; after events there is a second cycle, once they have died down;
//! while cycles fail, only the pause decides.

use std::time::{Duration, Instant};

/// After the last event everything is walked once more: events of files in folders that were just made get lost.
const AFTERWARDS: Duration = Duration::from_secs(1);
/// Waiting time after a failure, doubled up to a minute.
const FIRST_PAUSE: Duration = Duration::from_secs(1);
const LONGEST_PAUSE: Duration = Duration::from_secs(60);
/// A cycle that events caused for nothing is followed by this many times its length without another such, so that a
/// file that is written to all day does not keep the walk going all day; never so long that an export that comes
/// meanwhile would be filed late.
const BREATHS: u32 = 4;
const LONGEST_BREATH: Duration = Duration::from_millis(500);

/// What is to be done when.
#[derive(Debug, Clone)]
pub struct Agenda {
    every: Duration,
    walk: Instant,
    sooner: Option<Instant>,
    afterwards: Option<Instant>,
    /// Before this, events cause no cycle.
    breathe: Instant,
    pause: Duration,
    failing: bool,
}

impl Agenda {
    /// A cycle now, and then one at least `every` so often.
    pub fn new(every: Duration, now: Instant) -> Self {
        Self { every, walk: now, sooner: None, afterwards: None, breathe: now, pause: FIRST_PAUSE, failing: false }
    }

    /// Something happened in the folders.
    pub fn events(&mut self, now: Instant) {
        if !self.failing {
            self.want(now.max(self.breathe));
            self.afterwards = Some(now + AFTERWARDS);
        }
    }

    /// Wants a cycle at a moment, if none comes before.
    pub fn want(&mut self, at: Instant) {
        self.sooner = Some(self.sooner.map_or(at, |sooner| sooner.min(at)));
    }

    /// A cycle begins.
    pub fn begin(&mut self, now: Instant) {
        self.sooner = None;
        self.afterwards = self.afterwards.filter(|at| *at > now);
        self.walk = now + self.every;
    }

    /// It ended well; `idle`: there was nothing to do.
    pub fn ended(&mut self, began: Instant, now: Instant, idle: bool) {
        self.failing = false;
        self.pause = FIRST_PAUSE;
        let breath = if idle { ((now - began) * BREATHS).min(LONGEST_BREATH) } else { Duration::ZERO };
        self.breathe = now + breath;
    }

    /// It failed.
    pub fn failed(&mut self, now: Instant) {
        self.failing = true;
        (self.sooner, self.afterwards) = (None, None);
        self.walk = now + self.pause;
        self.pause = (self.pause * 2).min(LONGEST_PAUSE);
    }

    /// Whether the last cycle failed.
    pub fn is_failing(&self) -> bool {
        self.failing
    }

    /// When the next cycle is due.
    pub fn next(&self) -> Instant {
        [self.sooner, self.afterwards].into_iter().flatten().fold(self.walk, Instant::min)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    const MINUTE: Duration = Duration::from_secs(60);

    fn seconds(count: f64) -> Duration {
        Duration::from_secs_f64(count)
    }

    fn walked(start: Instant) -> Agenda {
        let mut agenda = Agenda::new(MINUTE, start);
        agenda.begin(start);
        agenda.ended(start, start, true);
        agenda
    }

    #[test]
    fn after_events_there_is_one_more_walk() {
        let start = Instant::now();
        let mut agenda = walked(start);
        assert_eq!(agenda.next(), start + MINUTE);
        agenda.events(start + seconds(5.0));
        assert_eq!(agenda.next(), start + seconds(5.0));
        agenda.begin(start + seconds(5.0));
        agenda.ended(start + seconds(5.0), start + seconds(5.1), false);
        assert_eq!(agenda.next(), start + seconds(6.0), "the walk afterwards");
        agenda.begin(start + seconds(6.0));
        assert_eq!(agenda.next(), start + seconds(66.0));
    }

    #[test]
    fn failures_back_off_whatever_happens_in_the_folders() {
        let start = Instant::now();
        let mut agenda = walked(start);
        let mut now = start;
        for pause in [1, 2, 4, 8, 16, 32, 60, 60] {
            agenda.begin(now);
            agenda.failed(now);
            agenda.events(now);
            assert_eq!(agenda.next(), now + Duration::from_secs(pause));
            now = agenda.next();
        }
        agenda.begin(now);
        agenda.ended(now, now, true);
        agenda.events(now);
        assert_eq!(agenda.next(), now);
    }

    #[test]
    fn events_for_nothing_do_not_keep_the_walk_going() {
        let start = Instant::now();
        let mut agenda = walked(start);
        agenda.begin(start);
        agenda.ended(start, start + seconds(0.1), true);
        agenda.events(start + seconds(0.1));
        assert_eq!(agenda.next(), start + seconds(0.5));
        agenda.begin(start + seconds(0.5));
        agenda.ended(start + seconds(0.5), start + seconds(0.6), false);
        agenda.events(start + seconds(0.6));
        assert_eq!(agenda.next(), start + seconds(0.6), "there was something to do");
    }

    #[test]
    fn a_file_that_will_have_rested_is_not_forgotten() {
        let start = Instant::now();
        let mut agenda = walked(start);
        agenda.want(start + seconds(9.0));
        agenda.want(start + seconds(12.0));
        assert_eq!(agenda.next(), start + seconds(9.0));
    }
}
