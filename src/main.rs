//! The command-line program: collect the arguments, run, return the exit status.

use std::io::{IsTerminal, stderr, stdout};
use std::process::ExitCode;
use thalweg::cli;

fn main() -> ExitCode {
    let stop = cli::stop_on_signals();
    let terminal = stderr().is_terminal();
    let status = cli::run(
        std::env::args_os(),
        &mut stdout(),
        &mut stderr(),
        terminal,
        stop,
    );
    ExitCode::from(status.code())
}
