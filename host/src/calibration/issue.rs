//! From a judged calibration to a sealed certificate.

use super::{Assessment, Certificate, Conditions, Point, Reference, Severity, Stability, check};

/// What a certificate says that the points do not.
#[derive(Clone, Debug, PartialEq)]
pub struct IssueDetails {
    /// Name of the bench.
    pub bench: String,
    /// Identity of the board, sixteen hexadecimal digits.
    pub device: String,
    /// Whether the codes came from the simulated bench.
    pub simulated: bool,
    /// Who made it.
    pub operator: String,
    /// What it was compared with.
    pub reference: Reference,
    /// Day of issue, `YYYY-MM-DD`.
    pub issued: String,
    /// For how many days it holds; a year to begin with, then by what the control chart shows.
    pub valid_days: i64,
    /// Standard uncertainty from drift, ppm per year.
    pub drift_u_ppm_per_year: f64,
    /// Why failures are accepted; `None` accepts none.
    pub accepted: Option<String>,
}

/// Why no certificate is issued.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
pub enum IssueError {
    /// There are points that do not belong to the others.
    #[error("no certificate yet: {0}")]
    Outlier(String),
    /// Something failed that a person may accept.
    #[error("no certificate yet: {0} Repair it, or accept it with --accept REASON, which the certificate will show.")]
    Failed(String),
    /// A value is out of range.
    #[error("no certificate: {0}")]
    Value(String),
}

/// Issues and seals a certificate.
///
/// # Errors
/// When there are outliers, failures nobody has accepted, or values that cannot be.
pub fn issue(assessment: &Assessment, points: &[Point], details: &IssueDetails) -> Result<Certificate, IssueError> {
    let failed = |outlier: bool| {
        let of =
            |finding: &&super::Finding| finding.severity == Severity::Fail && (finding.topic == "outlier") == outlier;
        assessment.findings.iter().find(of).map(|finding| finding.sentence.clone())
    };
    if let Some(sentence) = failed(true) {
        return Err(IssueError::Outlier(sentence));
    }
    if let (Some(sentence), None) = (failed(false), &details.accepted) {
        return Err(IssueError::Failed(sentence));
    }
    let issued = check::day(&details.issued)
        .ok_or_else(|| IssueError::Value("the day of issue must be YYYY-MM-DD".to_owned()))?;
    let mut certificate = Certificate {
        schema: 1,
        hash: String::new(),
        simulated: details.simulated,
        bench: details.bench.clone(),
        device: details.device.to_ascii_lowercase(),
        issued: details.issued.clone(),
        valid_until: check::day_text(issued.saturating_add(details.valid_days)).unwrap_or_default(),
        operator: details.operator.clone(),
        remarks: remarks(assessment, details.accepted.as_deref()),
        reference: details.reference.clone(),
        conditions: conditions(assessment, points),
        stability: Stability {
            temperature_ppm_per_kelvin: assessment.sense.temperature.ppm_per_kelvin,
            temperature_u_ppm_per_kelvin: temperature_u(assessment),
            drift_u_ppm_per_year: details.drift_u_ppm_per_year,
        },
        sense: assessment.sense.fit.clone(),
        cross: assessment.cross.fit.clone(),
        points: points.to_vec(),
    };
    check::check(&certificate).map_err(|fault| IssueError::Value(format!("{} {}", fault.field, fault.problem)))?;
    certificate.seal();
    Ok(certificate)
}

/// Everything that is no pass, and why failures were accepted.
fn remarks(assessment: &Assessment, accepted: Option<&str>) -> Vec<String> {
    let doubts = assessment.findings.iter().filter(|finding| finding.severity != Severity::Pass);
    let mut remarks: Vec<String> =
        doubts.map(|finding| finding.sentence.chars().take(300).collect()).take(18).collect();
    if let Some(reason) = accepted.filter(|_| assessment.worst() == Severity::Fail) {
        remarks.push(format!("Accepted nevertheless: {}", reason.chars().take(250).collect::<String>()));
    }
    remarks
}

/// One coefficient stands for both senses, so where they differ it is that much less certain.
fn temperature_u(assessment: &Assessment) -> f64 {
    let (sense, cross) = (&assessment.sense.temperature, &assessment.cross.temperature);
    sense.u_ppm_per_kelvin.max(0.5 * (sense.ppm_per_kelvin - cross.ppm_per_kelvin).abs())
}

/// With two ambients the range of use is what was seen, a kelvin more on both sides; with one, five kelvin around it.
fn conditions(assessment: &Assessment, points: &[Point]) -> Conditions {
    let used = points.iter().filter(|point| point.left_out.is_none());
    let ends = |values: Vec<f64>| {
        values.iter().fold((f64::INFINITY, f64::NEG_INFINITY), |(low, high), value| (low.min(*value), high.max(*value)))
    };
    let volts = ends(used.clone().map(|point| point.reference_volts).collect());
    let celsius = ends(used.filter_map(|point| point.enclosure_celsius).collect());
    let term = &assessment.sense.temperature;
    let tenth = |value: f64| libm::round(10.0 * value) / 10.0;
    let ambient_celsius = term.reference_celsius;
    let (least, most) =
        if term.measured { (celsius.0 - 1.0, celsius.1 + 1.0) } else { (ambient_celsius - 5.0, ambient_celsius + 5.0) };
    Conditions {
        ambient_celsius,
        ambient_min_celsius: tenth(least),
        ambient_max_celsius: tenth(most),
        volts_min: volts.0,
        volts_max: volts.1,
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::calibration::{assess, example};

    fn details() -> IssueDetails {
        let certificate = example();
        IssueDetails {
            bench: certificate.bench,
            device: certificate.device,
            simulated: true,
            operator: "somebody".to_owned(),
            reference: certificate.reference,
            issued: "2026-06-01".to_owned(),
            valid_days: 365,
            drift_u_ppm_per_year: 60.0,
            accepted: None,
        }
    }

    #[test]
    fn good_points_give_a_certificate_that_reads_back() {
        let points = example().points;
        let certificate = issue(&assess(&points, (5.0, 3.0)).unwrap(), &points, &details()).unwrap();
        assert_eq!(Certificate::parse(&certificate.to_toml(), "c.toml").unwrap(), certificate);
        assert_eq!(certificate.valid_until, "2027-06-01");
        assert_eq!(
            (certificate.conditions.ambient_min_celsius, certificate.conditions.ambient_max_celsius),
            (18.0, 28.0)
        );
        assert!(certificate.remarks[0].contains("temperature coefficient was not measured"));
        certificate.record().unwrap();
    }

    #[test]
    fn outliers_stand_in_the_way_until_left_out() {
        let mut points = example().points;
        points[7].reference_volts += 30.0;
        let found = assess(&points, (5.0, 3.0)).unwrap();
        let accepted = IssueDetails { accepted: Some("in a hurry".to_owned()), ..details() };
        assert!(matches!(issue(&found, &points, &accepted), Err(IssueError::Outlier(_))));
        points[7].left_out = Some("written down wrongly".to_owned());
        let certificate = issue(&assess(&points, (5.0, 3.0)).unwrap(), &points, &details()).unwrap();
        assert_eq!(certificate.points[7].left_out.as_deref(), Some("written down wrongly"));
    }

    #[test]
    fn failures_need_a_reason_and_the_certificate_shows_it() {
        let mut points = example().points;
        points.iter_mut().filter(|point| point.direction == "down").for_each(|point| point.sense_code *= 1.003);
        let found = assess(&points, (5.0, 3.0)).unwrap();
        assert!(matches!(issue(&found, &points, &details()), Err(IssueError::Failed(_))));
        let accepted = IssueDetails { accepted: Some("for a rough look only".to_owned()), ..details() };
        let certificate = issue(&found, &points, &accepted).unwrap();
        assert!(certificate.remarks.last().unwrap().contains("for a rough look only"));
        assert!(certificate.sense.hysteresis_fraction > 0.0028);
    }

    #[test]
    fn impossible_details_are_refused() {
        let points = example().points;
        let found = assess(&points, (5.0, 3.0)).unwrap();
        for wrong in [
            IssueDetails { issued: "soon".to_owned(), ..details() },
            IssueDetails { device: "none".to_owned(), ..details() },
            IssueDetails { valid_days: -1, ..details() },
            IssueDetails { valid_days: i64::MAX / 4, ..details() },
            IssueDetails { drift_u_ppm_per_year: f64::NAN, ..details() },
        ] {
            assert!(matches!(issue(&found, &points, &wrong), Err(IssueError::Value(_))), "{wrong:?}");
        }
    }
}
