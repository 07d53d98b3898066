//! How a command ends when it does not end well.

use std::{fmt, process::ExitCode};

/// Why a command did not do its job, in one sentence that says what, where and what to do next.
#[derive(Debug)]
pub enum Failure {
    /// The job failed for a stated reason: exit code 1.
    Job(String),
    /// The command line, or a file a person wrote for it, is wrong: exit code 2.
    Usage(String),
}

impl Failure {
    /// A failed job, from any error that reads as a sentence.
    pub fn job(error: impl fmt::Display) -> Self {
        Self::Job(error.to_string())
    }

    /// Wrong usage, from any error that reads as a sentence.
    pub fn usage(error: impl fmt::Display) -> Self {
        Self::Usage(error.to_string())
    }

    /// 1 or 2.
    pub fn exit_code(&self) -> ExitCode {
        match self {
            Self::Job(_) => ExitCode::from(1),
            Self::Usage(_) => ExitCode::from(2),
        }
    }
}

impl fmt::Display for Failure {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::Job(sentence) | Self::Usage(sentence) => f.write_str(sentence),
        }
    }
}
