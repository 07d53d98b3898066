//! Whether the certificate in the file is the one the readings were taken under.

use super::Finding;
use crate::{
    calibration::Certificate,
    run::{RunError, RunReader},
};

const SUBJECT: &str = "certificate";

/// The hash of a controller that holds none.
const NO_CERTIFICATE: &str = "0000000000000000";

pub(super) fn check(reader: &RunReader) -> Result<Vec<Finding>, RunError> {
    let header = reader.header()?;
    let Some(text) = &header.certificate_text else {
        let sentence = "the run holds no certificate: its codes are whole, but no voltage can be had until it is stamped under a valid one";
        return Ok(vec![Finding::note(SUBJECT, sentence)]);
    };
    let certificate = match Certificate::parse(text, "the certificate in the run") {
        Ok(certificate) => certificate,
        Err(error) => {
            let sentence = format!("{error}: no voltage of this run can be trusted, the codes can");
            return Ok(vec![Finding::fault(SUBJECT, sentence)]);
        }
    };
    let mut findings = Vec::new();
    if certificate.simulated && !header.simulated {
        let sentence = "it belongs to a simulated bench, the run does not: no voltage of this run can be trusted";
        findings.push(Finding::fault(SUBJECT, sentence));
    }
    findings.push(held(reader, &certificate)?);
    Ok(findings)
}

/// Counts the readings by the certificate the controller held.
fn held(reader: &RunReader, certificate: &Certificate) -> Result<Finding, RunError> {
    let counts: Vec<(String, i64)> = reader.rows(
        "SELECT hash, count(*) FROM reading JOIN held_certificate USING (certificate_key) GROUP BY certificate_key",
        [],
        |row| Ok((row.get(0)?, row.get(1)?)),
    )?;
    let ours: String = certificate.hash.chars().take(16).collect();
    let of = |wanted: &str| counts.iter().filter(|(hash, _)| hash == wanted).map(|(_, count)| *count).sum::<i64>();
    let (same, none) = (of(&ours), of(NO_CERTIFICATE));
    let other = counts.iter().map(|(_, count)| *count).sum::<i64>() - same - none;
    Ok(match (other, none) {
        (0, 0) => Finding::fine(SUBJECT, format!("{same} readings were taken under it ({ours}), and it is unchanged")),
        (0, _) => Finding::note(
            SUBJECT,
            format!(
                "{none} readings were taken while the controller held no certificate: its trips did not judge volts then"
            ),
        ),
        _ => Finding::note(
            SUBJECT,
            format!(
                "{other} readings were taken under another certificate than the one in the run ({ours}): frames exposed then are refused until stamped under theirs"
            ),
        ),
    })
}
