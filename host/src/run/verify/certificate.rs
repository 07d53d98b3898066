//! Whether the certificate in the file is the one the readings were taken under.

use std::collections::BTreeMap;

use ringvolt_protocol::CertificateHash;

use super::Finding;
use crate::{
    calibration::Certificate,
    run::{RunError, RunReader},
};

const SUBJECT: &str = "certificate";

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
    let mut counts: BTreeMap<[u8; 8], u64> = BTreeMap::new();
    for epoch in reader.epochs()? {
        reader.each_reading(epoch.epoch_key, |reading| {
            *counts.entry(reading.certificate.0).or_default() += 1;
            true
        })?;
    }
    let ours = certificate.hash8();
    let none = counts.remove(&CertificateHash::NONE.0).unwrap_or(0);
    let same = counts.remove(&ours.0).unwrap_or(0);
    let other: u64 = counts.values().sum();
    let short: String = certificate.hash.chars().take(16).collect();
    Ok(match (other, none) {
        (0, 0) => Finding::fine(SUBJECT, format!("{same} readings were taken under it ({short}), and it is unchanged")),
        (0, _) => Finding::note(
            SUBJECT,
            format!(
                "{none} readings were taken while the controller held no certificate: its trips did not judge volts then"
            ),
        ),
        _ => Finding::note(
            SUBJECT,
            format!(
                "{other} readings were taken under another certificate than the one in the run ({short}): frames exposed then are refused until stamped under theirs"
            ),
        ),
    })
}
