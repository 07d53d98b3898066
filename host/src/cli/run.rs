//! `ringvolt run`: record a session, live.

use std::{
    io::IsTerminal,
    path::{Path, PathBuf},
    sync::{
        Arc,
        atomic::{AtomicBool, Ordering},
    },
};

use clap::Args as ClapArgs;

use super::{Failure, bench_files, live};
use crate::{
    clock::RealClock,
    frames::{FrameFolder, watch},
    link::{self, Address},
    reduction::Reduction,
    run::{RunHeader, RunWriter},
    session::{self, LockstepPace, Observer, Pace, RealPace, Recorded, SessionParts, Store},
};

/// Record a session: readings, interlock and frames into a run file, stamped live.
#[derive(Debug, ClapArgs)]
pub struct Args {
    /// The bench profile.
    #[arg(long, value_name = "FILE")]
    pub bench: PathBuf,
    /// The controller: a serial port, or tcp:HOST:PORT.
    #[arg(long, value_name = "LINK")]
    pub link: String,
    /// The folder the camera writes to.
    #[arg(long, value_name = "DIR")]
    pub frames: PathBuf,
    /// The run file to make.
    #[arg(long, value_name = "FILE")]
    pub out: PathBuf,
    /// End after this many seconds.
    #[arg(long = "for", value_name = "SECONDS")]
    pub seconds: Option<f64>,
    /// Take the time from an emulated board's clock at HOST:PORT, in lock-step; the run is marked SIMULATED.
    #[arg(long, value_name = "HOST:PORT", hide = true)]
    pub clock: Option<String>,
}

/// Records, then reduces once more with the clock of the whole run.
pub fn run(args: &Args) -> Result<(), Failure> {
    let stop = stop_flag()?;
    if std::io::stdout().is_terminal() {
        record(args, &mut live::Plain::new(), &stop).map(drop)
    } else {
        record(args, &mut live::JsonLines::new(), &stop).map(drop)
    }
}

/// A flag that the usual signals to end set.
pub fn stop_flag() -> Result<Arc<AtomicBool>, Failure> {
    let stop = Arc::new(AtomicBool::new(false));
    for signal in [signal_hook::consts::SIGINT, signal_hook::consts::SIGTERM, signal_hook::consts::SIGHUP] {
        signal_hook::flag::register(signal, stop.clone())
            .map_err(|error| Failure::Job(format!("signals cannot be caught ({error})")))?;
    }
    Ok(stop)
}

/// Records a session for whoever watches.
pub fn record(args: &Args, observer: &mut dyn Observer, stop: &Arc<AtomicBool>) -> Result<Recorded, Failure> {
    let address: Address = args.link.parse().map_err(Failure::usage)?;
    let duration_ns = duration(args.seconds)?;
    let bench = bench_files::load(&args.bench)?;
    let frames = FrameFolder::open(&args.frames, &bench.profile.camera).map_err(Failure::job)?;
    let writer = create(args, &bench)?;
    let reduction = Reduction::new(&bench.profile, bench.certificate.as_ref());

    let clock = RealClock::new();
    let stop_frames = Arc::new(AtomicBool::new(false));
    let (frames, watcher) = watch(frames, Arc::new(clock.clone()), stop_frames.clone());
    let mut pace: Box<dyn Pace> = match &args.clock {
        None => Box::new(RealPace::new(clock)),
        Some(address) => Box::new(LockstepPace::connect(address).map_err(Failure::Job)?),
    };
    let recorded = session::record(SessionParts {
        open: &mut || link::open(&address),
        link: address.to_string(),
        pace: pace.as_mut(),
        store: Store::new(writer),
        reduction: reduction.clone(),
        frames: Some(frames),
        observer,
        stop: &|| stop.load(Ordering::Relaxed),
        duration_ns,
        // Under an emulator's clock nothing may depend on chance, and the length of a frame depends on this number.
        host: if args.clock.is_some() { 1 } else { std::process::id() },
    });
    stop_frames.store(true, Ordering::Relaxed);
    // The watcher ends by itself; that it panicked would be its own message.
    let _ = watcher.join();
    let recorded = recorded.map_err(Failure::job)?;
    super::stamp::reduce(&args.out, &reduction, &bench.profile_text, "run")?;
    Ok(recorded)
}

fn duration(seconds: Option<f64>) -> Result<Option<i64>, Failure> {
    match seconds {
        None => Ok(None),
        Some(seconds) if seconds > 0.0 && seconds <= 1e7 => Ok(Some((seconds * 1e9) as i64)),
        Some(seconds) => {
            Err(Failure::Usage(format!("--for {seconds}: give a number of seconds above 0 and up to 10000000")))
        }
    }
}

fn create(args: &Args, bench: &bench_files::Bench) -> Result<RunWriter, Failure> {
    let frames_dir = std::path::absolute(&args.frames).unwrap_or_else(|_| args.frames.clone());
    let header = RunHeader {
        simulated: bench.certificate.as_ref().is_some_and(|certificate| certificate.simulated) || args.clock.is_some(),
        bench_name: bench.profile.bench.name.clone(),
        profile_text: bench.profile_text.clone(),
        certificate_text: bench.certificate_text.clone(),
        frames_dir: relative_to(&frames_dir, &args.out),
        link: args.link.clone(),
        software: concat!("ringvolt ", env!("CARGO_PKG_VERSION")).to_owned(),
    };
    RunWriter::create(&args.out, &header).map_err(Failure::job)
}

/// The frames folder as the run file shall name it: relative to the run file where it lies beside or below it, so that
/// the two can be moved together.
fn relative_to(frames: &Path, out: &Path) -> String {
    let base = std::path::absolute(out).ok().and_then(|out| out.parent().map(Path::to_owned));
    let relative = base.and_then(|base| frames.strip_prefix(base).ok().map(Path::to_owned));
    relative.unwrap_or_else(|| frames.to_owned()).display().to_string()
}
