//! Reads a run file, also while another program records into it.
//!
//! Every value is checked against its range: a run file may have been through anything.

use std::path::{Path, PathBuf};

use ringvolt_protocol::{CertificateHash, Event, Gap, Reading, ReadingFlags, Slow, Status, Strobe, WindowCodes};
use rusqlite::{Connection, OpenFlags, OptionalExtension, Row, params, types::Type};
use serde::de::DeserializeOwned;

use super::{
    code::stream_of,
    error::RunError,
    rows::{EchoRow, EpochRow, Exposure, FrameRow, NoteRow, StampRow, StampValue},
    schema::{self, APPLICATION_ID, SCHEMA_VERSION, SEQ_BITS},
};

/// What a run says about itself.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Header {
    /// Whether it comes from a simulated bench.
    pub simulated: bool,
    /// The bench's name.
    pub bench_name: String,
    /// The profile, as it was when the run began.
    pub profile_text: String,
    /// The certificate, where there was one.
    pub certificate_text: Option<String>,
    /// The frames folder.
    pub frames_dir: String,
    /// The link.
    pub link: String,
    /// The recording program.
    pub software: String,
}

/// One reduction.
#[derive(Clone, Debug, PartialEq)]
pub struct ReductionRow {
    /// Its key.
    pub key: i64,
    /// The command that made it.
    pub command: String,
    /// The program that made it.
    pub software: String,
    /// The profile it used.
    pub profile_text: String,
    /// The certificate it used.
    pub certificate_text: Option<String>,
}

/// A run file open for reading.
pub struct RunReader {
    connection: Connection,
    path: PathBuf,
}

/// Refuses files that are no runs, or newer than this program.
pub(super) fn check_identity(connection: &Connection, path: &Path) -> Result<(), RunError> {
    let (application, version) = schema::identity(connection).map_err(|error| RunError::reading(path, &error))?;
    if application != APPLICATION_ID {
        return Err(RunError::NotARun { path: path.display().to_string() });
    }
    if version > SCHEMA_VERSION {
        return Err(RunError::Newer { path: path.display().to_string(), found: version, known: SCHEMA_VERSION });
    }
    Ok(())
}

impl RunReader {
    /// Opens a run file.
    ///
    /// # Errors
    /// When there is none, or it is no run of a layout this program knows.
    pub fn open(path: &Path) -> Result<Self, RunError> {
        let named = || path.display().to_string();
        if !path.is_file() {
            return Err(RunError::Open { path: named(), why: "there is no such file".to_owned() });
        }
        let flags = OpenFlags::SQLITE_OPEN_READ_ONLY | OpenFlags::SQLITE_OPEN_NO_MUTEX;
        let open = |error: rusqlite::Error| RunError::Open { path: named(), why: error.to_string() };
        let connection = Connection::open_with_flags(path, flags).map_err(open)?;
        connection.busy_timeout(std::time::Duration::from_secs(5)).map_err(open)?;
        check_identity(&connection, path)?;
        Ok(Self { connection, path: path.to_owned() })
    }

    /// The file.
    pub fn path(&self) -> &Path {
        &self.path
    }

    pub(super) fn read<T>(&self, work: impl FnOnce(&Connection) -> rusqlite::Result<T>) -> Result<T, RunError> {
        work(&self.connection).map_err(|error| RunError::reading(&self.path, &error))
    }

    pub(super) fn rows<T>(
        &self,
        sql: &str,
        values: impl rusqlite::Params,
        row: impl FnMut(&Row<'_>) -> rusqlite::Result<T>,
    ) -> Result<Vec<T>, RunError> {
        self.read(|c| c.prepare_cached(sql)?.query_map(values, row)?.collect())
    }

    /// What the database itself finds wrong with the file; empty where nothing is.
    ///
    /// # Errors
    /// When not even that can be asked.
    pub fn integrity(&self) -> Result<Vec<String>, RunError> {
        let found: Vec<String> = self.rows("PRAGMA integrity_check(20)", [], |row| row.get(0))?;
        Ok(found.into_iter().filter(|line| line != "ok").collect())
    }

    /// What the run says about itself.
    ///
    /// # Errors
    /// When the file cannot be read; so for all that follow.
    pub fn header(&self) -> Result<Header, RunError> {
        let value = |key: &str| -> Result<String, RunError> {
            let found: Option<String> = self
                .read(|c| c.query_row("SELECT value FROM meta WHERE key = ?1", [key], |row| row.get(0)).optional())?;
            Ok(found.unwrap_or_default())
        };
        Ok(Header {
            simulated: value("simulated")? == "1",
            bench_name: value("bench_name")?,
            profile_text: value("profile_text")?,
            certificate_text: Some(value("certificate_text")?).filter(|text| !text.is_empty()),
            frames_dir: value("frames_dir")?,
            link: value("link")?,
            software: value("software")?,
        })
    }

    /// The frames folder as a path: relative names are taken from the run file's folder.
    ///
    /// # Errors
    /// When the file cannot be read.
    pub fn frames_dir(&self) -> Result<PathBuf, RunError> {
        let named = PathBuf::from(self.header()?.frames_dir);
        Ok(self.path.parent().map_or(named.clone(), |folder| folder.join(&named)))
    }

    /// All epochs in the order they were met.
    ///
    /// # Errors
    /// When the file cannot be read.
    pub fn epochs(&self) -> Result<Vec<EpochRow>, RunError> {
        self.rows("SELECT epoch_key, hello, heard_utc_ns, link FROM epoch ORDER BY epoch_key", [], |row| {
            Ok(EpochRow { epoch_key: row.get(0)?, hello: from_json(row, 1)?, utc_ns: row.get(2)?, link: row.get(3)? })
        })
    }

    /// Readings of an epoch whose windows touch a stretch of its clock, in order.
    ///
    /// # Errors
    /// When the file cannot be read.
    pub fn readings(&self, epoch: i64, from_us: u64, until_us: u64) -> Result<Vec<Reading>, RunError> {
        // A window is at most 50 ms long, so the first one that touches began at most so long before.
        let first = self.first_reading_from(epoch, from_us.saturating_sub(50_000))?;
        let mut readings = Vec::new();
        self.each_reading_from(first, (epoch + 1) << SEQ_BITS, |reading| {
            if reading.time_us > until_us {
                return false;
            }
            if reading.time_us + u64::from(reading.duration_us) >= from_us {
                readings.push(reading);
            }
            true
        })?;
        Ok(readings)
    }

    /// Hands every reading of an epoch to `take`, in order, until it answers `false`.
    ///
    /// # Errors
    /// When the file cannot be read.
    pub fn each_reading(&self, epoch: i64, take: impl FnMut(Reading) -> bool) -> Result<(), RunError> {
        self.each_reading_from(epoch << SEQ_BITS, (epoch + 1) << SEQ_BITS, take)
    }

    fn each_reading_from(&self, from: i64, until: i64, mut take: impl FnMut(Reading) -> bool) -> Result<(), RunError> {
        self.read(|c| {
            let mut statement = c.prepare_cached(
                "SELECT r.id, time_us, duration_us, sense_sum, sense_count, sense_min, sense_max, cross_sum, cross_count,
                 cross_min, cross_max, flags, hash
                 FROM reading r JOIN held_certificate USING (certificate_key) WHERE r.id >= ?1 AND r.id < ?2 ORDER BY r.id",
            )?;
            let mut rows = statement.query([from, until])?;
            while let Some(row) = rows.next()? {
                if !take(reading(row)?) {
                    break;
                }
            }
            Ok(())
        })
    }

    /// Key of the first reading of an epoch that began at or after a time: keys grow with time, so they are halved.
    fn first_reading_from(&self, epoch: i64, time_us: u64) -> Result<i64, RunError> {
        let (mut low, mut high) = self.reading_keys(epoch)?;
        self.read(|c| {
            let mut at = c.prepare_cached("SELECT id, time_us FROM reading WHERE id >= ?1 ORDER BY id LIMIT 1")?;
            while low < high {
                let middle = low + (high - low) / 2;
                let (id, began): (i64, i64) = at.query_row([middle], |row| Ok((row.get(0)?, row.get(1)?)))?;
                if began.unsigned_abs() < time_us {
                    low = id + 1;
                } else {
                    high = middle;
                }
            }
            Ok(low)
        })
    }

    /// First key of an epoch's readings, and its last key.
    fn reading_keys(&self, epoch: i64) -> Result<(i64, i64), RunError> {
        let (from, until) = (epoch << SEQ_BITS, (epoch + 1) << SEQ_BITS);
        self.read(|c| {
            let one = |sql: &str| -> rusqlite::Result<Option<i64>> {
                c.prepare_cached(sql)?.query_row([from, until], |row| row.get(0)).optional()
            };
            let first = one("SELECT id FROM reading WHERE id >= ?1 AND id < ?2 ORDER BY id LIMIT 1")?;
            let last = one("SELECT id FROM reading WHERE id >= ?1 AND id < ?2 ORDER BY id DESC LIMIT 1")?;
            Ok((first.unwrap_or(from), last.unwrap_or(from)))
        })
    }

    /// Events of an epoch, in order.
    ///
    /// # Errors
    /// When the file cannot be read.
    pub fn events(&self, epoch: i64) -> Result<Vec<Event>, RunError> {
        self.of_epoch("SELECT id, time_us, detail FROM event WHERE id >= ?1 AND id < ?2 ORDER BY id", epoch, |row| {
            Ok(Event { seq: seq(row)?, time_us: time(row, 1)?, kind: from_json(row, 2)? })
        })
    }

    /// Slow inputs of an epoch, in order.
    ///
    /// # Errors
    /// When the file cannot be read.
    pub fn slow(&self, epoch: i64) -> Result<Vec<Slow>, RunError> {
        let sql =
            "SELECT id, time_us, beam_na, enclosure_centicelsius FROM slow WHERE id >= ?1 AND id < ?2 ORDER BY id";
        self.of_epoch(sql, epoch, |row| {
            Ok(Slow {
                seq: seq(row)?,
                time_us: time(row, 1)?,
                beam_na: row.get(2)?,
                enclosure_centicelsius: row.get(3)?,
            })
        })
    }

    /// Strobe edges of an epoch, in order.
    ///
    /// # Errors
    /// When the file cannot be read.
    pub fn strobes(&self, epoch: i64) -> Result<Vec<Strobe>, RunError> {
        self.of_epoch("SELECT id, time_us, rising FROM strobe WHERE id >= ?1 AND id < ?2 ORDER BY id", epoch, |row| {
            Ok(Strobe { seq: seq(row)?, time_us: time(row, 1)?, rising: row.get(2)? })
        })
    }

    fn of_epoch<T>(
        &self,
        sql: &str,
        epoch: i64,
        row: impl FnMut(&Row<'_>) -> rusqlite::Result<T>,
    ) -> Result<Vec<T>, RunError> {
        self.rows(sql, [epoch << SEQ_BITS, (epoch + 1) << SEQ_BITS], row)
    }

    /// Counted gaps of an epoch.
    ///
    /// # Errors
    /// When the file cannot be read.
    pub fn gaps(&self, epoch: i64) -> Result<Vec<Gap>, RunError> {
        let sql = "SELECT stream, first_seq, count FROM gap WHERE epoch_key = ?1 ORDER BY gap_key";
        self.rows(sql, [epoch], |row| {
            let code: String = row.get(0)?;
            let stream = stream_of(&code).ok_or_else(|| bad(0, "gap.stream"))?;
            Ok(Gap { stream, first: row.get(1)?, count: row.get(2)? })
        })
    }

    /// Clock exchanges of an epoch, in order.
    ///
    /// # Errors
    /// When the file cannot be read.
    pub fn echoes(&self, epoch: i64) -> Result<Vec<EchoRow>, RunError> {
        let sql = "SELECT asked_mono_ns, answered_mono_ns, utc_minus_mono_ns, received_us, sent_us FROM echo
                   WHERE epoch_key = ?1 ORDER BY echo_key";
        self.rows(sql, [epoch], |row| {
            Ok(EchoRow {
                asked_mono_ns: row.get(0)?,
                answered_mono_ns: row.get(1)?,
                utc_minus_mono_ns: row.get(2)?,
                received_us: time(row, 3)?,
                sent_us: time(row, 4)?,
            })
        })
    }

    /// States of an epoch, one a second.
    ///
    /// # Errors
    /// When the file cannot be read.
    pub fn statuses(&self, epoch: i64) -> Result<Vec<Status>, RunError> {
        let sql = "SELECT detail FROM status WHERE epoch_key = ?1 ORDER BY status_key";
        self.rows(sql, [epoch], |row| from_json(row, 0))
    }

    /// All frames by their exposure, those without one last.
    ///
    /// # Errors
    /// When the file cannot be read.
    pub fn frames(&self) -> Result<Vec<FrameRow>, RunError> {
        let sql =
            "SELECT frame, file, noticed_utc_ns, sha256, start_utc_ns, end_utc_ns, start_u_ns, length_u_ns, source,
                   unknown_because FROM frame ORDER BY start_utc_ns IS NULL, start_utc_ns, frame";
        self.rows(sql, [], |row| {
            let exposure = match row.get::<_, Option<String>>(9)? {
                Some(why) => Err(why),
                None => Ok(Exposure {
                    start_utc_ns: row.get(4)?,
                    end_utc_ns: row.get(5)?,
                    start_u_ns: row.get(6)?,
                    length_u_ns: row.get(7)?,
                    source: row.get(8)?,
                }),
            };
            let row = FrameRow {
                frame: row.get(0)?,
                file: row.get(1)?,
                noticed_utc_ns: row.get(2)?,
                sha256: row.get(3)?,
                exposure,
            };
            match &row.exposure {
                Ok(exposure) if exposure.end_utc_ns <= exposure.start_utc_ns => Err(bad(5, "frame.end_utc_ns")),
                _ => Ok(row),
            }
        })
    }

    /// Notes in the order they were made.
    ///
    /// # Errors
    /// When the file cannot be read.
    pub fn notes(&self) -> Result<Vec<NoteRow>, RunError> {
        self.rows("SELECT utc_ns, author, text FROM note ORDER BY note_key", [], |row| {
            Ok(NoteRow { utc_ns: row.get(0)?, author: row.get(1)?, text: row.get(2)? })
        })
    }

    /// All complete reductions, oldest first.
    ///
    /// # Errors
    /// When the file cannot be read.
    pub fn reductions(&self) -> Result<Vec<ReductionRow>, RunError> {
        let sql = "SELECT reduction_key, command, software, profile_text, certificate_text FROM reduction
                   WHERE complete = 1 ORDER BY reduction_key";
        self.rows(sql, [], |row| {
            Ok(ReductionRow {
                key: row.get(0)?,
                command: row.get(1)?,
                software: row.get(2)?,
                profile_text: row.get(3)?,
                certificate_text: row.get(4)?,
            })
        })
    }

    /// The stamps of a reduction, by frame name.
    ///
    /// # Errors
    /// When the file cannot be read.
    pub fn stamps(&self, reduction: i64) -> Result<Vec<StampRow>, RunError> {
        let sql = "SELECT frame, verdict, reasons, volts, volts_u, volts_u_frame, volts_u_common, wavelength_pm,
                   wavelength_u_pm, slope_volts_per_second, span_volts, ripple_volts, coverage, enclosure_celsius
                   FROM stamp WHERE reduction_key = ?1 ORDER BY frame";
        self.rows(sql, [reduction], |row| {
            let value = match row.get::<_, Option<f64>>(3)? {
                None => None,
                Some(volts) => Some(StampValue {
                    volts,
                    volts_u: row.get(4)?,
                    volts_u_frame: row.get(5)?,
                    volts_u_common: row.get(6)?,
                    wavelength_pm: row.get(7)?,
                    wavelength_u_pm: row.get(8)?,
                    slope_volts_per_second: row.get(9)?,
                    span_volts: row.get(10)?,
                    ripple_volts: row.get(11)?,
                    coverage: row.get(12)?,
                    enclosure_celsius: row.get(13)?,
                }),
            };
            Ok(StampRow { frame: row.get(0)?, verdict: row.get(1)?, reasons: row.get(2)?, value })
        })
    }

    /// Readings of an epoch: how many, and how many numbers from its first to its last are not there.
    ///
    /// # Errors
    /// When the file cannot be read.
    pub fn count_readings(&self, epoch: i64) -> Result<(u64, u64), RunError> {
        let keys = params![epoch << SEQ_BITS, (epoch + 1) << SEQ_BITS];
        let (count, first, last): (i64, Option<i64>, Option<i64>) = self.read(|c| {
            c.query_row("SELECT count(*), min(id), max(id) FROM reading WHERE id >= ?1 AND id < ?2", keys, |row| {
                Ok((row.get(0)?, row.get(1)?, row.get(2)?))
            })
        })?;
        let span = first.zip(last).map_or(0, |(first, last)| last - first + 1);
        Ok((count.unsigned_abs(), (span - count).unsigned_abs()))
    }
}

fn reading(row: &Row<'_>) -> rusqlite::Result<Reading> {
    let codes = |at: usize| -> rusqlite::Result<WindowCodes> {
        Ok(WindowCodes { sum: row.get(at)?, count: row.get(at + 1)?, min: row.get(at + 2)?, max: row.get(at + 3)? })
    };
    let hash: String = row.get(12)?;
    Ok(Reading {
        seq: seq(row)?,
        time_us: time(row, 1)?,
        duration_us: row.get(2)?,
        sense: codes(3)?,
        cross: codes(7)?,
        flags: ReadingFlags(row.get(11)?),
        certificate: CertificateHash(bytes8(&hash).ok_or_else(|| bad(12, "held_certificate.hash"))?),
    })
}

/// The sequence number within a key in column 0.
fn seq(row: &Row<'_>) -> rusqlite::Result<u32> {
    let id: i64 = row.get(0)?;
    Ok((id & i64::from(u32::MAX)) as u32)
}

fn time(row: &Row<'_>, at: usize) -> rusqlite::Result<u64> {
    let time: i64 = row.get(at)?;
    u64::try_from(time).map_err(|_| rusqlite::Error::IntegralValueOutOfRange(at, time))
}

fn from_json<T: DeserializeOwned>(row: &Row<'_>, at: usize) -> rusqlite::Result<T> {
    let text: String = row.get(at)?;
    serde_json::from_str(&text)
        .map_err(|error| rusqlite::Error::FromSqlConversionFailure(at, Type::Text, Box::new(error)))
}

fn bad(at: usize, place: &'static str) -> rusqlite::Error {
    rusqlite::Error::InvalidColumnType(at, place.to_owned(), Type::Text)
}

fn bytes8(hex: &str) -> Option<[u8; 8]> {
    let mut bytes = [0; 8];
    if hex.len() != 16 || !hex.is_ascii() {
        return None;
    }
    for (index, byte) in bytes.iter_mut().enumerate() {
        *byte = u8::from_str_radix(&hex[2 * index..2 * index + 2], 16).ok()?;
    }
    Some(bytes)
}
