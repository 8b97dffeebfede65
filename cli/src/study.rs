//! What a command works on: the study's folder, its records, and the rules under which they are read.
//!
//! Invariant: everything that one answer says comes from one [`View`], so that it stands at one trail number.

use std::path::{Path, PathBuf};
use std::sync::Arc;

use chrono::NaiveDate;
use chrono_tz::Tz;
use revisant_schema::plan::{self, Plan, VisitIx};
use revisant_schema::records::codec::Hash;
use revisant_schema::records::view::{PlanVersion, SessionRow};
use revisant_schema::records::{AsOf, Doer, Records, RecordsError, View};
use revisant_schema::roster::Roster;
use revisant_schema::session::{Courses, UNSCHEDULED};
use revisant_schema::world::World;

use crate::args::Then;
use crate::error::{Failure, unsound};
use crate::moment::Moment;
use crate::output::Out;

/// Name and version of this program, as the trail writes them.
pub const PROGRAM: &str = concat!("revisant ", env!("CARGO_PKG_VERSION"));

/// The surroundings of one command.
pub struct Context<'c, 'w> {
    /// The study's folder.
    pub study: PathBuf,
    /// Where words go.
    pub out: &'c mut Out<'w>,
    /// Clock and files.
    pub world: Arc<dyn World>,
}

impl<'c, 'w> Context<'c, 'w> {
    /// The surroundings of a command.
    pub fn new(study: PathBuf, out: &'c mut Out<'w>, world: Arc<dyn World>) -> Self {
        Self { study, out, world }
    }

    /// The records, which must be there.
    pub fn records(&self) -> Result<Records, Failure> {
        self.folder()?;
        Ok(Records::open(&self.study, self.world.clone())?)
    }

    /// The records, made if there are none.
    pub fn records_or_new(&self) -> Result<Records, Failure> {
        self.folder()?;
        Ok(Records::open_or_create(&self.study, self.world.clone())?)
    }

    /// The study's folder, which must be there.
    pub fn folder(&self) -> Result<&Path, Failure> {
        if self.study.is_dir() {
            return Ok(&self.study);
        }
        let shown = self.study.display().to_string();
        Err(Failure::usage(format!("there is no folder {shown}"))
            .at(shown)
            .then("name the study's folder with --study DIR"))
    }

    /// The account that runs this command, with its reason.
    pub fn doer(&self, why: Option<&str>) -> Doer {
        Doer::this_account(PROGRAM).because(why)
    }

    /// Today, in a zone.
    pub fn today(&self, zone: Tz) -> NaiveDate {
        self.world.now().with_timezone(&zone).date_naive()
    }

    /// The day that `--on` names, or today.
    pub fn day(&self, on: Option<Moment>, zone: Tz) -> NaiveDate {
        on.map_or_else(|| self.today(zone), |moment| moment.day(zone))
    }
}

/// A reason in a person's words, which must not be empty.
pub fn reason(why: &str) -> Result<&str, Failure> {
    match why.trim() {
        "" => Err(Failure::usage("--why is empty").then("give the reason in a few words")),
        why => Ok(why),
    }
}

/// The records as `--cut` or `--as-of` asks for them.
pub fn view<'r>(records: &'r Records, then: &Then) -> Result<View<'r>, Failure> {
    let as_of = match (&then.cut, then.as_of) {
        (Some(cut), _) => AsOf::Cut(cut.clone()),
        (None, Some(moment)) => AsOf::Moment(moment.end(zone_now(records)?)),
        (None, None) => AsOf::Now,
    };
    let view = records.view_as_of(&as_of)?;
    if view.upto() == 0 && as_of != AsOf::Now {
        return Err(Failure::refused("the records did not exist at that moment")
            .then("`revisant trail` shows since when they do"));
    }
    Ok(view)
}

fn zone_now(records: &Records) -> Result<Tz, Failure> {
    Ok(Basis::plan(&records.view()?)?.0.study.time_zone)
}

/// Plan, roster and courses, as they stood.
pub struct Basis {
    /// The plan.
    pub plan: Plan,
    /// Its version.
    pub version: i64,
    /// Of its files.
    pub sha256: Hash,
    /// The roster.
    pub roster: Roster,
    /// Every subject's course.
    pub courses: Courses,
}

impl Basis {
    /// As they stood at a view.
    pub fn of(view: &View<'_>) -> Result<Self, Failure> {
        let (plan, PlanVersion { version, sha256, .. }) = Self::plan(view)?;
        let roster = view.roster()?;
        let courses = Courses::derive(&plan, &roster, view.session_facts()?);
        Ok(Self { plan, version, sha256, roster, courses })
    }

    /// The plan in force.
    pub fn plan(view: &View<'_>) -> Result<(Plan, PlanVersion), Failure> {
        let Some(found) = view.plan()? else {
            return Err(Failure::refused("no plan is in force").then("bring one in with `revisant roster import FILE`"));
        };
        let (plan, _) = plan::parse(&found.files).map_err(|faults| {
            let wrong =
                format!("plan version {} was sound when filed and is not now: {}", found.version, unsound(&faults));
            RecordsError::Damaged(wrong)
        })?;
        Ok((plan, found))
    }

    /// The study's zone.
    pub fn zone(&self) -> Tz {
        self.plan.study.time_zone
    }

    /// What a session is to the plan, whether or not it holds a current reading.
    pub fn place(&self, session: &SessionRow) -> Place {
        if let Some(placed) = self.courses.session(session.session) {
            return Place { visit: placed.visit, off_window: placed.off_window, session: placed.session };
        }
        let found = self.place_bare(session);
        Place {
            visit: found.map(|(visit, _)| visit),
            off_window: found.is_some_and(|found| found.1),
            session: session.session,
        }
    }

    fn place_bare(&self, session: &SessionRow) -> Option<(VisitIx, bool)> {
        let course = self.courses.by_subject.get(session.subject.as_str())?;
        match session.label.as_deref() {
            Some(UNSCHEDULED) => None,
            Some(label) => {
                let (visit, _) = self.plan.visit(label)?;
                Some((visit, course.span(&self.plan, visit).is_some_and(|span| !span.on_time(session.day))))
            }
            None => course.visit_on(&self.plan, session.day),
        }
    }

    /// The code of a visit.
    pub fn visit_code(&self, visit: Option<VisitIx>) -> Option<&str> {
        visit.and_then(|visit| self.plan.visits.get(visit)).map(|visit| visit.code.as_str())
    }

    /// A subject of the roster, by its code tidied as the plan says.
    pub fn subject(&self, code: &str) -> Result<String, Failure> {
        let code = revisant_schema::roster::tidy(code, &self.plan.subject.normalise);
        match self.roster.subjects.contains_key(&code) {
            true => Ok(code),
            false => Err(Failure::refused(format!("subject {code} is not on the roster"))
                .then("`revisant roster list` shows who is")),
        }
    }

    /// A measure of the plan.
    pub fn measure(&self, code: &str) -> Result<&plan::Measure, Failure> {
        self.plan
            .measure(code)
            .map(|(_, measure)| measure)
            .ok_or_else(|| unknown("measure", code, self.plan.measures.iter().map(|measure| measure.code.as_str())))
    }

    /// A visit of the plan.
    pub fn visit(&self, code: &str) -> Result<VisitIx, Failure> {
        self.plan
            .visit(code)
            .map(|(visit, _)| visit)
            .ok_or_else(|| unknown("visit", code, self.plan.visits.iter().map(|visit| visit.code.as_str())))
    }
}

/// Says that the plan has no such thing, and what it has.
pub fn unknown<'a>(what: &str, code: &str, known: impl Iterator<Item = &'a str>) -> Failure {
    let known: Vec<&str> = known.collect();
    let there = if known.is_empty() { format!("it has no {what}") } else { format!("it has {}", known.join(", ")) };
    Failure::refused(format!("the plan in force has no {what} \"{code}\"")).then(there)
}

/// What a session is to the plan.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Place {
    /// Its visit; `None`: unscheduled.
    pub visit: Option<VisitIx>,
    /// It lies outside the visit's window.
    pub off_window: bool,
    /// The number that all sessions of the same subject, visit and day share.
    pub session: i64,
}
