//! Errors of reading and writing: where, what was found, what was expected, what to do.

use std::path::PathBuf;

/// Whose fault an error is; decides the exit code.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Blame {
    /// The machine failed (unreadable file, full disk): exit 1.
    Machine,
    /// Command line or survey file is wrong: exit 2.
    Usage,
    /// The data cannot be processed: exit 4.
    Data,
}

/// An error with its place.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum IoError {
    /// The operating system refused.
    #[error("cannot {action} {}: {source}", path.display())]
    System {
        /// `read`, `write`, `rename` ...
        action: &'static str,
        /// File or folder.
        path: PathBuf,
        /// What the system said.
        source: std::io::Error,
    },
    /// The content of a file cannot be used.
    #[error("{}: {place}: {problem}", path.display())]
    Content {
        /// File.
        path: PathBuf,
        /// Line, dataset, array or frame in it.
        place: String,
        /// What is wrong, what was expected, what to do.
        problem: String,
    },
    /// A flag or a key of the survey file is wrong.
    #[error("{place}: {problem}")]
    Setting {
        /// The flag or `file: [table] key`.
        place: String,
        /// What is wrong, what was expected, what to do.
        problem: String,
    },
}

impl IoError {
    /// Whose fault it is.
    pub fn blame(&self) -> Blame {
        match self {
            IoError::System { .. } => Blame::Machine,
            IoError::Content { .. } => Blame::Data,
            IoError::Setting { .. } => Blame::Usage,
        }
    }

    /// Content error.
    pub fn content(path: impl Into<PathBuf>, place: impl Into<String>, problem: impl Into<String>) -> Self {
        IoError::Content { path: path.into(), place: place.into(), problem: problem.into() }
    }

    /// Setting error.
    pub fn setting(place: impl Into<String>, problem: impl Into<String>) -> Self {
        IoError::Setting { place: place.into(), problem: problem.into() }
    }

    /// System error.
    pub fn system(action: &'static str, path: impl Into<PathBuf>, source: std::io::Error) -> Self {
        IoError::System { action, path: path.into(), source }
    }
}
