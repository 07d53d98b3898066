//! The journal of a calibration under way: one JSON object a line, only ever appended, so that an abort, a crash or a
//! power cut loses at most the point that was being written.

use std::{
    collections::BTreeMap,
    fs::{File, OpenOptions},
    io::{self, Read, Seek, SeekFrom, Write},
    path::{Path, PathBuf},
};

use serde::{Deserialize, Serialize};

use super::{Point, Reference, Step};

/// Longest journal that is read, bytes.
const MAX_JOURNAL_BYTES: u64 = 8 << 20;

/// What is fixed at the beginning of a calibration.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Header {
    /// Version of this format: 1.
    pub schema: u32,
    /// Name of the bench.
    pub bench: String,
    /// Identity of the board, sixteen hexadecimal digits.
    pub device: String,
    /// Whether the codes come from the simulated bench.
    pub simulated: bool,
    /// Who does it.
    pub operator: String,
    /// What it is compared with.
    pub reference: Reference,
    /// +1 or -1: the sign of the divider's voltage that accelerates. Targets are not negative; points are signed.
    pub polarity: i8,
    /// What is to be taken.
    pub steps: Vec<Step>,
}

/// A line of the journal.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(tag = "entry", rename_all = "lowercase", deny_unknown_fields)]
enum Entry {
    Begin {
        header: Header,
    },
    /// A point for a step; a later one for the same step takes its place.
    Point {
        step: usize,
        point: Point,
    },
    /// The point of a step is not to be used; the step is to be taken again.
    Withdrawn {
        step: usize,
        reason: String,
    },
    /// The step is left out.
    Skipped {
        step: usize,
        reason: String,
    },
}

/// Why a journal cannot be used.
#[derive(Debug, thiserror::Error)]
pub enum SessionError {
    /// It could not be created, read or written.
    #[error("cannot {action} {}: {source}", path.display())]
    File {
        /// What was tried.
        action: &'static str,
        /// Which file.
        path: PathBuf,
        /// What the system said.
        source: io::Error,
    },
    /// Someone else has it open.
    #[error("{} is in use by another calibration; finish or stop that one first", path.display())]
    InUse {
        /// Which file.
        path: PathBuf,
    },
    /// A line before the last is damaged.
    #[error("{}, line {line}: {problem}; restore the file from a copy, or begin a new calibration", path.display())]
    Damaged {
        /// Which file.
        path: PathBuf,
        /// Which line, from 1.
        line: usize,
        /// What is wrong.
        problem: String,
    },
}

/// What became of a step.
#[derive(Clone, Debug, PartialEq)]
pub enum Outcome {
    /// It was taken.
    Taken(Point),
    /// It was left out for a reason.
    Skipped(String),
}

/// A calibration under way.
#[derive(Debug)]
pub struct Session {
    path: PathBuf,
    file: File,
    header: Header,
    outcomes: BTreeMap<usize, Outcome>,
    /// Whether every entry waits for the disk. Only simulated calibrations by the thousand may do without.
    durable: bool,
}

impl Session {
    /// For simulated calibrations: entries do not wait for the disk.
    #[cfg(test)]
    pub(super) fn without_waiting(mut self) -> Self {
        self.durable = false;
        self
    }

    /// Begins a journal; an existing file is never overwritten.
    ///
    /// # Errors
    /// When the file exists or cannot be written.
    pub fn create(path: &Path, header: Header) -> Result<Self, SessionError> {
        let opened = OpenOptions::new().read(true).append(true).create_new(true).open(path);
        let file = opened.map_err(|source| file_error("create", path, source))?;
        let mut session = Self { path: path.to_owned(), file, header, outcomes: BTreeMap::new(), durable: true };
        session.lock()?;
        session.append(&Entry::Begin { header: session.header.clone() })?;
        Ok(session)
    }

    /// Takes up a journal where it ended. A last line that was cut off is removed; the sentence that says so is the
    /// second value.
    ///
    /// # Errors
    /// When the file cannot be read, is in use, or is damaged before its last line.
    pub fn resume(path: &Path) -> Result<(Self, Option<String>), SessionError> {
        let opened = OpenOptions::new().read(true).append(true).open(path);
        let mut file = opened.map_err(|source| file_error("open", path, source))?;
        let mut bytes = Vec::new();
        let read = (&mut file).take(MAX_JOURNAL_BYTES + 1).read_to_end(&mut bytes);
        read.map_err(|source| file_error("read", path, source))?;
        let whole = whole_lines(&bytes);
        let (header, outcomes) = replay(path, &bytes[..whole])?;
        let session = Self { path: path.to_owned(), file, header, outcomes, durable: true };
        session.lock()?;
        let cut = bytes.len() - whole;
        if cut == 0 {
            return Ok((session, None));
        }
        session.file.set_len(whole as u64).map_err(|source| file_error("repair", path, source))?;
        let notice = format!("The last line of {} was cut off ({cut} bytes) and is taken again.", path.display());
        Ok((session, Some(notice)))
    }

    /// Reads a journal without taking it up, e.g. to fit its points.
    ///
    /// # Errors
    /// As [`Self::resume`], except that it may be in use.
    pub fn read(path: &Path) -> Result<(Header, Vec<Point>), SessionError> {
        let mut bytes = Vec::new();
        let read = File::open(path).and_then(|file| file.take(MAX_JOURNAL_BYTES + 1).read_to_end(&mut bytes));
        read.map_err(|source| file_error("read", path, source))?;
        let (header, outcomes) = replay(path, &bytes[..whole_lines(&bytes)])?;
        Ok((header, points(&outcomes)))
    }

    fn lock(&self) -> Result<(), SessionError> {
        self.file.try_lock().map_err(|_| SessionError::InUse { path: self.path.clone() })
    }

    fn append(&mut self, entry: &Entry) -> Result<(), SessionError> {
        let mut line = serde_json::to_string(entry).map_err(|error| file_error("write", &self.path, error.into()))?;
        line.push('\n');
        let end = self.file.seek(SeekFrom::End(0)).map_err(|source| file_error("write", &self.path, source))?;
        let written = self
            .file
            .write_all(line.as_bytes())
            .and_then(|()| if self.durable { self.file.sync_data() } else { Ok(()) });
        written.map_err(|source| {
            // Half a line in the middle would spoil the file; if it cannot be cut now, `resume` cuts it.
            let _ = self.file.set_len(end);
            file_error("write", &self.path, source)
        })
    }

    /// What is fixed since the beginning.
    pub fn header(&self) -> &Header {
        &self.header
    }

    /// The next step that has neither a point nor a reason for having none.
    pub fn next_step(&self) -> Option<(usize, Step)> {
        let open = |(index, step): (usize, &Step)| (!self.outcomes.contains_key(&index)).then_some((index, *step));
        self.header.steps.iter().enumerate().find_map(open)
    }

    /// How many steps are done.
    pub fn done(&self) -> usize {
        self.outcomes.len()
    }

    /// What became of a step.
    pub fn outcome(&self, step: usize) -> Option<&Outcome> {
        self.outcomes.get(&step)
    }

    /// Records the point of a step.
    ///
    /// # Errors
    /// When the file cannot be written; the point then counts as not taken.
    pub fn take(&mut self, step: usize, point: Point) -> Result<(), SessionError> {
        self.append(&Entry::Point { step, point: point.clone() })?;
        self.outcomes.insert(step, Outcome::Taken(point));
        Ok(())
    }

    /// Withdraws the point of a step, which is then to be taken again.
    ///
    /// # Errors
    /// When the file cannot be written.
    pub fn withdraw(&mut self, step: usize, reason: &str) -> Result<(), SessionError> {
        self.append(&Entry::Withdrawn { step, reason: reason.to_owned() })?;
        self.outcomes.remove(&step);
        Ok(())
    }

    /// Leaves a step out.
    ///
    /// # Errors
    /// When the file cannot be written.
    pub fn skip(&mut self, step: usize, reason: &str) -> Result<(), SessionError> {
        self.append(&Entry::Skipped { step, reason: reason.to_owned() })?;
        self.outcomes.insert(step, Outcome::Skipped(reason.to_owned()));
        Ok(())
    }

    /// The points taken so far, in the order of the plan.
    pub fn points(&self) -> Vec<Point> {
        points(&self.outcomes)
    }
}

fn points(outcomes: &BTreeMap<usize, Outcome>) -> Vec<Point> {
    let taken = |outcome: &Outcome| match outcome {
        Outcome::Taken(point) => Some(point.clone()),
        Outcome::Skipped(_) => None,
    };
    outcomes.values().filter_map(taken).collect()
}

fn file_error(action: &'static str, path: &Path, source: io::Error) -> SessionError {
    SessionError::File { action, path: path.to_owned(), source }
}

/// Length of the part that ends in a newline: a line without one was being written when the power went.
fn whole_lines(bytes: &[u8]) -> usize {
    bytes.iter().rposition(|byte| *byte == b'\n').map_or(0, |at| at + 1)
}

fn replay(path: &Path, bytes: &[u8]) -> Result<(Header, BTreeMap<usize, Outcome>), SessionError> {
    let damaged = |line: usize, problem: &str| SessionError::Damaged {
        path: path.to_owned(),
        line: line + 1,
        problem: problem.to_owned(),
    };
    if bytes.len() as u64 > MAX_JOURNAL_BYTES {
        return Err(damaged(0, "the file is far longer than any calibration"));
    }
    let text = std::str::from_utf8(bytes).map_err(|_| damaged(0, "the file is not UTF-8 text"))?;
    let mut entries = text.lines().enumerate().map(|(line, text)| {
        let parsed: Result<Entry, _> = serde_json::from_str(text);
        parsed
            .map(|entry| (line, entry))
            .map_err(|error| damaged(line, &format!("is no entry of a calibration ({error})")))
    });
    let Some((_, Entry::Begin { header })) = entries.next().transpose()? else {
        return Err(damaged(0, "a calibration does not begin here"));
    };
    let sound = header.schema == 1 && matches!(header.polarity, 1 | -1) && (1..=5000).contains(&header.steps.len());
    if !sound || header.steps.iter().any(|step| !(0.0..=30_000.0).contains(&step.target_volts)) {
        return Err(damaged(0, "its beginning holds values that cannot be"));
    }
    let mut outcomes = BTreeMap::new();
    for entry in entries {
        let (line, entry) = entry?;
        apply(&mut outcomes, &header, entry).map_err(|problem| damaged(line, problem))?;
    }
    Ok((header, outcomes))
}

fn apply(outcomes: &mut BTreeMap<usize, Outcome>, header: &Header, entry: Entry) -> Result<(), &'static str> {
    let step = match &entry {
        Entry::Begin { .. } => return Err("begins a second calibration in the same file"),
        Entry::Point { step, .. } | Entry::Withdrawn { step, .. } | Entry::Skipped { step, .. } => *step,
    };
    if step >= header.steps.len() {
        return Err("names a step that is not in the plan");
    }
    match entry {
        Entry::Begin { .. } => {}
        Entry::Point { point, .. } => _ = outcomes.insert(step, Outcome::Taken(point)),
        Entry::Withdrawn { .. } => _ = outcomes.remove(&step),
        Entry::Skipped { reason, .. } => _ = outcomes.insert(step, Outcome::Skipped(reason)),
    }
    Ok(())
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::calibration::{example, plan};

    fn header() -> Header {
        let certificate = example();
        Header {
            schema: 1,
            bench: certificate.bench,
            device: certificate.device,
            simulated: true,
            operator: "somebody".to_owned(),
            reference: certificate.reference,
            polarity: 1,
            steps: plan(5500.0, 10, 3).unwrap(),
        }
    }

    fn point(index: usize) -> Point {
        example().points[index].clone()
    }

    #[test]
    fn a_session_is_taken_up_where_it_ended() {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("calibration.jsonl");
        let mut session = Session::create(&path, header()).unwrap();
        session.take(0, point(0)).unwrap();
        session.take(1, point(1)).unwrap();
        session.withdraw(0, "the switch was on").unwrap();
        session.skip(2, "supply cannot").unwrap();
        drop(session);
        let (mut session, notice) = Session::resume(&path).unwrap();
        assert_eq!(notice, None);
        assert_eq!(session.next_step().unwrap().0, 0);
        session.take(0, point(5)).unwrap();
        assert_eq!(session.next_step().unwrap().0, 3);
        assert_eq!(session.points(), [point(5), point(1)]);
        assert_eq!(Session::read(&path).unwrap(), (header(), vec![point(5), point(1)]));
    }

    /// Whatever length the file had when the power went, every point whose line was complete is still there.
    #[test]
    fn cut_at_any_byte_it_loses_only_the_line_that_was_cut() {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("calibration.jsonl");
        let mut session = Session::create(&path, header()).unwrap();
        (0..4).for_each(|index| session.take(index, point(index)).unwrap());
        drop(session);
        let whole = std::fs::read(&path).unwrap();
        let begin = whole.iter().position(|byte| *byte == b'\n').unwrap() + 1;
        for length in (begin..=whole.len()).step_by(7).chain([whole.len()]) {
            std::fs::write(&path, &whole[..length]).unwrap();
            let complete = whole[..length].iter().filter(|byte| **byte == b'\n').count() - 1;
            let (mut session, notice) = Session::resume(&path).unwrap();
            assert_eq!(session.points().len(), complete, "{length}");
            assert_eq!(notice.is_some(), whole[length - 1] != b'\n', "{length}");
            session.take(9, point(9)).unwrap();
            drop(session);
            assert_eq!(Session::resume(&path).unwrap().0.points().len(), complete + 1);
        }
    }

    #[test]
    fn damage_before_the_end_is_told_with_its_line() {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("calibration.jsonl");
        let mut session = Session::create(&path, header()).unwrap();
        (0..3).for_each(|index| session.take(index, point(index)).unwrap());
        drop(session);
        let text = std::fs::read_to_string(&path).unwrap();
        let broken = [
            (text.replacen("\"sense_code\"", "\"sense_kode\"", 1), "line 2"),
            (text.replace("\"step\":1,", "\"step\":900,"), "line 3"),
            (text.clone() + &text, "line 5"),
            ("{}\n".to_owned(), "line 1"),
            ("\n".to_owned(), "line 1"),
        ];
        for (text, wanted) in broken {
            std::fs::write(&path, text).unwrap();
            let error = Session::resume(&path).unwrap_err().to_string();
            assert!(error.contains(wanted) && !error.contains('\n'), "{error}");
        }
        std::fs::write(&path, "").unwrap();
        assert!(Session::resume(&path).is_err());
    }

    #[test]
    fn a_journal_is_neither_overwritten_nor_shared() {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("calibration.jsonl");
        let session = Session::create(&path, header()).unwrap();
        assert!(Session::create(&path, header()).is_err());
        assert!(matches!(Session::resume(&path), Err(SessionError::InUse { .. })));
        drop(session);
        assert!(Session::resume(&path).is_ok());
    }
}
