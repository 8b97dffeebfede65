//! `rehearse`: what the study would show if its plan's assumptions held. For now the number of subjects.
//!
//! Invariant: it asks the plan on disk alone; neither roster nor readings are looked at, so nothing is unblinded and
//! nothing goes on the trail.

use std::time::Duration;

use indicatif::{ProgressBar, ProgressDrawTarget};
use revisant_analysis::distributions::Normal;
use revisant_analysis::power::{
    Alpha, Assumed, PlannedEffect, Planning, PowerError, ar1, compound_symmetry, covariance, power, sample_size,
};
use revisant_schema::plan::{Analysis, Assume, AssumedCorrelation, AssumedMeans, Method, Plan, VisitIx};

use super::Done;
use super::collect::progress_bar;
use crate::args::{PlannedEffect as Asked, Rehearse};
use crate::error::{Exit, Failure};
use crate::intake;
use crate::report::rehearse::{Number, Sized};
use crate::report::text::count;
use crate::simulate::{Simulated, Study};
use crate::study::{Context, unknown};

/// Studies that are simulated unless somebody says otherwise.
const USUAL_RUNS: u32 = 4000;
/// Fewer say next to nothing.
const FEWEST_RUNS: u32 = 200;
/// How often the number is moved to where simulated studies have the wanted power.
const MOST_STEPS: usize = 4;
/// Then no more readings than these are made up in all, which takes seconds.
const USUAL_READINGS: usize = 20_000_000;
/// A simulated study with more readings would take more memory than its answer is worth.
const MOST_READINGS: usize = 2_000_000;

/// Runs it.
pub fn run(context: &mut Context<'_, '_>, args: &Rehearse) -> Done {
    let later = |what: &str| Err(Failure::not_yet(format!("{what} comes with a later version")));
    match (args.size, args.boundaries, args.blinded) {
        (true, ..) => size(context, args),
        (_, true, _) => later("rehearsing the boundaries of the planned looks"),
        (_, _, true) => later("the number of subjects by the blinded variance"),
        _ => later("rehearsing the whole study")
            .map_err(|failure| failure.then("`revisant rehearse --size` gives the number of subjects")),
    }
}

fn size(context: &mut Context<'_, '_>, args: &Rehearse) -> Done {
    let study = context.folder()?.to_path_buf();
    let loaded = intake::load(context.world.as_ref(), &study)?;
    let asked = Question::of(&loaded.plan, args)?;
    let sized = asked.answer(context, &loaded.plan, args)?;
    match context.out.json {
        true => context.out.json(&sized.json(&loaded.files.sha256()))?,
        false => context.out.text(&sized.text(context.out.width))?,
    }
    Ok(Exit::Done)
}

/// What is asked, with all that the plan says of it.
struct Question<'p> {
    analysis: Option<&'p Analysis>,
    assume: &'p Assume,
    visits: Vec<VisitIx>,
    /// The arms' codes; none in one group.
    arms: Vec<String>,
    assumed: Assumed,
    effect: PlannedEffect,
    alpha: f64,
}

impl<'p> Question<'p> {
    fn of(plan: &'p Plan, args: &Rehearse) -> Result<Self, Failure> {
        let Some(assume) = &plan.assume else {
            return Err(Failure::refused("the plan assumes nothing about the readings")
                .at("[assume]")
                .then("write means, SDs and correlation into [assume]"));
        };
        let analysis = args.analysis.as_deref().map(|code| analysis(plan, code)).transpose()?;
        let listed = assume.sd.len();
        let (visits, places) = visits(plan, analysis, listed)?;
        let (arms, means): (Vec<String>, Vec<&Vec<f64>>) = match &assume.means {
            AssumedMeans::OneGroup(means) => (vec![], vec![means]),
            AssumedMeans::ByArm(arms) => arms.iter().map(|(arm, means)| (arm.clone(), means)).unzip(),
        };
        if means.iter().any(|own| own.len() != listed) {
            return Err(Failure::refused("the means and the SDs are of different numbers of visits").at("[assume]"));
        }
        let chosen = |list: &[f64]| places.iter().filter_map(|at| list.get(*at).copied()).collect::<Vec<f64>>();
        let correlation = correlation(&assume.correlation, listed);
        let correlation: Vec<Vec<f64>> =
            places.iter().filter_map(|at| correlation.get(*at)).map(|row| chosen(row)).collect();
        let means = means.into_iter().map(|own| chosen(own)).collect();
        let assumed = Assumed::new(means, covariance(&chosen(&assume.sd), &correlation))
            .map_err(|error| Failure::refused(format!("nothing can be worked out: {error}")).at("[assume]"))?;
        let effect = effect(args.effect, analysis, arms.len())?;
        Ok(Self { alpha: alpha(args.alpha, analysis), analysis, assume, visits, arms, assumed, effect })
    }

    fn answer(&self, context: &Context<'_, '_>, plan: &Plan, args: &Rehearse) -> Result<Sized, Failure> {
        let level = Alpha::new(self.alpha).map_err(|error| unusable(&error))?;
        let planning = Planning::new(self.alpha, self.assume.power, self.assume.dropout).map_err(|e| unusable(&e))?;
        let found = sample_size(&self.assumed, self.effect, planning).map_err(|error| self.out_of_reach(&error))?;
        let target = plan.study.enrol.as_ref().map(|enrol| enrol.target as usize);
        let runs = self.runs(args.runs, found.enrolled.max(target.unwrap_or(0)));
        let trial = Trial { question: self, context, level, runs, seed: args.seed };
        let wanted = trial.number(found.enrolled, self.each(found.per_group))?;
        let planned = target.map(|target| trial.planned(target)).transpose()?;
        let by_simulation = trial.by_simulation(&wanted, found.per_group)?;
        Ok(self.sized(plan, wanted, by_simulation, planned))
    }

    /// So many in each group.
    fn each(&self, per_group: usize) -> Vec<usize> {
        vec![per_group; self.assumed.groups()]
    }

    /// As asked; else so many that the studies are made up within seconds.
    fn runs(&self, asked: Option<u32>, enrolled: usize) -> u32 {
        let readings = enrolled.saturating_mul(self.assumed.visits()).max(1);
        let affordable = u32::try_from(USUAL_READINGS / readings).unwrap_or(USUAL_RUNS);
        asked.unwrap_or_else(|| affordable.clamp(FEWEST_RUNS, USUAL_RUNS))
    }

    fn sized(&self, plan: &Plan, wanted: Number, by_simulation: Option<Number>, planned: Option<Number>) -> Sized {
        let visits = self.visits.iter().filter_map(|visit| plan.visits.get(*visit));
        let variances = self.assumed.covariance().iter().enumerate().filter_map(|(at, row)| row.get(at));
        Sized {
            study: plan.study.code.clone(),
            analysis: self.analysis.map(|it| it.code.clone()),
            mixed: self.analysis.is_some_and(|it| it.method == Method::MixedModel),
            ignores_arms: self.assumed.groups() > 1 && self.analysis.is_some_and(|it| it.between.is_empty()),
            unit: self.analysis.and_then(|it| plan.measures.get(it.measure)).map(|it| it.unit.clone()),
            effect: self.effect,
            alpha: self.alpha,
            visits: visits.map(|visit| visit.code.clone()).collect(),
            arms: self.arms.clone(),
            means: self.assumed.means().to_vec(),
            sds: variances.map(|variance| variance.sqrt()).collect(),
            correlation: self.assume.correlation.clone(),
            dropout: self.assume.dropout,
            power: self.assume.power,
            wanted,
            by_simulation,
            planned,
        }
    }

    /// Why no number of subjects does, in the words of the plan.
    fn out_of_reach(&self, error: &PowerError) -> Failure {
        let what = match error {
            PowerError::OneVisit => "a change between visits takes at least two visits".to_owned(),
            PowerError::NoEffect => format!(
                "the assumed means have no effect of {}, so no number of subjects can show it",
                crate::report::rehearse::name(self.effect)
            ),
            PowerError::OutOfReach { .. } => {
                format!("a power of {} takes more than a million subjects a group", self.assume.power)
            }
            other => other.to_string(),
        };
        Failure::refused(what).at("[assume]")
    }
}

/// Numbers of subjects tried, by formula and by simulation.
struct Trial<'t, 'c, 'w> {
    question: &'t Question<'t>,
    context: &'t Context<'c, 'w>,
    level: Alpha,
    runs: u32,
    seed: u64,
}

impl Trial<'_, '_, '_> {
    fn number(&self, enrolled: usize, sizes: Vec<usize>) -> Result<Number, Failure> {
        let Question { assumed, effect, .. } = self.question;
        let formula = power(assumed, *effect, &sizes, self.level).map_err(|error| unusable(&error))?;
        Ok(Number { simulated: self.simulate(&sizes)?, enrolled, sizes, formula })
    }

    /// So many enrolled, as evenly in the groups as they go; those who drop out are not complete.
    fn planned(&self, target: usize) -> Result<Number, Failure> {
        let groups = self.question.assumed.groups();
        // 40 of 50 stay with a dropout of 0.2, whatever the last digit of the product says.
        let complete = (target as f64 * (1.0 - self.question.assume.dropout) * (1.0 + 1e-12)).floor() as usize;
        let size = |group: usize| complete / groups + usize::from(group < complete % groups);
        let sizes: Vec<usize> = (0..groups).map(size).collect();
        if sizes.contains(&0) {
            let what = format!("of {} planned too few would be complete", count(target as u64, "subject"));
            return Err(Failure::refused(what).at("enrol"));
        }
        self.number(target, sizes)
    }

    /// The number that simulated studies ask for, where it is another than the formula's. Power rises with the root of
    /// the number about as the normal distribution has it; a few steps of that arrive within what chance leaves open.
    fn by_simulation(&self, wanted: &Number, per_group: usize) -> Result<Option<Number>, Failure> {
        let power = self.question.assume.power;
        let mut each = per_group;
        let mut found: Option<Number> = None;
        for _ in 0..MOST_STEPS {
            let Some(simulated) = found.as_ref().unwrap_or(wanted).simulated else { break };
            let (lower, upper) = simulated.interval();
            if lower <= power && power <= upper {
                break;
            }
            let next = self.next(each, simulated.power());
            if next == each {
                break;
            }
            each = next;
            let dropout = self.question.assume.dropout;
            let enrolled = (each as f64 / (1.0 - dropout) * (1.0 - 1e-12)).ceil() as usize;
            let sizes = self.question.each(each);
            found = Some(self.number(enrolled.saturating_mul(sizes.len()), sizes)?);
        }
        Ok(found)
    }

    fn next(&self, each: usize, reached: f64) -> usize {
        let z = |share: f64| Normal.quantile(share.clamp(0.001, 0.999)).unwrap_or(0.0);
        let rejects = z(1.0 - self.level.level() / 2.0);
        let ratio = (z(self.question.assume.power) + rejects) / (z(reached) + rejects);
        // A power near alpha says little about how far there is to go.
        let factor = if ratio.is_finite() && ratio > 0.0 { ratio.powi(2).clamp(0.25, 4.0) } else { 4.0 };
        ((each as f64 * factor).ceil() as usize).max(2)
    }

    /// `None` where a study has too many readings to be made up thousands of times.
    fn simulate(&self, sizes: &[usize]) -> Result<Option<Simulated>, Failure> {
        let Question { assumed, effect, .. } = self.question;
        if sizes.iter().sum::<usize>().saturating_mul(assumed.visits()) > MOST_READINGS {
            return Ok(None);
        }
        let study = Study { assumed, effect: *effect, sizes, alpha: self.level };
        let bar = Bar::new(self.context, self.runs);
        let found = study.simulate(self.runs, self.seed, || bar.step());
        bar.bar.finish_and_clear();
        found.map(Some).map_err(|error| Failure::refused(format!("such a study cannot be simulated: {error}")))
    }
}

fn unusable(error: &PowerError) -> Failure {
    match error {
        PowerError::Alpha(_) => Failure::usage(error.to_string()).at("--alpha"),
        _ => Failure::refused(error.to_string()).at("[assume]"),
    }
}

/// The analysis of this code, which must be one whose number of subjects can be worked out.
fn analysis<'p>(plan: &'p Plan, code: &str) -> Result<&'p Analysis, Failure> {
    let known = plan.analyses.iter().map(|analysis| analysis.code.as_str());
    let analysis = plan.analysis(code).ok_or_else(|| unknown("analysis", code, known))?;
    let refused = |what: String| Err(Failure::refused(format!("{code} {what}")).at(code));
    if matches!(analysis.method, Method::Friedman | Method::Agreement) {
        let method = analysis.method.name();
        return refused(format!("is by the method {method}; the number of subjects is for an F test over visits"));
    }
    if !analysis.within.iter().any(|factor| factor == "visit") {
        return refused("does not compare visits, and [assume] speaks of nothing else".to_owned());
    }
    match analysis.between.iter().find(|factor| *factor != "arm") {
        Some(factor) => refused(format!("compares groups by {factor}, of which [assume] says nothing")),
        None => Ok(analysis),
    }
}

/// The visits that count, and their places in the lists of `[assume]`, which name all visits of the plan or those of
/// the analysis (with its baseline, where that is a covariate).
fn visits(plan: &Plan, analysis: Option<&Analysis>, listed: usize) -> Result<(Vec<VisitIx>, Vec<usize>), Failure> {
    let all: Vec<VisitIx> = (0..plan.visits.len()).collect();
    let Some(analysis) = analysis else { return without_analysis(plan, all, listed) };
    let with_baseline = |baseline: VisitIx| {
        let mut visits = analysis.visits.clone();
        visits.push(baseline);
        visits.sort_unstable();
        visits.dedup();
        visits
    };
    let baseline = analysis.mixed.as_ref().and_then(|mixed| mixed.baseline);
    let lists = [Some(all), Some(analysis.visits.clone()), baseline.map(with_baseline)];
    let Some(named) = lists.into_iter().flatten().find(|list| list.len() == listed) else {
        let used = analysis.visits.len();
        let what = format!("[assume] lists {listed} visits, and {} uses {used}", analysis.code);
        return Err(Failure::refused(what).at(analysis.code.clone()).then("name another with --analysis"));
    };
    let places = named.iter().enumerate().filter(|(_, visit)| analysis.visits.contains(visit));
    let places: Vec<usize> = places.map(|(place, _)| place).collect();
    Ok((analysis.visits.clone(), places))
}

/// All visits of the plan, or else those of the one analysis that has so many.
fn without_analysis(plan: &Plan, all: Vec<VisitIx>, listed: usize) -> Result<(Vec<VisitIx>, Vec<usize>), Failure> {
    let places = || (0..listed).collect();
    if all.len() == listed {
        return Ok((all, places()));
    }
    let mut fitting: Vec<&Vec<VisitIx>> =
        plan.analyses.iter().map(|it| &it.visits).filter(|visits| visits.len() == listed).collect();
    fitting.dedup();
    match fitting.as_slice() {
        [one] => Ok(((*one).clone(), places())),
        _ => {
            let what = format!("[assume] lists {listed} visits, and the plan does not settle which");
            Err(Failure::refused(what).at("[assume]").then("name the analysis with --analysis"))
        }
    }
}

fn correlation(correlation: &AssumedCorrelation, visits: usize) -> Vec<Vec<f64>> {
    match correlation {
        AssumedCorrelation::Ar1(rho) => ar1(visits, *rho),
        AssumedCorrelation::CompoundSymmetry(rho) => compound_symmetry(visits, *rho),
        AssumedCorrelation::Matrix(matrix) => matrix.clone(),
    }
}

fn effect(asked: Option<Asked>, analysis: Option<&Analysis>, arms: usize) -> Result<PlannedEffect, Failure> {
    let by_arm = arms > 1 && analysis.is_none_or(|it| it.between.iter().any(|factor| factor == "arm"));
    match asked {
        None if by_arm => Ok(PlannedEffect::Interaction),
        None | Some(Asked::Visit) => Ok(PlannedEffect::Within),
        Some(Asked::ArmByVisit) if by_arm => Ok(PlannedEffect::Interaction),
        Some(Asked::Arm) if by_arm => Ok(PlannedEffect::Between),
        Some(_) => {
            let what = match analysis.filter(|_| arms > 1) {
                Some(analysis) => format!("{} does not compare arms", analysis.code),
                None => "the plan has no two arms to compare".to_owned(),
            };
            Err(Failure::usage(what).at("--effect").then("ask for --effect visit"))
        }
    }
}

/// As asked; else what the confidence of the analysis leaves, without what the arithmetic of doubles adds to it.
fn alpha(asked: Option<f64>, analysis: Option<&Analysis>) -> f64 {
    let left = |analysis: &Analysis| ((1.0 - analysis.confidence) * 1e9).round() / 1e9;
    asked.or_else(|| analysis.map(left)).unwrap_or(0.05)
}

/// A bar that shows itself only once it has taken a second.
struct Bar {
    bar: ProgressBar,
    shown: std::cell::Cell<bool>,
}

impl Bar {
    fn new(context: &Context<'_, '_>, runs: u32) -> Self {
        let bar = progress_bar(context, "studies simulated");
        let hidden = bar.is_hidden();
        bar.set_draw_target(ProgressDrawTarget::hidden());
        bar.set_length(u64::from(runs));
        Self { bar, shown: std::cell::Cell::new(hidden) }
    }

    fn step(&self) {
        self.bar.inc(1);
        if !self.shown.get() && self.bar.elapsed() > Duration::from_secs(1) {
            self.shown.set(true);
            self.bar.set_draw_target(ProgressDrawTarget::stderr());
        }
    }
}
