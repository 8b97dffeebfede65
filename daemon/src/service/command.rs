//! The program `revisantd`: options, signals, and the word to the system's service manager.

use std::path::PathBuf;
use std::process::ExitCode;
use std::sync::Arc;
use std::time::Duration;

use clap::Parser;
use revisant_schema::world::RealWorld;
use sd_notify::NotifyState;
use tokio::signal::unix::{Signal, SignalKind, signal};
use tokio_util::sync::CancellationToken;
use tracing::{info, warn};

use super::logs::{self, Format};
use super::{Handle, Options, ServiceError, spawn};

/// Watches the export folders of studies and files what arrives.
///
/// Runs in the foreground and logs to standard error. SIGTERM and SIGINT stop it within seconds, with the export in
/// hand finished or wholly unfiled; a second one ends it at once. SIGHUP makes it look at everything now.
///
/// Example: revisantd --study /srv/studies/qm-07
#[derive(Debug, Parser)]
#[command(name = "revisantd", version)]
struct Args {
    /// A study's folder, which holds its study.toml; may be given several times
    #[arg(long, value_name = "DIR", required = true)]
    study: Vec<PathBuf>,
    /// How logs are written
    #[arg(long, value_enum, default_value = "lines")]
    log: Format,
    /// The least serious events that are logged: error, warn, info or debug
    #[arg(long, value_name = "LEVEL", default_value = "info")]
    log_level: String,
    /// Walk through all folders at least so often, in seconds; shorter where a share tells nothing of its files
    #[arg(long, value_name = "SECONDS", default_value_t = 60, value_parser = clap::value_parser!(u64).range(1..=86_400))]
    every: u64,
}

/// Runs the program.
pub fn main() -> ExitCode {
    let args = Args::parse();
    logs::set_up(args.log, &args.log_level);
    // Records hold personal data: nobody but their owner may read what this process makes.
    rustix::process::umask(rustix::fs::Mode::RWXG | rustix::fs::Mode::RWXO);
    let runtime = tokio::runtime::Builder::new_multi_thread().worker_threads(1).enable_all().build();
    let done = match runtime {
        Ok(runtime) => runtime.block_on(serve(&args)),
        Err(error) => Err(format!("the service could not start: {error}")),
    };
    match done {
        Ok(()) => ExitCode::SUCCESS,
        Err(text) => {
            eprintln!("revisantd: {text}");
            ExitCode::FAILURE
        }
    }
}

async fn serve(args: &Args) -> Result<(), String> {
    // Before the first filing, so that a signal that comes early is not lost.
    let failed = |error| format!("signals cannot be taken: {error}");
    let mut ending = Ending::new().map_err(failed)?;
    let mut hang_up = signal(SignalKind::hangup()).map_err(failed)?;
    let services = start(args).await.map_err(|error| error.to_string())?;
    tell(&[NotifyState::Ready]);
    let quiet = CancellationToken::new();
    let dog = sd_notify::watchdog_enabled();
    let mut beat = tokio::time::interval(dog.map_or(Duration::from_secs(5), |period| period / 2));
    let broken = loop {
        tokio::select! {
            () = ending.wanted() => break false,
            _ = hang_up.recv() => services.iter().for_each(Handle::reload),
            _ = beat.tick() => {
                if !services.iter().all(Handle::is_alive) {
                    break true;
                }
                tell(&[NotifyState::Watchdog]);
            }
        }
    };
    tell(&[NotifyState::Stopping]);
    info!("stopping");
    leave_at_second_signal(ending, quiet.clone());
    let ended = stop(services).await;
    quiet.cancel();
    match (ended, broken) {
        (Err(error), _) => Err(error.to_string()),
        (Ok(()), true) => Err("a worker broke down; what it had filed is safe. Start the service again".to_owned()),
        (Ok(()), false) => Ok(()),
    }
}

async fn start(args: &Args) -> Result<Vec<Handle>, ServiceError> {
    let every = Duration::from_secs(args.every);
    let studies = args.study.clone();
    let started = tokio::task::spawn_blocking(move || {
        let one = |study: PathBuf| spawn(Options { study, every, world: Arc::new(RealWorld) }, Box::new(|_| {}));
        studies.into_iter().map(one).collect()
    });
    started.await.unwrap_or_else(|_| Err(ServiceError::Broken(PathBuf::from("the first walk"))))
}

async fn stop(services: Vec<Handle>) -> Result<(), ServiceError> {
    services.iter().for_each(Handle::ask_to_stop);
    let stopped = tokio::task::spawn_blocking(move || services.into_iter().try_for_each(Handle::stop));
    stopped.await.unwrap_or_else(|_| Err(ServiceError::Broken(PathBuf::from("the stop"))))
}

fn tell(states: &[NotifyState<'_>]) {
    if let Err(error) = sd_notify::notify(states) {
        warn!("the service manager cannot be told: {error}");
    }
}

/// The signals that end the service.
struct Ending {
    terminate: Signal,
    interrupt: Signal,
}

impl Ending {
    fn new() -> std::io::Result<Self> {
        Ok(Self { terminate: signal(SignalKind::terminate())?, interrupt: signal(SignalKind::interrupt())? })
    }

    async fn wanted(&mut self) {
        tokio::select! {
            _ = self.terminate.recv() => {}
            _ = self.interrupt.recv() => {}
        }
    }
}

fn leave_at_second_signal(mut ending: Ending, quiet: CancellationToken) {
    tokio::spawn(async move {
        tokio::select! {
            () = ending.wanted() => {
                warn!("left at once; what was not finished is cleared at the next start");
                std::process::exit(1);
            }
            () = quiet.cancelled() => {}
        }
    });
}
