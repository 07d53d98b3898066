//! The command line: one small file per command, which parses, calls the library and prints.
//!
//! A command's file holds `Args` (its options) and `run(&Args) -> Result<(), Failure>`.

use std::process::ExitCode;

use clap::{Parser, Subcommand};

mod bench;
mod failure;

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
    }
}
