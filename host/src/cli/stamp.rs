//! `ringvolt stamp`: reduce a recorded run once more, from its raw data.

use std::path::{Path, PathBuf};

use clap::Args as ClapArgs;

use super::{Failure, bench_files};
use crate::{
    calibration::Certificate,
    clock::{Clock, RealClock},
    profile::Profile,
    reduction::{Recording, Reduction},
    run::{RunReader, RunWriter, rows::FrameRow},
};

/// Stamp every frame of a run again, from raw codes; earlier results stay in the file.
#[derive(Debug, ClapArgs)]
pub struct Args {
    /// The run file.
    pub run: PathBuf,
    /// Use this bench profile (and the certificate it names) instead of the ones the run was recorded with.
    #[arg(long, value_name = "FILE")]
    pub bench: Option<PathBuf>,
}

/// Stamps and prints how it came out.
pub fn run(args: &Args) -> Result<(), Failure> {
    let (reduction, profile_text) = match &args.bench {
        Some(path) => {
            let bench = bench_files::load(path)?;
            (Reduction::new(&bench.profile, bench.certificate.as_ref()), bench.profile_text)
        }
        None => {
            let reader = RunReader::open(&args.run).map_err(Failure::job)?;
            (of_run(&reader)?, reader.header().map_err(Failure::job)?.profile_text)
        }
    };
    let counts = reduce(&args.run, &reduction, &profile_text, "stamp")?;
    println!(
        "{} frames: {} good, {} marked, {} refused",
        counts.good + counts.marked + counts.refused,
        counts.good,
        counts.marked,
        counts.refused
    );
    Ok(())
}

/// How many frames got which verdict.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct VerdictCounts {
    /// `good`.
    pub good: usize,
    /// `marked`.
    pub marked: usize,
    /// `refused`.
    pub refused: usize,
}

/// The reduction a run was recorded with: its own profile and certificate.
pub fn of_run(reader: &RunReader) -> Result<Reduction, Failure> {
    let header = reader.header().map_err(Failure::job)?;
    of_texts(reader, &header.profile_text, header.certificate_text.as_deref())
}

/// The newest reduction in a run file: the one whose stamps are shown; where there is none, that of the recording.
pub fn newest(reader: &RunReader) -> Result<Reduction, Failure> {
    match reader.reductions().map_err(Failure::job)?.pop() {
        Some(row) => of_texts(reader, &row.profile_text, row.certificate_text.as_deref()),
        None => of_run(reader),
    }
}

fn of_texts(reader: &RunReader, profile: &str, certificate: Option<&str>) -> Result<Reduction, Failure> {
    let origin = format!("the profile in {}", reader.path().display());
    let profile = Profile::parse(profile, &origin).map_err(Failure::job)?;
    let origin = format!("the certificate in {}", reader.path().display());
    let certificate = certificate.map(|text| Certificate::parse(text, &origin)).transpose();
    Ok(Reduction::new(&profile, certificate.map_err(Failure::job)?.as_ref()))
}

/// Stamps all frames of a run into a new reduction.
pub fn reduce(run: &Path, reduction: &Reduction, profile_text: &str, command: &str) -> Result<VerdictCounts, Failure> {
    reduce_with(run, reduction, profile_text, command, None)
}

/// Stamps all frames of a run into a new reduction, with these exposures instead of their own where any are given.
pub fn reduce_with(
    run: &Path,
    reduction: &Reduction,
    profile_text: &str,
    command: &str,
    aligned: Option<&[FrameRow]>,
) -> Result<VerdictCounts, Failure> {
    let reader = RunReader::open(run).map_err(Failure::job)?;
    let recording = Recording::open(&reader).map_err(Failure::job)?;
    let mut writer = RunWriter::append(run).map_err(Failure::job)?;
    let certificate = reduction.certificate().map(Certificate::to_toml);
    let software = concat!("ringvolt ", env!("CARGO_PKG_VERSION"));
    let created = RealClock::new().utc_ns();
    let key = writer
        .begin_reduction(created, command, software, profile_text, certificate.as_deref())
        .map_err(Failure::job)?;
    let mut counts = VerdictCounts::default();
    for frame in reader.frames().map_err(Failure::job)? {
        let other = aligned.and_then(|aligned| aligned.iter().find(|other| other.frame == frame.frame));
        if let Some(other) = other {
            writer.exposure(key, other).map_err(Failure::job)?;
        }
        let frame = other.unwrap_or(&frame);
        let stamp = reduction.stamp(frame, &recording).map_err(Failure::job)?;
        match stamp.verdict.as_str() {
            "good" => counts.good += 1,
            "marked" => counts.marked += 1,
            _ => counts.refused += 1,
        }
        writer.stamp(key, &stamp).map_err(Failure::job)?;
    }
    writer.finish_reduction(key).map_err(Failure::job)?;
    // Closed before the writer, so that the writer can fold its log back into the one file.
    drop(reader);
    Ok(counts)
}
