//! `ringvolt verify`: what may still be trusted of a run.

use std::path::PathBuf;

use clap::Args as ClapArgs;

use super::Failure;
use crate::{
    reduction::Recording,
    run::{Finding, RunReader, Severity, verify},
};

/// Check a run file: that it is whole, that nothing is missing, and what may still be trusted.
#[derive(Debug, ClapArgs)]
pub struct Args {
    /// The run file.
    pub run: PathBuf,
}

/// Checks; a fault is a failed job.
pub fn run(args: &Args) -> Result<(), Failure> {
    let reader = RunReader::open(&args.run).map_err(Failure::job)?;
    let mut findings = verify(&reader);
    findings.extend(clocks(&reader));
    for finding in &findings {
        println!("{:<5}  {:<11}  {}", finding.severity.to_string(), finding.subject, finding.sentence);
    }
    let faults = findings.iter().filter(|finding| finding.severity == Severity::Fault).count();
    let notes = findings.iter().filter(|finding| finding.severity == Severity::Note).count();
    match faults {
        0 => {
            println!("{}: no fault found, {notes} notes: what it holds may be trusted as recorded", args.run.display())
        }
        _ => {
            return Err(Failure::Job(format!(
                "{} has {faults} faults: trust only what the lines above say may be trusted",
                args.run.display()
            )));
        }
    }
    Ok(())
}

/// Whether every epoch that has exchanges can be tied to UTC by them.
fn clocks(reader: &RunReader) -> Vec<Finding> {
    let (Ok(epochs), Ok(recording)) = (reader.epochs(), Recording::open(reader)) else { return Vec::new() };
    let mut findings = Vec::new();
    for epoch in epochs {
        let key = epoch.epoch_key;
        let Some(tied) = recording.epoch(key) else {
            if reader.echoes(key).is_ok_and(|echoes| !echoes.is_empty()) {
                let sentence = format!(
                    "the clock exchanges of epoch {key} contradict each other: its frames stay refused, its readings are kept"
                );
                findings.push(Finding::fault("clock", sentence));
            }
            continue;
        };
        let (first, last) = tied.clock.span_us();
        let Some(middle) = tied.clock.utc(first.midpoint(last)) else { continue };
        let sentence = format!("epoch {key} is tied to the host's UTC within {:.2} ms", middle.bound_ns as f64 * 1e-6);
        findings.push(Finding::fine("clock", sentence));
    }
    findings
}
