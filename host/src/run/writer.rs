//! Adds to a run file, in batches that become durable together.
//!
//! Write-ahead log with `synchronous = FULL`: a commit that has returned survives a crash of the program and a loss of
//! power. Only then is the controller told to let go of what was in it. A clean end folds the log back into the one
//! file.

use std::{
    collections::HashMap,
    path::{Path, PathBuf},
};

use ringvolt_protocol::{CertificateHash, Gap, Reading, Status, WindowCodes};
use rusqlite::{Connection, OpenFlags, OptionalExtension, params};
use serde::Serialize;

use super::{
    code::{event_code, stream_code},
    error::RunError,
    reader::check_identity,
    rows::{EchoRow, EpochRow, FrameRow, NoteRow, Record, StampRow},
    schema::{self, SEQ_BITS},
};
use crate::text::hex;

/// What is known when a run begins.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct RunHeader {
    /// Whether it is known already that everything comes from a simulated bench.
    pub simulated: bool,
    /// The bench's name.
    pub bench_name: String,
    /// The profile, as it was read.
    pub profile_text: String,
    /// The certificate, as its canonical text.
    pub certificate_text: Option<String>,
    /// The frames folder, relative to the run file's folder where it lies within it.
    pub frames_dir: String,
    /// The link, as the person named it.
    pub link: String,
    /// Name and version of the recording program.
    pub software: String,
}

/// A run file open for adding.
pub struct RunWriter {
    connection: Connection,
    path: PathBuf,
    in_batch: bool,
    certificates: HashMap<CertificateHash, i64>,
    last_status: Option<(i64, u64)>,
}

/// State is kept once a second.
const STATUS_EVERY_US: u64 = 1_000_000;

impl RunWriter {
    /// Makes a new run file.
    ///
    /// # Errors
    /// [`RunError::Exists`] where there is a file; otherwise what the system says.
    pub fn create(path: &Path, header: &RunHeader) -> Result<Self, RunError> {
        if path.exists() {
            return Err(RunError::Exists { path: path.display().to_string() });
        }
        let flags = OpenFlags::SQLITE_OPEN_READ_WRITE | OpenFlags::SQLITE_OPEN_CREATE | OpenFlags::SQLITE_OPEN_NO_MUTEX;
        let mut writer = Self::open(path, flags)?;
        let write = |error: rusqlite::Error| RunError::writing(path, &error);
        schema::create(&writer.connection).map_err(write)?;
        let certificate = header.certificate_text.as_deref().unwrap_or("");
        for (key, value) in [
            ("simulated", if header.simulated { "1" } else { "0" }),
            ("bench_name", &header.bench_name),
            ("profile_text", &header.profile_text),
            ("certificate_text", certificate),
            ("frames_dir", &header.frames_dir),
            ("link", &header.link),
            ("software", &header.software),
        ] {
            writer.meta(key, value)?;
        }
        writer.commit()?;
        Ok(writer)
    }

    /// Opens a run file to add to it: notes, reductions, or a recording that goes on.
    ///
    /// # Errors
    /// When it is no run file of a layout this program knows.
    pub fn append(path: &Path) -> Result<Self, RunError> {
        if !path.exists() {
            return Err(RunError::Open { path: path.display().to_string(), why: "there is no such file".to_owned() });
        }
        let flags = OpenFlags::SQLITE_OPEN_READ_WRITE | OpenFlags::SQLITE_OPEN_NO_MUTEX;
        let writer = Self::open(path, flags)?;
        check_identity(&writer.connection, path)?;
        Ok(writer)
    }

    fn open(path: &Path, flags: OpenFlags) -> Result<Self, RunError> {
        let open = |error: rusqlite::Error| match error.sqlite_error_code() {
            Some(rusqlite::ErrorCode::DiskFull) => RunError::Full { path: path.display().to_string() },
            Some(rusqlite::ErrorCode::NotADatabase) => RunError::NotARun { path: path.display().to_string() },
            _ => RunError::Open { path: path.display().to_string(), why: error.to_string() },
        };
        let connection = Connection::open_with_flags(path, flags).map_err(open)?;
        connection.busy_timeout(std::time::Duration::from_secs(5)).map_err(open)?;
        connection
            .execute_batch("PRAGMA journal_mode = WAL; PRAGMA synchronous = FULL; PRAGMA foreign_keys = ON;")
            .map_err(open)?;
        Ok(Self { connection, path: path.to_owned(), in_batch: false, certificates: HashMap::new(), last_status: None })
    }

    /// The file.
    pub fn path(&self) -> &Path {
        &self.path
    }

    fn write<T>(&mut self, work: impl FnOnce(&Connection) -> rusqlite::Result<T>) -> Result<T, RunError> {
        if !self.in_batch {
            self.connection.execute_batch("BEGIN IMMEDIATE").map_err(|error| RunError::writing(&self.path, &error))?;
            self.in_batch = true;
        }
        work(&self.connection).map_err(|error| RunError::writing(&self.path, &error))
    }

    /// Makes everything since the last commit durable.
    ///
    /// # Errors
    /// [`RunError::Full`] or [`RunError::Write`]; what was committed before stays.
    pub fn commit(&mut self) -> Result<(), RunError> {
        if !self.in_batch {
            return Ok(());
        }
        self.connection.execute_batch("COMMIT").map_err(|error| RunError::writing(&self.path, &error))?;
        self.in_batch = false;
        Ok(())
    }

    /// Stands in for a small disk.
    #[cfg(test)]
    pub(super) fn limit_pages(&mut self, pages: u32) -> rusqlite::Result<()> {
        self.connection.pragma_update(None, "max_page_count", pages)
    }

    fn meta(&mut self, key: &str, value: &str) -> Result<(), RunError> {
        self.write(|c| {
            c.prepare_cached("INSERT OR REPLACE INTO meta (key, value) VALUES (?1, ?2)")?.execute([key, value])
        })?;
        Ok(())
    }

    /// Marks the whole run SIMULATED. There is no way back.
    ///
    /// # Errors
    /// When the file cannot be written; so for all that follow.
    pub fn mark_simulated(&mut self) -> Result<(), RunError> {
        self.meta("simulated", "1")
    }

    /// Adds an epoch, or finds the one with this device and number, and gives its key. The row's own key is not used.
    ///
    /// # Errors
    /// When the file cannot be written.
    pub fn epoch(&mut self, row: &EpochRow) -> Result<i64, RunError> {
        let device = hex(&row.hello.device);
        let number = row.hello.epoch;
        let hello = json(&row.hello);
        self.write(|c| {
            let known = c
                .prepare_cached("SELECT epoch_key FROM epoch WHERE device = ?1 AND number = ?2")?
                .query_row(params![device, number], |row| row.get(0))
                .optional()?;
            if let Some(key) = known {
                return Ok(key);
            }
            c.prepare_cached(
                "INSERT INTO epoch (device, number, heard_utc_ns, link, hello) VALUES (?1, ?2, ?3, ?4, ?5)",
            )?
            .insert(params![device, number, row.utc_ns, row.link, hello])
        })
    }

    /// Adds what the controller sent. A double of what is there already is passed over.
    ///
    /// # Errors
    /// When the file cannot be written.
    pub fn record(&mut self, epoch: i64, record: &Record) -> Result<(), RunError> {
        match record {
            Record::Reading(reading) => self.reading(epoch, reading),
            Record::Event(event) => {
                let (id, detail) = (id(epoch, event.seq), json(&event.kind));
                self.insert(
                    "INSERT OR IGNORE INTO event (id, time_us, code, detail) VALUES (?1, ?2, ?3, ?4)",
                    params![id, signed(event.time_us), event_code(&event.kind), detail],
                )
            }
            Record::Slow(slow) => self.insert(
                "INSERT OR IGNORE INTO slow (id, time_us, beam_na, enclosure_centicelsius) VALUES (?1, ?2, ?3, ?4)",
                params![id(epoch, slow.seq), signed(slow.time_us), slow.beam_na, slow.enclosure_centicelsius],
            ),
            Record::Strobe(strobe) => self.insert(
                "INSERT OR IGNORE INTO strobe (id, time_us, rising) VALUES (?1, ?2, ?3)",
                params![id(epoch, strobe.seq), signed(strobe.time_us), strobe.rising],
            ),
            Record::Gap(gap) => self.gap(epoch, gap),
            Record::Status(status) => self.status(epoch, status),
        }
    }

    fn insert(&mut self, sql: &str, values: impl rusqlite::Params) -> Result<(), RunError> {
        self.write(|c| c.prepare_cached(sql)?.execute(values)).map(drop)
    }

    fn reading(&mut self, epoch: i64, reading: &Reading) -> Result<(), RunError> {
        let certificate = self.certificate(reading.certificate)?;
        let WindowCodes { sum, min, max, count } = reading.sense;
        let cross = reading.cross;
        self.insert(
            "INSERT OR IGNORE INTO reading VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7, ?8, ?9, ?10, ?11, ?12, ?13)",
            params![
                id(epoch, reading.seq),
                signed(reading.time_us),
                reading.duration_us,
                sum,
                count,
                min,
                max,
                cross.sum,
                cross.count,
                cross.min,
                cross.max,
                reading.flags.0,
                certificate
            ],
        )
    }

    /// Key of a held certificate's hash.
    fn certificate(&mut self, hash: CertificateHash) -> Result<i64, RunError> {
        if let Some(key) = self.certificates.get(&hash) {
            return Ok(*key);
        }
        let text = hex(&hash.0);
        let key = self.write(|c| {
            c.execute("INSERT OR IGNORE INTO held_certificate (hash) VALUES (?1)", [&text])?;
            c.query_row("SELECT certificate_key FROM held_certificate WHERE hash = ?1", [&text], |row| row.get(0))
        })?;
        self.certificates.insert(hash, key);
        Ok(key)
    }

    fn gap(&mut self, epoch: i64, gap: &Gap) -> Result<(), RunError> {
        self.insert(
            "INSERT INTO gap (epoch_key, stream, first_seq, count) VALUES (?1, ?2, ?3, ?4)",
            params![epoch, stream_code(gap.stream), gap.first, gap.count],
        )
    }

    fn status(&mut self, epoch: i64, status: &Status) -> Result<(), RunError> {
        let recent = self.last_status.is_some_and(|(key, at)| key == epoch && status.time_us < at + STATUS_EVERY_US);
        if recent {
            return Ok(());
        }
        self.last_status = Some((epoch, status.time_us));
        self.insert(
            "INSERT INTO status (epoch_key, time_us, detail) VALUES (?1, ?2, ?3)",
            params![epoch, signed(status.time_us), json(status)],
        )
    }

    /// Adds a clock exchange.
    ///
    /// # Errors
    /// When the file cannot be written.
    pub fn echo(&mut self, epoch: i64, row: &EchoRow) -> Result<(), RunError> {
        self.insert(
            "INSERT INTO echo (epoch_key, asked_mono_ns, answered_mono_ns, utc_minus_mono_ns, received_us, sent_us)
             VALUES (?1, ?2, ?3, ?4, ?5, ?6)",
            params![
                epoch,
                row.asked_mono_ns,
                row.answered_mono_ns,
                row.utc_minus_mono_ns,
                signed(row.received_us),
                signed(row.sent_us)
            ],
        )
    }

    /// Adds a frame; one of the same name stays as it is.
    ///
    /// # Errors
    /// When the file cannot be written.
    pub fn frame(&mut self, row: &FrameRow) -> Result<(), RunError> {
        let exposure = row.exposure.as_ref().ok();
        self.insert(
            "INSERT OR IGNORE INTO frame VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7, ?8, ?9, ?10)",
            params![
                row.frame,
                row.file,
                row.noticed_utc_ns,
                row.sha256,
                exposure.map(|e| e.start_utc_ns),
                exposure.map(|e| e.end_utc_ns),
                exposure.map(|e| e.start_u_ns),
                exposure.map(|e| e.length_u_ns),
                exposure.map(|e| &e.source),
                row.exposure.as_ref().err()
            ],
        )
    }

    /// Adds a note.
    ///
    /// # Errors
    /// When the file cannot be written.
    pub fn note(&mut self, row: &NoteRow) -> Result<(), RunError> {
        self.insert(
            "INSERT INTO note (utc_ns, author, text) VALUES (?1, ?2, ?3)",
            params![row.utc_ns, row.author, row.text],
        )
    }

    /// Begins a reduction and gives its key. It counts only after [`Self::finish_reduction`].
    ///
    /// # Errors
    /// When the file cannot be written.
    pub fn begin_reduction(
        &mut self,
        created_utc_ns: i64,
        command: &str,
        software: &str,
        profile_text: &str,
        certificate_text: Option<&str>,
    ) -> Result<i64, RunError> {
        self.write(|c| {
            c.prepare_cached(
                "INSERT INTO reduction (created_utc_ns, command, software, profile_text, certificate_text, complete)
                 VALUES (?1, ?2, ?3, ?4, ?5, 0)",
            )?
            .insert(params![created_utc_ns, command, software, profile_text, certificate_text])
        })
    }

    /// Adds the exposure that a reduction uses for a frame instead of the frame's own.
    ///
    /// # Errors
    /// When the file cannot be written.
    pub fn exposure(&mut self, reduction: i64, row: &FrameRow) -> Result<(), RunError> {
        let exposure = row.exposure.as_ref().ok();
        self.insert(
            "INSERT INTO exposure VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7, ?8)",
            params![
                reduction,
                row.frame,
                exposure.map(|e| e.start_utc_ns),
                exposure.map(|e| e.end_utc_ns),
                exposure.map(|e| e.start_u_ns),
                exposure.map(|e| e.length_u_ns),
                exposure.map(|e| &e.source),
                row.exposure.as_ref().err()
            ],
        )
    }

    /// Adds a stamp to a reduction.
    ///
    /// # Errors
    /// When the file cannot be written.
    pub fn stamp(&mut self, reduction: i64, row: &StampRow) -> Result<(), RunError> {
        let v = row.value;
        self.insert(
            "INSERT INTO stamp VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7, ?8, ?9, ?10, ?11, ?12, ?13, ?14, ?15)",
            params![
                reduction,
                row.frame,
                row.verdict,
                row.reasons,
                v.map(|v| v.volts),
                v.map(|v| v.volts_u),
                v.map(|v| v.volts_u_frame),
                v.map(|v| v.volts_u_common),
                v.map(|v| v.wavelength_pm),
                v.map(|v| v.wavelength_u_pm),
                v.map(|v| v.slope_volts_per_second),
                v.map(|v| v.span_volts),
                v.map(|v| v.ripple_volts),
                v.map(|v| v.coverage),
                v.and_then(|v| v.enclosure_celsius)
            ],
        )
    }

    /// Declares a reduction complete and commits it.
    ///
    /// # Errors
    /// When the file cannot be written.
    pub fn finish_reduction(&mut self, reduction: i64) -> Result<(), RunError> {
        self.insert("UPDATE reduction SET complete = 1 WHERE reduction_key = ?1", [reduction])?;
        self.commit()
    }
}

impl Drop for RunWriter {
    fn drop(&mut self) {
        // What was not committed was acknowledged to nobody. Folding the log back makes it one file again; where another
        // program still reads, that is left to whoever closes last.
        if self.in_batch {
            let _ = self.connection.execute_batch("ROLLBACK");
        }
        let _ = self.connection.execute_batch("PRAGMA journal_mode = DELETE");
    }
}

fn id(epoch: i64, seq: u32) -> i64 {
    (epoch << SEQ_BITS) | i64::from(seq)
}

/// SQLite's integers are signed; a controller's clock does not reach 2^63 us (292 000 years).
fn signed(time_us: u64) -> i64 {
    i64::try_from(time_us).unwrap_or(i64::MAX)
}

fn json(value: &impl Serialize) -> String {
    // Plain structs of numbers and names: serialising them cannot fail.
    serde_json::to_string(value).unwrap_or_default()
}
