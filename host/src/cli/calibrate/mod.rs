//! `ringvolt calibrate`: from a reference meter to a certificate, and the checks that follow.

mod check;
mod fit;
mod guided;
mod live;
mod show;
mod store;
mod terminal;

use std::path::PathBuf;

use clap::Subcommand;

use super::Failure;
use crate::calibration::Reference;

/// Calibrate the divider against a reference, check it, show certificates.
#[derive(Debug, clap::Args)]
pub struct Args {
    #[command(subcommand)]
    action: Action,
}

#[derive(Debug, Subcommand)]
enum Action {
    /// Begin a guided calibration: says what to set, waits until it has settled, takes the reference.
    Run(guided::RunArgs),
    /// Take a guided calibration up where it ended.
    Resume(guided::ResumeArgs),
    /// Fit points and issue a certificate.
    Fit(fit::FitArgs),
    /// Check one voltage against the reference and keep it in the control chart.
    Check(check::CheckArgs),
    /// Store the profile's certificate and settings in the controller.
    Store(store::StoreArgs),
    /// Show a certificate, or write it as a page to print.
    Show(show::ShowArgs),
}

/// Carries out `ringvolt calibrate`.
///
/// # Errors
/// Whatever stands in the way, in one sentence.
pub fn run(args: &Args) -> Result<(), Failure> {
    match &args.action {
        Action::Run(args) => guided::run(args),
        Action::Resume(args) => guided::resume(args),
        Action::Fit(args) => fit::run(args),
        Action::Check(args) => check::run(args),
        Action::Store(args) => store::run(args),
        Action::Show(args) => show::run(args),
    }
}

/// What the calibration is compared with.
#[derive(Debug, clap::Args)]
struct ReferenceArgs {
    /// Who does it.
    #[arg(long, value_name = "NAME")]
    operator: Option<String>,
    /// The reference: what it is and its serial number.
    #[arg(long, value_name = "TEXT")]
    reference: Option<String>,
    /// The reference's own certificate.
    #[arg(long, value_name = "TEXT", default_value = "")]
    reference_certificate: String,
    /// Standard uncertainty (k = 1) of the reference in proportion to the voltage, ppm.
    #[arg(long, value_name = "PPM")]
    reference_u_ppm: Option<f64>,
    /// Standard uncertainty (k = 1) of the reference that does not depend on the voltage, volts.
    #[arg(long, value_name = "VOLTS")]
    reference_u_volts: Option<f64>,
}

impl ReferenceArgs {
    /// The operator and the reference, all of which a certificate needs.
    fn complete(&self) -> Result<(String, Reference), Failure> {
        let missing = |name: &str| {
            Failure::Usage(format!("a certificate needs --{name}: say who, with what, and how well that is known"))
        };
        let within = |name: &str, value: Option<f64>, most: f64| match value {
            None => Err(missing(name)),
            Some(value) if (0.0..=most).contains(&value) => Ok(value),
            Some(value) => Err(Failure::Usage(format!("--{name} is {value}; permitted are 0 to {most}"))),
        };
        let operator = self.operator.clone().ok_or_else(|| missing("operator"))?;
        let reference = Reference {
            identity: self.reference.clone().ok_or_else(|| missing("reference"))?,
            certificate: self.reference_certificate.clone(),
            u_ppm: within("reference-u-ppm", self.reference_u_ppm, 100_000.0)?,
            u_volts: within("reference-u-volts", self.reference_u_volts, 1000.0)?,
        };
        Ok((operator, reference))
    }
}

/// How a certificate is issued from points.
#[derive(Debug, clap::Args)]
struct IssueArgs {
    /// Where to write the certificate; an existing file is never overwritten.
    #[arg(long, value_name = "FILE")]
    out: Option<PathBuf>,
    /// Also write it as a page to print.
    #[arg(long, value_name = "FILE")]
    html: Option<PathBuf>,
    /// Leave this point (by its number) out of the fit; may be given several times.
    #[arg(long, value_name = "NUMBER")]
    leave_out: Vec<usize>,
    /// Why points are left out.
    #[arg(long, value_name = "REASON")]
    because: Option<String>,
    /// Issue the certificate although something failed; the reason stands in it.
    #[arg(long, value_name = "REASON")]
    accept: Option<String>,
    /// Temperature coefficient of the ratio, ppm per kelvin, where only one ambient was measured.
    #[arg(long, value_name = "PPM", default_value_t = 0.0, allow_hyphen_values = true)]
    temperature_ppm: f64,
    /// Its standard uncertainty, ppm per kelvin.
    #[arg(long, value_name = "PPM", default_value_t = 10.0)]
    temperature_u_ppm: f64,
    /// Standard uncertainty from drift, ppm per year, until the control chart knows better.
    #[arg(long, value_name = "PPM", default_value_t = 115.0)]
    drift_u_ppm: f64,
    /// Day of issue, YYYY-MM-DD; today (UTC) if left out.
    #[arg(long, value_name = "DAY")]
    issued: Option<String>,
    /// For how many days it holds.
    #[arg(long, value_name = "DAYS", default_value_t = 365)]
    valid_days: i64,
}
