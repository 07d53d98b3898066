//! `ringvolt demo`: the whole job on the simulated bench.

use std::{
    fs,
    path::{Path, PathBuf},
    sync::{
        Arc,
        atomic::{AtomicBool, Ordering},
        mpsc,
    },
    time::Duration,
};

use clap::Args as ClapArgs;

use super::{
    Failure, export, live, report,
    run::{self, stop_flag},
    simulate::{built_in, play},
};
use crate::{
    profile,
    run::RunReader,
    simulation::{self, Bench, Scenario},
    stamp::Reason,
};

/// Simulate a bench, record it through a real pseudo-terminal and real image files, stamp, export and report.
#[derive(Debug, ClapArgs)]
pub struct Args {
    /// The folder to leave everything in; made if it is not there.
    #[arg(long, value_name = "DIR")]
    pub out: PathBuf,
    /// How long to record, seconds: 20 to 3600.
    #[arg(long, value_name = "SECONDS", default_value_t = 40.0)]
    pub seconds: f64,
    /// Everything drawn at random comes from this number.
    #[arg(long, value_name = "N", default_value_t = 1)]
    pub seed: u64,
}

/// What a demonstration leaves; an earlier one is cleared away.
const LEFT: [&str; 8] =
    ["bench.toml", "certificate.toml", "frames", "run.ringvolt", "report.html", "tables", "truth.csv", "controller"];

/// Demonstrates.
pub fn run(args: &Args) -> Result<(), Failure> {
    if !(20.0..=3_600.0).contains(&args.seconds) {
        return Err(Failure::Usage(format!("--seconds {}: give 20 to 3600", args.seconds)));
    }
    clear(&args.out)?;
    let (profile, certificate) = built_in()?;
    write(&args.out.join("bench.toml"), &profile::example())?;
    write(&args.out.join("certificate.toml"), &certificate.to_toml())?;
    let scenario = Scenario::demonstration(args.seconds);
    let bench = Bench {
        setup: simulation::setup(&profile, &certificate, scenario, args.seed).map_err(Failure::job)?,
        optics: simulation::optics(&profile, args.seed).map_err(Failure::job)?,
        link: args.out.join("controller"),
        frames: args.out.join("frames"),
        truth: args.out.join("truth.csv"),
    };
    println!("SIMULATED bench: an invented tube, divider and camera. Nothing below is a measurement.");
    println!("Recording {} s through the pseudo-terminal {} ...", args.seconds, bench.link.display());
    record(args, &bench)?;
    let run_file = args.out.join("run.ringvolt");
    export::run(&export::Args { run: run_file.clone(), out: args.out.join("tables") })?;
    report::run(&report::Args { run: run_file.clone(), out: args.out.join("report.html") })?;
    summarise(&args.out, &run_file)
}

fn record(args: &Args, bench: &Bench) -> Result<(), Failure> {
    let stop = stop_flag()?;
    let stop_bench = Arc::new(AtomicBool::new(false));
    let (ready, is_ready) = mpsc::channel();
    std::thread::scope(|scope| {
        let simulated = scope.spawn(|| {
            play(bench, None, &stop_bench, move || {
                // The recorder waits for it; that it has gone is no matter.
                let _ = ready.send(());
            })
        });
        let recorded = match is_ready.recv_timeout(Duration::from_secs(10)) {
            Ok(()) => run::record(
                &run::Args {
                    bench: args.out.join("bench.toml"),
                    link: bench.link.display().to_string(),
                    frames: bench.frames.clone(),
                    out: args.out.join("run.ringvolt"),
                    seconds: Some(args.seconds),
                    clock: None,
                },
                &mut live::Plain::new(),
                &stop,
            )
            .map(drop),
            Err(_) => Ok(()),
        };
        stop_bench.store(true, Ordering::Relaxed);
        let simulated =
            simulated.join().unwrap_or_else(|_| Err(Failure::Job("the simulated bench broke off".to_owned())));
        simulated.and(recorded)
    })
}

fn clear(out: &Path) -> Result<(), Failure> {
    let failed =
        |error: std::io::Error| Failure::Job(format!("{} cannot be used ({error}): give another --out", out.display()));
    fs::create_dir_all(out).map_err(failed)?;
    for entry in fs::read_dir(out).map_err(failed)? {
        let name = entry.map_err(failed)?.file_name();
        if !LEFT.iter().any(|left| name.to_string_lossy().starts_with(left)) {
            return Err(Failure::Usage(format!(
                "{} holds {}, which no demonstration left there: give an empty folder",
                out.display(),
                name.to_string_lossy()
            )));
        }
    }
    for name in LEFT {
        let path = out.join(name);
        let gone = if path.is_dir() { fs::remove_dir_all(&path) } else { fs::remove_file(&path) };
        if let Err(error) = gone
            && error.kind() != std::io::ErrorKind::NotFound
        {
            return Err(failed(error));
        }
    }
    Ok(())
}

fn write(path: &Path, text: &str) -> Result<(), Failure> {
    fs::write(path, text).map_err(|error| Failure::Job(format!("{} could not be written ({error})", path.display())))
}

/// What came out, for a person who has never seen it.
fn summarise(out: &Path, run_file: &Path) -> Result<(), Failure> {
    let reader = RunReader::open(run_file).map_err(Failure::job)?;
    let Some(reduction) = reader.reductions().map_err(Failure::job)?.pop() else { return Ok(()) };
    let stamps = reader.stamps(reduction.key).map_err(Failure::job)?;
    let count = |verdict: &str| stamps.iter().filter(|stamp| stamp.verdict == verdict).count();
    let (mut readings, mut missing) = (0, 0);
    for epoch in reader.epochs().map_err(Failure::job)? {
        let (there, not) = reader.count_readings(epoch.epoch_key).map_err(Failure::job)?;
        readings += there;
        missing += not;
    }
    println!();
    println!("SIMULATED run, summary");
    println!("  {readings} readings recorded, {missing} missing");
    println!(
        "  {} frames: {} good, {} marked, {} refused",
        stamps.len(),
        count("good"),
        count("marked"),
        count("refused")
    );
    let best =
        stamps.iter().filter(|stamp| stamp.verdict == "good").filter_map(|stamp| Some((&stamp.frame, stamp.value?)));
    if let Some((frame, value)) = best.last() {
        println!(
            "  for example {frame}: {:.2} V ± {:.2} V, wavelength {:.4} pm ± {:.4} pm (95 %, k = 2)",
            value.volts,
            2.0 * value.volts_u,
            value.wavelength_pm,
            2.0 * value.wavelength_u_pm
        );
    }
    println!("  why frames were marked or refused:");
    let mut reasons: Vec<(usize, Reason)> = Vec::new();
    for code in stamps.iter().flat_map(|stamp| stamp.reasons.split(';')) {
        let Some(reason) = Reason::from_code(code) else { continue };
        match reasons.iter_mut().find(|(_, known)| *known == reason) {
            Some((count, _)) => *count += 1,
            None => reasons.push((1, reason)),
        }
    }
    reasons.sort_by(|a, b| b.0.cmp(&a.0));
    for (count, reason) in reasons {
        println!("    {count:>4}  {}: {}", reason.rule().code, reason.rule().sentence);
    }
    println!(
        "  the report is {}, the tables are in {}",
        out.join("report.html").display(),
        out.join("tables").display()
    );
    println!("  what was really true, which the program never reads, is in {}", out.join("truth.csv").display());
    Ok(())
}
