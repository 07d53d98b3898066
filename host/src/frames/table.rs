//! A table of frames and times, for cameras whose times come from elsewhere.
//!
//! CSV with a header. `frame` (name or file) and `start_utc` (RFC 3339 with zone) are required, and one of `end_utc` and
//! `exposure_s`; `start_u_s` (standard uncertainty) may stand beside them.

use std::collections::HashMap;

use serde::Deserialize;
use thiserror::Error;

use crate::{profile::Camera, run::rows::Exposure};

/// Why a table cannot be used.
#[derive(Debug, Error)]
#[error("{origin}, line {line}: {problem}")]
pub struct TableError {
    origin: String,
    line: u64,
    problem: String,
}

#[derive(Deserialize)]
struct Row {
    frame: String,
    start_utc: String,
    end_utc: Option<String>,
    exposure_s: Option<f64>,
    start_u_s: Option<f64>,
}

/// Longest exposure a table may state, seconds.
const LONGEST_SECONDS: f64 = 86_400.0;

/// Exposures by the frame's name as the table writes it.
///
/// # Errors
/// [`TableError`] with line and what is wrong; a frame that stands twice is an error.
pub fn exposures(text: &str, origin: &str, camera: &Camera) -> Result<HashMap<String, Exposure>, TableError> {
    let fault = |line: u64, problem: String| TableError { origin: origin.to_owned(), line, problem };
    let mut reader = csv::ReaderBuilder::new().trim(csv::Trim::All).comment(Some(b'#')).from_reader(text.as_bytes());
    let mut found = HashMap::new();
    let headers = reader.headers().map_err(|error| fault(1, error.to_string()))?.clone();
    let mut record = csv::StringRecord::new();
    while reader.read_record(&mut record).map_err(|error| fault(reader_line(&error), error.to_string()))? {
        let line = record.position().map_or(0, csv::Position::line);
        let row: Row = record.deserialize(Some(&headers)).map_err(|error| fault(line, words(&error)))?;
        let exposure = exposure(&row, camera).map_err(|problem| fault(line, problem))?;
        if found.insert(row.frame.clone(), exposure).is_some() {
            return Err(fault(line, format!("frame {} stands twice", row.frame)));
        }
    }
    Ok(found)
}

fn reader_line(error: &csv::Error) -> u64 {
    error.position().map_or(0, csv::Position::line)
}

fn words(error: &csv::Error) -> String {
    match error.kind() {
        csv::ErrorKind::Deserialize { err, .. } => err.to_string(),
        _ => error.to_string(),
    }
}

fn exposure(row: &Row, camera: &Camera) -> Result<Exposure, String> {
    let start_utc_ns = time(&row.start_utc)?;
    let seconds = match (&row.end_utc, row.exposure_s) {
        (Some(end), None) if !end.is_empty() => (time(end)? - start_utc_ns) as f64 * 1e-9,
        (_, Some(seconds)) => seconds,
        _ => return Err("give end_utc or exposure_s".to_owned()),
    };
    if !(seconds > 0.0 && seconds <= LONGEST_SECONDS) {
        return Err(format!("an exposure of {seconds} s is not possible: give 0 to {LONGEST_SECONDS} s"));
    }
    let start_u = row.start_u_s.unwrap_or(camera.start_u_seconds);
    if !(0.0..=LONGEST_SECONDS).contains(&start_u) {
        return Err(format!("start_u_s {start_u} is not possible"));
    }
    Ok(Exposure {
        start_utc_ns,
        end_utc_ns: start_utc_ns + (seconds * 1e9).round() as i64,
        start_u_ns: (start_u * 1e9).round() as i64,
        length_u_ns: (camera.exposure_u_seconds * 1e9).round() as i64,
        source: "table".to_owned(),
    })
}

fn time(text: &str) -> Result<i64, String> {
    let time: jiff::Timestamp =
        text.parse().map_err(|_| format!("`{text}` is no time such as 2026-12-01T09:30:00.25Z or with +01:00"))?;
    i64::try_from(time.as_nanosecond()).map_err(|_| format!("`{text}` lies outside the years 1678 to 2261"))
}

#[cfg(test)]
mod tests {
    use super::*;

    fn read(text: &str) -> Result<HashMap<String, Exposure>, TableError> {
        let camera = crate::profile::Profile::parse(&crate::profile::example(), "example").unwrap().camera;
        exposures(text, "times.csv", &camera)
    }

    #[test]
    fn ends_and_lengths_are_both_taken() {
        let found = read(
            "frame,start_utc,end_utc,exposure_s,start_u_s\na,1970-01-01T00:00:01Z,1970-01-01T00:00:01.5Z,,\nb,1970-01-01T01:00:02+01:00,,0.25,0.01\n",
        )
        .unwrap();
        assert_eq!((found["a"].start_utc_ns, found["a"].end_utc_ns), (1_000_000_000, 1_500_000_000));
        assert_eq!((found["b"].end_utc_ns, found["b"].start_u_ns), (2_250_000_000, 10_000_000));
    }

    #[test]
    fn what_is_wrong_is_told_with_its_line() {
        let head = "frame,start_utc,exposure_s\n";
        for (rows, words) in [
            ("a,yesterday,0.2\n", "yesterday"),
            ("a,1970-01-01T00:00:01Z,-1\n", "not possible"),
            ("a,1970-01-01T00:00:01Z,\n", "end_utc or exposure_s"),
            ("a,1970-01-01T00:00:01Z,0.2\na,1970-01-01T00:00:02Z,0.2\n", "twice"),
            ("a,1970-01-01T00:00:01Z,soon\n", "line 2"),
        ] {
            let error = read(&format!("{head}{rows}")).unwrap_err().to_string();
            assert!(error.contains(words) && error.contains("times.csv"), "{error}");
        }
        assert!(read("frame,when\na,b\n").is_err());
        assert!(read("frame,start_utc,exposure_s\na,b\n").is_err());
    }
}
