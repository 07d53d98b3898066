//! The simulated bench in real time: pseudo-terminal, picture files, truth.

use std::{
    collections::VecDeque,
    fs, io,
    path::{Path, PathBuf},
    sync::mpsc::{self, Receiver, Sender},
    time::Duration,
};

use thiserror::Error;

use super::{
    camera::Shot,
    picture::{PictureFault, Tags, write_picture},
    port::{Port, PortError},
    render::{Optics, render},
    truth::Truth,
    world::{Setup, World},
};
use crate::clock::Clock;

/// Why the simulated bench stopped.
#[derive(Debug, Error)]
pub enum SimulationError {
    /// No pseudo-terminal.
    #[error(transparent)]
    Port(#[from] PortError),
    /// A frame could not be written.
    #[error(transparent)]
    Picture(#[from] PictureFault),
    /// Folder or truth table could not be written.
    #[error("{path} could not be written ({why}): check the path and the disk")]
    File {
        /// The file.
        path: String,
        /// What the system said.
        why: String,
    },
}

/// A simulated bench with everything around it.
#[derive(Clone, Debug)]
pub struct Bench {
    /// The world.
    pub setup: Setup,
    /// The view of the tube.
    pub optics: Optics,
    /// Where the pseudo-terminal is linked.
    pub link: PathBuf,
    /// Where frames go.
    pub frames: PathBuf,
    /// Where the truth goes.
    pub truth: PathBuf,
}

/// The world is never further behind the clock than this much work at a time, nanoseconds: bytes are passed on between.
const SLICE_NS: i64 = 5_000_000;

/// Runs a bench until `stop` answers `true`. Calls `ready` once the port is there.
///
/// # Errors
/// [`SimulationError`].
pub fn run(
    bench: &Bench,
    clock: &dyn Clock,
    ready: impl FnOnce(),
    stop: impl Fn() -> bool,
) -> Result<(), SimulationError> {
    let file = |path: &Path, error: io::Error| SimulationError::File {
        path: path.display().to_string(),
        why: error.to_string(),
    };
    fs::create_dir_all(&bench.frames).map_err(|error| file(&bench.frames, error))?;
    let mut truth = Truth::create(&bench.truth).map_err(|error| file(&bench.truth, error))?;
    let port = Port::open(&bench.link)?;
    ready();
    let zero_mono_ns = clock.mono_ns();
    let zero_utc_ns = clock.utc_ns();
    let (shots, waiting) = mpsc::channel();
    // Drawing takes tens of milliseconds: on a thread of its own it holds up neither the controller nor its clock.
    std::thread::scope(|scope| {
        let painter = scope.spawn(move || paint(bench, zero_utc_ns, &waiting));
        let outcome = turn(bench, clock, &port, zero_mono_ns, &shots, &stop, |shot| {
            truth.add(shot, zero_utc_ns).map_err(|error| file(&bench.truth, error))
        });
        drop(shots);
        let painted = painter.join().unwrap_or(Ok(()));
        outcome.and(painted)
    })
}

fn turn(
    bench: &Bench,
    clock: &dyn Clock,
    port: &Port,
    zero_mono_ns: i64,
    shots: &Sender<Shot>,
    stop: &impl Fn() -> bool,
    mut tell: impl FnMut(&Shot) -> Result<(), SimulationError>,
) -> Result<(), SimulationError> {
    let lost = |error: io::Error| PortError::System { path: bench.link.display().to_string(), why: error.to_string() };
    let mut world = World::new(&bench.setup);
    let mut arrived: VecDeque<(i64, Vec<u8>)> = VecDeque::new();
    let mut buffer = [0; 1_024];
    while !stop() {
        let count = port.read(&mut buffer).map_err(lost)?;
        let now_ns = clock.mono_ns() - zero_mono_ns;
        if count > 0 {
            arrived.push_back((now_ns, buffer[..count].to_vec()));
        }
        // The world may lag behind the clock: bytes must not reach the controller before the time they really came, or
        // its answers would claim that questions were received before they were asked.
        let slice_ns = now_ns.min(world.now_ns() + SLICE_NS);
        let until_ns = arrived.front().map_or(slice_ns, |(at, _)| slice_ns.min(*at));
        world.advance_to(until_ns);
        while arrived.front().is_some_and(|(at, _)| world.is_at(*at)) {
            if let Some((_, bytes)) = arrived.pop_front() {
                world.receive(&bytes);
            }
        }
        let sent = port.write(world.outgoing()).map_err(lost)?;
        world.sent(sent);
        while let Some(shot) = world.take_shot() {
            tell(&shot)?;
            // A painter that has stopped tells its own error at the end.
            if shots.send(shot).is_err() {
                return Ok(());
            }
        }
        if world.now_ns() + SLICE_NS > now_ns && count == 0 {
            clock.sleep(Duration::from_micros(500));
        }
    }
    Ok(())
}

fn paint(bench: &Bench, zero_utc_ns: i64, shots: &Receiver<Shot>) -> Result<(), SimulationError> {
    for shot in shots {
        let grey = render(&bench.optics, &shot, bench.setup.seed);
        let tags =
            Tags { start_utc_ns: zero_utc_ns + shot.stated_start_ns, exposure_seconds: shot.stated_exposure_seconds };
        write_picture(&bench.frames, &shot.name, (bench.optics.width, bench.optics.height), &grey, &tags)?;
    }
    Ok(())
}
