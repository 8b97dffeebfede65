//! The command `revisant`, as built for the checks.

fn main() -> std::process::ExitCode {
    // Under its own name, so that help and usage errors read as a user meets them.
    revisant::main(std::iter::once("revisant".into()).chain(std::env::args_os().skip(1)))
}
