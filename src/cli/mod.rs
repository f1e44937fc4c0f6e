//! The command line: arguments in, work done, words to stderr, results to stdout, an exit status back.

mod args;
mod check;
mod exit;
mod occupied;
mod progress;
mod scan;
mod settle;

pub use exit::Status;

use crate::basis::describe;
use crate::spec::{self, Spec, SpecErrors};
use args::{Arguments, Command};
use clap::{CommandFactory, Parser};
use std::ffi::OsString;
use std::io::Write;
use std::path::Path;
use std::sync::OnceLock;
use std::sync::atomic::{AtomicBool, Ordering};

/// Where a command writes.
pub(crate) struct Streams<'a> {
    /// Results.
    pub(crate) out: &'a mut dyn Write,
    /// Words for people.
    pub(crate) err: &'a mut dyn Write,
    /// Whether the words go to a terminal that can redraw a line.
    pub(crate) terminal: bool,
}

/// A flag that an interrupt or termination signal raises. Call it once, from `main`.
pub fn stop_on_signals() -> &'static AtomicBool {
    static STOP: OnceLock<AtomicBool> = OnceLock::new();
    let stop = STOP.get_or_init(|| AtomicBool::new(false));
    // A second signal ends the program at once; where no handler can be installed the system's own applies.
    let _ = ctrlc::set_handler(move || {
        if stop.swap(true, Ordering::Relaxed) {
            std::process::exit(i32::from(Status::Interrupted.code()));
        }
    });
    stop
}

/// Runs the whole program. `args` starts with the program's name; `terminal` tells whether `err` is a
/// terminal; raising `stop` ends a scan after the evaluations under way.
pub fn run(
    args: impl IntoIterator<Item = OsString>,
    out: &mut dyn Write,
    err: &mut dyn Write,
    terminal: bool,
    stop: &AtomicBool,
) -> Status {
    let arguments = match Arguments::try_parse_from(args) {
        Ok(arguments) => arguments,
        Err(message) => return refuse_arguments(&message, out, err),
    };
    let mut streams = Streams { out, err, terminal };
    let result = match arguments.command {
        Command::Scan(scan) => scan::run(&scan, stop, &mut streams),
        Command::Settle(args) => settle::run(&args, stop, &mut streams),
        Command::Report(report) => scan::report(&report, &mut streams),
        Command::Check(check) => check::run(&check, &mut streams),
        Command::Basis { name } => basis(name.as_deref(), &mut streams),
        Command::Schema => writeln!(streams.out, "{:#}", spec::schema())
            .map(|()| Status::Done)
            .map_err(Failure::from),
        Command::Completions { shell } => {
            // The generator panics where a stream is closed; memory never is.
            let mut text = Vec::new();
            clap_complete::generate(shell, &mut Arguments::command(), "thalweg", &mut text);
            streams
                .out
                .write_all(&text)
                .map(|()| Status::Done)
                .map_err(Failure::from)
        }
    };
    match result {
        Ok(status) => status,
        Err(failure) => {
            // If even stderr is gone there is nobody left to tell.
            if !failure.message.is_empty() {
                let _ = writeln!(streams.err, "{}", failure.message);
            }
            failure.status
        }
    }
}

/// A command that ended early: what to tell and the status to return.
pub(crate) struct Failure {
    message: String,
    status: Status,
}

impl Failure {
    /// The user's input or choice is at fault.
    pub(crate) fn usage(message: impl ToString) -> Self {
        Self {
            message: format!("error: {}", message.to_string()),
            status: Status::WrongInput,
        }
    }

    /// Something outside failed.
    pub(crate) fn system(message: impl ToString) -> Self {
        Self {
            message: format!("error: {}", message.to_string()),
            status: Status::Failed,
        }
    }
}

impl From<std::io::Error> for Failure {
    fn from(error: std::io::Error) -> Self {
        if error.kind() == std::io::ErrorKind::BrokenPipe {
            // The reader has seen enough.
            return Self {
                message: String::new(),
                status: Status::Done,
            };
        }
        Self::system(error)
    }
}

/// Reads and validates a spec; its errors are already complete messages. What is allowed but may surprise is told.
fn load(path: &Path, streams: &mut Streams<'_>) -> Result<Spec, Failure> {
    told(spec::load(path), streams)
}

/// The spec, its notes told, or its errors as the failure they are.
fn told(read: Result<Spec, SpecErrors>, streams: &mut Streams<'_>) -> Result<Spec, Failure> {
    let spec = read.map_err(|errors| Failure {
        message: errors.to_string().trim_end().to_owned(),
        status: Status::WrongInput,
    })?;
    for note in &spec.notes {
        writeln!(streams.err, "{note}")?;
    }
    Ok(spec)
}

fn basis(name: Option<&str>, streams: &mut Streams<'_>) -> Result<Status, Failure> {
    match name {
        None => describe::write_list(streams.out)?,
        Some(name) => {
            let set = crate::basis::library::find(name).map_err(Failure::usage)?;
            describe::write_set(set, streams.out)?;
        }
    }
    Ok(Status::Done)
}

fn refuse_arguments(message: &clap::Error, out: &mut dyn Write, err: &mut dyn Write) -> Status {
    let asked_for = !message.use_stderr();
    let text = message.render().to_string();
    let _ = if asked_for {
        write!(out, "{text}")
    } else {
        write!(err, "{text}")
    };
    if asked_for {
        Status::Done
    } else {
        Status::WrongInput
    }
}
