//! An input that was read, with everything a command needs to go on.

use std::io::Write;
use std::path::Path;

use isopsi::analysis::{AnalysisOptions, Check, Features, FittedFlow, check_flow, find_features, fit_flow};
use isopsi::io::{Dataset, IoError, Survey, read};
use isopsi::report::{Provenance, ReportContext};
use serde_json::Value;

use super::args::Common;
use super::config::{options_of, psi_sign, survey_of};
use super::diagnostics::{Failure, Messages, Stopwatch};

/// Data and settings of a command.
pub struct Job<'a> {
    /// Raw arguments.
    pub common: &'a Common,
    /// Data.
    pub data: Dataset,
    /// Settings of the analysis.
    pub options: AnalysisOptions,
    /// Units and sign of the results.
    pub context: ReportContext,
    /// Remarks and progress.
    pub messages: Messages,
    /// Seconds per stage.
    pub watch: Stopwatch,
}

impl<'a> Job<'a> {
    /// Reads the input and the settings.
    ///
    /// # Errors
    /// [`Failure`].
    pub fn open(common: &'a Common) -> Result<Self, Failure> {
        let watch = Stopwatch::start();
        let data = read(&common.inputs, &survey_of(common)?)?;
        watch.lap("read");
        let options = options_of(&data.survey)?;
        let context = ReportContext { units: data.units.clone(), psi_sign: psi_sign(&data.survey)? };
        let messages = Messages::new(common.quiet);
        Ok(Self { common, data, options, context, messages, watch })
    }

    /// Refuses an output that is one of the inputs.
    ///
    /// # Errors
    /// [`Failure`] for an output equal to an input, or one that cannot be written.
    pub fn guard_output(&self, out: &Path) -> Result<(), Failure> {
        let same = |a: &Path, b: &Path| match (a.canonicalize(), b.canonicalize()) {
            (Ok(a), Ok(b)) => a == b,
            _ => false,
        };
        if self
            .data
            .sources
            .iter()
            .map(|s| s.path.as_path())
            .chain(self.common.inputs.iter().map(AsRef::as_ref))
            .any(|p| same(p, out))
        {
            return Err(IoError::setting(
                "--out",
                format!("{} is the input itself; choose another name", out.display()),
            )
            .into());
        }
        isopsi::io::output::ensure_writable(out)?;
        Ok(())
    }

    /// Screens and fits.
    ///
    /// # Errors
    /// [`Failure::Analysis`].
    pub fn fit(&self) -> Result<FittedFlow, Failure> {
        fit_flow(&self.data.field, &self.options, &|stage| self.watch.stage(stage))
            .map_err(|error| Failure::Analysis { source_name: self.source_name(), error })
    }

    /// The incompressibility check.
    pub fn check(&self, flow: &FittedFlow) -> Check {
        check_flow(flow, &self.options, &|stage| self.watch.stage(stage))
    }

    /// Points, lines, cells.
    pub fn features(&self, flow: &FittedFlow) -> Features {
        find_features(flow, &self.options, &|stage| self.watch.stage(stage))
    }

    /// File and frame in words.
    pub fn source_name(&self) -> String {
        let file = self.data.sources.first().map(|s| s.path.display().to_string()).unwrap_or_default();
        if self.data.frames > 1 { format!("{file}, frame {}", self.data.field.frame.index) } else { file }
    }

    /// Prints the remarks of reading and of a stage.
    pub fn say(&self, flow: &FittedFlow) {
        self.messages.remarks(self.data.remarks.iter().chain(&flow.remarks));
    }

    /// Where the results come from.
    pub fn provenance(&self) -> Provenance {
        Provenance {
            command: std::env::args().collect::<Vec<_>>().join(" "),
            settings: settings(&self.data.survey),
            inputs: self
                .data
                .sources
                .iter()
                .map(|s| (s.path.display().to_string(), s.size, s.sha256.clone()))
                .collect(),
            remarks: self.data.remarks.clone(),
        }
    }
}

/// Settings in the form of a survey file, as JSON.
pub fn settings(survey: &Survey) -> Value {
    serde_json::to_value(survey).unwrap_or(Value::Null)
}

/// Writes to standard output.
///
/// # Errors
/// [`Failure::Output`].
pub fn print(text: &str) -> Result<(), Failure> {
    let mut out = std::io::stdout().lock();
    out.write_all(text.as_bytes())?;
    out.flush()?;
    Ok(())
}
