//! `ringvolt simulate`: the simulated bench as a process of its own.

use std::{
    path::{Path, PathBuf},
    sync::{
        Arc,
        atomic::{AtomicBool, Ordering},
    },
};

use clap::Args as ClapArgs;

use super::{Failure, bench_files, run::stop_flag};
use crate::{
    calibration,
    clock::{Clock, RealClock},
    profile::{self, Profile},
    simulation::{self, Bench, Scenario},
};

/// Run an invented bench behind a pseudo-terminal: controller, supply, tube and camera, all SIMULATED.
///
/// A script is a TOML file of `[[happening]]` tables with `at_seconds`, `do` and what belongs to it; `--explain` lists
/// what can happen. The world is fixed by the seed; the timing of the pseudo-terminal is not.
#[derive(Debug, ClapArgs)]
pub struct Args {
    /// Where to link the pseudo-terminal that `ringvolt run --link` opens.
    #[arg(long, value_name = "FILE", required_unless_present = "explain")]
    pub link_path: Option<PathBuf>,
    /// The folder the simulated camera writes to.
    #[arg(long, value_name = "DIR", required_unless_present = "explain")]
    pub frames: Option<PathBuf>,
    /// What happens, instead of the usual demonstration.
    #[arg(long, value_name = "FILE")]
    pub script: Option<PathBuf>,
    /// Everything drawn at random comes from this number.
    #[arg(long, value_name = "N", default_value_t = 1)]
    pub seed: u64,
    /// Simulate the bench of this profile instead of the built-in one.
    #[arg(long, value_name = "FILE")]
    pub bench: Option<PathBuf>,
    /// Where to write what was really true; beside the frames folder if not given.
    #[arg(long, value_name = "FILE")]
    pub truth: Option<PathBuf>,
    /// End after this many seconds; the usual demonstration is spread over them.
    #[arg(long, value_name = "SECONDS")]
    pub seconds: Option<f64>,
    /// List what can happen in a script, and end.
    #[arg(long)]
    pub explain: bool,
}

/// Length of the demonstration without `--seconds`.
const USUAL_SECONDS: f64 = 60.0;

/// Runs until it is stopped.
pub fn run(args: &Args) -> Result<(), Failure> {
    // Without both, the command line was not accepted unless it asked for this.
    let (false, Some(link), Some(frames)) = (args.explain, &args.link_path, &args.frames) else {
        print!("{}", simulation::explain());
        return Ok(());
    };
    let seconds = checked_seconds(args.seconds)?;
    let scenario = match &args.script {
        Some(path) => Scenario::load(path).map_err(Failure::usage)?,
        None => Scenario::demonstration(seconds.unwrap_or(USUAL_SECONDS)),
    };
    let (profile, certificate) = match &args.bench {
        Some(path) => {
            let bench = bench_files::load(path)?;
            let certificate = bench.certificate.ok_or_else(|| {
                Failure::Usage(format!(
                    "{}: the certificate it names is not there, so no bench can be simulated",
                    path.display()
                ))
            })?;
            (bench.profile, certificate)
        }
        None => built_in()?,
    };
    let beside = || frames.parent().unwrap_or(Path::new(".")).join("truth.csv");
    let bench = Bench {
        setup: simulation::setup(&profile, &certificate, scenario, args.seed).map_err(Failure::job)?,
        optics: simulation::optics(&profile, args.seed).map_err(Failure::job)?,
        link: link.clone(),
        frames: frames.clone(),
        truth: args.truth.clone().unwrap_or_else(beside),
    };
    let stop = stop_flag()?;
    let ready = || {
        println!(
            "SIMULATED bench (seed {}) on {}; frames in {}; truth in {}; end with Ctrl-C",
            args.seed,
            bench.link.display(),
            bench.frames.display(),
            bench.truth.display()
        );
    };
    play(&bench, seconds, &stop, ready)
}

/// Runs a bench until its time is over or `stop` is set.
pub fn play(bench: &Bench, seconds: Option<f64>, stop: &Arc<AtomicBool>, ready: impl FnOnce()) -> Result<(), Failure> {
    let clock = RealClock::new();
    let end_ns = seconds.map(|seconds| (seconds * 1e9) as i64);
    let over = || stop.load(Ordering::Relaxed) || end_ns.is_some_and(|end| clock.mono_ns() >= end);
    simulation::run(bench, &clock, ready, over).map_err(Failure::job)
}

/// The invented bench that comes with the program.
pub fn built_in() -> Result<(Profile, calibration::Certificate), Failure> {
    let text = profile::example();
    let profile = Profile::parse(&text, "the built-in bench").map_err(Failure::job)?;
    Ok((profile, calibration::example()))
}

fn checked_seconds(seconds: Option<f64>) -> Result<Option<f64>, Failure> {
    match seconds {
        Some(seconds) if !(seconds > 0.0 && seconds <= 1e7) => {
            Err(Failure::Usage(format!("--seconds {seconds}: give a number above 0 and up to 10000000")))
        }
        seconds => Ok(seconds),
    }
}
