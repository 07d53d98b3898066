//! Where the codes of a calibration come from.

use std::{io, time::Duration};

use jiff::Timestamp;

/// Codes of both senses at one moment: the mean of a reading or of several.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Codes {
    /// When, nanoseconds since 1970-01-01 UTC.
    pub utc_ns: i64,
    /// Mean code of the main sense.
    pub sense_code: f64,
    /// Mean code of the cross-sense.
    pub cross_code: f64,
    /// Enclosure temperature, degrees Celsius, where measured.
    pub enclosure_celsius: Option<f64>,
}

/// What a source has to say.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum CodeEvent {
    /// Codes.
    Codes(Codes),
    /// Nothing within the time given.
    Quiet,
    /// There will be no more.
    Ended,
}

/// Why a source gives no codes.
#[derive(Debug, thiserror::Error)]
pub enum SourceError {
    /// A table cannot be read.
    #[error("{origin}: {problem}")]
    Table {
        /// Which table, and where in it.
        origin: String,
        /// What is wrong.
        problem: String,
    },
    /// The controller cannot be heard.
    #[error("{0}")]
    Link(String),
}

/// A live or recorded stream of codes.
pub trait CodeSource {
    /// The next codes, waiting at most `limit`. With a limit of zero it gives what has arrived meanwhile and never
    /// waits.
    ///
    /// # Errors
    /// When the source has failed; a live one may be asked again once it is back.
    fn next(&mut self, limit: Duration) -> Result<CodeEvent, SourceError>;

    /// Identity of the board, sixteen hexadecimal digits.
    fn device(&self) -> String;

    /// Whether the codes come from the simulated bench.
    fn simulated(&self) -> bool;
}

#[derive(Debug, serde::Deserialize)]
struct Row {
    time_utc: String,
    sense_code: f64,
    cross_code: f64,
    #[serde(default)]
    enclosure_celsius: Option<f64>,
}

/// Codes from a CSV table with the columns `time_utc`, `sense_code`, `cross_code` and, where measured,
/// `enclosure_celsius`; one row about every tenth of a second to every second.
pub struct CsvSource {
    rows: csv::DeserializeRecordsIntoIter<Box<dyn io::Read + Send>, Row>,
    origin: String,
    device: String,
    simulated: bool,
}

impl CsvSource {
    /// Reads from `table`; `origin` names it in errors.
    pub fn new(table: Box<dyn io::Read + Send>, origin: &str, device: &str, simulated: bool) -> Self {
        let rows = csv::ReaderBuilder::new().trim(csv::Trim::All).from_reader(table).into_deserialize();
        Self { rows, origin: origin.to_owned(), device: device.to_owned(), simulated }
    }

    fn wrong(&self, problem: impl ToString) -> SourceError {
        SourceError::Table { origin: self.origin.clone(), problem: problem.to_string().replace('\n', " ") }
    }
}

impl CodeSource for CsvSource {
    fn next(&mut self, limit: Duration) -> Result<CodeEvent, SourceError> {
        if limit.is_zero() {
            // A table does not run on while a person types.
            return Ok(CodeEvent::Quiet);
        }
        let Some(row) = self.rows.next() else { return Ok(CodeEvent::Ended) };
        let row = row.map_err(|error| self.wrong(error))?;
        let time: Timestamp = row
            .time_utc
            .parse()
            .map_err(|_| self.wrong(format!("\"{:.40}\" is no time such as 2026-06-01T08:00:00Z", row.time_utc)))?;
        let sound = |code: f64| (-32_768.0..=32_767.0).contains(&code);
        if !sound(row.sense_code) || !sound(row.cross_code) {
            return Err(self.wrong(format!("at {time}: codes lie between -32768 and 32767")));
        }
        let utc_ns = i64::try_from(time.as_nanosecond()).map_err(|_| self.wrong(format!("{time} is out of range")))?;
        let (sense_code, cross_code) = (row.sense_code, row.cross_code);
        Ok(CodeEvent::Codes(Codes { utc_ns, sense_code, cross_code, enclosure_celsius: row.enclosure_celsius }))
    }

    fn device(&self) -> String {
        self.device.clone()
    }

    fn simulated(&self) -> bool {
        self.simulated
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn source(text: &'static str) -> CsvSource {
        CsvSource::new(Box::new(text.as_bytes()), "codes.csv", "5eed000000000001", true)
    }

    #[test]
    fn rows_become_codes_and_an_absent_temperature_stays_absent() {
        let mut source = source(
            "time_utc,sense_code,cross_code,enclosure_celsius\n1970-01-01T00:00:01Z,10.5,9,\n1970-01-01T00:00:02Z,1,2,23.5\n",
        );
        let wait = Duration::from_secs(1);
        assert_eq!(source.next(Duration::ZERO).unwrap(), CodeEvent::Quiet);
        let first = Codes { utc_ns: 1_000_000_000, sense_code: 10.5, cross_code: 9.0, enclosure_celsius: None };
        assert_eq!(source.next(wait).unwrap(), CodeEvent::Codes(first));
        assert!(matches!(source.next(wait).unwrap(), CodeEvent::Codes(Codes { enclosure_celsius: Some(23.5), .. })));
        assert_eq!(source.next(wait).unwrap(), CodeEvent::Ended);
    }

    #[test]
    fn broken_rows_are_told() {
        for row in [
            "yesterday,1,2,",
            "1970-01-01T00:00:01Z,x,2,",
            "1970-01-01T00:00:01Z,NaN,2,",
            "1970-01-01T00:00:01Z,1",
            "9999-01-01T00:00:01Z,1,2,",
        ] {
            let text: &'static str =
                Box::leak(format!("time_utc,sense_code,cross_code,enclosure_celsius\n{row}\n").into());
            let error = source(text).next(Duration::from_secs(1)).unwrap_err().to_string();
            assert!(error.starts_with("codes.csv: ") && !error.contains('\n'), "{error}");
        }
    }
}
