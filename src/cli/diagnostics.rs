//! Messages for people: errors with their exit code, remarks, progress of stages.

use std::io::{self, IsTerminal, Write};
use std::time::Instant;

use isopsi::analysis::{AnalysisError, Stage};
use isopsi::field::Remark;
use isopsi::io::{Blame, IoError};
use isopsi::report::StageTime;

/// Why a command ended early; decides the exit code.
#[derive(Debug, thiserror::Error)]
pub enum Failure {
    /// Reading or writing.
    #[error(transparent)]
    Io(#[from] IoError),
    /// The frame cannot be analyzed.
    #[error("{source_name}: {error}")]
    Analysis {
        /// Input.
        source_name: String,
        /// Reason.
        error: AnalysisError,
    },
    /// The flux between two points cannot be given.
    #[error("{0}")]
    Flux(#[from] isopsi::extract::flux::FluxError),
    /// The figure cannot be drawn.
    #[error("figure: {0}")]
    Figure(#[from] isopsi::figure::FigureError),
    /// Standard output failed.
    #[error("cannot write to standard output: {0}")]
    Output(#[from] io::Error),
    /// The verdict is another one than required.
    #[error("the verdict is `{found}`, `{required}` was required")]
    Verdict {
        /// Verdict found.
        found: &'static str,
        /// Verdict required.
        required: &'static str,
    },
}

impl Failure {
    /// Exit code: 1 the machine, 2 command line or survey, 3 a required verdict, 4 the data.
    pub fn exit_code(&self) -> u8 {
        match self {
            Failure::Io(error) => match error.blame() {
                Blame::Machine => 1,
                Blame::Usage => 2,
                Blame::Data => 4,
            },
            Failure::Analysis { error, .. } => {
                use isopsi::numerics::stream_function::FitError as F;
                match error {
                    AnalysisError::Fit(
                        F::ZeroNotWall { .. }
                        | F::ZeroNotBody { .. }
                        | F::ZeroOutside { .. }
                        | F::CosineNotApplicable
                        | F::WallPlace { .. },
                    ) => 2,
                    _ => 4,
                }
            }
            Failure::Flux(_) => 4,
            Failure::Figure(_) | Failure::Output(_) => 1,
            Failure::Verdict { .. } => 3,
        }
    }

    /// A pipe that closed (`isopsi ... | head`) is no failure.
    pub fn is_closed_pipe(&self) -> bool {
        matches!(self, Failure::Output(e) if e.kind() == io::ErrorKind::BrokenPipe)
    }
}

/// Remarks and progress on standard error.
pub struct Messages {
    quiet: bool,
}

impl Messages {
    /// Messages, silenced by `--quiet`.
    pub fn new(quiet: bool) -> Self {
        Self { quiet }
    }

    /// A line on standard error.
    pub fn line(&self, text: &str) {
        if !self.quiet {
            // A closed standard error is no reason to stop.
            let _ = writeln!(io::stderr(), "{text}");
        }
    }

    /// Remarks, one a line.
    pub fn remarks<'a>(&self, remarks: impl Iterator<Item = &'a Remark>) {
        let mark = if io::stderr().is_terminal() && std::env::var_os("NO_COLOR").is_none() {
            "\u{1b}[33mnote:\u{1b}[0m"
        } else {
            "note:"
        };
        for remark in remarks {
            self.line(&format!("{mark} {remark}"));
        }
    }
}

/// Measures the seconds between stages.
pub struct Stopwatch {
    state: std::sync::Mutex<(Instant, Vec<StageTime>)>,
}

impl Stopwatch {
    /// Starts now.
    pub fn start() -> Self {
        Self { state: std::sync::Mutex::new((Instant::now(), Vec::new())) }
    }

    /// Notes that something ended.
    pub fn lap(&self, stage: &'static str) {
        if let Ok(mut state) = self.state.lock() {
            let now = Instant::now();
            let seconds = now.duration_since(state.0).as_secs_f64();
            state.0 = now;
            state.1.push(StageTime { stage, seconds });
        }
    }

    /// Notes the end of a stage of the analysis.
    pub fn stage(&self, stage: Stage) {
        self.lap(stage.name());
    }

    /// Times so far.
    pub fn times(&self) -> Vec<StageTime> {
        self.state.lock().map(|s| s.1.clone()).unwrap_or_default()
    }
}
