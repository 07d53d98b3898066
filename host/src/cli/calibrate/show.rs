//! `ringvolt calibrate show`.

use std::path::PathBuf;

use super::fit::create;
use crate::{
    calibration::{Certificate, Channel, certificate_page, combined_volts},
    cli::{Failure, bench},
};

/// Show a certificate, or write it as a page to print.
#[derive(Debug, clap::Args)]
pub(super) struct ShowArgs {
    /// The certificate.
    certificate: PathBuf,
    /// Write it as a page to print.
    #[arg(long, value_name = "FILE")]
    html: Option<PathBuf>,
}

pub(super) fn run(args: &ShowArgs) -> Result<(), Failure> {
    let certificate = Certificate::load(&args.certificate).map_err(Failure::usage)?;
    if let Some(html) = &args.html {
        create(html, &certificate_page(&certificate))?;
        return bench::print(&format!("Page to print: {}.\n", html.display()));
    }
    bench::print(&text(&certificate))
}

fn text(certificate: &Certificate) -> String {
    let mut text = String::new();
    if certificate.simulated {
        text.push_str("SIMULATED: made with an invented bench; it certifies nothing.\n");
    }
    text.push_str(&format!(
        "Certificate {} of \"{}\", board {}\nissued {} by {}, valid until {}\nreference: {} ({} ppm and {} V, k = 1)\n",
        &certificate.hash[..16],
        certificate.bench,
        certificate.device,
        certificate.issued,
        certificate.operator,
        certificate.valid_until,
        certificate.reference.identity,
        certificate.reference.u_ppm,
        certificate.reference.u_volts
    ));
    for (name, channel) in [("main sense", Channel::Sense), ("cross-sense", Channel::Cross)] {
        let fit = certificate.fit(channel);
        let [offset, slope, bend] = fit.coefficients;
        text.push_str(&format!(
            "{name}: V = {offset:.4} + {slope:.9} N + {bend:.3e} N^2 for N from {} to {}\n",
            fit.code_min, fit.code_max
        ));
    }
    let ambient = certificate.conditions.ambient_celsius;
    text.push_str("\nUncertainty on the last day of validity, at the calibration's temperature (k = 2):\n");
    let conditions = &certificate.conditions;
    let largest = if conditions.volts_max.abs() >= conditions.volts_min.abs() {
        conditions.volts_max
    } else {
        conditions.volts_min
    };
    for share in [0.25, 0.5, 1.0] {
        let volts = share * largest;
        let parts =
            certificate.common_u(volts, certificate.sense.code(volts), Some(ambient), certificate.expires_day());
        let expanded = 2.0 * combined_volts(&parts);
        text.push_str(&format!("  {volts:7.0} V  {expanded:6.2} V  {:5.0} ppm\n", 1e6 * expanded / volts.abs()));
    }
    for remark in &certificate.remarks {
        text.push_str(&format!("Remark: {remark}\n"));
    }
    text
}
