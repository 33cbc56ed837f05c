//! Command line of isopsi.

mod cli;

use std::process::ExitCode;

fn main() -> ExitCode {
    cli::run()
}
