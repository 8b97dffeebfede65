//! Every help text, as it stands in `tests/help/`. Set `WRITE_HELP=1` to write the files anew after a change.

#![allow(clippy::unwrap_used, reason = "a test ends where it fails")]

use clap::CommandFactory;
use revisant::args::Args;

fn check(command: &mut clap::Command, path: &str, wrong: &mut Vec<String>) {
    *command = command.clone().term_width(80);
    let text = command.render_help().to_string();
    assert!(text.contains("Example:"), "{path} has no example");
    let examples = command.get_after_help().map(ToString::to_string).unwrap_or_default();
    for line in examples.lines().filter(|line| line.starts_with("  ")) {
        assert!(line.chars().count() <= 80, "{path}: {line}");
    }
    let file = format!("{}/tests/help/{path}.txt", env!("CARGO_MANIFEST_DIR"));
    if std::env::var_os("WRITE_HELP").is_some() {
        std::fs::write(&file, &text).unwrap();
    } else if std::fs::read_to_string(&file).unwrap_or_default() != text {
        wrong.push(path.to_owned());
    }
    let names: Vec<String> = command.get_subcommands().map(|sub| sub.get_name().to_owned()).collect();
    for name in names {
        check(command.find_subcommand_mut(&name).unwrap(), &format!("{path}-{name}"), wrong);
    }
}

#[test]
fn help_texts_are_as_written_down() {
    let mut wrong = vec![];
    let mut command = Args::command();
    command.build();
    check(&mut command, "revisant", &mut wrong);
    assert!(wrong.is_empty(), "these help texts changed: {wrong:?}; WRITE_HELP=1 writes them anew");
}
