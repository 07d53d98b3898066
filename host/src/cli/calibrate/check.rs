//! `ringvolt calibrate check`: one voltage against the reference, into the control chart.

use std::{path::PathBuf, time::Duration};

use super::guided::{SourceArgs, open_source};
use crate::{
    calibration::{Certificate, CodeEvent, Codes, Severity, chart, ended, guess, parse_typed_volts, plausible},
    cli::{Failure, bench},
};

/// Check one voltage against the reference and keep it in the control chart.
#[derive(Debug, clap::Args)]
pub(super) struct CheckArgs {
    /// The bench profile.
    #[arg(long, value_name = "FILE")]
    bench: PathBuf,
    /// What the reference shows, signed volts at the divider's input.
    #[arg(long, value_name = "VOLTS", allow_hyphen_values = true)]
    reference_volts: String,
    #[command(flatten)]
    source: SourceArgs,
    /// Only judge; do not write it into the chart.
    #[arg(long)]
    dry: bool,
}

pub(super) fn run(args: &CheckArgs) -> Result<(), Failure> {
    let profile = bench::load(&args.bench)?;
    let path = &profile.calibration.certificate;
    let certificate = Certificate::load(path).map_err(Failure::usage)?;
    let volts = parse_typed_volts(&args.reference_volts).map_err(|problem| {
        Failure::Usage(format!("--reference-volts \"{}\" {problem}", args.reference_volts.escape_debug()))
    })?;
    if volts != 0.0
        && volts.abs() < 0.1 * certificate.conditions.volts_max.abs().max(certificate.conditions.volts_min.abs())
    {
        let sentence = format!(
            "{volts} V is too little for a check: choose 0 (high voltage off) or a voltage you use, above a tenth of the calibrated range"
        );
        return Err(Failure::Usage(sentence));
    }
    let codes = mean_codes(&args.source, &profile.controller.device)?;
    let check = chart::Check::new(
        &certificate,
        codes.utc_ns,
        volts,
        (codes.sense_code, codes.cross_code),
        codes.enclosure_celsius,
    );
    if !plausible(volts, check.sense_volts) {
        let why = ended(guess(volts, check.sense_volts));
        return Err(Failure::Job(format!(
            "the reference is given as {volts} V, but the main sense shows {:.1} V{why} Nothing was written; check that the \
             voltage is on, the value typed, and then the divider: treat it as live",
            check.sense_volts
        )));
    }
    let file = chart::chart_path(path);
    let mut checks = chart::load(&file).map_err(Failure::job)?;
    if !args.dry {
        chart::append(&file, &check).map_err(Failure::job)?;
    }
    checks.push(check);
    let findings = chart::judge(&checks, &certificate);
    let mut text = if certificate.simulated { "SIMULATED\n".to_owned() } else { String::new() };
    findings.iter().for_each(|finding| text.push_str(&format!("{:?}: {}\n", finding.severity, finding.sentence)));
    bench::print(&text)?;
    match findings.iter().find(|finding| finding.severity == Severity::Fail) {
        Some(alarm) => Err(Failure::Job(alarm.sentence.clone())),
        None => Ok(()),
    }
}

/// How many readings of a live source are averaged: ten seconds.
const LIVE_READINGS: f64 = 1000.0;

/// The mean of all codes of a table, or of ten seconds of a live source.
fn mean_codes(args: &SourceArgs, device: &str) -> Result<Codes, Failure> {
    let mut source = open_source(args, device, false)?;
    let (mut sum, mut count) = ((0.0, 0.0), 0.0);
    let (mut celsius, mut known) = (0.0, 0.0);
    let mut latest = None;
    while let CodeEvent::Codes(codes) = source.next(Duration::from_secs(5)).map_err(Failure::job)? {
        sum = (sum.0 + codes.sense_code, sum.1 + codes.cross_code);
        count += 1.0;
        if let Some(value) = codes.enclosure_celsius {
            celsius += value;
            known += 1.0;
        }
        latest = Some(codes.utc_ns);
        if args.is_live() && count >= LIVE_READINGS {
            break;
        }
    }
    let utc_ns = latest.ok_or_else(|| Failure::Job("no codes came; do not assume 0 V".to_owned()))?;
    Ok(Codes {
        utc_ns,
        sense_code: sum.0 / count,
        cross_code: sum.1 / count,
        enclosure_celsius: (known > 0.0).then(|| celsius / known),
    })
}
