//! The control chart: one-point checks over the months, and when they call for a new calibration.

use std::{
    fs::OpenOptions,
    io::{self, Write},
    path::{Path, PathBuf},
};

use jiff::Timestamp;
use serde::{Deserialize, Serialize};

use super::{Certificate, Channel, Finding, Severity, apply::combined_volts, assess::finding};
use crate::metrology::solve;
use crate::text::{self, TextError};

const MAX_CHART_BYTES: u64 = 4 << 20;
const SECONDS_PER_YEAR: f64 = 365.25 * 86_400.0;

/// Deviations in a row on one side that chance explains once in 64 times: common practice for control charts.
const RUN: usize = 7;

/// One check.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Check {
    /// When, RFC 3339.
    pub time_utc: String,
    /// First sixteen digits of the certificate's hash.
    pub certificate: String,
    /// Reference, signed volts at the divider's input.
    pub reference_volts: f64,
    /// Main sense under the certificate, volts.
    pub sense_volts: f64,
    /// Cross-sense under the certificate, volts.
    pub cross_volts: f64,
    /// Standard uncertainty of the main sense, without the reference's, which is common to calibration and check, volts.
    pub u_volts: f64,
    /// Standard uncertainty of the senses' difference, volts.
    pub difference_u_volts: f64,
    /// Enclosure temperature, degrees Celsius, where measured.
    pub enclosure_celsius: Option<f64>,
}

impl Check {
    /// Makes a check from codes taken at a moment.
    pub fn new(
        certificate: &Certificate,
        utc_ns: i64,
        reference_volts: f64,
        codes: (f64, f64),
        enclosure_celsius: Option<f64>,
    ) -> Self {
        let day = super::day_of_utc_ns(utc_ns);
        let sense_volts = certificate.volts(Channel::Sense, codes.0, enclosure_celsius);
        let own = certificate.common_u(sense_volts, codes.0, enclosure_celsius, day);
        let parts: Vec<_> = own.into_iter().filter(|part| !part.name.starts_with("reference")).collect();
        Self {
            time_utc: Timestamp::from_second(utc_ns.div_euclid(1_000_000_000)).unwrap_or_default().to_string(),
            certificate: certificate.hash.chars().take(16).collect(),
            reference_volts,
            sense_volts,
            cross_volts: certificate.volts(Channel::Cross, codes.1, enclosure_celsius),
            // Reading a reference twice is never better than its fixed part and a point's scatter.
            u_volts: libm::hypot(
                combined_volts(&parts),
                libm::hypot(certificate.reference.u_volts, certificate.sense.residual_volts),
            ),
            difference_u_volts: certificate.difference_u_volts(sense_volts, enclosure_celsius, day),
            enclosure_celsius,
        }
    }

    /// Main sense less reference, volts.
    pub fn deviation_volts(&self) -> f64 {
        self.sense_volts - self.reference_volts
    }

    /// The same in parts per million of the reference; `None` for a check at zero.
    pub fn deviation_ppm(&self) -> Option<f64> {
        (self.reference_volts != 0.0).then(|| 1e6 * self.deviation_volts() / self.reference_volts)
    }

    fn sound(&self) -> bool {
        let numbers = [self.reference_volts, self.sense_volts, self.cross_volts, self.u_volts, self.difference_u_volts];
        numbers.iter().all(|value| value.abs() <= 50_000.0)
            && self.u_volts > 0.0
            && self.time_utc.parse::<Timestamp>().is_ok()
    }

    fn years(&self) -> f64 {
        let time: Timestamp = self.time_utc.parse().unwrap_or_default();
        time.as_second() as f64 / SECONDS_PER_YEAR
    }
}

/// Why a chart cannot be used.
#[derive(Debug, thiserror::Error)]
pub enum ChartError {
    /// It could not be read.
    #[error(transparent)]
    Text(#[from] TextError),
    /// It could not be written.
    #[error("cannot write {}: {source}", path.display())]
    Write {
        /// Which file.
        path: PathBuf,
        /// What the system said.
        source: io::Error,
    },
    /// A row is damaged.
    #[error("{}, line {line}: {problem}; correct the row or move the file away", path.display())]
    Row {
        /// Which file.
        path: PathBuf,
        /// Which line, from 1.
        line: u64,
        /// What is wrong.
        problem: String,
    },
}

/// Where the checks of a certificate are kept: beside it, whatever certificate is in force.
pub fn chart_path(certificate: &Path) -> PathBuf {
    certificate.with_extension("checks.csv")
}

/// Reads a chart; an absent file is an empty one.
///
/// # Errors
/// When it cannot be read or a row is damaged.
pub fn load(path: &Path) -> Result<Vec<Check>, ChartError> {
    if !path.exists() {
        return Ok(Vec::new());
    }
    let text = text::read(path, MAX_CHART_BYTES)?;
    let mut checks = Vec::new();
    for (index, row) in csv::Reader::from_reader(text.as_bytes()).deserialize().enumerate() {
        let line = index as u64 + 2;
        let wrong = |problem: String| ChartError::Row { path: path.to_owned(), line, problem };
        let check: Check = row.map_err(|error: csv::Error| wrong(error.to_string().replace('\n', " ")))?;
        if !check.sound() {
            return Err(wrong("a value cannot be".to_owned()));
        }
        checks.push(check);
    }
    Ok(checks)
}

/// Adds a check to a chart, on disk before this returns.
///
/// # Errors
/// When the file cannot be written.
pub fn append(path: &Path, check: &Check) -> Result<(), ChartError> {
    let failed = |source: io::Error| ChartError::Write { path: path.to_owned(), source };
    let mut file = OpenOptions::new().append(true).create(true).open(path).map_err(failed)?;
    let fresh = file.metadata().map_err(failed)?.len() == 0;
    let mut writer = csv::WriterBuilder::new().has_headers(fresh).from_writer(Vec::new());
    let row = writer
        .serialize(check)
        .map_err(io::Error::other)
        .and_then(|()| writer.into_inner().map_err(|error| io::Error::other(error.to_string())));
    file.write_all(&row.map_err(failed)?).and_then(|()| file.sync_data()).map_err(failed)
}

/// What the checks say, the last one first. `certificate` is the one in force: checks under others are history.
pub fn judge(checks: &[Check], certificate: &Certificate) -> Vec<Finding> {
    let hash: String = certificate.hash.chars().take(16).collect();
    let mut current: Vec<&Check> = checks.iter().filter(|check| check.certificate == hash).collect();
    current.sort_by(|a, b| a.years().total_cmp(&b.years()));
    let Some(last) = current.last() else {
        return vec![finding(Severity::Doubt, "check", "There is no check under this certificate yet.".to_owned())];
    };
    let mut findings = vec![deviation(last), senses(last)];
    findings.extend(one_sided(&current));
    findings.extend(trend(&current, certificate));
    findings
}

fn deviation(last: &Check) -> Finding {
    let (volts, u) = (last.deviation_volts(), last.u_volts);
    let ppm = last.deviation_ppm().map_or_else(String::new, |ppm| format!(" ({ppm:+.0} ppm)"));
    let place = last.reference_volts;
    let text = format!("At {place:.1} V the main sense is off by {volts:+.2} V{ppm}, {:.1} u", volts.abs() / u);
    if volts.abs() <= 2.0 * u {
        finding(Severity::Pass, "check", format!("{text}: as the certificate says."))
    } else if volts.abs() <= 3.0 * u {
        finding(Severity::Doubt, "check", format!("{text}: repeat the check; one in twenty is off as far by chance."))
    } else {
        finding(
            Severity::Fail,
            "check",
            format!("{text}: the certificate no longer holds. Calibrate again before you use it."),
        )
    }
}

fn senses(last: &Check) -> Finding {
    let apart = (last.sense_volts - last.cross_volts).abs();
    let text = format!("The senses differ by {apart:.2} V ({:.1} u)", apart / last.difference_u_volts.max(1e-9));
    if apart <= 4.0 * last.difference_u_volts {
        finding(Severity::Pass, "senses", format!("{text}."))
    } else {
        finding(Severity::Fail, "senses", format!("{text}: one string has changed. Find out which before you use it."))
    }
}

fn one_sided(current: &[&Check]) -> Option<Finding> {
    let last = current.last()?.deviation_volts().signum();
    let run = current.iter().rev().take_while(|check| check.deviation_volts().signum() == last).count();
    (run >= RUN).then(|| {
        let sentence =
            format!("The last {run} checks were off to the same side: something has shifted; calibrate again soon.");
        finding(Severity::Doubt, "run", sentence)
    })
}

/// A straight line through relative deviations over time.
fn trend(current: &[&Check], certificate: &Certificate) -> Option<Finding> {
    let first = current.first()?.years();
    let relative = current.iter().filter_map(|check| Some((check.years() - first, check.deviation_ppm()?)));
    let (years, ppm): (Vec<f64>, Vec<f64>) = relative.unzip();
    if years.len() < 4 || (years.last()? - years.first()?) * 365.25 < 30.0 {
        return None;
    }
    let line = solve(&[vec![1.0; ppm.len()], years.clone()], &ppm, &vec![1.0; ppm.len()])?;
    let (slope, u) = (line.coefficients[1], libm::sqrt(line.cofactors[1][1] * line.unit_variance()));
    let allowed = 2.0 * certificate.stability.drift_u_ppm_per_year;
    let text = format!("Drift {slope:+.0} ppm a year (u {u:.0}; the certificate allows {allowed:.0})");
    if slope.abs() > allowed && slope.abs() > 2.0 * u {
        return Some(finding(Severity::Fail, "drift", format!("{text}: calibrate again, and more often from now on.")));
    }
    Some(finding(Severity::Pass, "drift", format!("{text}.")))
}

#[cfg(test)]
mod tests {
    use rand::{RngExt, SeedableRng};
    use rand_distr::StandardNormal;

    use super::*;
    use crate::calibration::example;

    const DAY_NS: i64 = 86_400_000_000_000;

    /// Monthly checks at 3000 V whose main sense is off by `ppm(years)`, with 30 ppm of scatter.
    fn monthly(count: i64, ppm: impl Fn(f64) -> f64) -> Vec<Check> {
        let certificate = example();
        let mut rng = rand_chacha::ChaCha8Rng::seed_from_u64(5);
        (0..count)
            .map(|month| {
                let noise: f64 = rng.sample(StandardNormal);
                let off = 1e-6 * (ppm(month as f64 / 12.0) + 30.0 * noise);
                let codes = (certificate.sense.code(3000.0 * (1.0 + off)), certificate.cross.code(3000.0));
                Check::new(&certificate, (certificate.issued_day() + 30 * month) * DAY_NS, 3000.0, codes, Some(23.0))
            })
            .collect()
    }

    fn worst(checks: &[Check], topic: &str) -> Option<Severity> {
        judge(checks, &example()).iter().filter(|finding| finding.topic == topic).map(|finding| finding.severity).max()
    }

    #[test]
    fn a_bench_that_holds_passes() {
        let checks = monthly(12, |_| 0.0);
        assert!(
            judge(&checks, &example()).iter().all(|finding| finding.severity == Severity::Pass),
            "{:?}",
            judge(&checks, &example())
        );
    }

    #[test]
    fn a_drift_beyond_the_certificate_is_an_alarm() {
        assert_eq!(worst(&monthly(10, |years| 400.0 * years), "drift"), Some(Severity::Fail));
        assert_eq!(worst(&monthly(10, |years| 60.0 * years), "drift"), Some(Severity::Pass));
        assert_eq!(worst(&monthly(3, |years| 400.0 * years), "drift"), None, "three checks are no trend");
    }

    #[test]
    fn a_step_is_an_alarm_and_a_small_shift_shows_in_time() {
        assert_eq!(worst(&monthly(2, |_| 1000.0), "check"), Some(Severity::Fail));
        assert_eq!(worst(&monthly(9, |_| 80.0), "run"), Some(Severity::Doubt));
        assert_eq!(worst(&monthly(2, |_| 1000.0), "senses"), Some(Severity::Fail));
    }

    #[test]
    fn a_check_at_zero_is_judged_in_volts_and_is_no_part_of_the_trend() {
        let certificate = example();
        let at_zero = |volts: f64| {
            let codes = (certificate.sense.code(volts), certificate.cross.code(0.0));
            Check::new(&certificate, certificate.issued_day() * DAY_NS, 0.0, codes, Some(23.0))
        };
        assert_eq!(worst(&[at_zero(0.1)], "check"), Some(Severity::Pass));
        assert_eq!(worst(&[at_zero(3.0)], "check"), Some(Severity::Fail));
        assert_eq!(worst(&[at_zero(0.1), at_zero(0.0), at_zero(0.1), at_zero(0.2)], "drift"), None);
    }

    #[test]
    fn checks_under_another_certificate_are_history() {
        let mut checks = monthly(5, |_| 5000.0);
        checks.iter_mut().for_each(|check| check.certificate = "0".repeat(16));
        assert_eq!(worst(&checks, "check"), Some(Severity::Doubt));
    }

    #[test]
    fn a_chart_is_appended_and_read_back() {
        let folder = tempfile::tempdir().unwrap();
        let path = chart_path(&folder.path().join("certificate.toml"));
        assert!(load(&path).unwrap().is_empty());
        let checks = monthly(3, |_| 0.0);
        checks.iter().for_each(|check| append(&path, check).unwrap());
        assert_eq!(load(&path).unwrap(), checks);
        let text = std::fs::read_to_string(&path).unwrap().replacen("3000.0", "NaN", 1);
        std::fs::write(&path, text).unwrap();
        assert!(load(&path).unwrap_err().to_string().contains("line 2"));
    }
}
