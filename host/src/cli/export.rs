//! `ringvolt export`: a run as open tables.

use std::path::PathBuf;

use clap::Args as ClapArgs;

use super::{Failure, stamp::newest};
use crate::{export, run::RunReader};

/// Write frames, readings, events and the rest as CSV with a Frictionless `datapackage.json`.
#[derive(Debug, ClapArgs)]
pub struct Args {
    /// The run file.
    pub run: PathBuf,
    /// The folder to write to; made if it is not there.
    #[arg(long, value_name = "DIR")]
    pub out: PathBuf,
}

/// Exports.
pub fn run(args: &Args) -> Result<(), Failure> {
    let reader = RunReader::open(&args.run).map_err(Failure::job)?;
    let tables = export::export(&reader, &newest(&reader)?, &args.out).map_err(Failure::job)?;
    println!("{} tables in {}", tables, args.out.display());
    Ok(())
}
