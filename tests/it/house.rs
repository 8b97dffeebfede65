//! House rules: what nobody would notice being broken until it is everywhere.

use std::fs;
use std::path::{Path, PathBuf};

use clap::CommandFactory;
use regex::Regex;
use revisant_tests::corpus::files_below;

use crate::PROGRAMS;

/// Folders of the top level; a newcomer has to guess any path inside them.
const TOP: [&str; 5] = ["cli", "daemon", "demo-site", "schema", "tests"];

fn root() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("..").canonicalize().expect("the project's folder")
}

/// Every file of the project with its text, by path from the top; exports of the corpus are bytes and not read.
fn texts(endings: &[&str]) -> Vec<(String, String)> {
    let root = root();
    let top = fs::read_dir(&root).expect("the project's folder").map(|entry| entry.expect("an entry").file_name());
    let mut files: Vec<PathBuf> = Vec::new();
    for name in top {
        let path = PathBuf::from(&name);
        match root.join(&path).is_dir() {
            true if TOP.contains(&&*name.to_string_lossy()) => files.extend(files_below(&root, &path)),
            true => {}
            false => files.push(path),
        }
    }
    let ours = |path: &PathBuf| {
        let shown = path.to_string_lossy();
        let built = shown.contains("/target/");
        let bytes = shown.starts_with("tests/corpus/") && shown.contains("/exports/");
        !(built || bytes)
    };
    let ending = |path: &PathBuf| endings.iter().any(|ending| path.to_string_lossy().ends_with(ending));
    files.retain(|path| ours(path) && ending(path));
    files.sort();
    assert!(!files.is_empty(), "no files that end in {endings:?}");
    files
        .into_iter()
        .map(|path| {
            let text = fs::read_to_string(root.join(&path));
            (path.to_string_lossy().into_owned(), text.unwrap_or_else(|error| panic!("{}: {error}", path.display())))
        })
        .collect()
}

/// The part of a source file that is no test.
fn without_tests(text: &str) -> &str {
    text.split("#[cfg(test)]").next().unwrap_or(text)
}

fn sources(of: &str) -> Vec<(String, String)> {
    let in_place = |(path, _): &(String, String)| path.starts_with(&format!("{of}/src/"));
    texts(&[".rs"]).into_iter().filter(in_place).collect()
}

fn none(what: &str, found: &[String]) {
    assert!(found.is_empty(), "{what}:\n{}", found.join("\n"));
}

/// Lines of these files in which a pattern occurs.
fn lines_with(files: &[(String, String)], pattern: &str) -> Vec<String> {
    let pattern = Regex::new(pattern).expect("a pattern");
    let mut found = Vec::new();
    for (path, text) in files {
        for (at, line) in text.lines().enumerate().filter(|(_, line)| pattern.is_match(line)) {
            found.push(format!("{path}:{}: {}", at + 1, line.trim()));
        }
    }
    found
}

#[test]
fn crates_import_only_what_lies_below_them() {
    let manifest =
        |of: &str| (of.to_owned(), fs::read_to_string(root().join(of).join("Cargo.toml")).expect("a manifest"));
    let names = |of: &str, banned: &str| {
        let mut files = sources(of);
        files.push(manifest(of));
        lines_with(&files, banned)
    };
    let ours = r"\brevisant[-_](schema|daemon|tests)\b|\brevisant(::|\.workspace)";
    none("the numerical crate names another crate", &names("cli/analysis", ours));
    let above = r"\brevisant[-_](daemon|analysis|tests)\b|\brevisant(::|\.workspace)";
    none("the schema names a crate above it", &names("schema", above));
    let above = r"\brevisant[-_](analysis|tests)\b|\brevisant(::|\.workspace)";
    none("the daemon names the command line or the analyses", &names("daemon", above));
    for of in ["cli", "cli/analysis", "daemon"] {
        none("only the schema names rusqlite", &names(of, r"\brusqlite\b"));
        none("only the schema names a table", &names(of, r"\b(INSERT INTO|SELECT .* FROM|DELETE FROM|CREATE TABLE)\b"));
    }
}

#[test]
fn the_numerical_crate_cannot_reach_the_world() {
    let world = r"std::(fs|time|net|env|process|thread|io)\b|\b(print|println|eprint|eprintln|dbg)!|SystemTime|Instant::|HashMap|HashSet";
    none("the numerical crate reaches the world", &lines_with(&sources("cli/analysis"), world));
}

#[test]
fn main_files_are_thin() {
    for (path, text) in texts(&["src/main.rs"]) {
        assert!(
            text.lines().count() < 15,
            "{path} has {} lines; what it does belongs to the library",
            text.lines().count()
        );
    }
}

#[test]
fn nothing_panics_on_purpose_outside_tests() {
    let panics = Regex::new(r"\.unwrap\(\)|\.expect\(|\b(panic|todo|unimplemented|unreachable|dbg)!|\bunsafe\b")
        .expect("a pattern");
    let mut found = Vec::new();
    for of in ["schema", "daemon", "cli", "cli/analysis"] {
        for (path, text) in sources(of) {
            let lines: Vec<&str> = without_tests(&text).lines().collect();
            for (at, line) in lines.iter().enumerate() {
                let code = line.split("//").next().unwrap_or(line);
                // An exception says so and why, on the item.
                let excused = lines[at.saturating_sub(4)..at].iter().any(|line| line.contains("expect(clippy::"));
                if panics.is_match(code) && !excused && !path.ends_with("tests.rs") && !code.contains("forbid(unsafe") {
                    found.push(format!("{path}:{}: {}", at + 1, line.trim()));
                }
            }
        }
    }
    none("panics outside tests", &found);
}

#[test]
fn no_file_names_the_machine_it_was_written_on() {
    let files = texts(&[".rs", ".md", ".toml", ".sql", ".txt", ".py", ".json", ".service", ".lock"]);
    // The patterns are put together so that this file does not hold what it looks for.
    let paths = format!(r#"(^|[\s"'`(=])/({}|{}|{}|{})/"#, "work", "root", "Users", "workspace");
    none("a path of one machine", &lines_with(&files, &paths));
    let hosts = format!("https?://[^ )\"]*({}|{}|{}|{})", "artifactory", "jfrog", "nexus", "mirror");
    none("a host of one network", &lines_with(&files, &hosts));
    for (path, text) in files.iter().filter(|(path, _)| path.ends_with("Cargo.lock")) {
        let elsewhere = text.lines().filter(|line| {
            line.starts_with("source = ") && !line.starts_with("source = \"registry+https://github.com/rust-lang/")
        });
        none(&format!("{path}: a crate from elsewhere"), &elsewhere.map(str::to_owned).collect::<Vec<_>>());
    }
    assert!(!root().join(".cargo/config.toml").exists(), "settings of one machine do not belong to the project");
}

/// Words whose spelling tells where the writer learnt it.
const ELSEWHERE: [&str; 27] = [
    "analy(z|zes|zed|zing)",
    "artifact",
    "behavior",
    "cancel(ed|ing)",
    "catalog",
    "center(ed|s|ing)?",
    "color(ed|s|ing)?",
    "defense",
    "enrol(l|ls|lment|lments)",
    "favor(ite)?",
    "fulfill",
    "gray",
    "honor",
    "initializ(e|ed|es|ing|ation)",
    "judgment",
    "label(ed|ing)",
    "meters?",
    "minimiz(e|ed|es|ing)",
    "model(ed|ing)",
    "neighbor(s|ing)?",
    "normaliz(e|ed|es|ing|ation)",
    "optimiz(e|ed|es|ing|ation)",
    "organiz(e|ed|es|ing|ation)",
    "recogniz(e|ed|es|ing)",
    "standardiz(e|ed|es|ing)",
    "summariz(e|ed|es|ing)",
    "travel(ed|ing)",
];

#[test]
fn words_are_spelt_the_british_way() {
    // Small letters only, and no part of a name with a dash: titles of books and names of crates stay as they are.
    let words = Regex::new(&format!(r"(?:^|[^-\w])({})\b", ELSEWHERE.join("|"))).expect("a pattern");
    let quoted = Regex::new(r#"`[^`]*`|"[^"]*::[^"]*""#).expect("a pattern");
    let string = Regex::new(r#""((?:[^"\\]|\\.)*)""#).expect("a pattern");
    let mut found = Vec::new();
    for (path, text) in texts(&[".rs", ".md", ".sql"]).into_iter().filter(|(path, _)| !path.ends_with("it/house.rs")) {
        for (at, line) in text.lines().enumerate() {
            // Of code, what people read: comments and texts. Names of other people's functions are as they are.
            let comment = line.split_once("//").map_or("", |(_, comment)| comment);
            let read = match path.ends_with(".rs") {
                true => format!(
                    "{comment} {}",
                    string.captures_iter(line).map(|it| it[1].to_owned()).collect::<Vec<_>>().join(" ")
                ),
                false => line.to_owned(),
            };
            if let Some(word) = words.captures(&quoted.replace_all(&read, "")) {
                found.push(format!("{path}:{}: {}", at + 1, &word[1]));
            }
        }
    }
    none("spelt as elsewhere", &found);
}

#[test]
fn links_lead_somewhere() {
    let link = Regex::new(r"\]\(([^)\s]+)\)").expect("a pattern");
    let mut dead = Vec::new();
    for (path, text) in texts(&[".md"]) {
        let here = root().join(&path);
        for target in link.captures_iter(&text).map(|found| found[1].to_owned()) {
            if target.contains("://") || target.starts_with("mailto:") {
                continue;
            }
            let (file, anchor) = target.split_once('#').unwrap_or((&target, ""));
            let led_to = if file.is_empty() { here.clone() } else { here.parent().expect("a folder").join(file) };
            if !led_to.exists() {
                dead.push(format!("{path}: {target}"));
            } else if !anchor.is_empty() && led_to.extension().is_some_and(|it| it == "md") {
                let there = fs::read_to_string(&led_to).expect("a page");
                if !there.lines().filter(|line| line.starts_with('#')).any(|line| anchor_of(line) == anchor) {
                    dead.push(format!("{path}: {target} (no such heading)"));
                }
            }
        }
    }
    none("dead links", &dead);
}

/// The anchor that a heading gets on the usual sites.
fn anchor_of(heading: &str) -> String {
    let text = heading.trim_start_matches('#').trim().to_lowercase();
    let kept = text.chars().filter(|c| c.is_alphanumeric() || *c == ' ' || *c == '-' || *c == '_');
    kept.collect::<String>().replace(' ', "-")
}

#[test]
fn the_top_level_is_as_laid_out() {
    let entries = fs::read_dir(root()).expect("the project's folder").map(|entry| entry.expect("an entry"));
    let folders: Vec<String> = entries
        .filter(|entry| entry.path().is_dir())
        .map(|entry| entry.file_name().to_string_lossy().into_owned())
        .filter(|name| !name.starts_with('.') && name != "target" && !TOP.contains(&name.as_str()))
        .collect();
    none("a folder that the layout does not know", &folders);
}

/// The commands of the vocabulary that this version has.
const COMMANDS: [&str; 21] = [
    "new",
    "probe",
    "check",
    "roster",
    "collect",
    "status",
    "completeness",
    "due",
    "account",
    "holds",
    "readings",
    "enter",
    "amend",
    "strike",
    "restore",
    "provenance",
    "cut",
    "trail",
    "analyse",
    "rehearse",
    "demo",
];

#[test]
fn every_command_says_what_it_does_and_gives_an_example() {
    let program = revisant::args::Args::command();
    let names: Vec<&str> = program.get_subcommands().map(clap::Command::get_name).collect();
    assert_eq!(names, COMMANDS, "the commands are those of the vocabulary, in its order of use");
    let mut wanting = Vec::new();
    visit(&program, "revisant", &mut wanting);
    none("help that is wanting", &wanting);
}

fn visit(command: &clap::Command, name: &str, wanting: &mut Vec<String>) {
    let after = command.get_after_help().map(ToString::to_string).unwrap_or_default();
    if command.get_about().is_none() {
        wanting.push(format!("{name}: it does not say what it does"));
    }
    if !after.contains("Example:") {
        wanting.push(format!("{name}: no example"));
    }
    for option in command.get_opts().filter(|option| option.get_short().is_some()) {
        wanting.push(format!("{name}: {} has a short form; options are long and plain", option.get_id()));
    }
    let said = |arg: &&clap::Arg| arg.get_help().is_none() && !arg.is_hide_set();
    command
        .get_arguments()
        .filter(said)
        .for_each(|arg| wanting.push(format!("{name}: {} is not explained", arg.get_id())));
    command.get_subcommands().for_each(|inner| visit(inner, &format!("{name} {}", inner.get_name()), wanting));
}

#[test]
fn help_fits_a_terminal() {
    let site = revisant_tests::site::Site::new(PROGRAMS);
    let pages = std::iter::once(vec!["--help"]).chain(COMMANDS.iter().map(|command| vec![*command, "--help"]));
    for page in pages {
        let help = site.ok(&page);
        let wide: Vec<&str> = help.stdout.lines().filter(|line| line.chars().count() > 130).collect();
        assert!(wide.is_empty(), "{page:?}: {wide:?}");
    }
}

/// What a person may meet has to stand in the README: every command, and every reason for which something is held.
#[test]
fn the_readme_names_every_command_and_hold_reason() {
    let Ok(readme) = fs::read_to_string(root().join("README.md")) else { return };
    let mut missing: Vec<String> = COMMANDS
        .iter()
        .filter(|command| !readme.contains(&format!("revisant {command}")) && !readme.contains(&format!("`{command}`")))
        .map(|command| format!("the command {command}"))
        .collect();
    for reason in revisant_schema::hold::Reason::ALL {
        if !readme.contains(reason.code()) {
            missing.push(format!("the reason {}", reason.code()));
        }
    }
    none("not in the README", &missing);
}

#[test]
fn every_hold_reason_of_the_vocabulary_is_known() {
    let known: Vec<&str> = revisant_schema::hold::Reason::ALL.iter().map(|reason| reason.code()).collect();
    let vocabulary = "no-subject unknown-subject before-enrolment after-withdrawal no-stamp unreadable-stamp clock-gap \
        clock-fold future-stamp unknown-visit visit-disagrees unknown-measure unknown-condition unknown-unit \
        unreadable-value below-limit above-limit implausible-value changed-value extra-replicate unreadable-row \
        unfinished-row other-instrument after-closing unreadable-file unknown-layout too-large";
    let missing: Vec<String> =
        vocabulary.split_whitespace().filter(|word| !known.contains(word)).map(str::to_owned).collect();
    none("hold reasons that the program does not know", &missing);
}
