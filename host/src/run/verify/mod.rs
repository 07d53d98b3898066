//! What may still be trusted of a run file: the file itself, nothing missing, certificate, mark, frame files, stamps.
//!
//! Each check gives findings; a check that cannot be carried out because the file is damaged is a fault itself, and the
//! others go on.

mod certificate;
mod frames;
mod sequence;
mod stamps;

use std::{
    fmt,
    fs::File,
    io::{Read, Seek, SeekFrom},
};

use ringvolt_protocol::DeviceKind;

use super::{RunError, RunReader};

/// How much a finding matters.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub enum Severity {
    /// As it should be.
    Fine,
    /// Worth knowing; nothing that was recorded is in doubt.
    Note,
    /// Something is missing or was changed.
    Fault,
}

impl fmt::Display for Severity {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(match self {
            Self::Fine => "fine",
            Self::Note => "note",
            Self::Fault => "FAULT",
        })
    }
}

/// One thing that was looked at.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Finding {
    /// How much it matters.
    pub severity: Severity,
    /// What was looked at: a few words.
    pub subject: &'static str,
    /// What was found, and what may be trusted because of it or in spite of it.
    pub sentence: String,
}

impl Finding {
    /// As it should be.
    pub fn fine(subject: &'static str, sentence: impl Into<String>) -> Self {
        Self { severity: Severity::Fine, subject, sentence: sentence.into() }
    }

    /// Worth knowing.
    pub fn note(subject: &'static str, sentence: impl Into<String>) -> Self {
        Self { severity: Severity::Note, subject, sentence: sentence.into() }
    }

    /// Something is wrong.
    pub fn fault(subject: &'static str, sentence: impl Into<String>) -> Self {
        Self { severity: Severity::Fault, subject, sentence: sentence.into() }
    }
}

type Check = fn(&RunReader) -> Result<Vec<Finding>, RunError>;

/// All checks, in the order in which a person wants to hear of them.
const CHECKS: [(&str, Check); 9] = [
    ("file", file),
    ("references", references),
    ("clean end", clean_end),
    ("mark", mark),
    ("sequence", sequence::check),
    ("clock", clock),
    ("certificate", certificate::check),
    ("frame files", frames::check),
    ("stamps", stamps::check),
];

/// Everything there is to find out about a run file from itself and its frames folder.
pub fn verify(reader: &RunReader) -> Vec<Finding> {
    let mut findings = Vec::new();
    for (subject, check) in CHECKS {
        match check(reader) {
            Ok(found) => findings.extend(found),
            Err(error) => findings.push(Finding::fault(subject, could_not(&error))),
        }
    }
    findings
}

/// The sentence for a check that stumbled over the file: without the advice to verify, which is being done.
fn could_not(error: &RunError) -> String {
    match error {
        RunError::Damaged { place, .. } => format!("an impossible value in {place}: this part cannot be trusted"),
        RunError::Read { why, .. } => format!("it could not be read ({why}): this part cannot be trusted"),
        other => other.to_string(),
    }
}

fn file(reader: &RunReader) -> Result<Vec<Finding>, RunError> {
    const SUBJECT: &str = "file";
    let found = reader.integrity()?;
    if found.is_empty() {
        return Ok(vec![match missing_bytes(reader)? {
            0 => Finding::fine(SUBJECT, "the database is whole"),
            missing => Finding::fault(
                SUBJECT,
                format!(
                    "the last {missing} bytes of the file are missing: it was cut off in copying, fetch the original"
                ),
            ),
        }]);
    }
    let first = found.first().map_or("", String::as_str).replace('\n', "; ");
    let sentence = format!(
        "the database is damaged in {} or more places ({first}): work on a copy, trust only what other checks confirm, and stamp again what can still be read",
        found.len()
    );
    Ok(vec![Finding::fault(SUBJECT, sentence)])
}

/// How much shorter the file is than its own header says. A page that is cut off may have been an unused one, which the
/// database does not miss. While there is a log, pages may be in there.
fn missing_bytes(reader: &RunReader) -> Result<u64, RunError> {
    const PAGE_COUNT_AT: u64 = 28; // "In-header database size", SQLite database file format, section 1.3
    if journal_mode(reader)? == "wal" {
        return Ok(0);
    }
    let size: u32 = reader.read(|c| c.query_row("PRAGMA page_size", [], |row| row.get(0)))?;
    let looked = || -> std::io::Result<(u32, u64)> {
        let mut file = File::open(reader.path())?;
        let mut pages = [0; 4];
        file.seek(SeekFrom::Start(PAGE_COUNT_AT))?;
        file.read_exact(&mut pages)?;
        Ok((u32::from_be_bytes(pages), file.metadata()?.len()))
    };
    let (pages, length) = looked()
        .map_err(|error| RunError::Read { path: reader.path().display().to_string(), why: error.to_string() })?;
    Ok((u64::from(pages) * u64::from(size)).saturating_sub(length))
}

fn journal_mode(reader: &RunReader) -> Result<String, RunError> {
    reader.read(|c| c.query_row("PRAGMA journal_mode", [], |row| row.get(0)))
}

fn references(reader: &RunReader) -> Result<Vec<Finding>, RunError> {
    const SUBJECT: &str = "references";
    let broken: Vec<String> = reader.rows("PRAGMA foreign_key_check", [], |row| row.get(0))?;
    let lost: i64 = reader.read(|c| {
        c.query_row(
            "SELECT count(*) FROM reading WHERE certificate_key NOT IN (SELECT certificate_key FROM held_certificate)",
            [],
            |row| row.get(0),
        )
    })?;
    let Some(table) = broken.first() else {
        let orphans = format!("{lost} readings name a certificate hash that is not in the file: they have no voltage");
        return Ok(vec![match lost {
            0 => Finding::fine(SUBJECT, "every row belongs to something"),
            _ => Finding::fault(SUBJECT, orphans),
        }]);
    };
    let sentence =
        format!("{} rows, the first in table {table}, belong to nothing: rows were removed or changed", broken.len());
    Ok(vec![Finding::fault(SUBJECT, sentence)])
}

/// A log beside the file holds what was committed last: whoever copies the file alone loses it.
fn clean_end(reader: &RunReader) -> Result<Vec<Finding>, RunError> {
    const SUBJECT: &str = "clean end";
    if journal_mode(reader)? != "wal" {
        return Ok(vec![Finding::fine(SUBJECT, "the recording was closed, everything is in the one file")]);
    }
    let mut log = reader.path().as_os_str().to_owned();
    log.push("-wal");
    let sentence = if std::path::Path::new(&log).exists() {
        "the recording is still going on or was broken off: keep the file ending in -wal beside this one, its newest part is in there; `ringvolt stamp` folds it in"
    } else {
        "the recording was broken off and no file ending in -wal stands beside this one: if the run was copied, fetch that file too, its newest part may be in there"
    };
    Ok(vec![Finding::note(SUBJECT, sentence)])
}

fn mark(reader: &RunReader) -> Result<Vec<Finding>, RunError> {
    const SUBJECT: &str = "mark";
    let simulated = reader.header()?.simulated;
    let from_bench = reader.epochs()?.iter().any(|epoch| epoch.hello.kind == DeviceKind::Simulated);
    Ok(vec![match (simulated, from_bench) {
        (true, _) => Finding::note(SUBJECT, "SIMULATED: nothing in this run is a measurement"),
        (false, true) => Finding::fault(
            SUBJECT,
            "the controller was a simulated one, but the mark SIMULATED is gone: nothing in this run is a measurement",
        ),
        (false, false) => Finding::fine(SUBJECT, "recorded from a controller board"),
    }])
}

/// Exchanges must be there; whether they agree is for the clock to say.
fn clock(reader: &RunReader) -> Result<Vec<Finding>, RunError> {
    const SUBJECT: &str = "clock";
    let mut findings = Vec::new();
    for epoch in reader.epochs()? {
        let echoes = reader.echoes(epoch.epoch_key)?;
        if echoes.is_empty() {
            let sentence = format!(
                "epoch {} has no clock exchange: its readings cannot be placed in UTC, frames in it stay refused",
                epoch.epoch_key
            );
            findings.push(Finding::fault(SUBJECT, sentence));
            continue;
        }
        let impossible = echoes.iter().filter(|e| e.answered_mono_ns < e.asked_mono_ns || e.sent_us < e.received_us);
        let impossible = impossible.count();
        let sentence =
            format!("epoch {}: {} exchanges, {impossible} of them impossible", epoch.epoch_key, echoes.len());
        findings.push(if impossible == 0 {
            Finding::fine(SUBJECT, sentence)
        } else {
            Finding::note(SUBJECT, sentence + " and passed over")
        });
    }
    Ok(findings)
}

#[cfg(test)]
mod tests;
