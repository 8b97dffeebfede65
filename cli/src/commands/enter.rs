//! `enter`: a reading taken by hand, when an instrument cannot export it.

use chrono::{DateTime, NaiveDate, Utc};
use revisant_schema::plan::Measure;
use revisant_schema::reading::Condition;
use revisant_schema::records::view::SessionRow;
use revisant_schema::records::{ActKind, View};
use serde_json::json;

use super::Done;
use crate::args::Enter;
use crate::by_hand::{self, Written};
use crate::error::{Exit, Failure};
use crate::moment::Moment;
use crate::study::{Basis, Context, reason};

/// Runs it.
pub fn run(context: &mut Context<'_, '_>, args: &Enter) -> Done {
    let why = reason(&args.why)?;
    let mut records = context.records()?;
    let view = records.view()?;
    let basis = Basis::of(&view)?;
    let written = written(context, &view, &basis, args)?;
    let plan = basis.version;
    let (trail, reading) = records.act(ActKind::Enter, &context.doer(Some(why)), |act| {
        let numbers = Written::file(act, std::slice::from_ref(&written), plan, 1)?;
        act.objects.insert("readings".to_owned(), json!(numbers));
        act.objects.insert("subject".to_owned(), json!(written.subject));
        act.objects.insert("measure".to_owned(), json!(written.measure));
        Ok((act.number(), numbers[0]))
    })?;
    match context.out.json {
        true => context.out.json(&json!({ "trail": trail, "reading": reading }))?,
        false => context.out.say(&format!("Entered by hand as reading {reading}, act {trail} on the trail."))?,
    }
    Ok(Exit::Done)
}

fn written(context: &Context<'_, '_>, view: &View<'_>, basis: &Basis, args: &Enter) -> Result<Written, Failure> {
    let subject = basis.subject(&args.subject)?;
    let measure = basis.measure(&args.measure)?;
    let condition = by_hand::condition(measure, &args.condition)?;
    let number = by_hand::number(&args.value)?;
    by_hand::plausible(measure, number, args.as_it_stands)?;
    let (day, moment) = taken(context, basis, args.taken_at)?;
    by_hand::in_study(basis, &subject, day)?;
    let label = args.visit.as_deref().map(|visit| by_hand::label(basis, visit)).transpose()?;
    let session = SessionRow { session: 0, subject: subject.clone(), day, label: label.clone() };
    let replicate = replicate(view, basis, measure, &condition, &session, args.replicate)?;
    Ok(Written {
        capture: None,
        line: None,
        bytes: None,
        cell: None,
        instrument: String::new(),
        measure: measure.code.clone(),
        condition,
        replicate,
        labelled: args.replicate.is_some(),
        subject,
        day,
        label,
        text: args.value.trim().to_owned(),
        exported: Some(number),
        unit: String::new(),
        number,
        mark: None,
        written: Some(written_time(args.taken_at)),
        moment,
        operator: String::new(),
        supersedes: None,
    })
}

fn written_time(taken_at: Moment) -> String {
    match taken_at {
        Moment::Day(day) => day.to_string(),
        Moment::Local(local) => local.format("%Y-%m-%dT%H:%M:%S").to_string(),
        Moment::Instant(moment) => moment.to_rfc3339(),
    }
}

fn taken(context: &Context<'_, '_>, basis: &Basis, at: Moment) -> Result<(NaiveDate, Option<DateTime<Utc>>), Failure> {
    let zone = basis.zone();
    let day = at.day(zone);
    let moment = at.exact(zone).map_err(Failure::refused)?;
    let future = match moment {
        None => day > context.today(zone),
        Some(moment) => moment > context.world.now(),
    };
    match future {
        true => Err(Failure::refused(format!("{} lies in the future", written_time(at)))),
        false => Ok((day, moment)),
    }
}

/// The number given, or the smallest that is free over all instruments; never beyond the plan's.
fn replicate(
    view: &View<'_>,
    basis: &Basis,
    measure: &Measure,
    condition: &Condition,
    session: &SessionRow,
    given: Option<u32>,
) -> Result<u32, Failure> {
    let there = by_hand::in_the_cell(view, basis, &measure.code, condition, session)?;
    let taken = |number: u32| there.iter().find(|row| row.replicate == number);
    let free = (1..=measure.replicates).find(|number| taken(*number).is_none());
    let number = given.or(free);
    match number {
        Some(number) if number == 0 || number > measure.replicates => {
            Err(Failure::refused(format!("{} has {} replicates in the plan", measure.code, measure.replicates)))
        }
        Some(number) => match taken(number) {
            Some(row) => {
                Err(Failure::refused(format!("replicate {number} stands there already, as reading {}", row.reading))
                    .then("amend that reading, or strike it first"))
            }
            None => Ok(number),
        },
        None => Err(Failure::refused(format!(
            "all {} replicates of {} stand there already",
            measure.replicates, measure.code
        ))
        .then("amend one, or strike it first")),
    }
}
