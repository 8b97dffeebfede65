//! The plan as used: checked, with every code resolved.
//!
//! Invariants: a value of these types is only made by [`super::parse`] from a plan without faults, so whoever holds
//! one may rely on it: codes are unique, every index points into the list it names, no two visits' windows overlap.

use std::collections::BTreeMap;
use std::path::PathBuf;
use std::time::Duration;

use chrono::{NaiveDate, TimeDelta};
use chrono_tz::Tz;
use regex::Regex;

/// The position of a measure in [`Plan::measures`].
pub type MeasureIx = usize;
/// The position of a visit in [`Plan::visits`].
pub type VisitIx = usize;

/// One sound plan.
#[derive(Debug, Clone)]
pub struct Plan {
    /// `[study]`
    pub study: Study,
    /// `[subject]`
    pub subject: SubjectRule,
    /// `[[arm]]`, in the order of the plan.
    pub arms: Vec<Arm>,
    /// `[[measure]]`, in the order of the plan.
    pub measures: Vec<Measure>,
    /// `[[visit]]`, in the order of the plan.
    pub visits: Vec<Visit>,
    /// `[[instrument]]`, in the order of the plan.
    pub instruments: Vec<Instrument>,
    /// `[[analysis]]`, in the order of the plan.
    pub analyses: Vec<Analysis>,
    /// `[interim]`
    pub interim: Option<Interim>,
    /// `[assume]`
    pub assume: Option<Assume>,
}

/// `[study]`
#[derive(Debug, Clone)]
pub struct Study {
    /// The study's code, as written.
    pub code: String,
    /// Its title; empty when not given.
    pub title: String,
    /// The zone of the study centre: whose local day decides the visit.
    pub time_zone: Tz,
    /// Planned enrolment.
    pub enrol: Option<Enrol>,
    /// Whether the roster may show arms.
    pub allocation: Allocation,
}

/// `enrol = { target, from, until }`
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Enrol {
    /// Planned number of subjects.
    pub target: u32,
    /// First day of enrolment.
    pub from: NaiveDate,
    /// Last day of enrolment.
    pub until: NaiveDate,
}

/// Whether the roster has a column `arm`.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Allocation {
    /// Encrypted until a look or the close opens it.
    Sealed,
    /// The roster has a column `arm`.
    Open,
}

/// `[subject]`
#[derive(Debug, Clone)]
pub struct SubjectRule {
    /// Anchored at both ends: the whole code must match, after tidying.
    pub pattern: Regex,
    /// The pattern as the plan has it.
    pub pattern_text: String,
    /// How a code as exported is tidied, in this order.
    pub normalise: Vec<Tidy>,
    /// Where day 0 lies.
    pub anchor: Anchor,
    /// Roster columns that analyses may use, in the order of the plan.
    pub attributes: Vec<Attribute>,
}

/// One step of tidying a subject's code.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Tidy {
    /// Take away Unicode white space at both ends.
    Trim,
    /// Upper-case.
    Upper,
    /// `_` and space become `-`.
    Dash,
}

/// Where a subject's day 0 lies.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Anchor {
    /// The day of enrolment on the roster.
    Enrolment,
    /// The first session of this visit.
    Visit(VisitIx),
}

/// One attribute of the roster.
#[derive(Debug, Clone, PartialEq)]
pub struct Attribute {
    /// The roster's column.
    pub code: String,
    /// What a cell may hold.
    pub kind: AttributeKind,
}

/// What an attribute's cell may hold.
#[derive(Debug, Clone, PartialEq)]
pub enum AttributeKind {
    /// A number.
    Number,
    /// One of these levels; the first is the reference.
    Levels(Vec<String>),
}

/// `[[arm]]`
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Arm {
    /// The arm's code.
    pub code: String,
    /// What people read; the code when not given.
    pub label: String,
}

/// `[[measure]]`
#[derive(Debug, Clone)]
pub struct Measure {
    /// The measure's code.
    pub code: String,
    /// What people read; the code when not given.
    pub label: String,
    /// UCUM code.
    pub unit: String,
    /// Bounds within which a value is plausible, both ends in, in `unit`.
    pub plausible: Option<(f64, f64)>,
    /// A change since the subject's last session that is larger than this is flagged, in `unit`.
    pub step: Option<f64>,
    /// Replicates expected in a session (and condition).
    pub replicates: u32,
    /// How a cell's replicates become one number.
    pub summary: Summary,
    /// Replicates without which a cell counts as missing in analyses.
    pub at_least: u32,
    /// Within-session factors in the order of the plan.
    pub conditions: Vec<ConditionFactor>,
    /// What is done with `<x`.
    pub below_limit: LimitRule,
    /// What is done with `>x`.
    pub above_limit: LimitRule,
}

impl Measure {
    /// Every combination of levels, the last factor running fastest; one empty combination when there is no factor.
    pub fn cells(&self) -> Vec<Vec<usize>> {
        self.conditions.iter().fold(vec![vec![]], |cells, factor| {
            cells
                .iter()
                .flat_map(|cell| {
                    (0..factor.levels.len()).map(move |level| {
                        let mut cell: Vec<usize> = cell.clone();
                        cell.push(level);
                        cell
                    })
                })
                .collect()
        })
    }
}

/// One within-session factor of a measure.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct ConditionFactor {
    /// The factor's code (`hand`).
    pub code: String,
    /// Its levels (`left`, `right`), in the order of the plan.
    pub levels: Vec<String>,
}

/// How the replicates of one cell become one number.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Summary {
    /// Arithmetic mean.
    Mean,
    /// Median; the mean of the two middle ones when there is an even number.
    Median,
    /// Smallest.
    Min,
    /// Largest.
    Max,
    /// First by time, then by replicate number.
    First,
    /// Last by time, then by replicate number.
    Last,
}

/// What is done with a value beyond a limit of detection (`<x`, `>x`).
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum LimitRule {
    /// Held for a person.
    Hold,
    /// Filed as the limit.
    Limit,
    /// Filed as half the limit.
    Half,
    /// Not filed.
    Missing,
}

/// `[[visit]]`
#[derive(Debug, Clone)]
pub struct Visit {
    /// The visit's code.
    pub code: String,
    /// What people read; the code when not given.
    pub label: String,
    /// Days after the anchor, or after `after`'s session.
    pub day: i64,
    /// On time: days around `day`, both ends in.
    pub window: (i64, i64),
    /// Still this visit: days around `day`, both ends in; contains `window`.
    pub counts: (i64, i64),
    /// Measures due at this visit, in the order of the plan.
    pub measures: Vec<MeasureIx>,
    /// Which of several sessions counts.
    pub choose: Choose,
    /// For [`Choose::Nearest`]: which of two equally near sessions counts.
    pub tie: Tie,
    /// Counted from this visit's actual session instead of the anchor; always an earlier visit of the plan.
    pub after: Option<VisitIx>,
}

/// Which of several sessions for one visit counts.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Choose {
    /// The one nearest to the visit's day.
    Nearest,
    /// The first.
    First,
    /// The last.
    Last,
}

/// Which of two equally near sessions counts.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Tie {
    /// The later.
    Later,
    /// The earlier.
    Earlier,
}

/// `[[instrument]]`
#[derive(Debug, Clone)]
pub struct Instrument {
    /// The instrument's code.
    pub code: String,
    /// What people read; the code when not given.
    pub label: String,
    /// The export folder: absolute, or relative to the plan's own folder.
    pub folder: PathBuf,
    /// The glob as written.
    pub files: String,
    /// Matches an export's file name (no `/` in the glob) or its path below `folder` (with `/`); case-sensitive.
    pub files_glob: globset::GlobMatcher,
    /// How long a file must have rested before it is read.
    pub rest: Duration,
    /// First and last day of use; outside, it is not flagged as quiet.
    pub used: Option<(Option<NaiveDate>, Option<NaiveDate>)>,
    /// The serial number that its exports must bear.
    pub serial: Option<Serial>,
    /// Bytes; a larger export is held.
    pub largest: u64,
    /// Known errors of its values, in the order of the plan.
    pub correct: Vec<Correction>,
    /// Flagged when it exports nothing for so long while sessions take place.
    pub silent: Option<TimeDelta>,
    /// What another export of the same rows means.
    pub re_export: ReExport,
    /// What a re-exported value that differs means.
    pub changed: Changed,
    /// The zone of its clock.
    pub time_zone: Tz,
    /// Known errors of its clock, sorted by `from`.
    pub clock: Vec<ClockError>,
    /// How its exports are read.
    pub reader: Reader,
}

impl Instrument {
    /// The correction of a measure's numbers that holds on a local day.
    pub fn correction(&self, measure: MeasureIx, day: NaiveDate) -> Option<&Correction> {
        let holds = |entry: &&Correction| entry.from <= day && entry.measure.is_none_or(|only| only == measure);
        self.correct.iter().filter(holds).max_by_key(|entry| entry.from)
    }

    /// Whether the plan has it in use on a day.
    pub fn in_use_on(&self, day: NaiveDate) -> bool {
        let (from, until) = self.used.unwrap_or_default();
        from.is_none_or(|from| from <= day) && until.is_none_or(|until| day <= until)
    }
}

/// `serial = { preamble, is }`
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Serial {
    /// The preamble's key.
    pub preamble: String,
    /// The expected value.
    pub is: String,
}

/// A known error of an instrument's values: the value as exported stays, `number * times + plus` is used.
#[derive(Debug, Clone, PartialEq)]
pub struct Correction {
    /// The measure corrected; `None` for all.
    pub measure: Option<MeasureIx>,
    /// First local day on which it holds.
    pub from: NaiveDate,
    /// Factor.
    pub times: f64,
    /// Summand, in the measure's unit.
    pub plus: f64,
}

/// What another export of rows already seen means.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum ReExport {
    /// Each file holds new rows.
    New,
    /// The same rows again, and more.
    Grows,
    /// A path's newest bytes are the whole truth of that path.
    Replaces,
}

/// What a re-exported value that differs means.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Changed {
    /// Held as `changed-value`.
    Hold,
    /// The newer supersedes the older.
    Supersede,
}

/// A known error of an instrument's clock.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct ClockError {
    /// First day, by the instrument's own clock, on which it holds.
    pub from: NaiveDate,
    /// Added to the moment.
    pub add: TimeDelta,
}

/// `[instrument.reader]`
#[derive(Debug, Clone)]
pub struct Reader {
    /// The kind of file, with what only that kind has.
    pub format: Format,
    /// How bytes become text (text formats).
    pub encoding: Encoding,
    /// The decimal mark of numbers written as text.
    pub decimal_mark: char,
    /// The thousands mark of numbers written as text.
    pub group_mark: Option<char>,
    /// Where the header is (tables).
    pub header: Header,
    /// What a last line without a line end means (text tables).
    pub last_line: LastLine,
    /// Whether a row of units stands under the header (tables).
    pub units_row: bool,
    /// A line that ends the table.
    pub stop_at: Option<Regex>,
    /// Texts that stand for no value, after trimming.
    pub missing: Vec<String>,
    /// Rows that are no readings.
    pub ignore: Vec<Ignore>,
    /// Where the subject is found.
    pub subject: Place,
    /// Where the moment is found.
    pub taken_at: Place,
    /// How the moment is written.
    pub stamp: Stamp,
    /// Where the visit's label is found.
    pub visit: Option<Place>,
    /// Where the replicate's number is found.
    pub replicate: Option<Place>,
    /// Where the operator is found.
    pub operator: Option<Place>,
    /// The values of a row, in the order of the plan.
    pub values: Vec<ValueRule>,
}

/// The kind of an export.
#[derive(Debug, Clone)]
pub enum Format {
    /// Delimited text; `None` = the one of `, ; tab |` under which the header holds every named column.
    Delimited {
        /// The delimiter.
        delimiter: Option<u8>,
    },
    /// Columns by position.
    FixedWidth {
        /// Given columns; empty when the header's labels show where columns begin.
        columns: Vec<FixedColumn>,
    },
    /// A spreadsheet workbook.
    Workbook {
        /// Which sheet.
        sheet: Sheet,
    },
    /// One JSON document.
    Json {
        /// Where the rows are.
        rows: String,
    },
    /// One JSON value a line.
    JsonLines {
        /// Where the rows are inside each line; empty = the line itself.
        rows: String,
    },
    /// One XML document.
    Xml {
        /// Where the rows are.
        rows: String,
    },
}

impl Format {
    /// The format's name in the plan.
    pub fn name(&self) -> &'static str {
        match self {
            Self::Delimited { .. } => "delimited",
            Self::FixedWidth { .. } => "fixed-width",
            Self::Workbook { .. } => "workbook",
            Self::Json { .. } => "json",
            Self::JsonLines { .. } => "json-lines",
            Self::Xml { .. } => "xml",
        }
    }
}

/// One column of a fixed-width export.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct FixedColumn {
    /// Its name.
    pub name: String,
    /// First character, from 1.
    pub from: usize,
    /// Last character, included.
    pub to: usize,
}

/// Which sheet of a workbook.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Sheet {
    /// By name.
    Named(String),
    /// By number, from 1.
    Number(usize),
}

/// How bytes become text.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Encoding {
    /// Byte-order mark, else valid UTF-8, else held.
    Auto,
    /// A WHATWG encoding.
    Label(&'static encoding_rs::Encoding),
}

/// Where a table's header is.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Header {
    /// The first line that begins so (text), or whose first non-empty cell does (workbook).
    StartsWith(String),
    /// At this line, from 1, over so many lines.
    Row {
        /// Its first line, from 1.
        row: u64,
        /// How many lines it takes; their cells are joined by a space.
        lines: u64,
    },
    /// There is none: columns are "1", "2", …
    None,
}

/// What a last line without a line end means.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum LastLine {
    /// Held as `unfinished-row`.
    Finished,
    /// Read as it stands.
    Whole,
}

/// A rule for rows that are no readings.
#[derive(Debug, Clone)]
pub enum Ignore {
    /// The column's text, trimmed, equals this.
    Equals {
        /// The column.
        column: String,
        /// The text.
        text: String,
    },
    /// The column's text, trimmed, matches (anywhere).
    Matches {
        /// The column.
        column: String,
        /// The expression.
        regex: Regex,
    },
    /// The line as written matches (text formats).
    Line(Regex),
}

/// Where something is found, and what its texts mean.
#[derive(Debug, Clone)]
pub struct Place {
    /// Where the text is.
    pub source: Source,
    /// "as written" -> "as in the plan"; a text that is not in it stands for itself.
    pub map: BTreeMap<String, String>,
}

/// Where a text is.
#[derive(Debug, Clone)]
pub enum Source {
    /// A column (or a path inside a row).
    Column(String),
    /// Several columns, joined by a space.
    Columns(Vec<String>),
    /// The value of a key above the header.
    Preamble(String),
    /// The expression's group in the file's name.
    FileName(Regex),
    /// The expression's group in the folder below the instrument's.
    Folder(Regex),
    /// Always this.
    Fixed(String),
    /// Several places, joined by a space.
    Parts(Vec<Place>),
}

impl Source {
    /// The columns that must be in the header.
    pub fn columns(&self) -> Vec<&str> {
        match self {
            Self::Column(name) => vec![name],
            Self::Columns(names) => names.iter().map(String::as_str).collect(),
            Self::Parts(places) => places.iter().flat_map(|place| place.source.columns()).collect(),
            Self::Preamble(_) | Self::FileName(_) | Self::Folder(_) | Self::Fixed(_) => vec![],
        }
    }
}

/// How a moment is written.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Stamp {
    /// ISO 8601, with or without offset; a date alone too.
    Iso,
    /// A workbook's day numbers.
    Serial,
    /// strftime.
    Pattern(String),
}

/// One value of a row.
#[derive(Debug, Clone)]
pub struct ValueRule {
    /// Which measure.
    pub measure: MeasureRule,
    /// The column that holds the value.
    pub column: String,
    /// Its unit.
    pub unit: UnitRule,
    /// The level of each factor named, by the factor's code. Every factor of a fixed measure is here.
    pub condition: Vec<(String, LevelRule)>,
    /// The replicate's number, for a column a trial.
    pub replicate: Option<u32>,
}

/// Which measure a value is of.
#[derive(Debug, Clone)]
pub enum MeasureRule {
    /// Always this.
    Fixed(MeasureIx),
    /// As a place says, by the measure's code.
    Found(Place),
}

/// The level of one factor.
#[derive(Debug, Clone)]
pub enum LevelRule {
    /// Always this level, by its code.
    Fixed(String),
    /// As a place says.
    Found(Place),
}

/// The unit of a value as exported.
#[derive(Debug, Clone)]
pub enum UnitRule {
    /// The measure's own, or what the units row says.
    Unsaid,
    /// Always this.
    Fixed {
        /// UCUM code.
        code: String,
        /// Conversion that overrides the known one.
        convert: Option<Affine>,
    },
    /// As a place says.
    Found {
        /// Where.
        place: Place,
        /// Conversion that overrides the known one.
        convert: Option<Affine>,
    },
}

/// `number * times + plus`
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Affine {
    /// Factor.
    pub times: f64,
    /// Summand, in the target unit.
    pub plus: f64,
}

/// `[[analysis]]`
#[derive(Debug, Clone)]
pub struct Analysis {
    /// Its code.
    pub code: String,
    /// The measure analysed.
    pub measure: MeasureIx,
    /// The method.
    pub method: Method,
    /// Within factors: `visit` and/or conditions' codes.
    pub within: Vec<String>,
    /// Between factors: `arm` and/or attributes' codes.
    pub between: Vec<String>,
    /// The visits used, in the order of the plan.
    pub visits: Vec<VisitIx>,
    /// Conditions averaged over first.
    pub average: Vec<String>,
    /// What becomes of sessions outside their window.
    pub off_window: OffWindow,
    /// Contrasts wanted, in the order written.
    pub contrasts: Vec<ContrastKind>,
    /// Adjustment of their p values.
    pub multiplicity: Multiplicity,
    /// Coverage of intervals, in (0, 1).
    pub confidence: f64,
    /// Sums of squares for unbalanced groups.
    pub sums: Sums,
    /// `agreement` only: over what readings are to agree.
    pub agree_over: AgreeOver,
    /// `mixed-model` only.
    pub mixed: Option<Mixed>,
}

/// The method of an analysis.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Method {
    /// Repeated-measures analysis of variance.
    RepeatedMeasures,
    /// Friedman's rank test.
    Friedman,
    /// A linear mixed model.
    MixedModel,
    /// Agreement and reliability.
    Agreement,
}

impl Method {
    /// The method's name in the plan and in results.
    pub fn name(self) -> &'static str {
        match self {
            Self::RepeatedMeasures => "repeated-measures",
            Self::Friedman => "friedman",
            Self::MixedModel => "mixed-model",
            Self::Agreement => "agreement",
        }
    }
}

/// What becomes of sessions outside their window in an analysis.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum OffWindow {
    /// Used; the result says how many.
    Use,
    /// Left out.
    Leave,
}

/// A family of contrasts.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum ContrastKind {
    /// Every level against every earlier one.
    Pairwise,
    /// Every level against the first.
    EachVsFirst,
    /// Orthonormal polynomial trends at the real spacing.
    Polynomial,
    /// Within each level of the other factors.
    Simple,
}

/// Adjustment of p values for many comparisons.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Multiplicity {
    /// None.
    None,
    /// Bonferroni.
    Bonferroni,
    /// Holm 1979.
    Holm,
    /// Benjamini & Hochberg 1995.
    BenjaminiHochberg,
}

/// Sums of squares for unbalanced groups.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Sums {
    /// Each effect after all others.
    Type3,
    /// Each effect after those that do not contain it.
    Type2,
}

/// Over what readings are to agree.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum AgreeOver {
    /// Visits.
    Visits,
    /// Replicates.
    Replicates,
    /// Instruments.
    Instruments,
}

/// What only a mixed model has.
#[derive(Debug, Clone)]
pub struct Mixed {
    /// A visit used as covariate instead of response.
    pub baseline: Option<VisitIx>,
    /// Attributes used as covariates.
    pub covariates: Vec<String>,
    /// Time as visits, or as days with this degree.
    pub time: Time,
    /// Whether every session counts, or the chosen one for each visit.
    pub all_sessions: bool,
    /// Covariance structures, tried in this order.
    pub covariance: Vec<Covariance>,
    /// One covariance for each level of this between factor.
    pub covariance_by: Option<String>,
    /// Degrees of freedom.
    pub df: DegreesOfFreedom,
    /// Sensitivity to readings missing not at random.
    pub sensitivity: Option<Sensitivity>,
}

/// How time enters a mixed model.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Time {
    /// A level for each visit.
    Visit,
    /// Real days from the anchor, as a polynomial.
    Days {
        /// Its degree.
        degree: u32,
    },
}

/// A structure of the within-subject covariance.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
#[expect(missing_docs, reason = "the names are the published ones, and the plan's")]
pub enum Covariance {
    Unstructured,
    CompoundSymmetry,
    Ar1,
    Toeplitz,
    HeterogeneousCompoundSymmetry,
    HeterogeneousAr1,
    HeterogeneousToeplitz,
    ExponentialInDays,
    RandomIntercept,
    RandomSlope,
}

/// Degrees of freedom of a mixed model's tests.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
#[expect(missing_docs, reason = "the names are the published ones, and the plan's")]
pub enum DegreesOfFreedom {
    KenwardRoger,
    Satterthwaite,
    BetweenWithin,
}

/// `sensitivity = { kind, … }`
#[derive(Debug, Clone, PartialEq)]
pub struct Sensitivity {
    /// The assumption about what was not seen.
    pub kind: SensitivityKind,
    /// Number of imputations.
    pub imputations: u32,
    /// Seed of the random numbers.
    pub seed: u64,
}

/// The assumption about readings that were not seen.
#[derive(Debug, Clone, PartialEq)]
pub enum SensitivityKind {
    /// As in the reference arm from then on.
    JumpToReference {
        /// The reference arm.
        reference: String,
    },
    /// Increments as in the reference arm.
    CopyIncrements {
        /// The reference arm.
        reference: String,
    },
    /// Worse by this much, in the measure's unit.
    Delta {
        /// The step.
        by: f64,
    },
}

/// `[interim]`
#[derive(Debug, Clone, PartialEq)]
pub struct Interim {
    /// The analysis, by its position in [`Plan::analyses`].
    pub analysis: usize,
    /// The planned effect, of one degree of freedom.
    pub effect: Effect,
    /// Error rate, over all sides.
    pub alpha: f64,
    /// 1 or 2.
    pub sides: u8,
    /// The boundary.
    pub boundary: Boundary,
    /// The planned looks, by rising information fraction.
    pub looks: Vec<PlannedLook>,
    /// How information is counted.
    pub information: Information,
    /// Futility.
    pub futility: Option<Futility>,
}

/// The planned effect.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Effect {
    /// Between two arms at a visit.
    Arms {
        /// The arm.
        arm: String,
        /// The reference arm.
        against: String,
        /// The visit.
        visit: VisitIx,
    },
    /// Between two visits of one group.
    Visits {
        /// The later visit.
        visit: VisitIx,
        /// The visit it is held against.
        against: VisitIx,
    },
}

/// How alpha is spent.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Boundary {
    /// A spending function (Lan & DeMets 1983).
    Spending(Spending),
    /// Wang & Tsiatis 1987, by its shape.
    Shape(f64),
}

/// A spending function.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Spending {
    /// Lan & DeMets' O'Brien-Fleming type.
    ObrienFlemingType,
    /// Lan & DeMets' Pocock type.
    PocockType,
    /// Kim & DeMets' power family.
    KimDemets(f64),
    /// Hwang, Shih & DeCani's family.
    HwangShihDecani(f64),
}

/// One planned look.
#[derive(Debug, Clone, PartialEq)]
pub struct PlannedLook {
    /// Its name.
    pub name: String,
    /// Information fraction, in (0, 1].
    pub at: f64,
}

/// How information is counted.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Information {
    /// One over the effect's squared standard error, with this maximum.
    Variance(f64),
    /// Subjects with the endpoint, with this maximum.
    Subjects(u32),
}

/// `futility = { … }`
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Futility {
    /// How beta is spent.
    pub spending: Spending,
    /// The power that defines beta.
    pub power: f64,
    /// Whether crossing it obliges to stop.
    pub binding: bool,
}

/// `[assume]`
#[derive(Debug, Clone, PartialEq)]
pub struct Assume {
    /// Means at each visit of the analysis: by arm, or of the one group.
    pub means: AssumedMeans,
    /// Standard deviations at each visit.
    pub sd: Vec<f64>,
    /// Correlation between visits.
    pub correlation: AssumedCorrelation,
    /// Share of subjects gone by the last visit.
    pub dropout: f64,
    /// Power wanted.
    pub power: f64,
}

/// Assumed means.
#[derive(Debug, Clone, PartialEq)]
pub enum AssumedMeans {
    /// One list for each arm, by its code.
    ByArm(Vec<(String, Vec<f64>)>),
    /// One group.
    OneGroup(Vec<f64>),
}

/// Assumed correlation between visits.
#[derive(Debug, Clone, PartialEq)]
pub enum AssumedCorrelation {
    /// First-order autoregressive.
    Ar1(f64),
    /// Equal.
    CompoundSymmetry(f64),
    /// A full matrix.
    Matrix(Vec<Vec<f64>>),
}

impl Plan {
    /// The measure with this code.
    pub fn measure(&self, code: &str) -> Option<(MeasureIx, &Measure)> {
        self.measures.iter().enumerate().find(|(_, measure)| measure.code == code)
    }

    /// The visit with this code.
    pub fn visit(&self, code: &str) -> Option<(VisitIx, &Visit)> {
        self.visits.iter().enumerate().find(|(_, visit)| visit.code == code)
    }

    /// The instrument with this code.
    pub fn instrument(&self, code: &str) -> Option<(usize, &Instrument)> {
        self.instruments.iter().enumerate().find(|(_, instrument)| instrument.code == code)
    }

    /// The analysis with this code.
    pub fn analysis(&self, code: &str) -> Option<&Analysis> {
        self.analyses.iter().find(|analysis| analysis.code == code)
    }
}

#[cfg(test)]
pub(crate) mod tests {
    use super::*;

    /// A plan with these visits and nothing else.
    pub(crate) fn empty(visits: Vec<Visit>) -> Plan {
        Plan {
            study: Study {
                code: "T".into(),
                title: String::new(),
                time_zone: Tz::UTC,
                enrol: None,
                allocation: Allocation::Sealed,
            },
            subject: SubjectRule {
                pattern: Regex::new("").unwrap(),
                pattern_text: String::new(),
                normalise: vec![],
                anchor: Anchor::Enrolment,
                attributes: vec![],
            },
            arms: vec![],
            measures: vec![],
            visits,
            instruments: vec![],
            analyses: vec![],
            interim: None,
            assume: None,
        }
    }
}
