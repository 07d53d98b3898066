//! The command line: one small file per command, which parses, calls the library and prints.
//!
//! A command's file holds `Args` (its options) and `run(&Args) -> Result<(), Failure>`.

use std::process::ExitCode;

use clap::{Parser, Subcommand};

mod bench;
mod bench_files;
mod calibrate;
mod demo;
mod divider;
mod export;
mod failure;
mod live;
mod predict;
mod report;
mod run;
mod simulate;
mod stamp;
mod verify;

pub use failure::Failure;

/// Records, stamps and reports the accelerating voltage of electron-diffraction tubes.
#[derive(Debug, Parser)]
#[command(name = "ringvolt", version, max_term_width = 100)]
pub struct Cli {
    /// What to do.
    #[command(subcommand)]
    pub command: Command,
}

/// The commands.
#[derive(Debug, Subcommand)]
pub enum Command {
    /// Check, begin or explain a bench profile: the file that describes one bench.
    Bench(bench::Args),
    /// Do the whole job on a simulated bench, to see what it is like.
    Demo(demo::Args),
    /// Write a run's frames, readings and events as open tables.
    Export(export::Args),
    /// Write a run's report as one HTML file.
    Report(report::Args),
    /// Record a session: readings, interlock and frames into a run file, stamped live.
    Run(run::Args),
    /// Run an invented bench behind a pseudo-terminal: controller, supply, tube and camera, all SIMULATED.
    Simulate(simulate::Args),
    /// Stamp every frame of a run again, from raw codes; earlier results stay in the file.
    Stamp(stamp::Args),
    /// Calibrate the divider against a reference, check it, show certificates.
    Calibrate(Box<calibrate::Args>),
    /// Ratio, stress, settling, bleeding and accuracy of the divider in a profile.
    Divider(divider::Args),
    /// Wavelength and rings this tube would show at given voltages.
    Predict(predict::Args),
    /// Check a run file and say what may still be trusted.
    Verify(verify::Args),
}

/// Parses the command line, carries it out and gives the exit code: 0 done, 1 failed with a stated reason, 2 wrong usage.
pub fn main() -> ExitCode {
    let cli = Cli::parse();
    match dispatch(&cli.command) {
        Ok(()) => ExitCode::SUCCESS,
        Err(failure) => {
            eprintln!("ringvolt: {failure}");
            failure.exit_code()
        }
    }
}

fn dispatch(command: &Command) -> Result<(), Failure> {
    match command {
        Command::Bench(args) => bench::run(args),
        Command::Demo(args) => demo::run(args),
        Command::Export(args) => export::run(args),
        Command::Report(args) => report::run(args),
        Command::Run(args) => run::run(args),
        Command::Simulate(args) => simulate::run(args),
        Command::Stamp(args) => stamp::run(args),
        Command::Calibrate(args) => calibrate::run(args),
        Command::Divider(args) => divider::run(args),
        Command::Predict(args) => predict::run(args),
        Command::Verify(args) => verify::run(args),
    }
}
