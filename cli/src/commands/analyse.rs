//! `analyse`: an analysis of the plan on what has come in.
//!
//! Invariant: no result is printed or drawn before it is on the trail that it was looked at.

use std::path::Path;

use chrono::{DateTime, NaiveDate};
use revisant_schema::plan::{Allocation, Analysis, Instrument, MeasureIx, MeasureRule, Plan};
use revisant_schema::records::view::PlanVersion;
use revisant_schema::records::{ActKind, Records, View};
use serde_json::json;

use super::{Done, status};
use crate::args::Analyse;
use crate::dataset::{ARM, Dataset};
use crate::error::{Exit, Failure};
use crate::intake;
use crate::looked::Looked;
use crate::method::{self, Outcome};
use crate::report::analysis::{Analysed, PlanUsed};
use crate::report::plot;
use crate::study::{Basis, Context, unknown, view};

/// Runs it.
pub fn run(context: &mut Context<'_, '_>, args: &Analyse) -> Done {
    let mut records = context.records()?;
    if args.then.cut.is_none() && args.then.as_of.is_none() {
        intake::bring_plan_into_force(&mut records, &context.study, &context.doer(None))?;
    }
    let then = view(&records, &args.then)?;
    let basis = Basis::of(&then)?;
    let (plan_now, version_now) = Basis::plan(&records.view()?)?;
    let planned = Planned::find(&basis, &plan_now, &version_now, &args.code)?;
    refuse([&basis.plan, &plan_now], planned.analysis)?;
    let analysed = analyse(context, &records, &then, &basis, &planned, args)?;
    let drawing = args.plot.as_deref().map(|file| picture(file, &analysed).map(|bytes| (file, bytes))).transpose()?;
    remember(context, &mut records, &analysed)?;
    if let Some((file, bytes)) = drawing {
        draw(file, &bytes)?;
    }
    match context.out.json {
        true => context.out.json(&analysed.json())?,
        false => context.out.text(&analysed.text(context.out.width))?,
    }
    Ok(Exit::Done)
}

/// The analysis asked for: of the plan under which the readings are placed, or else of the plan of now.
struct Planned<'p> {
    analysis: &'p Analysis,
    other: Option<PlanUsed>,
}

impl<'p> Planned<'p> {
    fn find(basis: &'p Basis, now: &'p Plan, version: &PlanVersion, code: &str) -> Result<Self, Failure> {
        if let Some(analysis) = now.analysis(code) {
            let another = (version.version != basis.version)
                .then_some(PlanUsed { version: version.version, sha256: version.sha256 });
            // An analysis of now refers to measures and visits by their places in its own plan.
            let fits = another.is_none()
                || same_places(&basis.plan, now) && (analysis.between.is_empty() || same_groups(&basis.plan, now));
            return match fits {
                true => Ok(Self { analysis, other: another }),
                false => Self::then(basis, code),
            };
        }
        Self::then(basis, code)
    }

    fn then(basis: &'p Basis, code: &str) -> Result<Self, Failure> {
        let known = basis.plan.analyses.iter().map(|analysis| analysis.code.as_str());
        match basis.plan.analysis(code) {
            Some(analysis) => Ok(Self { analysis, other: None }),
            None => Err(unknown("analysis", code, known)),
        }
    }
}

/// Whether both plans list the same measures and visits at the same places.
fn same_places(then: &Plan, now: &Plan) -> bool {
    let measures = |plan: &Plan| plan.measures.iter().map(|it| it.code.clone()).collect::<Vec<_>>();
    let visits = |plan: &Plan| plan.visits.iter().map(|it| it.code.clone()).collect::<Vec<_>>();
    measures(then) == measures(now) && visits(then) == visits(now)
}

/// Whether both plans group subjects alike.
fn same_groups(then: &Plan, now: &Plan) -> bool {
    let arms = |plan: &Plan| plan.arms.iter().map(|it| it.code.clone()).collect::<Vec<_>>();
    arms(then) == arms(now) && then.subject.attributes == now.subject.attributes
}

/// What cannot be done, in one plain sentence; `plans` are those of then and of now.
fn refuse(plans: [&Plan; 2], analysis: &Analysis) -> Result<(), Failure> {
    method::offered(analysis)?;
    if plans.iter().any(|plan| plan.interim.is_some()) {
        return Err(Failure::not_yet(
            "the plan names interim looks, and a result outside them would be a look of its own; it needs `revisant \
             look`, which comes with a later version",
        )
        .at(analysis.code.clone()));
    }
    let sealed = plans.iter().any(|plan| plan.study.allocation == Allocation::Sealed);
    if sealed && analysis.between.iter().any(|factor| factor == ARM) {
        return Err(Failure::refused(format!(
            "{} compares arms, and the allocation is sealed: no result by arm can be shown before it is opened",
            analysis.code
        ))
        .at(analysis.code.clone())
        .then("until then, analyse without \"arm\" in \"between\""));
    }
    Ok(())
}

fn analyse<'a>(
    context: &Context<'_, '_>,
    records: &Records,
    then: &View<'_>,
    basis: &'a Basis,
    planned: &Planned<'a>,
    args: &Analyse,
) -> Result<Analysed<'a>, Failure> {
    let analysis = planned.analysis;
    let measure = &basis.plan.measures[analysis.measure];
    let standing = then.standing(args.then.cut.as_deref())?;
    let data = Dataset::build(then, basis, analysis, standing_day(context, basis, args, &standing.moment))?;
    let outcome = Outcome::of(analysis, &data, args.checks)?;
    let exports = then.exports()?;
    let instruments = status::instruments(context, then, basis, &exports)?;
    let measuring: Vec<&str> = measuring(&basis.plan, analysis.measure);
    let instruments = instruments.into_iter().filter(|line| measuring.contains(&line.instrument.as_str())).collect();
    let holds = then.holds(true)?;
    Ok(Analysed {
        study: &basis.plan.study.code,
        analysis,
        measure: &measure.code,
        label: &measure.label,
        unit: &measure.unit,
        standing,
        plan: PlanUsed { version: basis.version, sha256: basis.sha256 },
        placed_by: &basis.plan,
        analysis_plan: planned.other,
        enrolled: basis.roster.subjects.len(),
        open_holds: holds.iter().filter(|hold| measuring.contains(&hold.instrument.as_str())).count(),
        looked: Looked::before(records, then, analysis)?,
        data,
        outcome,
        instruments,
    })
}

/// The local day on which the records stand: that of the last act, or today when they are asked as they are.
fn standing_day(context: &Context<'_, '_>, basis: &Basis, args: &Analyse, moment: &str) -> NaiveDate {
    let now = args.then.cut.is_none() && args.then.as_of.is_none();
    let at = DateTime::parse_from_rfc3339(moment).ok().filter(|_| !now);
    at.map_or_else(|| context.today(basis.zone()), |at| at.with_timezone(&basis.zone()).date_naive())
}

/// The instruments that may export a measure.
fn measuring(plan: &Plan, measure: MeasureIx) -> Vec<&str> {
    let gives = |instrument: &&Instrument| {
        instrument.reader.values.iter().any(|value| match &value.measure {
            MeasureRule::Fixed(fixed) => *fixed == measure,
            MeasureRule::Found(_) => true,
        })
    };
    plan.instruments.iter().filter(gives).map(|instrument| instrument.code.as_str()).collect()
}

/// Writes the look on the trail.
fn remember(context: &Context<'_, '_>, records: &mut Records, analysed: &Analysed<'_>) -> Result<(), Failure> {
    let done = records.act(ActKind::Analyse, &context.doer(None), |act| {
        act.objects.insert("analysis".to_owned(), json!(analysed.analysis.code));
        act.objects.insert("trail".to_owned(), json!(analysed.standing.trail));
        act.objects.insert("stood_at".to_owned(), json!(analysed.looked.stood_at));
        act.objects.insert("cut".to_owned(), json!(analysed.standing.cut));
        act.objects.insert("plan".to_owned(), json!(analysed.plan.version));
        Ok(())
    });
    done.map_err(|error| {
        let failure = Failure::from(error);
        let what = format!("the result is not shown, since the look cannot be written on the trail: {}", failure.what);
        Failure { what, ..failure }
    })
}

/// As the ending of the file's name asks.
fn picture(file: &Path, analysed: &Analysed<'_>) -> Result<Vec<u8>, Failure> {
    let shown = file.display().to_string();
    let ending = file.extension().and_then(|ending| ending.to_str()).unwrap_or_default();
    match ending.to_ascii_lowercase().as_str() {
        "svg" => Ok(plot::svg(analysed).into_bytes()),
        "png" => plot::png(&plot::svg(analysed))
            .map_err(|error| Failure::new("plot", format!("the plot cannot be drawn as PNG ({error})")).at(shown)),
        _ => Err(Failure::usage(format!("{shown} is neither an SVG nor a PNG file by its name"))
            .at(shown)
            .then("end its name in .svg or .png")),
    }
}

fn draw(file: &Path, bytes: &[u8]) -> Result<(), Failure> {
    let shown = file.display().to_string();
    std::fs::write(file, bytes).map_err(|error| {
        Failure::new("file", format!("the plot {shown} cannot be written ({error})")).at(shown.clone())
    })
}
