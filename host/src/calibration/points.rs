//! Tables of points: what people bring from their own calibration.

use std::path::{Path, PathBuf};

use serde::Deserialize;

use super::{Direction, Point, suspect};
use crate::text::{self, TextError};

const MAX_POINTS_BYTES: u64 = 8 << 20;

/// Why a table of points cannot be used.
#[derive(Debug, thiserror::Error)]
pub enum PointsError {
    /// It could not be read.
    #[error(transparent)]
    Text(#[from] TextError),
    /// A row is wrong.
    #[error("{}{}: {problem}", path.display(), line.map_or_else(String::new, |line| format!(", line {line}")))]
    Row {
        /// Which file.
        path: PathBuf,
        /// Which line, from 1, where known.
        line: Option<u64>,
        /// What is wrong and what is meant.
        problem: String,
    },
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
struct Row {
    time_utc: String,
    direction: String,
    reference_volts: f64,
    sense_code: f64,
    cross_code: f64,
    #[serde(default)]
    enclosure_celsius: Option<f64>,
    #[serde(default)]
    left_out: Option<String>,
}

/// Reads a CSV table with the columns `time_utc`, `direction` (zero, up, down), `reference_volts` (signed, at the
/// divider's input), `sense_code`, `cross_code` and, where they apply, `enclosure_celsius` and `left_out` (a reason).
///
/// # Errors
/// When it cannot be read, a row is wrong, or the reference is plainly in another unit. `nominal_volts_per_code` tells
/// what the codes should be worth, where known.
pub fn read_points(path: &Path, nominal_volts_per_code: Option<f64>) -> Result<Vec<Point>, PointsError> {
    let text = text::read(path, MAX_POINTS_BYTES)?;
    let mut reader = csv::ReaderBuilder::new().trim(csv::Trim::All).comment(Some(b'#')).from_reader(text.as_bytes());
    let mut points = Vec::new();
    for row in reader.deserialize() {
        let row: Row = row.map_err(|error: csv::Error| {
            let line = error.position().map(csv::Position::line);
            PointsError::Row { path: path.to_owned(), line, problem: error.to_string().replace('\n', " ") }
        })?;
        let number = points.len() + 1;
        let point = point(row).map_err(|problem| PointsError::Row {
            path: path.to_owned(),
            line: None,
            problem: format!("point {number}: {problem}"),
        })?;
        points.push(point);
    }
    if let Some(problem) = nominal_volts_per_code.and_then(|nominal| wrong_unit(&points, nominal)) {
        return Err(PointsError::Row { path: path.to_owned(), line: None, problem });
    }
    Ok(points)
}

fn point(row: Row) -> Result<Point, String> {
    if row.time_utc.parse::<jiff::Timestamp>().is_err() {
        return Err(format!("time_utc is \"{:.40}\"; meant is a time such as 2026-06-01T08:00:00Z", row.time_utc));
    }
    if Direction::from_word(&row.direction).is_none() {
        return Err(format!("direction is \"{:.20}\"; permitted are zero, up and down", row.direction));
    }
    if !(-50_000.0..=50_000.0).contains(&row.reference_volts) {
        return Err(format!("reference_volts is {}; permitted are -50000 to 50000 V", row.reference_volts));
    }
    for (name, code) in [("sense_code", row.sense_code), ("cross_code", row.cross_code)] {
        if !(-32_768.0..=32_767.0).contains(&code) {
            return Err(format!("{name} is {code}; permitted are -32768 to 32767"));
        }
        if code.abs() > 32_700.0 {
            return Err(format!("{name} is {code}, at the end of the converter's range: that is no measurement"));
        }
    }
    if row.enclosure_celsius.is_some_and(|celsius| !(-40.0..=100.0).contains(&celsius)) {
        return Err("enclosure_celsius must lie between -40 and 100".to_owned());
    }
    Ok(Point {
        time_utc: row.time_utc,
        direction: row.direction,
        reference_volts: row.reference_volts,
        sense_code: row.sense_code,
        cross_code: row.cross_code,
        enclosure_celsius: row.enclosure_celsius,
        left_out: row.left_out.filter(|reason| !reason.is_empty()),
    })
}

/// When most references are off by the same usual slip against what the codes should be worth.
fn wrong_unit(points: &[Point], nominal: f64) -> Option<String> {
    let guesses = points.iter().filter(|point| (nominal * point.sense_code).abs() > 200.0);
    let kilovolts = guesses.clone().filter(|point| {
        let expected = (nominal * point.sense_code).copysign(point.reference_volts);
        let ratio = 1e3 * point.reference_volts / expected;
        (0.8..1.25).contains(&ratio) && !suspect::guess(point.reference_volts, 1e3 * point.reference_volts).is_empty()
    });
    (2 * kilovolts.count() > guesses.count()).then(|| {
        "reference_volts is in kilovolts, to judge by the codes and the profile's nominal_volts_per_code; it must be in volts".to_owned()
    })
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::calibration::example;

    fn read(table: &str) -> Result<Vec<Point>, PointsError> {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("points.csv");
        std::fs::write(&path, table).unwrap();
        read_points(&path, Some(0.3125))
    }

    fn table(scale: f64) -> String {
        let rows = example().points.into_iter().map(|point| {
            format!(
                "{},{},{},{},{},{}\n",
                point.time_utc,
                point.direction,
                point.reference_volts * scale,
                point.sense_code,
                point.cross_code,
                23
            )
        });
        std::iter::once("time_utc,direction,reference_volts,sense_code,cross_code,enclosure_celsius\n".to_owned())
            .chain(rows)
            .collect()
    }

    #[test]
    fn a_table_is_read() {
        assert_eq!(read(&table(1.0)).unwrap(), example().points);
    }

    #[test]
    fn kilovolts_are_told() {
        assert!(read(&table(1e-3)).unwrap_err().to_string().contains("in kilovolts"));
    }

    #[test]
    fn wrong_rows_are_told_with_their_place() {
        let head = "time_utc,direction,reference_volts,sense_code,cross_code\n2026-06-01T08:00:00Z,up,1,2,3\n";
        for (row, wanted) in [
            ("2026-06-01T08:00:00Z,up,x,2,3", "line 3"),
            ("2026-06-01T08:00:00Z,up,1,2", "line 3"),
            ("8 o'clock,up,1,2,3", "point 2: time_utc"),
            ("2026-06-01T08:00:00Z,sideways,1,2,3", "point 2: direction"),
            ("2026-06-01T08:00:00Z,up,NaN,2,3", "point 2: reference_volts"),
            ("2026-06-01T08:00:00Z,up,1,32767,3", "end of the converter's range"),
        ] {
            let error = read(&format!("{head}{row}\n")).unwrap_err().to_string();
            assert!(error.contains(wanted) && !error.contains('\n'), "{error}");
        }
        assert!(read("volts,code\n1,2\n").is_err());
    }
}
