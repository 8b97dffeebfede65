//! The service `revisantd`, as built for the checks.

fn main() -> std::process::ExitCode {
    revisant_daemon::service::command::main()
}
