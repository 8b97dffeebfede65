//! Logs: lines for people, or JSON for machines, to standard error.

use tracing::level_filters::LevelFilter;

/// How logs are written.
#[derive(Debug, Clone, Copy, PartialEq, Eq, clap::ValueEnum)]
pub enum Format {
    /// A line an event.
    Lines,
    /// A JSON object an event.
    Json,
}

/// Sets the logs up, once for the process.
pub fn set_up(format: Format, level: LevelFilter) {
    let builder = tracing_subscriber::fmt().with_max_level(level).with_writer(std::io::stderr).with_target(false);
    // A second set-up in one process (a test) changes nothing.
    let _ = match format {
        Format::Lines => builder.with_ansi(false).try_init(),
        Format::Json => builder.json().flatten_event(true).try_init(),
    };
}
