//! The options of every command.
//!
//! Invariant: options are long, plain and few; every command has one line that says what it does, and an example.

use std::path::PathBuf;

use chrono::NaiveDate;
use clap::{Args as Group, Parser, Subcommand, ValueEnum};

use crate::moment::Moment;

/// Keeps, judges and analyses what was measured on the same subjects again and again.
#[derive(Debug, Parser)]
#[command(name = "revisant", version, disable_help_subcommand = true, max_term_width = 100)]
#[command(after_help = "\
Example:
  revisant new --study grip-study       write a plan
  revisant check --study grip-study     say what is wrong with it
  revisant roster import roster.csv --study grip-study --why \"first enrolments\"
  revisant collect --study grip-study   file what the instruments exported

A MOMENT is a date (2026-03-31), a local time of the study's zone (2026-03-31T14:00) or a moment of RFC 3339
(2026-03-31T14:00:00+01:00).
Exit status: 0 done, 1 failed, 2 usage error or unsound plan, 3 a check found something.
With --json a failure is {\"error\": {\"kind\", \"message\", \"where\"}} on standard error.")]
pub struct Args {
    /// The study's folder, which holds study.toml
    #[arg(long, value_name = "DIR", global = true, display_order = 901, default_value = ".")]
    pub study: PathBuf,
    /// Print the result as JSON
    #[arg(long, global = true, display_order = 902)]
    pub json: bool,
    /// Print nothing but what was asked for
    #[arg(long, global = true, display_order = 903)]
    pub quiet: bool,
    /// What to do.
    #[command(subcommand)]
    pub command: Command,
}

/// The commands.
#[derive(Debug, Subcommand)]
pub enum Command {
    /// Write a plan, study.toml, to begin with
    #[command(after_help = "\
Example:
  revisant new --study grip --code GR-1 --title \"Grip\" --zone Europe/London \\
    --subject GR-012 --measure grip:kg:3:2:95 --condition grip:hand=left,right \\
    --visit baseline:0 --visit week-4:28:-3:7 --instrument dyn-1:exports/dyn-1

On a terminal, what is not given is asked for; elsewhere --code, --zone, --measure and --visit are needed.
The plan is never overwritten.
JSON: {\"plan\": path, \"folders\": [path]}")]
    New(New),
    /// Draft an instrument's reader from sample exports
    #[command(after_help = "\
Example:
  revisant probe exports/dyn-1/*.csv --into study.toml

The columns are held against the plan: its subjects' pattern, visits, measures
and units. A line that is not certain says why after `# unsure:`; a line that a
person must complete says what after `# FILL IN:`. Until all of those are filled
in, `revisant check` refuses the plan and nothing is filed by it; a service that
is running goes on with the last sound plan. More exports make more certain.
Exit status 3 when something must be filled in, or a sample does not fit.
JSON: {\"code\", \"toml\", \"gaps\": [{\"key\", \"text\"}], \"unsure\",
\"misfits\": [{\"sample\", \"why\"}], \"preview\", \"into\"}")]
    Probe(Probe),
    /// Say what is wrong with the plan, and what a changed plan would change
    #[command(after_help = "\
Example:
  revisant check --study grip
  revisant check --study grip --sample exports/dyn-1/today.csv

Exit status 2 when the plan is unsound, 3 when it is sound and would change what is filed, or would hold
something of the sample.
JSON: {\"sound\", \"sha256\", \"warnings\": [fault], \"would_change\": [text]}; of a sample {\"export\", \"instrument\",
\"state\", \"lines\", \"readings\", \"first\": [reading], \"holds\": [hold], \"held_before\": [hold], …}")]
    Check(Check),
    /// Who is enrolled
    #[command(
        subcommand,
        after_help = "\
Example:
  revisant roster import roster.csv --why \"enrolments of March\""
    )]
    Roster(Roster),
    /// Read once all exports that wait, file what is sound, hold what is not
    #[command(after_help = "\
Example:
  revisant collect --study grip

JSON: {\"exports\": {state: count}, \"readings\": {\"filed\", \"already\", \"held\"}, \"seconds\"}")]
    Collect(Collect),
    /// What became of every export, and which instrument is quiet
    #[command(after_help = "\
Example:
  revisant status --strict

With --strict the exit status is 3 when no service is running or an instrument is quiet or unreachable.
JSON: {\"service\", \"exports\", \"readings\", \"files\", \"holds\", \"instruments\"}")]
    Status(Status),
    /// What was expected of every subject against what is there
    #[command(after_help = "\
Example:
  revisant completeness --on 2026-06-30 --strict

With --strict the exit status is 3 while somebody is incomplete and not accounted for.
JSON: {\"subjects\": [{\"subject\", \"status\", \"visits\"}], \"totals\", \"enrolment\"}")]
    Completeness(Completeness),
    /// Who is due now or soon
    #[command(after_help = "\
Example:
  revisant due --days 14

JSON: {\"on\", \"days\", \"due\": [{\"subject\", \"visit\", \"state\", \"from\", \"target\", \"until\", \"missing\"}]}")]
    Due(Due),
    /// Say why planned readings will not come
    #[command(after_help = "\
Example:
  revisant account QM-014 week-8 --why \"in hospital\"

JSON: {\"trail\", \"subject\", \"visit\", \"measure\"}")]
    Account(Account),
    /// What waits for a person, and deciding it
    #[command(
        args_conflicts_with_subcommands = true,
        after_help = "\
Example:
  revisant holds
  revisant holds show 12
  revisant holds decide 12 --subject QM-014 --why \"code misread; see visit log\"

JSON: [{\"hold\", \"reason\", \"state\", \"export\", \"where\", \"row\", \"likely\", \"since\"}]"
    )]
    Holds(Holds),
    /// The readings that are filed
    #[command(after_help = "\
Example:
  revisant readings --subject QM-014 --measure grip

JSON: [{\"reading\", \"subject\", \"visit\", \"session\", \"measure\", \"value\", \"unit\", \"state\", …}]")]
    Readings(Readings),
    /// Enter a reading by hand, when an instrument cannot export it
    #[command(
        override_usage = "revisant enter --subject <CODE> --measure <CODE> --value <NUMBER>\n                      --taken-at <MOMENT> --why <TEXT> [OPTIONS]",
        after_help = "\
Example:
  revisant enter --subject QM-014 --measure grip --condition hand=left \\
    --value 31.5 --taken-at 2026-03-31T09:40:00+01:00 --why \"export failed\"

JSON: {\"trail\", \"reading\"}"
    )]
    Enter(Enter),
    /// Correct whose a reading or a session is, its visit or its value; the original stays linked
    #[command(
        subcommand,
        after_help = "\
Example:
  revisant amend reading 812 --value 31.5 --why \"misread; see sheet\""
    )]
    Amend(Amend),
    /// Take readings out of use; they stay legible
    #[command(after_help = "\
Example:
  revisant strike 812 813 --why \"wrong grip position\"

JSON: {\"trail\", \"readings\": [number]}")]
    Strike(Strike),
    /// Undo a strike
    #[command(after_help = "\
Example:
  revisant restore 812 --why \"the position was right after all\"

JSON: {\"trail\", \"readings\": [number]}")]
    Restore(Strike),
    /// The way back from a reading to its bytes
    #[command(after_help = "\
Example:
  revisant provenance 812

JSON: the reading, with \"sha256\", \"bytes\": [from, to], \"line\", \"text\", \"history\": [{\"trail\", \"at\", \"who\", \"act\", \"why\"}]")]
    Provenance(Provenance),
    /// Named cut-offs of the data
    #[command(
        subcommand,
        after_help = "\
Example:
  revisant cut make interim-1 --why \"half of the subjects have week 12\""
    )]
    Cut(Cut),
    /// The audit trail
    #[command(
        args_conflicts_with_subcommands = true,
        after_help = "\
Example:
  revisant trail
  revisant trail verify

JSON: [{\"trail\", \"at\", \"who\", \"program\", \"act\", \"objects\", \"before\", \"after\", \"why\", \"hash\"}]"
    )]
    Trail(Trail),
    /// Run an analysis of the plan on what has come in
    #[command(after_help = "\
Example:
  revisant analyse grip-over-visits --plot profiles.svg
  revisant analyse grip-by-arm --checks

JSON: \"subjects\", \"cells\", \"decomposition\", \"effects\", \"if_unlinked\", \"contrasts\", \"data_state\", …; of several \
factors also \"simple_effects\" and \"sums\"; with --checks \"checks\": {\"residuals\", \"subjects\", \"influence\", \
\"missing\", \"thin_cells\"}")]
    Analyse(Analyse),
    /// Work out how many subjects the study needs, from what its plan assumes
    #[command(after_help = "\
Example:
  revisant rehearse --size --effect arm:visit --runs 10000 --seed 7

It needs [assume] in the plan, and neither a roster nor records. The power of an
F test over complete subjects, by the non-central F with the assumed epsilon, is
held against simulated studies that are analysed with the Greenhouse-Geisser
correction. The same seed gives the same studies.
JSON: {\"effect\", \"alpha\", \"visits\", \"groups\", \"assumed\", \"epsilon\",
\"wanted\": {\"power\", \"enrolled\", \"enrolled_per_group\", \"complete\", \"per_group\",
\"sizes\", \"formula\": {\"power\", \"noncentrality\", \"df\", \"error_df\", \"critical_f\"},
\"simulation\": {\"runs\", \"seed\", \"rejected\", \"power\", \"ci\"} or null}, and in the same
shape or null \"by_simulation\" (the number that simulated studies ask for, where
it is another) and \"planned\" (enrolment's target); \"sentences\", \"notes\"}")]
    Rehearse(Rehearse),
    /// Run an invented study on a fresh copy, to see all of this at work
    #[command(after_help = "\
Example:
  revisant demo --into demo-study

It writes into a new folder and nowhere else, and takes under half a minute.
JSON: {\"folder\", \"seed\", \"on\", \"steps\", \"status\", \"holds\", \"completeness\", \"due\", \"analysis\", \"verified\", \"plot\",
\"seconds\"}, each as its own command gives it")]
    Demo(Demo),
}

/// The records as they once stood.
#[derive(Debug, Clone, Default, Group)]
pub struct Then {
    /// The records as they stood at this cut
    #[arg(long, value_name = "NAME", conflicts_with = "as_of")]
    pub cut: Option<String>,
    /// The records as they then stood; a date means its end
    #[arg(long, value_name = "MOMENT")]
    pub as_of: Option<Moment>,
}

/// `new`
#[derive(Debug, Group)]
pub struct New {
    /// The study's code
    #[arg(long)]
    pub code: Option<String>,
    /// Its title
    #[arg(long)]
    pub title: Option<String>,
    /// The zone of the study centre, such as Europe/London
    #[arg(long, value_name = "ZONE")]
    pub zone: Option<String>,
    /// A subject's code, from which the pattern of all codes is made
    #[arg(long, value_name = "EXAMPLE")]
    pub subject: Option<String>,
    /// A measure and its unit, its replicates in a session and its plausible range; may be given again
    #[arg(long, value_name = "CODE:UNIT[:REPLICATES[:LOW:HIGH]]")]
    pub measure: Vec<String>,
    /// A condition under which a measure is taken; may be given again
    #[arg(long, value_name = "MEASURE:FACTOR=LEVEL,LEVEL")]
    pub condition: Vec<String>,
    /// A visit, its day after day 0 and its window in days around that; may be given again
    #[arg(long, value_name = "CODE:DAY[:FROM:UNTIL]")]
    pub visit: Vec<String>,
    /// An instrument and the folder of its exports; may be given again
    #[arg(long, value_name = "CODE:FOLDER")]
    pub instrument: Vec<String>,
    /// There are no instruments yet, and none is asked for
    #[arg(long, conflicts_with = "instrument")]
    pub no_instrument: bool,
}

/// `probe`
#[derive(Debug, Group)]
pub struct Probe {
    /// Sample exports of one instrument
    #[arg(required = true, value_name = "FILE")]
    pub files: Vec<PathBuf>,
    /// The instrument's code; default: from its folder's name
    #[arg(long)]
    pub code: Option<String>,
    /// The instrument's export folder, relative to the plan; default: the folder that holds all samples
    #[arg(long, value_name = "DIR")]
    pub folder: Option<PathBuf>,
    /// Add the instrument to this plan; all else in the file stays as it is
    #[arg(long, value_name = "PLAN")]
    pub into: Option<PathBuf>,
}

/// `check`
#[derive(Debug, Group)]
pub struct Check {
    /// Print a JSON Schema of the plan, for editors
    #[arg(long)]
    pub schema: bool,
    /// Show what the plan would do with this export, with nothing filed
    #[arg(long, value_name = "FILE", conflicts_with = "schema")]
    pub sample: Option<PathBuf>,
    /// Whose export the sample is, where its folder and its layout do not tell
    #[arg(long, value_name = "CODE", requires = "sample")]
    pub instrument: Option<String>,
}

/// `roster`
#[derive(Debug, Subcommand)]
pub enum Roster {
    /// Import a CSV with the columns subject, enrolled, withdrawn and the plan's attributes
    #[command(after_help = "\
Example:
  revisant roster import roster.csv --why \"enrolments of March\"

A subject who is absent from the file stays as it is. A cell that changes or is blanked needs --why.
JSON: {\"trail\", \"subjects\", \"new\", \"changes\": [{\"subject\", \"field\", \"before\", \"after\"}]}")]
    Import {
        /// The file
        file: PathBuf,
        /// Why
        #[arg(long, value_name = "TEXT")]
        why: Option<String>,
    },
    /// Add one subject
    #[command(after_help = "\
Example:
  revisant roster add QM-049 --enrolled 2026-03-31 --set sex=F --why \"enrolled\"

JSON: as `roster import`")]
    Add {
        /// The subject's code
        subject: String,
        /// Day of enrolment
        #[arg(long, value_name = "DATE")]
        enrolled: NaiveDate,
        /// An attribute of the plan; may be given again
        #[arg(long, value_name = "ATTRIBUTE=VALUE", value_parser = pair)]
        set: Vec<(String, String)>,
        /// Why
        #[arg(long, value_name = "TEXT")]
        why: String,
    },
    /// Note that a subject was withdrawn
    #[command(after_help = "\
Example:
  revisant roster withdraw QM-014 --on 2026-05-02 --data keep --why \"moved away\"

JSON: as `roster import`")]
    Withdraw {
        /// The subject's code
        subject: String,
        /// The day of withdrawal, which still belongs to the study
        #[arg(long, value_name = "DATE")]
        on: NaiveDate,
        /// What becomes of the subject's data
        #[arg(long)]
        data: Data,
        /// Why
        #[arg(long, value_name = "TEXT")]
        why: String,
    },
    /// List the subjects
    #[command(after_help = "\
Example:
  revisant roster list --as-of 2026-03-31

JSON: [{\"subject\", \"enrolled\", \"withdrawn\", \"arm\", \"attributes\", \"data\"}]")]
    List {
        #[command(flatten)]
        #[expect(missing_docs, reason = "a doc comment here would become help text")]
        then: Then,
    },
}

/// What becomes of a withdrawn subject's data.
#[derive(Debug, Clone, Copy, PartialEq, Eq, ValueEnum)]
pub enum Data {
    /// They stay
    Keep,
    /// They are removed
    Remove,
}

/// `collect`
#[derive(Debug, Group)]
pub struct Collect {
    /// Read exports again with a mended reader; what was filed otherwise is superseded
    #[arg(long, requires = "why")]
    pub adopt: bool,
    /// Why
    #[arg(long, value_name = "TEXT")]
    pub why: Option<String>,
}

/// `status`
#[derive(Debug, Group)]
pub struct Status {
    /// End with exit status 3 when the service has stopped or an instrument is quiet
    #[arg(long)]
    pub strict: bool,
}

/// `completeness`
#[derive(Debug, Group)]
pub struct Completeness {
    /// End with exit status 3 while somebody is incomplete and not accounted for
    #[arg(long)]
    pub strict: bool,
    /// Judge at this moment, on the records of now; default: now
    #[arg(long, value_name = "MOMENT")]
    pub on: Option<Moment>,
    #[command(flatten)]
    #[expect(missing_docs, reason = "a doc comment here would become help text")]
    pub then: Then,
}

/// `due`
#[derive(Debug, Group)]
pub struct Due {
    /// Judge at this moment; default: now
    #[arg(long, value_name = "MOMENT")]
    pub on: Option<Moment>,
    /// Also those whose window opens within so many days
    #[arg(long, value_name = "N", default_value_t = 7)]
    pub days: u16,
}

/// `account`
#[derive(Debug, Group)]
pub struct Account {
    /// The subject's code
    pub subject: String,
    /// The visit's code
    pub visit: String,
    /// Only this measure; default: all of the visit
    #[arg(long, value_name = "CODE")]
    pub measure: Option<String>,
    /// Why the readings will not come
    #[arg(long, value_name = "TEXT")]
    pub why: String,
}

/// `holds`
#[derive(Debug, Group)]
pub struct Holds {
    /// What to do with them.
    #[command(subcommand)]
    pub act: Option<HoldsAct>,
    #[command(flatten)]
    #[expect(missing_docs, reason = "a doc comment here would become help text")]
    pub list: HoldsList,
}

/// `holds list`
#[derive(Debug, Default, Group)]
pub struct HoldsList {
    /// Also those that are decided or dismissed
    #[arg(long)]
    pub all: bool,
    #[command(flatten)]
    #[expect(missing_docs, reason = "a doc comment here would become help text")]
    pub then: Then,
}

/// What may be done with holds.
#[derive(Debug, Subcommand)]
pub enum HoldsAct {
    /// List what is held
    #[command(after_help = "\
Example:
  revisant holds list --all

JSON: [{\"hold\", \"reason\", \"state\", \"export\", \"where\", \"row\", \"likely\", \"since\"}]")]
    List(HoldsList),
    /// Show one hold, with the commands that answer it
    #[command(after_help = "\
Example:
  revisant holds show 12

JSON: the hold, with \"instrument\", \"column\", \"wrong\", \"meaning\", \"answers\", \"commands\", \"like_it\", \"answer\"")]
    Show {
        /// The hold's number
        hold: i64,
    },
    /// Answer one hold, or all like it in the same export
    #[command(
        override_usage = "revisant holds decide [OPTIONS] <ANSWER> <HOLD> --why <TEXT>",
        after_help = "\
Example:
  revisant holds decide 12 --subject QM-014 --why \"code misread; see visit log\"
  revisant holds decide 12 --keep-old --all-like-it      say how many are alike
  revisant holds decide 12 --keep-old --all-like-it 31 --why \"test export\"

Which answers fit depends on the reason; `revisant holds show N` lists them.
JSON: {\"trail\", \"holds\", \"filed\", \"held\"}"
    )]
    Decide(Box<Decide>),
    /// Leave out what is held, for good
    #[command(after_help = "\
Example:
  revisant holds dismiss 12 --why \"test squeeze, no reading\"

JSON: {\"trail\", \"holds\", \"filed\", \"held\"}")]
    Dismiss {
        /// The hold's number
        hold: i64,
        /// All like it in the same export; COUNT must be how many they are
        #[arg(long, value_name = "COUNT", num_args = 0..=1)]
        all_like_it: Option<Option<u64>>,
        /// Why
        #[arg(long, value_name = "TEXT")]
        why: Option<String>,
    },
}

/// `holds decide`
#[derive(Debug, Group)]
pub struct Decide {
    /// The hold's number
    pub hold: i64,
    #[command(flatten)]
    #[expect(missing_docs, reason = "a doc comment here would become help text")]
    pub answer: AnswerOptions,
    /// All like it in the same export; COUNT must be how many they are
    #[arg(long, value_name = "COUNT", num_args = 0..=1)]
    pub all_like_it: Option<Option<u64>>,
    /// Why
    #[arg(long, value_name = "TEXT")]
    pub why: Option<String>,
}

/// The answers to a hold, one of which is given.
#[derive(Debug, Default, Group)]
#[group(required = true, multiple = true)]
pub struct AnswerOptions {
    /// Whose row it is
    #[arg(long, value_name = "CODE")]
    pub subject: Option<String>,
    /// When it was taken
    #[arg(long, value_name = "MOMENT")]
    pub moment: Option<String>,
    /// On which day it was taken; the time is not known
    #[arg(long, value_name = "DAY")]
    pub date: Option<NaiveDate>,
    /// Which visit, or "unscheduled"
    #[arg(long, value_name = "CODE")]
    pub visit: Option<String>,
    /// Which measure
    #[arg(long, value_name = "CODE")]
    pub measure: Option<String>,
    /// Which level of a condition; may be given again for another factor
    #[arg(long, value_name = "FACTOR=LEVEL", value_parser = pair)]
    pub condition: Vec<(String, String)>,
    /// Which unit
    #[arg(long, value_name = "CODE")]
    pub unit: Option<String>,
    /// The value, in the unit as exported
    #[arg(long, value_name = "NUMBER", allow_hyphen_values = true)]
    pub value: Option<String>,
    /// It is right as it stands
    #[arg(long)]
    pub as_it_stands: bool,
    /// The value filed before stays
    #[arg(long)]
    pub keep_old: bool,
    /// The new value supersedes the one filed before
    #[arg(long)]
    pub take_new: bool,
    /// It is the replicate with this number
    #[arg(long, value_name = "NUMBER")]
    pub replicate: Option<u32>,
    /// It takes the place of the replicate with this number
    #[arg(long, value_name = "NUMBER")]
    pub instead_of: Option<u32>,
}

/// `readings`
#[derive(Debug, Group)]
pub struct Readings {
    /// Only this subject's
    #[arg(long, value_name = "CODE")]
    pub subject: Option<String>,
    /// Only of this measure
    #[arg(long, value_name = "CODE")]
    pub measure: Option<String>,
    /// Only of this visit, or "unscheduled"
    #[arg(long, value_name = "CODE")]
    pub visit: Option<String>,
    #[command(flatten)]
    #[expect(missing_docs, reason = "a doc comment here would become help text")]
    pub then: Then,
}

/// `enter`
#[derive(Debug, Group)]
pub struct Enter {
    /// Whose it is
    #[arg(long, value_name = "CODE")]
    pub subject: String,
    /// What was measured
    #[arg(long, value_name = "CODE")]
    pub measure: String,
    /// The visit, or "unscheduled"; default: the date decides
    #[arg(long, value_name = "CODE")]
    pub visit: Option<String>,
    /// The level of each of the measure's conditions
    #[arg(long, value_name = "FACTOR=LEVEL", value_parser = pair)]
    pub condition: Vec<(String, String)>,
    /// The replicate's number; default: the next one
    #[arg(long, value_name = "NUMBER")]
    pub replicate: Option<u32>,
    /// The value, in the plan's unit
    #[arg(long, value_name = "NUMBER", allow_hyphen_values = true)]
    pub value: String,
    /// When it was taken; a date alone when the time is not known
    #[arg(long, value_name = "MOMENT")]
    pub taken_at: Moment,
    /// The value is right although it lies outside the plan's plausible bounds
    #[arg(long)]
    pub as_it_stands: bool,
    /// Why it is entered by hand
    #[arg(long, value_name = "TEXT")]
    pub why: String,
}

/// `amend`
#[derive(Debug, Subcommand)]
pub enum Amend {
    /// Correct one reading
    #[command(after_help = "\
Example:
  revisant amend reading 812 --subject QM-015 --why \"bands swapped; see log\"

JSON: {\"trail\", \"readings\": [{\"reading\", \"supersedes\"}]}")]
    Reading {
        /// The reading's number
        reading: i64,
        /// Whose it is
        #[arg(long, value_name = "CODE")]
        subject: Option<String>,
        /// Its visit, or "unscheduled"
        #[arg(long, value_name = "CODE")]
        visit: Option<String>,
        /// Its value, in the plan's unit
        #[arg(long, value_name = "NUMBER", allow_hyphen_values = true)]
        value: Option<String>,
        /// Its replicate's number
        #[arg(long, value_name = "NUMBER")]
        replicate: Option<u32>,
        /// The value is right although it lies outside the plan's plausible bounds
        #[arg(long)]
        as_it_stands: bool,
        /// Why
        #[arg(long, value_name = "TEXT")]
        why: String,
    },
    /// Correct all current readings of one session
    #[command(after_help = "\
Example:
  revisant amend session 40 --swap-with 41 --why \"the subjects changed chairs\"

JSON: {\"trail\", \"readings\": [{\"reading\", \"supersedes\"}]}")]
    Session {
        /// The session's number, as `revisant readings` shows it
        session: i64,
        /// Whose it is
        #[arg(long, value_name = "CODE", conflicts_with = "swap_with")]
        subject: Option<String>,
        /// Its visit, or "unscheduled"
        #[arg(long, value_name = "CODE", conflicts_with = "swap_with")]
        visit: Option<String>,
        /// The session with which it changes subjects
        #[arg(long, value_name = "SESSION")]
        swap_with: Option<i64>,
        /// Why
        #[arg(long, value_name = "TEXT")]
        why: String,
    },
}

/// `strike` and `restore`
#[derive(Debug, Group)]
pub struct Strike {
    /// The readings' numbers
    #[arg(required = true, value_name = "READING")]
    pub readings: Vec<i64>,
    /// Why
    #[arg(long, value_name = "TEXT")]
    pub why: String,
}

/// `provenance`
#[derive(Debug, Group)]
pub struct Provenance {
    /// The reading's number
    pub reading: i64,
}

/// `cut`
#[derive(Debug, Subcommand)]
pub enum Cut {
    /// Give the records as they now stand a name
    #[command(after_help = "\
Example:
  revisant cut make interim-1 --why \"half of the subjects have week 12\"

JSON: {\"name\", \"trail\", \"hash\", \"at\", \"who\", \"why\"}")]
    Make {
        /// Its name: lower-case words with -
        name: String,
        /// Why
        #[arg(long, value_name = "TEXT")]
        why: String,
    },
    /// List the cuts
    #[command(after_help = "\
Example:
  revisant cut list

JSON: [{\"name\", \"trail\", \"hash\", \"at\", \"who\", \"why\"}]")]
    List,
    /// Say which readings are new, changed or gone between two cuts
    #[command(after_help = "\
Example:
  revisant cut compare interim-1 interim-2

JSON: {\"from\", \"to\", \"new\": [reading], \"changed\": [{\"before\", \"after\"}], \"gone\": [reading]}")]
    Compare {
        /// The earlier cut
        from: String,
        /// The later cut
        to: String,
    },
}

/// `trail`
#[derive(Debug, Group)]
pub struct Trail {
    /// What to do with it.
    #[command(subcommand)]
    pub act: Option<TrailAct>,
    #[command(flatten)]
    #[expect(missing_docs, reason = "a doc comment here would become help text")]
    pub list: TrailList,
}

/// `trail list`
#[derive(Debug, Default, Group)]
pub struct TrailList {
    /// Only the last so many acts
    #[arg(long, value_name = "N")]
    pub last: Option<u32>,
}

/// What may be done with the trail.
#[derive(Debug, Subcommand)]
pub enum TrailAct {
    /// List the acts
    #[command(after_help = "\
Example:
  revisant trail list --last 20

JSON: [{\"trail\", \"at\", \"who\", \"program\", \"act\", \"objects\", \"before\", \"after\", \"why\", \"hash\"}]")]
    List(TrailList),
    /// Compute everything again that the trail covers, and name the first act that fails
    #[command(after_help = "\
Example:
  revisant trail verify --head 0123-4567-89ab-cdef-0123

The exit status is 3 when something is wrong. The head hash that it prints is short enough to be
written into a paper notebook; given back with --head it shows that the trail was not cut short or
rebuilt since.
JSON: {\"sound\", \"rows\", \"readings\", \"raw_copies\", \"head\": {\"trail\", \"hash\", \"short\"}, \"noted\", \"faults\", \"notes\"}")]
    Verify {
        /// A head hash noted elsewhere, in full or short
        #[arg(long, value_name = "HASH")]
        head: Option<String>,
    },
}

/// `analyse`
#[derive(Debug, Group)]
pub struct Analyse {
    /// The analysis's code in the plan
    pub code: String,
    #[command(flatten)]
    #[expect(missing_docs, reason = "a doc comment here would become help text")]
    pub then: Then,
    /// Show what the result rests on: residuals, influence of each subject, missing visits, thin cells
    #[arg(long)]
    pub checks: bool,
    /// Draw every subject's profile, and the means (of agreement: differences against means), into this file: SVG, or
    /// PNG if its name ends in .png
    #[arg(long, value_name = "FILE")]
    pub plot: Option<PathBuf>,
}

/// `rehearse`
#[derive(Debug, Group)]
pub struct Rehearse {
    /// The number of subjects for the wanted power, and the power of the planned number
    #[arg(long, conflicts_with_all = ["boundaries", "blinded"])]
    pub size: bool,
    /// The boundaries of the planned looks (not in this version)
    #[arg(long, conflicts_with = "blinded")]
    pub boundaries: bool,
    /// The number of subjects by the blinded variance so far (not in this version)
    #[arg(long)]
    pub blinded: bool,
    /// Which effect is to be shown; default: arm:visit, or visit in one group
    #[arg(long, requires = "size")]
    pub effect: Option<PlannedEffect>,
    /// The error rate; default: what the analysis's confidence leaves, or 0.05
    #[arg(long, value_name = "SHARE", requires = "size")]
    pub alpha: Option<f64>,
    /// The analysis of the plan whose visits count; default: all that the assumptions list
    #[arg(long, value_name = "CODE", requires = "size")]
    pub analysis: Option<String>,
    /// How many studies are simulated; default: 4000, or fewer of very large ones
    #[arg(long, value_name = "N", requires = "size", value_parser = clap::value_parser!(u32).range(1..=10_000_000))]
    pub runs: Option<u32>,
    /// Other studies, the same for the same number
    #[arg(long, value_name = "N", requires = "size", default_value_t = 1)]
    pub seed: u64,
}

/// An effect whose test is planned.
#[derive(Debug, Clone, Copy, PartialEq, Eq, ValueEnum)]
pub enum PlannedEffect {
    /// Visits differ, averaged over arms
    #[value(name = "visit")]
    Visit,
    /// Arms change differently over visits
    #[value(name = "arm:visit")]
    ArmByVisit,
    /// Arms differ, averaged over visits
    #[value(name = "arm")]
    Arm,
}

/// `demo`
#[derive(Debug, Group)]
pub struct Demo {
    /// The new folder; default: revisant-demo under the current folder
    #[arg(long, value_name = "DIR")]
    pub into: Option<PathBuf>,
    /// Other values and days, the same for the same number
    #[arg(long, value_name = "N")]
    pub seed: Option<u64>,
}

/// `name=value`
fn pair(text: &str) -> Result<(String, String), String> {
    match text.split_once('=') {
        Some((name, value)) if !name.trim().is_empty() => Ok((name.trim().to_owned(), value.trim().to_owned())),
        _ => Err("write NAME=VALUE".to_owned()),
    }
}
