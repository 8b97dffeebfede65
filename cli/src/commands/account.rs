//! `account`: why planned readings will not come.

use revisant_schema::records::{ActKind, Cell};
use serde_json::json;

use super::Done;
use crate::args::Account;
use crate::error::{Exit, Failure};
use crate::study::{Basis, Context, reason};

/// Runs it.
pub fn run(context: &mut Context<'_, '_>, args: &Account) -> Done {
    let why = reason(&args.why)?;
    let mut records = context.records()?;
    let basis = Basis::of(&records.view()?)?;
    let subject = basis.subject(&args.subject)?;
    let visit = basis.visit(&args.visit)?;
    let measure = args.measure.as_deref().map(|code| due_measure(&basis, visit, code)).transpose()?;
    let code = &basis.plan.visits[visit].code;
    let trail = records.act(ActKind::Account, &context.doer(Some(why)), |act| {
        act.objects.insert("subject".to_owned(), json!(subject));
        act.objects.insert("visit".to_owned(), json!(code));
        act.objects.insert("measure".to_owned(), json!(measure));
        act.add("accounted", &[Cell::Subject(&subject), Cell::Text(code), Cell::text_or_null(measure)])?;
        Ok(act.number())
    })?;
    if context.out.json {
        context.out.json(&json!({ "trail": trail, "subject": subject, "visit": code, "measure": measure }))?;
    } else {
        let what = measure.unwrap_or("what is missing");
        context.out.say(&format!("{subject}, {code}: {what} is accounted for."))?;
    }
    Ok(Exit::Done)
}

/// A measure that is due at the visit.
fn due_measure<'b>(basis: &'b Basis, visit: usize, code: &str) -> Result<&'b str, Failure> {
    let measure = basis.measure(code)?;
    let rule = &basis.plan.visits[visit];
    let due = rule.measures.iter().any(|due| basis.plan.measures[*due].code == measure.code);
    match due {
        true => Ok(&measure.code),
        false => Err(Failure::refused(format!("{code} is not due at {}", rule.code))),
    }
}
