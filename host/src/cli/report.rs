//! `ringvolt report`: a run as one HTML file.

use std::path::PathBuf;

use clap::Args as ClapArgs;

use super::{Failure, stamp::newest};
use crate::{report, run::RunReader};

/// Write a self-contained HTML report of a run.
#[derive(Debug, ClapArgs)]
pub struct Args {
    /// The run file.
    pub run: PathBuf,
    /// The file to write.
    #[arg(long, value_name = "FILE")]
    pub out: PathBuf,
}

/// Reports.
pub fn run(args: &Args) -> Result<(), Failure> {
    let reader = RunReader::open(&args.run).map_err(Failure::job)?;
    let html = report::html(&reader, &newest(&reader)?).map_err(Failure::job)?;
    std::fs::write(&args.out, html).map_err(|error| {
        Failure::Job(format!("{} could not be written ({error}): check the folder", args.out.display()))
    })?;
    println!("report in {}", args.out.display());
    Ok(())
}
