//! Where a command's words go.
//!
//! Invariants: results go to standard output and failures to standard error; a reader that went away ends the command
//! quietly; colour is used only where it was allowed.

use std::io::{self, Write};

use owo_colors::OwoColorize;
use serde::Serialize;

use crate::error::{Exit, Failure};
use crate::report::table::Table;
use crate::report::text::{clean_lines, wrap};

/// The narrowest and the widest that text is laid out for.
const NARROWEST: usize = 40;
const WIDEST: usize = 160;
/// The width where there is no terminal.
const USUAL: usize = 80;

/// Standard output and error output.
pub struct Out<'w> {
    stdout: Box<dyn Write + 'w>,
    stderr: Box<dyn Write + 'w>,
    /// Results as JSON.
    pub json: bool,
    /// Nothing but what was asked for.
    pub quiet: bool,
    /// Standard output is a terminal.
    pub terminal: bool,
    /// Colour may be used.
    pub colour: bool,
    /// Columns to fill.
    pub width: usize,
}

impl<'w> Out<'w> {
    /// Plain output, 80 columns wide.
    pub fn new(stdout: Box<dyn Write + 'w>, stderr: Box<dyn Write + 'w>) -> Self {
        let stdout = Box::new(io::BufWriter::with_capacity(1 << 16, stdout));
        Self { stdout, stderr, json: false, quiet: false, terminal: false, colour: false, width: USUAL }
    }

    /// A result for machines.
    pub fn json<T: Serialize + ?Sized>(&mut self, value: &T) -> Result<(), Failure> {
        let written = match self.terminal {
            true => serde_json::to_writer_pretty(&mut self.stdout, value),
            false => serde_json::to_writer(&mut self.stdout, value),
        };
        written.map_err(|error| write_failure(&error.into()))?;
        self.line("")
    }

    /// What was asked for; ends with a line end whatever the text does.
    pub fn text(&mut self, text: &str) -> Result<(), Failure> {
        self.line(text.strip_suffix('\n').unwrap_or(text))
    }

    /// A table, its heading set off where colour is allowed.
    pub fn table(&mut self, table: &Table) -> Result<(), Failure> {
        let text = table.render(self.width);
        if !self.colour {
            return self.text(&text);
        }
        let is_rule = |line: &str| line.starts_with('─');
        let heads = text.lines().take_while(|line| !is_rule(line)).count();
        let bold = |(at, line): (usize, &str)| if at < heads { line.bold().to_string() } else { line.to_owned() };
        let lines: Vec<String> = text.lines().enumerate().map(bold).collect();
        self.text(&lines.join("\n"))
    }

    /// A paragraph, wrapped; left out under `--quiet`.
    pub fn say(&mut self, text: &str) -> Result<(), Failure> {
        if self.quiet {
            return Ok(());
        }
        let text = wrap(text, self.width, "");
        self.line(&text)
    }

    /// A heading; left out under `--quiet`.
    pub fn heading(&mut self, text: &str) -> Result<(), Failure> {
        let text = wrap(text, self.width, "");
        let text = if self.colour { text.bold().to_string() } else { text };
        if self.quiet { Ok(()) } else { self.line(&text) }
    }

    fn line(&mut self, text: &str) -> Result<(), Failure> {
        self.stdout
            .write_all(text.as_bytes())
            .and_then(|()| self.stdout.write_all(b"\n"))
            .map_err(|e| write_failure(&e))
    }

    /// Hands over what is still kept back.
    pub fn finish(&mut self) -> Result<(), Failure> {
        self.stdout.flush().map_err(|error| write_failure(&error))
    }

    /// A failure; nothing more can be done if it cannot be written either.
    pub fn failure(&mut self, failure: &Failure) {
        let _ = self.stdout.flush();
        if failure.kind == CLOSED {
            return;
        }
        let text = if self.json { format!("{}\n", failure.json()) } else { self.plain(failure) };
        let _ = self.stderr.write_all(text.as_bytes());
    }

    fn plain(&self, failure: &Failure) -> String {
        // Faults and messages may quote what a file says.
        let faults =
            failure.faults.as_ref().map_or(String::new(), |faults| format!("{}\n\n", clean_lines(faults.0.trim_end())));
        // What the option parser says is laid out already.
        let message = clean_lines(&match failure.what.contains('\n') {
            true => format!("revisant: {}", failure.message()),
            false => wrap(&format!("revisant: {}", sentence(&failure.message())), self.width, "  "),
        });
        let name = "revisant:";
        let message = match message.strip_prefix(name) {
            Some(rest) if self.colour => format!("{}{rest}", name.red().bold()),
            _ => message,
        };
        format!("{faults}{message}\n")
    }
}

/// A message with the one mark that ends it.
fn sentence(message: &str) -> String {
    match message.trim_end_matches('.') {
        question if question.ends_with('?') => question.to_owned(),
        statement => format!("{statement}."),
    }
}

/// The kind of failure that means that nobody reads on.
const CLOSED: &str = "closed";

fn write_failure(error: &io::Error) -> Failure {
    match error.kind() {
        io::ErrorKind::BrokenPipe => Failure { exit: Exit::Done, ..Failure::new(CLOSED, "nobody reads on") },
        _ => Failure::new("output", format!("the output cannot be written ({error})")),
    }
}

/// The columns of the terminal on standard output; 80 where there is none.
pub fn terminal_width() -> usize {
    let size = rustix::termios::tcgetwinsize(std::io::stdout()).map(|size| usize::from(size.ws_col));
    size.ok().filter(|columns| *columns > 0).unwrap_or(USUAL).clamp(NARROWEST, WIDEST)
}
