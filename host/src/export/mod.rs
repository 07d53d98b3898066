//! A run as open tables: CSV files and a Frictionless `datapackage.json` that types every column and names every unit.
//!
//! Each table is one list of columns (`columns`), from which both the CSV and its description are made, so that the two
//! cannot part. The same run gives the same bytes: there is no time of writing in them.

mod columns;
mod package;
mod tables;

use std::{
    fs,
    path::{Path, PathBuf},
};

use thiserror::Error;

use crate::{
    reduction::{Recording, Reduction},
    run::{RunError, RunReader},
};

pub use columns::{Column, Kind, Table};

/// Why a run could not be exported.
#[derive(Debug, Error)]
pub enum ExportError {
    /// The run cannot be read.
    #[error(transparent)]
    Run(#[from] RunError),
    /// The run has no stamps.
    #[error("{path} has no finished reduction: run `ringvolt stamp` on it first")]
    NoStamps {
        /// The run.
        path: String,
    },
    /// A file could not be written.
    #[error("{path} could not be written ({why}): check the folder and the disk")]
    Write {
        /// The file.
        path: String,
        /// What the system said.
        why: String,
    },
    /// The folder holds the tables of another run.
    #[error("{path} holds the tables of another run: give an empty or new folder, or remove the old tables first")]
    OtherRun {
        /// The folder.
        path: String,
    },
    /// The folder holds something else.
    #[error("{path} holds {name}, which is no part of an export: give an empty or new folder")]
    Foreign {
        /// The folder.
        path: String,
        /// What is there.
        name: String,
    },
}

const DESCRIPTION: &str = "datapackage.json";

/// Writes all tables of a run to a folder, and gives their number.
///
/// # Errors
/// [`ExportError`].
pub fn export(reader: &RunReader, reduction: &Reduction, folder: &Path) -> Result<usize, ExportError> {
    let run = reader.fingerprint()?;
    prepare(folder, &run)?;
    let recording = Recording::open(reader)?;
    let mut resources = Vec::new();
    for table in tables::ALL {
        let path = folder.join(table.file);
        let unfinished = unfinished(&path);
        let failed = |why: String| ExportError::Write { path: path.display().to_string(), why };
        let mut csv = csv::Writer::from_path(&unfinished).map_err(|error| failed(error.to_string()))?;
        csv.write_record(table.columns.iter().map(|column| column.name)).map_err(|error| failed(error.to_string()))?;
        tables::fill(table, reader, &recording, reduction, &mut |row: &[String]| {
            csv.write_record(row).map_err(|error| failed(error.to_string()))
        })?;
        csv.flush().map_err(|error| failed(error.to_string()))?;
        drop(csv);
        fs::rename(&unfinished, &path).map_err(|error| failed(error.to_string()))?;
        resources.push(package::resource(table, &path).map_err(|error| failed(error.to_string()))?);
    }
    let path = folder.join(DESCRIPTION);
    let text = package::package(&reader.header()?, &run, resources);
    let unfinished = unfinished(&path);
    fs::write(&unfinished, text)
        .and_then(|()| fs::rename(&unfinished, &path))
        .map_err(|error| ExportError::Write { path: path.display().to_string(), why: error.to_string() })?;
    Ok(tables::ALL.len())
}

fn unfinished(path: &Path) -> PathBuf {
    path.with_extension("part")
}

/// Makes the folder; one that holds anything but an earlier export of the same run is refused.
fn prepare(folder: &Path, run: &str) -> Result<(), ExportError> {
    let failed =
        |error: std::io::Error| ExportError::Write { path: folder.display().to_string(), why: error.to_string() };
    fs::create_dir_all(folder).map_err(failed)?;
    for entry in fs::read_dir(folder).map_err(failed)? {
        let name = entry.map_err(failed)?.file_name().to_string_lossy().into_owned();
        let is = |file: &str| file == name || unfinished(Path::new(file)) == Path::new(&name);
        let ours = is(DESCRIPTION) || tables::ALL.iter().any(|table| is(table.file));
        if !ours {
            return Err(ExportError::Foreign { path: folder.display().to_string(), name });
        }
    }
    let earlier = fs::read_to_string(folder.join(DESCRIPTION)).ok().and_then(|text| package::run_of(&text));
    if earlier.is_some_and(|earlier| earlier != run) {
        return Err(ExportError::OtherRun { path: folder.display().to_string() });
    }
    Ok(())
}

#[cfg(test)]
mod tests;
