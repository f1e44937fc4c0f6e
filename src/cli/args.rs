//! What can be typed.

use clap::{Args, Parser, Subcommand};
use std::path::PathBuf;

/// Walks a molecule along its potential-energy surface: scans bonds, angles and dihedrals from a TOML spec.
#[derive(Debug, Parser)]
#[command(name = "thalweg", version, disable_help_subcommand = true)]
#[command(
    after_help = "Exit status: 0 done; 1 could not finish; 2 the spec or command line is wrong, or the folder holds \
another spec's run; 3 finished, but some point did not converge; 130 interrupted, journal intact."
)]
pub(crate) struct Arguments {
    #[command(subcommand)]
    pub(crate) command: Command,
}

#[derive(Debug, Subcommand)]
pub(crate) enum Command {
    /// Run a spec: walk its grid, write tables and figures
    Scan(ScanArgs),
    /// Find the equilibrium geometry, vibrations and force constants at each level of a spec; needs no sweep
    Settle(SettleArgs),
    /// Make tables and figures again from a run's journal, without any calculation
    Report(ReportArgs),
    /// Validate a spec and print its grid, sizes and an estimate of the time; run nothing
    Check(CheckArgs),
    /// List the basis sets inside, or describe one
    Basis {
        /// Name of a basis set, such as 6-31G*
        name: Option<String>,
    },
    /// Print the JSON Schema of the spec, for editors
    Schema,
    /// Print completions for a shell
    Completions {
        /// The shell
        shell: clap_complete::Shell,
    },
}

#[derive(Debug, Args)]
pub(crate) struct ScanArgs {
    /// The spec, a TOML file
    pub(crate) spec: PathBuf,
    /// Move an existing run folder aside (to NAME.1, NAME.2, …; nothing is deleted)
    #[arg(long)]
    pub(crate) fresh: bool,
    #[command(flatten)]
    pub(crate) common: CommonArgs,
}

#[derive(Debug, Args)]
pub(crate) struct SettleArgs {
    /// The spec, a TOML file
    pub(crate) spec: PathBuf,
    /// Leave saddle points along their imaginary modes until a minimum is reached
    #[arg(long)]
    pub(crate) push: bool,
    /// Move an existing run folder aside (to NAME.1, NAME.2, …; nothing is deleted)
    #[arg(long)]
    pub(crate) fresh: bool,
    #[command(flatten)]
    pub(crate) common: CommonArgs,
}

#[derive(Debug, Args)]
pub(crate) struct ReportArgs {
    /// The run folder
    pub(crate) run: PathBuf,
    /// A spec whose [[fit]], [vibration] and [output] tables replace those of the run
    #[arg(long, value_name = "SPEC")]
    pub(crate) spec: Option<PathBuf>,
    #[command(flatten)]
    pub(crate) common: CommonArgs,
}

#[derive(Debug, Args)]
pub(crate) struct CheckArgs {
    /// The spec, a TOML file
    pub(crate) spec: PathBuf,
}

/// Options of every command that makes results.
#[derive(Debug, Args)]
pub(crate) struct CommonArgs {
    /// Folder of the run, instead of the spec's [output] folder
    #[arg(long, value_name = "DIR")]
    pub(crate) out: Option<PathBuf>,
    /// Number of threads (default: all processors)
    #[arg(long, value_name = "N", value_parser = clap::value_parser!(u16).range(1..=1024))]
    pub(crate) threads: Option<u16>,
    /// No progress on stderr
    #[arg(long)]
    pub(crate) quiet: bool,
    /// The whole result as JSON on stdout instead of a table
    #[arg(long)]
    pub(crate) json: bool,
}
