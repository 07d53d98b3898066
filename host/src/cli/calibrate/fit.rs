//! `ringvolt calibrate fit`: points to certificate.

use std::{
    fs::OpenOptions,
    io::Write,
    path::{Path, PathBuf},
};

use super::{IssueArgs, ReferenceArgs};
use crate::{
    calibration::{
        Assessment, Certificate, FitError, IssueDetails, Point, Reference, Session, Severity, assess, certificate_page,
        issue, plot, read_points,
    },
    cli::{Failure, bench},
    profile::Profile,
};

/// Fit points and issue a certificate.
#[derive(Debug, clap::Args)]
pub(super) struct FitArgs {
    /// Points: CSV tables, or journals (.jsonl) of guided calibrations. Two files from two ambients give the temperature coefficient.
    #[arg(required = true, value_name = "POINTS")]
    points: Vec<PathBuf>,
    /// The bench profile.
    #[arg(long, value_name = "FILE")]
    bench: PathBuf,
    /// The points come from a simulated bench.
    #[arg(long)]
    simulated: bool,
    #[command(flatten)]
    reference: ReferenceArgs,
    #[command(flatten)]
    issue: IssueArgs,
}

/// Who, with what, and whether simulated.
pub(super) struct Origin {
    pub operator: String,
    pub reference: Reference,
    pub device: String,
    pub simulated: bool,
}

pub(super) fn run(args: &FitArgs) -> Result<(), Failure> {
    let profile = bench::load(&args.bench)?;
    let mut points = Vec::new();
    let mut origin = None;
    for path in &args.points {
        if path.extension().is_some_and(|extension| extension == "jsonl") {
            let (header, taken) = Session::read(path).map_err(Failure::usage)?;
            let found = Origin {
                operator: header.operator,
                reference: header.reference,
                device: header.device,
                simulated: header.simulated,
            };
            same_board(origin.as_ref(), &found, path)?;
            origin = Some(found);
            points.extend(taken);
        } else {
            let nominal = profile.divider.nominal_volts_per_code;
            points.extend(read_points(path, Some(nominal)).map_err(Failure::usage)?);
        }
    }
    let mut origin = match origin {
        Some(origin) => origin,
        None => typed_origin(args, &profile)?,
    };
    origin.simulated |= args.simulated;
    finish(&profile, points, &origin, &args.issue)
}

fn same_board(first: Option<&Origin>, next: &Origin, path: &Path) -> Result<(), Failure> {
    match first {
        Some(first) if first.device != next.device => Err(Failure::Usage(format!(
            "{} was made with board {}, the file before with {}; points of two boards give no certificate",
            path.display(),
            next.device,
            first.device
        ))),
        _ => Ok(()),
    }
}

fn typed_origin(args: &FitArgs, profile: &Profile) -> Result<Origin, Failure> {
    let (operator, reference) = args.reference.complete()?;
    let device = profile.controller.device.clone();
    if device.is_empty() {
        let bench = args.bench.display();
        return Err(Failure::Usage(format!(
            "{bench}: controller.device is empty, but a certificate belongs to one board; fill it in"
        )));
    }
    Ok(Origin { operator, reference, device, simulated: args.simulated })
}

/// Fits, shows, and issues where nothing stands in the way.
pub(super) fn finish(
    profile: &Profile,
    mut points: Vec<Point>,
    origin: &Origin,
    args: &IssueArgs,
) -> Result<(), Failure> {
    leave_out(&mut points, args)?;
    let given = (args.temperature_ppm, args.temperature_u_ppm);
    if !(-1000.0..=1000.0).contains(&given.0) || !(0.0..=1000.0).contains(&given.1) {
        return Err(Failure::Usage("temperature coefficients lie between -1000 and 1000 ppm per kelvin".to_owned()));
    }
    let assessment = assess(&points, given).map_err(|error| match error {
        FitError::TooFew { .. } => Failure::job(error),
        FitError::NoSlope(_) => Failure::usage(error),
    })?;
    bench::print(&summary(&points, &assessment))?;
    let details = IssueDetails {
        bench: profile.bench.name.clone(),
        device: origin.device.clone(),
        simulated: origin.simulated,
        operator: origin.operator.clone(),
        reference: origin.reference.clone(),
        issued: args.issued.clone().unwrap_or_else(today),
        valid_days: args.valid_days,
        drift_u_ppm_per_year: args.drift_u_ppm,
        accepted: args.accept.clone(),
    };
    let certificate = issue(&assessment, &points, &details).map_err(Failure::job)?;
    certificate.record().map_err(Failure::job)?;
    write(&certificate, args)
}

fn today() -> String {
    let now = jiff::Timestamp::now().to_string();
    now.chars().take(10).collect()
}

fn leave_out(points: &mut [Point], args: &IssueArgs) -> Result<(), Failure> {
    if args.leave_out.is_empty() {
        return Ok(());
    }
    let Some(reason) = args.because.as_ref().filter(|reason| !reason.trim().is_empty()) else {
        return Err(Failure::Usage("--leave-out needs a reason; add --because REASON".to_owned()));
    };
    let count = points.len();
    for number in &args.leave_out {
        let point = number.checked_sub(1).and_then(|index| points.get_mut(index));
        let point =
            point.ok_or_else(|| Failure::Usage(format!("there is no point {number}; they go from 1 to {count}")))?;
        point.left_out = Some(reason.clone());
    }
    Ok(())
}

fn summary(points: &[Point], assessment: &Assessment) -> String {
    let mut text = String::new();
    for (name, report) in [("Main sense", &assessment.sense), ("Cross-sense", &assessment.cross)] {
        let [offset, slope, bend] = report.fit.coefficients;
        text.push_str(&format!(
            "{name}: V = {offset:.4} + {slope:.9} N + {bend:.3e} N^2, residual {:.3} V\n",
            report.fit.residual_volts
        ));
        text.push_str(&plot::residual_lines(points, report));
        text.push('\n');
    }
    for finding in &assessment.findings {
        let word = match finding.severity {
            Severity::Pass => "pass ",
            Severity::Doubt => "DOUBT",
            Severity::Fail => "FAIL ",
        };
        text.push_str(&format!("{word} {}\n", finding.sentence));
    }
    text
}

fn write(certificate: &Certificate, args: &IssueArgs) -> Result<(), Failure> {
    let Some(out) = &args.out else {
        return bench::print("\nNothing was written; give --out FILE to issue the certificate.\n");
    };
    create(out, &certificate.to_toml())?;
    let mut text = format!(
        "\nIssued {}, hash {}, valid until {}.\n",
        out.display(),
        &certificate.hash[..16],
        certificate.valid_until
    );
    if let Some(html) = &args.html {
        create(html, &certificate_page(certificate))?;
        text.push_str(&format!("Page to print: {}.\n", html.display()));
    }
    bench::print(&text)
}

/// Writes a new file, on disk when this returns.
pub(super) fn create(path: &Path, text: &str) -> Result<(), Failure> {
    let opened = OpenOptions::new().write(true).create_new(true).open(path);
    let written = opened.and_then(|mut file| file.write_all(text.as_bytes()).and_then(|()| file.sync_all()));
    written.map_err(|error| {
        Failure::Job(format!("cannot write {}: {error}; choose another name or place", path.display()))
    })
}
