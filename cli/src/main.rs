//! The command `revisant`.

use std::process::ExitCode;

fn main() -> ExitCode {
    revisant::main(std::env::args_os())
}
