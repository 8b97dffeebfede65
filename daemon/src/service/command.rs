//! The program `revisantd`: options, signals, and the word to the system's service manager.

use std::path::PathBuf;
use std::process::ExitCode;
use std::sync::Arc;
use std::time::Duration;

use clap::Parser;
use revisant_schema::world::RealWorld;
use sd_notify::NotifyState;
use tokio::signal::unix::{Signal, SignalKind, signal};
use tokio::task::JoinHandle;
use tokio_util::sync::CancellationToken;
use tracing::level_filters::LevelFilter;
use tracing::{info, warn};

use super::logs::{self, Format};
use super::{Handle, Options, Ready, ServiceError, start as start_one};

/// How long the workers may take to stop. One that hangs in a file system or waits for another writer is left where it
/// is: every instant is one at which the process may end.
const STOP_WITHIN: Duration = Duration::from_millis(4500);
const DAY: u64 = 86_400;

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
    #[arg(long, value_name = "LEVEL", default_value = "info", value_parser = level)]
    log_level: LevelFilter,
    /// Walk through all folders at least so often, such as 10s or 5m; shorter where a share tells nothing of its files
    #[arg(long, value_name = "TIME", default_value = "60s", value_parser = time)]
    every: Duration,
}

fn level(text: &str) -> Result<LevelFilter, String> {
    match text {
        "error" => Ok(LevelFilter::ERROR),
        "warn" => Ok(LevelFilter::WARN),
        "info" => Ok(LevelFilter::INFO),
        "debug" => Ok(LevelFilter::DEBUG),
        _ => Err("it is one of error, warn, info and debug".to_owned()),
    }
}

fn time(text: &str) -> Result<Duration, String> {
    let end = text.find(|c: char| !c.is_ascii_digit()).unwrap_or(text.len());
    let (number, unit) = text.split_at(end);
    let unit = match unit {
        "" | "s" => Some(1),
        "m" => Some(60),
        "h" => Some(3600),
        _ => None,
    };
    let seconds = number.parse::<u64>().ok().zip(unit).and_then(|(number, unit)| number.checked_mul(unit));
    let fits = seconds.filter(|seconds| (1..=DAY).contains(seconds));
    fits.map(Duration::from_secs).ok_or_else(|| "it is a time from 1s to 24h, such as 10s or 5m".to_owned())
}

/// Runs the program.
pub fn main() -> ExitCode {
    let args = Args::parse();
    logs::set_up(args.log, args.log_level);
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
    let hang_up = signal(SignalKind::hangup()).map_err(failed)?;
    let mut services = start(args).await.map_err(|error| error.to_string())?;
    let ready = services.iter_mut().map(Handle::take_ready).collect();
    let broken = attend(&services, ready, &mut ending, hang_up).await;
    tell(&[NotifyState::Stopping]);
    info!("stopping");
    let quiet = CancellationToken::new();
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
    let every = args.every;
    let studies = args.study.clone();
    let started = tokio::task::spawn_blocking(move || {
        let one = |study: PathBuf| start_one(Options { study, every, world: Arc::new(RealWorld) }, Box::new(|_| {}));
        // Should one fail, those before it are stopped as they go out of sight.
        studies.into_iter().map(one).collect()
    });
    started.await.unwrap_or_else(|_| Err(ServiceError::Broken(PathBuf::from("a study"))))
}

/// Keeps the service manager informed until a signal comes; gives whether a worker broke down instead.
async fn attend(services: &[Handle], ready: Vec<Ready>, ending: &mut Ending, mut hang_up: Signal) -> bool {
    let mut all_ready = AllReady(Some(tokio::task::spawn_blocking(|| ready.into_iter().for_each(Ready::wait))));
    let dog = sd_notify::watchdog_enabled();
    let mut beat = tokio::time::interval(dog.map_or(Duration::from_secs(5), |period| period / 2));
    loop {
        tokio::select! {
            () = ending.wanted() => return false,
            _ = hang_up.recv() => services.iter().for_each(Handle::reload),
            () = all_ready.wait() => tell(&[NotifyState::Ready]),
            _ = beat.tick() => {
                if !services.iter().all(Handle::is_alive) {
                    return true;
                }
                tell(&[NotifyState::Watchdog]);
            }
        }
    }
}

/// Comes about once all services are ready, and never again.
struct AllReady(Option<JoinHandle<()>>);

impl AllReady {
    async fn wait(&mut self) {
        match &mut self.0 {
            Some(waiting) => {
                // Only a process that is coming to its end gives up waiting.
                let _ = waiting.await;
                self.0 = None;
            }
            None => std::future::pending().await,
        }
    }
}

async fn stop(services: Vec<Handle>) -> Result<(), ServiceError> {
    services.iter().for_each(Handle::ask_to_stop);
    let stopped = tokio::task::spawn_blocking(move || services.into_iter().try_for_each(Handle::stop));
    match tokio::time::timeout(STOP_WITHIN, stopped).await {
        Ok(ended) => ended.unwrap_or_else(|_| Err(ServiceError::Broken(PathBuf::from("a study")))),
        Err(_) => {
            warn!("stopped in the midst of work; what was not finished is cleared at the next start");
            std::process::exit(0);
        }
    }
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

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn times_and_levels_are_read_or_refused() {
        assert_eq!(time("60s"), Ok(Duration::from_secs(60)));
        assert_eq!(time("5"), Ok(Duration::from_secs(5)));
        assert_eq!(time("2m"), Ok(Duration::from_secs(120)));
        assert_eq!(time("24h"), Ok(Duration::from_secs(DAY)));
        for wrong in ["", "s", "0s", "25h", "1d", "-1s", "1.5s", "99999999999999999999s", "5 m"] {
            assert!(time(wrong).is_err(), "{wrong}");
        }
        assert_eq!(level("warn"), Ok(LevelFilter::WARN));
        assert!(level("inof").is_err());
    }
}
