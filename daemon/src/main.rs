//! The background service.

use std::process::ExitCode;

fn main() -> ExitCode {
    revisant_daemon::service::command::main()
}
