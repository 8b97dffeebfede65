//! `amend`: correct a reading or a session; the original stays linked.

use revisant_schema::records::view::{ReadingFilter, ReadingRow};
use revisant_schema::records::{ActKind, Records, View};
use serde_json::{Value as Json, json};

use super::Done;
use crate::args::Amend;
use crate::by_hand::{self, Written};
use crate::error::{Exit, Failure};
use crate::report::text::count;
use crate::study::{Basis, Context, reason};

/// Runs it.
pub fn run(context: &mut Context<'_, '_>, args: &Amend) -> Done {
    let mut records = context.records()?;
    let view = records.view()?;
    let basis = Basis::of(&view)?;
    let (why, amended) = match args {
        Amend::Reading { why, .. } => (why, reading(&view, &basis, args)?),
        Amend::Session { session, subject, visit, swap_with, why } => {
            let change = Change { subject: subject.as_deref(), visit: visit.as_deref() };
            (why, session_amended(&view, &basis, *session, change, *swap_with)?)
        }
    };
    by_hand::refuse_taken(&view, &basis, &amended)?;
    let why = reason(why)?.to_owned();
    write(context, &mut records, &basis, &amended, &why)
}

/// Whose it is to be, and which visit.
#[derive(Debug, Clone, Copy, Default)]
struct Change<'a> {
    subject: Option<&'a str>,
    visit: Option<&'a str>,
}

impl Change<'_> {
    fn apply(self, basis: &Basis, mut written: Written) -> Result<Written, Failure> {
        if let Some(subject) = self.subject {
            written.subject = basis.subject(subject)?;
        }
        if let Some(visit) = self.visit {
            written.label = Some(by_hand::label(basis, visit)?);
        }
        by_hand::in_study(basis, &written.subject, written.day)?;
        Ok(written)
    }
}

fn reading(view: &View<'_>, basis: &Basis, args: &Amend) -> Result<Vec<Written>, Failure> {
    let Amend::Reading { reading, subject, visit, value, replicate, as_it_stands, .. } = args else {
        return Ok(vec![]);
    };
    if subject.is_none() && visit.is_none() && value.is_none() && replicate.is_none() {
        return Err(Failure::usage("nothing is to be amended").then("give --subject, --visit, --value or --replicate"));
    }
    let row = view.reading(*reading)?;
    let change = Change { subject: subject.as_deref(), visit: visit.as_deref() };
    let mut written = change.apply(basis, Written::like(&row)?)?;
    let measure = basis.measure(&written.measure)?;
    if let Some(text) = value {
        let number = by_hand::number(text)?;
        by_hand::plausible(measure, number, *as_it_stands)?;
        written = written.with_value(text, number);
    }
    if let Some(number) = replicate {
        if *number == 0 || *number > measure.replicates {
            return Err(Failure::refused(format!(
                "{} has {} replicates in the plan",
                measure.code, measure.replicates
            )));
        }
        written.replicate = *number;
    }
    Ok(vec![written])
}

fn session_amended(
    view: &View<'_>,
    basis: &Basis,
    session: i64,
    change: Change<'_>,
    swap_with: Option<i64>,
) -> Result<Vec<Written>, Failure> {
    let rows = of_session(view, basis, session)?;
    let Some(other) = swap_with else {
        if change.subject.is_none() && change.visit.is_none() {
            return Err(Failure::usage("nothing is to be amended").then("give --subject, --visit or --swap-with"));
        }
        return moved(basis, &rows, change);
    };
    let others = of_session(view, basis, other)?;
    let (one, two) = (subject_of(&rows), subject_of(&others));
    if one == two {
        return Err(Failure::refused(format!("sessions {session} and {other} are both of {one}")));
    }
    let mut amended = moved(basis, &rows, Change { subject: Some(two), visit: None })?;
    amended.extend(moved(basis, &others, Change { subject: Some(one), visit: None })?);
    Ok(amended)
}

fn subject_of(rows: &[ReadingRow]) -> &str {
    rows.first().map_or("", |row| row.session.subject.as_str())
}

fn moved(basis: &Basis, rows: &[ReadingRow], change: Change<'_>) -> Result<Vec<Written>, Failure> {
    rows.iter().map(|row| change.apply(basis, Written::like(row)?)).collect()
}

/// The current readings of a session, by the number that `readings` shows.
fn of_session(view: &View<'_>, basis: &Basis, session: i64) -> Result<Vec<ReadingRow>, Failure> {
    let subject = basis.courses.session(session).map(|placed| placed.facts.subject.to_string());
    let Some(subject) = subject else {
        let what = format!("there is no session {session} with a reading in use");
        return Err(Failure::refused(what).then("`revisant readings --json` names the session of each reading"));
    };
    let rows = view.readings(&ReadingFilter { subject: Some(subject), ..ReadingFilter::default() })?;
    let wanted = basis.courses.session(session).map(|placed| placed.session);
    let own = |row: &ReadingRow| {
        row.state == revisant_schema::reading::ReadingState::Current
            && Some(basis.place(&row.session).session) == wanted
    };
    Ok(rows.into_iter().filter(own).collect())
}

fn write(context: &mut Context<'_, '_>, records: &mut Records, basis: &Basis, amended: &[Written], why: &str) -> Done {
    let plan = basis.version;
    let (trail, numbers) = records.act(ActKind::Amend, &context.doer(Some(why)), |act| {
        let numbers = Written::file(act, amended, plan, 2)?;
        act.objects.insert("readings".to_owned(), links(&numbers, amended));
        let mut subjects: Vec<&str> = amended.iter().map(|one| one.subject.as_str()).collect();
        subjects.dedup();
        act.after = Some(json!({ "subjects": subjects }));
        Ok((act.number(), numbers))
    })?;
    match context.out.json {
        true => context.out.json(&json!({ "trail": trail, "readings": links(&numbers, amended) }))?,
        false => {
            let what = count(numbers.len() as u64, "reading");
            let shown: Vec<String> = numbers.iter().map(ToString::to_string).collect();
            context.out.say(&format!("{what} amended, now {}; the originals stay linked.", shown.join(", ")))?;
        }
    }
    Ok(Exit::Done)
}

fn links(numbers: &[i64], amended: &[Written]) -> Json {
    let pairs = numbers.iter().zip(amended);
    pairs.map(|(number, one)| json!({ "reading": number, "supersedes": one.supersedes })).collect()
}
