//! Layer 6, the command line of the binary: arguments, settings, commands, messages.  May use: the public library.

mod args;
mod check;
mod config;
mod diagnostics;
mod files;
mod inspect;
mod job;
mod run;

use std::io::Write;
use std::process::ExitCode;

use clap::Parser;

use args::{Cli, Command};
use diagnostics::Failure;
use job::Job;

/// Parses the command line, does the job, returns the exit code.
pub fn run() -> ExitCode {
    let cli = match Cli::try_parse() {
        Ok(cli) => cli,
        Err(error) => {
            // Help and version are answers, not failures.
            let code = if error.use_stderr() { 2 } else { 0 };
            let _ = error.print();
            return ExitCode::from(code);
        }
    };
    match dispatch(&cli.command) {
        Ok(()) => ExitCode::SUCCESS,
        Err(failure) if failure.is_closed_pipe() => ExitCode::SUCCESS,
        Err(failure) => {
            let _ = writeln!(std::io::stderr(), "error: {failure}");
            ExitCode::from(failure.exit_code())
        }
    }
}

fn dispatch(command: &Command) -> Result<(), Failure> {
    let common = command.common();
    if let Some(threads) = common.threads {
        if threads == 0 {
            return Err(isopsi::io::IoError::setting("--threads", "0 threads cannot work; give 1 or more").into());
        }
        // Only fails when a pool exists already, which cannot be here.
        let _ = rayon::ThreadPoolBuilder::new().num_threads(threads).build_global();
    }
    if let Command::Inspect { write, .. } = command {
        return inspect::inspect(common, write.as_deref());
    }
    match command {
        Command::Run { out, overwrite, .. } => run::run(common, out, *overwrite),
        Command::Divergence { require, .. } => check::divergence(&Job::open(common)?, *require),
        Command::Flux { from, to, .. } => {
            let points = (config::point(from, "--from")?, config::point(to, "--to")?);
            check::flux(&Job::open(common)?, points.0, points.1)
        }
        Command::Clean { out, .. } => files::clean(common, out),
        Command::Psi { out, .. } => files::psi(common, out),
        Command::Stagnation { out, .. } => files::stagnation(common, out.as_deref()),
        Command::Streamlines { out, .. } => files::streamlines(common, out.as_deref()),
        Command::Figure { out, .. } => files::figure(common, out),
        Command::Inspect { .. } => Ok(()),
    }
}
