//! What can go wrong with a run file, as sentences.

use std::path::Path;

use rusqlite::ErrorCode;
use thiserror::Error;

/// Why a run file could not be made, written or read.
#[derive(Debug, Error)]
pub enum RunError {
    /// There is a file already, and a run is never written over.
    #[error("{path} exists already: choose another name for the new run, or move the old one away")]
    Exists {
        /// The file.
        path: String,
    },
    /// It could not be opened or created.
    #[error("{path} cannot be opened ({why}): check the path and that the folder may be written to")]
    Open {
        /// The file.
        path: String,
        /// What the system said.
        why: String,
    },
    /// The file is no run.
    #[error("{path} is not a Ringvolt run file: give the file that `ringvolt run --out` made")]
    NotARun {
        /// The file.
        path: String,
    },
    /// A newer program made it.
    #[error("{path} has layout version {found}, this program reads up to {known}: install a newer ringvolt")]
    Newer {
        /// The file.
        path: String,
        /// Its version.
        found: i64,
        /// The newest this program knows.
        known: i64,
    },
    /// No room.
    #[error(
        "the disk that holds {path} is full: free some room and start a new run; everything up to the last quarter second is in the file"
    )]
    Full {
        /// The file.
        path: String,
    },
    /// Writing failed.
    #[error("{path} could not be written ({why}): check the disk; everything committed before is in the file")]
    Write {
        /// The file.
        path: String,
        /// What the database said.
        why: String,
    },
    /// Reading failed.
    #[error("{path} could not be read ({why}): run `ringvolt verify` on it to see what may still be trusted")]
    Read {
        /// The file.
        path: String,
        /// What the database said.
        why: String,
    },
    /// A row holds something that cannot be.
    #[error(
        "{path} holds an impossible value in {place}: run `ringvolt verify` on it to see what may still be trusted"
    )]
    Damaged {
        /// The file.
        path: String,
        /// Table and column.
        place: String,
    },
}

impl RunError {
    pub(super) fn writing(path: &Path, error: &rusqlite::Error) -> Self {
        let path = path.display().to_string();
        match error.sqlite_error_code() {
            Some(ErrorCode::DiskFull) => Self::Full { path },
            _ => Self::Write { path, why: error.to_string() },
        }
    }

    pub(super) fn reading(path: &Path, error: &rusqlite::Error) -> Self {
        let text = path.display().to_string();
        match error {
            rusqlite::Error::FromSqlConversionFailure(..)
            | rusqlite::Error::IntegralValueOutOfRange(..)
            | rusqlite::Error::InvalidColumnType(..)
            | rusqlite::Error::Utf8Error(..) => Self::Damaged { path: text, place: error.to_string() },
            _ => match error.sqlite_error_code() {
                Some(ErrorCode::NotADatabase) => Self::NotARun { path: text },
                _ => Self::Read { path: text, why: error.to_string() },
            },
        }
    }
}
