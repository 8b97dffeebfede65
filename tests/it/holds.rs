//! Holds as a technician meets them: every reason, with what is wrong, the row as exported, and commands that can be
//! pasted. What is said is in `snapshots/holds`.

use std::collections::BTreeMap;

use revisant_tests::site::Site;

/// A plan under which something can be held for every reason.
const PLAN: &str = r#"[study]
code = "HELD"
title = "Everything that can be wrong"
time_zone = "Europe/London"

[subject]
pattern = 'HD-\d{3}'
normalise = ["trim", "upper", "dash"]
anchor = "enrolment"

[[measure]]
code = "grip"
unit = "kg"
plausible = [2, 95]
replicates = 2
conditions = { hand = ["left", "right"] }

[[measure]]
code = "crp"
unit = "mg/L"

[[visit]]
code = "start"
day = 0
window = [0, 3]

[[visit]]
code = "week-4"
day = 28
window = [-7, 7]

[[instrument]]
code = "dyn"
folder = "exports/dyn"
files = "*.csv"
rest = "0s"
largest = "2KiB"
serial = { preamble = "Serial", is = "A1703" }

[instrument.reader]
format = "delimited"
delimiter = ";"
header = { starts_with = "Who" }
subject = { column = "Who" }
taken_at = { column = "When", format = "%d/%m/%Y %H:%M" }
visit = { column = "Visit" }
replicate = { column = "Trial" }

[[instrument.reader.value]]
measure = "grip"
column = "Grip"
condition = { hand = { column = "Hand" } }
unit = { column = "Unit" }

[[instrument]]
code = "lab"
folder = "exports/lab"
files = "*.csv"
rest = "0s"
re_export = "grows"

[instrument.reader]
format = "delimited"
delimiter = ","
decimal_mark = "."
subject = { column = "Who" }
taken_at = { column = "When", format = "iso" }

[[instrument.reader.value]]
measure = { column = "Test", map = { "CRP" = "crp" } }
column = "Result"
unit = { code = "mg/L" }
"#;

const ROSTER: &str = "subject,enrolled,withdrawn\nHD-001,2026-02-02,\nHD-002,2026-02-02,2026-02-20\nHD-003,2026-02-02,\n\
                      HD-010,2026-02-02,\n";

const DYN: &str = "\
;03/02/2026 09:00;start;1;31;left;kg
HD-O01;03/02/2026 09:00;start;1;31;left;kg
HD-004;03/02/2026 09:00;start;1;31;left;kg
HD-001;;start;1;31;left;kg
HD-001;31/02/2026 09:00;start;1;31;left;kg
HD-001;2026-02-03 09:00;start;1;31;left;kg
HD-001;29/03/2026 01:30;;1;31;left;kg
HD-001;25/10/2026 01:30;;1;31;left;kg
HD-001;03/02/2062 09:00;start;1;31;left;kg
HD-001;01/02/2026 09:00;start;1;31;left;kg
HD-002;21/02/2026 09:00;;1;31;left;kg
HD-001;03/02/2026 09:00;week-6;1;31;left;kg
HD-001;02/03/2026 09:00;start;1;31;left;kg
HD-001;03/02/2026 09:00;start;one;31;left;kg
HD-001;03/02/2026 09:00;start;1;31;both;kg
HD-001;03/02/2026 09:00;start;1;31;left;pounds
HD-001;03/02/2026 09:00;start;1;31;left;N
HD-001;03/02/2026 09:00;start;1;31;left;
HD-001;03/02/2026 09:00;start;1;3l;left;kg
HD-001;03/02/2026 09:00;start;1;31,5;left;kg
HD-001;03/02/2026 09:00;start;1;<5;left;kg
HD-001;03/02/2026 09:00;start;1;>90;left;kg
HD-001;03/02/2026 09:00;start;1;310;left;kg
HD-001;03/02/2026 09:00;start;1;1;left;[lb_av]
HD-003;03/02/2026 09:00;start;1;31;left;kg
HD-003;03/02/2026 09:05;start;1;32;left;kg
HD-003;03/02/2026 09:10;start;3;33;left;kg
HD-003;03/02/2026 09:15;start;2;33;left;kg;too;many
HD-003;03/02/2026 09:20;start;2;33;left;kg";

/// The same rows, each as an export of its own would have it, within the largest that is taken.
fn lay_out() -> Site {
    let site = crate::site(PLAN, ROSTER);
    let head = "Serial: A1703\nWho;When;Visit;Trial;Grip;Hand;Unit\n";
    let rows: Vec<&str> = DYN.lines().collect();
    let (first, second) = rows.split_at(15);
    site.drop_export("exports/dyn/one.csv", format!("{head}{}\n", first.join("\n")));
    site.drop_export("exports/dyn/two.csv", format!("{head}{}", second.join("\n")));
    site.drop_export(
        "exports/dyn/other.csv",
        format!("Serial: B9\n{}HD-003;03/02/2026 09:00;start;1;31;left;kg\n", &head[14..]),
    );
    site.drop_export(
        "exports/dyn/large.csv",
        format!("{head}{}", "HD-003;03/02/2026 09:00;start;1;31;left;kg\n".repeat(60)),
    );
    site.drop_export("exports/dyn/bytes.csv", b"Serial: A1703\nWho;When\xff\xfe\x82\n");
    site.drop_export("exports/dyn/layout.csv", "Serial: A1703\nWho;Date;Visit;Trial;Force;Side;Unit\n1;2;3;4;5;6;7\n");
    let lab = "Who,When,Test,Result\nHD-003,2026-02-03T09:00:00,CRP,3.1\nHD-003,2026-02-03T09:00:00,Iron,9\n";
    site.drop_export("exports/lab/a.csv", lab);
    site.collect();
    site.drop_export("exports/lab/b.csv", lab.replace("3.1", "31"));
    site.collect();
    site
}

#[test]
fn every_hold_says_what_is_wrong_and_what_can_be_done() {
    let site = lay_out();
    let holds = site.holds();
    let mut shown: BTreeMap<String, String> = BTreeMap::new();
    for hold in &holds {
        let reason = hold["reason"].as_str().unwrap().to_owned();
        let ran = site.ok(&["holds", "show", &hold["hold"].to_string()]);
        let text = shown.entry(reason).or_default();
        text.push_str(&ran.stdout);
        text.push('\n');
    }
    // One that needs a close, which is no answer to anything here.
    let all = revisant_schema::hold::Reason::ALL.iter().map(|reason| reason.code());
    let absent: Vec<&str> = all.filter(|code| !shown.contains_key(*code)).collect();
    assert_eq!(absent, ["after-closing"], "every reason is shown");
    let since = regex::Regex::new(r"held since .*").expect("a pattern");
    let today = regex::Regex::new(r"was read on[\s]+\d{4}-\d\d-\d\d").expect("a pattern");
    for (reason, text) in &shown {
        for line in text.lines().filter(|line| !line.trim_start().starts_with("revisant")) {
            assert!(line.chars().count() <= 80, "{reason}: {line}");
        }
        let text = today.replace_all(text, "was read on DAY");
        revisant_tests::snapshot::check(&format!("holds/{reason}"), &since.replace_all(&text, "held since TIME"));
    }
    let list = site.ok(&["holds"]).stdout;
    assert!(list.lines().all(|line| line.chars().count() <= 80), "{list}");
    revisant_tests::snapshot::check("holds/list", &list);
}

/// Every command that has no placeholder can be pasted as it stands.
#[test]
fn the_commands_of_a_hold_can_be_pasted() {
    let site = lay_out();
    let mut pasted = 0;
    for hold in site.holds() {
        let number = hold["hold"].to_string();
        let commands: Vec<String> = site.json(&["holds", "show", &number])["commands"]
            .as_array()
            .unwrap()
            .iter()
            .filter_map(|command| command.as_str().map(str::to_owned))
            .collect();
        let ready = |command: &&String| {
            !["NUMBER", "CODE", "MOMENT", "DAY", "LEVEL", "dismiss"].iter().any(|word| command.contains(word))
        };
        let Some(command) = commands.iter().find(ready) else { continue };
        let args: Vec<&str> = command.split_whitespace().skip(1).map(|word| word.trim_matches(['\'', '"'])).collect();
        let ran = site.run(&args);
        assert_eq!(ran.code, Some(0), "{}", ran.shown());
        pasted += 1;
    }
    assert!(pasted > 15, "{pasted}");
}

/// What an export says may not reach the terminal as it is: neither in tables nor in failures.
#[test]
fn nothing_that_an_export_says_steers_the_terminal() {
    let site = crate::site(PLAN, ROSTER);
    let head = "Serial: A1703\nWho;When;Visit;Trial;Grip;Hand;Unit\n";
    let escape = "\u{1b}]0;gone\u{7}\u{1b}[2J\u{202e}";
    let row = format!("HD-{escape};03/02/2026 09:00;{escape};1;{escape};left;kg\n");
    site.drop_export("exports/dyn/a.csv", format!("{head}{row}HD-001;{escape};start;1;31;left;{escape}\n"));
    site.drop_export(
        "exports/dyn/b.csv",
        format!("Serial: {escape}\n{}HD-001;03/02/2026 09:00;start;1;31;left;kg\n", &head[14..]),
    );
    site.drop_export("exports/dyn/c.csv", format!("Serial: A1703\nWho;{escape};Trial\n1;2;3\n"));
    site.collect();
    let mut said =
        vec![site.run(&["holds"]), site.run(&["status"]), site.run(&["check", "--sample", "exports/dyn/a.csv"])];
    site.write("c.csv", format!("Who;{escape}\n1;2\n"));
    said.push(site.run(&["check", "--sample", "c.csv"]));
    for hold in site.holds() {
        let number = hold["hold"].to_string();
        said.push(site.run(&["holds", "show", &number]));
        said.push(site.run(&["holds", "decide", &number, "--as-it-stands", "--why", "seen"]));
        said.push(site.run(&["holds", "decide", &number, "--subject", escape, "--why", "seen"]));
    }
    site.write("roster.csv", format!("subject,enrolled,withdrawn\nHD-{escape},2026-02-02,{escape}\n"));
    said.push(site.run(&["roster", "import", "roster.csv", "--why", "more"]));
    for ran in &said {
        let steers = |c: char| c.is_control() && c != '\n' || ('\u{202a}'..='\u{202e}').contains(&c);
        assert!(!ran.stdout.contains(steers) && !ran.stderr.contains(steers), "{:?}", ran.shown());
    }
    assert!(said.len() > 10 && said.iter().any(|ran| ran.stderr.contains('\u{fffd}')), "failures are among them");
}
