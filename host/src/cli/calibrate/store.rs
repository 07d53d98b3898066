//! `ringvolt calibrate store`: certificate and settings into the controller.

use std::path::PathBuf;

use ringvolt_protocol::{Request, ToDevice};

use super::live::{Controller, device_text};
use crate::{
    calibration::{Certificate, Validity, day_of_utc_ns},
    cli::{Failure, bench},
    link::Address,
};

/// Store the profile's certificate and settings in the controller.
#[derive(Debug, clap::Args)]
pub(super) struct StoreArgs {
    /// The bench profile.
    #[arg(long, value_name = "FILE")]
    bench: PathBuf,
    /// The controller: a serial port, or tcp:HOST:PORT.
    #[arg(long, value_name = "LINK")]
    link: String,
}

pub(super) fn run(args: &StoreArgs) -> Result<(), Failure> {
    let profile = bench::load(&args.bench)?;
    let certificate = Certificate::load(&profile.calibration.certificate).map_err(Failure::usage)?;
    let record = certificate.record().map_err(Failure::usage)?;
    let settings = profile.settings_record(Some(&certificate)).map_err(Failure::usage)?;
    let today = day_of_utc_ns(i64::try_from(jiff::Timestamp::now().as_nanosecond()).unwrap_or(0));
    if certificate.validity(today) == Validity::Expired {
        let sentence =
            format!("the certificate expired on {}; calibrate again before storing one", certificate.valid_until);
        return Err(Failure::Job(sentence));
    }
    let address: Address = args.link.parse().map_err(Failure::usage)?;
    let (mut controller, hello) = Controller::connect(&address).map_err(Failure::Job)?;
    let board = device_text(&hello);
    if board != certificate.device {
        let sentence = format!(
            "the certificate was made with board {}, but {address} is board {board}; take its own",
            certificate.device
        );
        return Err(Failure::Job(sentence));
    }
    controller.write(&ToDevice::WriteSettings(settings), Request::WriteSettings, "settings").map_err(Failure::Job)?;
    controller
        .write(&ToDevice::WriteCertificate(record), Request::WriteCertificate, "certificate")
        .map_err(Failure::Job)?;
    controller.goodbye();
    let limit = profile.controller.limit_volts;
    bench::print(&format!(
        "Board {board} holds certificate {} and the settings (limit {limit} V).\n",
        &certificate.hash[..16]
    ))
}
