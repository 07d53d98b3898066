//! `ringvolt align`: reduce a run again with exposures from another source.

use std::{
    fs::File,
    io::{self, BufReader, Read},
    path::{Path, PathBuf},
};

use clap::{Args as ClapArgs, ValueEnum};
use ringvolt_protocol::{EventKind, lamp};

use super::{
    Failure,
    stamp::{VerdictCounts, of_run, reduce_with},
};
use crate::{
    frames::{
        exposure_of,
        lamp::{LampCode, LampFrame, LampSearch, TimedFrame, time_frames},
        modified_utc_ns, read_picture, strobe, table,
        video::{Patch, patch_brightness, patch_of_picture},
    },
    profile::{Camera, Profile, TimeSource},
    reduction::{Epoch, Recording, Source},
    run::{
        RunReader, RunWriter,
        rows::{Exposure, FrameRow},
    },
    text,
};

/// Find every frame's exposure again, from another source, and stamp the run with it; earlier results stay in the file.
#[derive(Debug, ClapArgs)]
pub struct Args {
    /// The run file.
    pub run: PathBuf,
    /// Where exposures come from.
    #[arg(long, value_enum)]
    pub source: SourceName,
    /// For `table`: CSV with frame, start_utc and end_utc or exposure_s.
    #[arg(long, value_name = "FILE")]
    pub table: Option<PathBuf>,
    /// For `lamp`: where the sync lamp lies in the picture, X,Y,WIDTH,HEIGHT in pixels.
    #[arg(long, value_name = "X,Y,W,H")]
    pub patch: Option<Patch>,
    /// For `lamp`: time a rolling shutter takes from one row to the next, microseconds (10 to 30 are common); 0 for a
    /// global shutter.
    #[arg(long, value_name = "MICROSECONDS", default_value_t = 0.0, allow_negative_numbers = true)]
    pub row_us: f64,
    /// For `lamp`: a Y4M video instead of the run's frames; `-` is standard input.
    #[arg(long, value_name = "FILE")]
    pub video: Option<PathBuf>,
    /// For `lamp` with a video: a file with the time of every frame, seconds, one a line.
    #[arg(long, value_name = "FILE")]
    pub times: Option<PathBuf>,
    /// For `strobe` and `lamp`: how far the camera's clock may be off, seconds.
    #[arg(long, value_name = "SECONDS", default_value_t = 15.0, allow_negative_numbers = true)]
    pub within: f64,
    /// For `lamp` with a video: when the clip began, RFC 3339; the middle of the lamp's run if not given.
    #[arg(long, value_name = "TIME")]
    pub start: Option<String>,
}

/// Names of the sources.
#[derive(Clone, Copy, Debug, PartialEq, Eq, ValueEnum)]
pub enum SourceName {
    /// EXIF tags of the image files.
    Exif,
    /// Times of the image files.
    FileTime,
    /// A table.
    Table,
    /// Edges of the strobe line.
    Strobe,
    /// The sync lamp in the picture.
    Lamp,
}

/// Aligns, stamps and prints how it came out.
pub fn run(args: &Args) -> Result<(), Failure> {
    if !(args.within > 0.0 && args.within <= 86_400.0) {
        return Err(Failure::Usage(format!("--within {}: give 0 to 86400 s", args.within)));
    }
    if !(0.0..=10_000.0).contains(&args.row_us) {
        return Err(Failure::Usage(format!("--row-us {}: give 0 to 10000 us", args.row_us)));
    }
    let reader = RunReader::open(&args.run).map_err(Failure::job)?;
    let reduction = of_run(&reader)?;
    let frames = match args.source {
        SourceName::Exif => from_files(&reader, reduction.profile(), TimeSource::Exif)?,
        SourceName::FileTime => from_files(&reader, reduction.profile(), TimeSource::FileTime)?,
        SourceName::Table => from_table(args, &reader, &reduction.profile().camera)?,
        SourceName::Strobe => from_strobe(args, &reader, &reduction.profile().camera)?,
        SourceName::Lamp if args.video.is_some() => from_video(args, &reader, &reduction.profile().camera)?,
        SourceName::Lamp => from_lamp(args, &reader, &reduction.profile().camera)?,
    };
    let profile_text = job(reader.header())?.profile_text;
    drop(reader);
    let known = frames.iter().filter(|frame| frame.exposure.is_ok()).count();
    let counts = reduce_with(&args.run, &reduction, &profile_text, "align", Some(&frames))?;
    println!("{known} of {} frames have an exposure now", frames.len());
    let VerdictCounts { good, marked, refused } = counts;
    println!("{good} good, {marked} marked, {refused} refused");
    Ok(())
}

fn job<T>(outcome: Result<T, crate::run::RunError>) -> Result<T, Failure> {
    outcome.map_err(Failure::job)
}

fn from_files(reader: &RunReader, profile: &Profile, source: TimeSource) -> Result<Vec<FrameRow>, Failure> {
    let folder = job(reader.frames_dir())?;
    let camera = Camera { time_source: source, ..profile.camera.clone() };
    let again = |frame: FrameRow| {
        let path = folder.join(&frame.file);
        let read = std::fs::read(&path).map_err(|error| format!("{} could not be read ({error})", path.display()));
        let exposure = read.and_then(|bytes| exposure_of(&bytes, modified_utc_ns(&path).unwrap_or(0), &camera));
        FrameRow { exposure, ..frame }
    };
    Ok(job(reader.frames())?.into_iter().map(again).collect())
}

fn from_table(args: &Args, reader: &RunReader, camera: &Camera) -> Result<Vec<FrameRow>, Failure> {
    let path = args.table.as_ref().ok_or_else(|| Failure::Usage("--source table needs --table FILE".to_owned()))?;
    let text = text::read(path, 64 << 20).map_err(Failure::usage)?;
    let exposures = table::exposures(&text, &path.display().to_string(), camera).map_err(Failure::usage)?;
    let frames: Vec<FrameRow> = job(reader.frames())?
        .into_iter()
        .map(|frame| {
            let found = exposures.get(&frame.frame).or_else(|| exposures.get(&frame.file));
            let exposure = found.cloned().ok_or_else(|| format!("it does not stand in {}", path.display()));
            FrameRow { exposure, ..frame }
        })
        .collect();
    if frames.iter().all(|frame| frame.exposure.is_err()) {
        return Err(Failure::Job(format!("{}: none of its frames is in the run: check their names", path.display())));
    }
    Ok(frames)
}

/// The frame's own time, coarse as it may be.
fn coarse_ns(frame: &FrameRow) -> i64 {
    frame.exposure.as_ref().map_or(frame.noticed_utc_ns, |exposure| exposure.start_utc_ns)
}

fn from_strobe(args: &Args, reader: &RunReader, camera: &Camera) -> Result<Vec<FrameRow>, Failure> {
    let recording = job(Recording::open(reader))?;
    let mut edges = Vec::new();
    let mut clock_u_ns = 0;
    for epoch in recording.epochs() {
        for edge in job(reader.strobes(epoch.key))? {
            if let Some(instant) = epoch.clock.utc(edge.time_us) {
                edges.push((instant.utc_ns, edge.rising));
                clock_u_ns = clock_u_ns.max(instant.u_ns);
            }
        }
    }
    let pulses = strobe::pulses(edges);
    let mut frames = job(reader.frames())?;
    frames.sort_by_key(|frame| (coarse_ns(frame), frame.frame.clone()));
    let coarse: Vec<i64> = frames.iter().map(coarse_ns).collect();
    let matched = strobe::match_frames(&coarse, &pulses, (args.within * 1e9) as i64).map_err(Failure::job)?;
    for (frame, at) in frames.iter_mut().zip(matched) {
        let pulse = pulses[at];
        let length = (camera.exposure_seconds * 1e9).round() as i64;
        // A line that only tells the beginning leaves the length to the profile.
        frame.exposure = Ok(Exposure {
            start_utc_ns: pulse.start_ns,
            end_utc_ns: pulse.end_ns.unwrap_or(pulse.start_ns + length),
            start_u_ns: clock_u_ns,
            length_u_ns: if pulse.end_ns.is_some() { 1_000 } else { (camera.exposure_u_seconds * 1e9) as i64 },
            source: "strobe".to_owned(),
        });
    }
    Ok(frames)
}

/// The lamp's last run in a recording: its epoch and code.
fn lamp_code<'a>(reader: &RunReader, recording: &'a Recording<'_>) -> Result<(&'a Epoch, LampCode), Failure> {
    for epoch in recording.epochs().iter().rev() {
        let events = job(reader.events(epoch.key))?;
        let started = events.iter().rev().find_map(|event| match event.kind {
            EventKind::LampStarted { chip_us } => Some((event.time_us, chip_us)),
            _ => None,
        });
        if let Some((time_us, chip_us)) = started {
            let code = LampCode::new(time_us as f64 * 1e-6, f64::from(chip_us) * 1e-6, lamp::sequence().to_vec());
            return Ok((epoch, code));
        }
    }
    Err(Failure::Job(
        "the sync lamp did not run during this run: switch it on in the profile, or use another source".to_owned(),
    ))
}

fn patch(args: &Args) -> Result<Patch, Failure> {
    args.patch.ok_or_else(|| Failure::Usage("--source lamp needs --patch X,Y,WIDTH,HEIGHT".to_owned()))
}

fn from_lamp(args: &Args, reader: &RunReader, camera: &Camera) -> Result<Vec<FrameRow>, Failure> {
    let patch = patch(args)?;
    let recording = job(Recording::open(reader))?;
    let (epoch, code) = lamp_code(reader, &recording)?;
    let folder = job(reader.frames_dir())?;
    let mut frames = job(reader.frames())?;
    frames.sort_by_key(|frame| (coarse_ns(frame), frame.frame.clone()));
    let first = frames.first().map(coarse_ns).ok_or_else(|| Failure::Job("the run has no frames".to_owned()))?;
    let mut samples = Vec::new();
    let mut height = 0;
    for frame in &frames {
        let picture = read_picture(&folder.join(&frame.file)).map_err(Failure::job)?;
        let brightness = patch_of_picture(&picture, patch).ok_or_else(|| {
            Failure::Usage(format!("--patch lies outside {} ({} x {})", frame.file, picture.width, picture.height))
        })?;
        height = picture.height;
        samples.push(LampFrame { clip_seconds: (coarse_ns(frame) - first) as f64 * 1e-9, brightness });
    }
    let start_us = epoch.clock.device_us(first).ok_or_else(no_clock)?;
    let search = search(args, camera, &samples, start_us as f64 * 1e-6, false);
    let timing = time_frames(&code, &samples, &search).map_err(Failure::job)?;
    let later = patch.rows_to_middle_seconds(height, args.row_us * 1e-6);
    for (frame, timed) in frames.iter_mut().zip(&timing.frames) {
        frame.exposure = exposure(epoch, timed, later, timing.exposure_seconds, timing.exposure_u_seconds);
    }
    Ok(frames)
}

fn no_clock() -> Failure {
    Failure::Job("the controller's clock could not be tied to UTC there: no frame can be placed".to_owned())
}

fn search(args: &Args, camera: &Camera, samples: &[LampFrame], start_guess: f64, times_may_slip: bool) -> LampSearch {
    let mut gaps: Vec<f64> = samples.windows(2).map(|pair| pair[1].clip_seconds - pair[0].clip_seconds).collect();
    gaps.sort_by(f64::total_cmp);
    let frame_seconds = gaps.get(gaps.len() / 2).copied().filter(|gap| *gap > 0.0).unwrap_or(camera.exposure_seconds);
    LampSearch {
        frame_seconds,
        start_guess,
        start_within: args.within,
        exposure_guess: camera.exposure_seconds.min(frame_seconds).max(1e-4),
        times_may_slip,
    }
}

fn from_video(args: &Args, reader: &RunReader, camera: &Camera) -> Result<Vec<FrameRow>, Failure> {
    let patch = patch(args)?;
    let path = args.video.as_ref().ok_or_else(|| Failure::Usage("--video is missing".to_owned()))?;
    let source: Box<dyn Read> = if path == Path::new("-") {
        Box::new(io::stdin().lock())
    } else {
        Box::new(
            File::open(path)
                .map_err(|error| Failure::Usage(format!("{} cannot be opened ({error})", path.display())))?,
        )
    };
    let clip = patch_brightness(BufReader::new(source), patch).map_err(Failure::job)?;
    let times = frame_times(args, clip.frame_seconds, clip.brightness.len())?;
    let samples: Vec<LampFrame> = times
        .iter()
        .zip(&clip.brightness)
        .map(|(clip_seconds, brightness)| LampFrame { clip_seconds: *clip_seconds, brightness: *brightness })
        .collect();
    let recording = job(Recording::open(reader))?;
    let (epoch, code) = lamp_code(reader, &recording)?;
    let start_guess = match &args.start {
        Some(text) => {
            let time: jiff::Timestamp =
                text.parse().map_err(|_| Failure::Usage(format!("--start {text} is no RFC 3339 time with zone")))?;
            let utc_ns = i64::try_from(time.as_nanosecond()).unwrap_or(i64::MAX);
            epoch.clock.device_us(utc_ns).ok_or_else(no_clock)? as f64 * 1e-6
        }
        None => {
            let end = epoch.clock.span_us().1 as f64 * 1e-6;
            let clip_seconds = times.last().copied().unwrap_or(0.0);
            0.5 * (code.start_seconds + end - clip_seconds)
        }
    };
    let search = search(args, camera, &samples, start_guess, args.times.is_none());
    let timing = time_frames(&code, &samples, &search).map_err(Failure::job)?;
    let later = patch.rows_to_middle_seconds(clip.height, args.row_us * 1e-6);
    let stem =
        path.file_stem().filter(|_| path != Path::new("-")).map_or("video".into(), |stem| stem.to_string_lossy());
    let rows = timing.frames.iter().enumerate().map(|(index, timed)| {
        let exposure = exposure(epoch, timed, later, timing.exposure_seconds, timing.exposure_u_seconds);
        FrameRow {
            frame: format!("{stem}-{:06}", index + 1),
            file: format!("{}#{}", path.display(), index + 1),
            noticed_utc_ns: exposure.as_ref().map_or(0, |exposure| exposure.end_utc_ns),
            sha256: String::new(),
            exposure: if timed.repeated { Err("the camera repeated the frame before".to_owned()) } else { exposure },
        }
    });
    let rows: Vec<FrameRow> = rows.collect();
    let mut writer = job(RunWriter::append(reader.path()))?;
    for row in &rows {
        job(writer.frame(row))?;
    }
    job(writer.commit())?;
    Ok(rows)
}

fn frame_times(args: &Args, frame_seconds: f64, count: usize) -> Result<Vec<f64>, Failure> {
    let Some(path) = &args.times else { return Ok((0..count).map(|index| index as f64 * frame_seconds).collect()) };
    let text = text::read(path, 64 << 20).map_err(Failure::usage)?;
    let mut times = Vec::new();
    for (line, number) in text.lines().enumerate().filter(|(_, line)| !line.trim().is_empty()) {
        let time: f64 = number.trim().parse().ok().filter(|time: &f64| time.is_finite()).ok_or_else(|| {
            Failure::Usage(format!("{}, line {}: `{number}` is no number of seconds", path.display(), line + 1))
        })?;
        if times.last().is_some_and(|last| time < *last) {
            return Err(Failure::Usage(format!("{}, line {}: times go back", path.display(), line + 1)));
        }
        times.push(time);
    }
    if times.len() != count {
        return Err(Failure::Usage(format!(
            "{} holds {} times, the video {count} frames",
            path.display(),
            times.len()
        )));
    }
    let first = times.first().copied().unwrap_or(0.0);
    Ok(times.into_iter().map(|time| time - first).collect())
}

/// The exposure of the rings, which a rolling shutter takes `later` seconds than the lamp's patch.
fn exposure(epoch: &Epoch, timed: &TimedFrame, later: f64, seconds: f64, seconds_u: f64) -> Result<Exposure, String> {
    let start_us = (timed.centre_seconds + later - 0.5 * seconds) * 1e6;
    let instant = (start_us >= 0.0).then(|| epoch.clock.utc(start_us as u64)).flatten();
    let instant = instant.ok_or_else(|| "the controller's clock could not be tied to UTC there".to_owned())?;
    Ok(Exposure {
        start_utc_ns: instant.utc_ns,
        end_utc_ns: instant.utc_ns + (seconds * 1e9).round() as i64,
        start_u_ns: (libm::hypot(timed.centre_u_seconds, 0.5 * seconds_u) * 1e9).round() as i64,
        length_u_ns: (seconds_u * 1e9).round() as i64,
        source: "lamp".to_owned(),
    })
}
