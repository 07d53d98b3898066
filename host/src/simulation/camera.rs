//! The camera: exposures on a clock of its own, and what it says about their time.

use rand_chacha::ChaCha8Rng;

use super::draws::{Part, normal, stream, within};

/// From its start to the beginning of its first exposure, seconds.
pub(super) const FIRST_FRAME_SECONDS: f64 = 0.01;
/// The camera's clock is set right this often, nanoseconds; in between it runs away by its rate error.
const SET_RIGHT_NS: i64 = 60_000_000_000;
/// Its clock's rate error is up to this, ppm.
const CLOCK_PPM: f64 = 20.0;

/// How the camera behaves.
#[derive(Clone, Debug, PartialEq)]
pub struct CameraSetup {
    /// Time from frame to frame, seconds.
    pub period_seconds: f64,
    /// Exposure, seconds.
    pub exposure_seconds: f64,
    /// Largest scatter of the stated start about the true one, seconds; the rate error of its clock comes on top.
    pub start_scatter_seconds: f64,
    /// Standard deviation over benches of the true exposure from the stated one, seconds; each bench keeps its own.
    pub exposure_off_seconds: f64,
    /// After a change the screen still shows the old picture for so long, seconds.
    pub settle_seconds: f64,
    /// Whether its strobe line is connected to the controller.
    pub strobe: bool,
    /// Whether voltages are kept for pictures; without them frames carry their times and truth only.
    pub pictures: bool,
}

impl Default for CameraSetup {
    fn default() -> Self {
        Self {
            period_seconds: 0.4,
            exposure_seconds: 0.2,
            start_scatter_seconds: 1e-3,
            exposure_off_seconds: 2e-4,
            settle_seconds: 0.3,
            strobe: true,
            pictures: true,
        }
    }
}

/// What is really true of one frame.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct ShotTruth {
    /// Start of the exposure, nanoseconds of true time.
    pub start_ns: i64,
    /// Its end.
    pub end_ns: i64,
    /// Mean true accelerating voltage over it, volts.
    pub volts: f64,
    /// Whether a disturbance was planted in it or shortly before.
    pub disturbed: bool,
}

/// Light of one voltage in a picture.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Light {
    /// Accelerating voltage, volts.
    pub volts: f64,
    /// Its share of the exposure; less than 1 in all where the beam was off for a part.
    pub share: f64,
}

/// One frame, ready to be drawn.
#[derive(Clone, Debug, PartialEq)]
pub struct Shot {
    /// Its name: the file's stem.
    pub name: String,
    /// Number, from 1.
    pub number: u64,
    /// Start the camera claims, nanoseconds of true time.
    pub stated_start_ns: i64,
    /// Exposure the camera claims, seconds.
    pub stated_exposure_seconds: f64,
    /// What the screen shone with, afterglow and all; empty where no pictures are wanted.
    pub light: Vec<Light>,
    /// Share of the exposure in which the sync lamp was lit.
    pub lamp: f64,
    /// What is really true.
    pub truth: ShotTruth,
}

/// One exposure as it truly was and as it is stated, true nanoseconds from the beginning of the world.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) struct Exposed {
    /// Counts frames from 1.
    pub number: u64,
    /// True start.
    pub start_ns: i64,
    /// True end.
    pub end_ns: i64,
    /// The start that the camera states.
    pub stated_start_ns: i64,
}

/// What the shutter does next.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Shutter {
    /// An exposure begins.
    Opens,
    /// An exposure ended.
    Closes(Exposed),
    /// An exposure ended whose frame the camera loses.
    Loses,
}

/// The camera.
#[derive(Clone, Debug)]
pub(super) struct Camera {
    setup: CameraSetup,
    rng: ChaCha8Rng,
    running: bool,
    period_ns: i64,
    exposure_ns: i64,
    clock_ppm: f64,
    next_start_ns: i64,
    open_since_ns: Option<i64>,
    number: u64,
    lie_ns: i64,
    lose: u64,
}

impl Camera {
    /// Stopped.
    pub(super) fn new(setup: CameraSetup, seed: u64) -> Self {
        let mut rng = stream(seed, Part::Camera);
        // The length is off by some tenths of a millisecond, always the same: the shutter's own.
        let off = (setup.exposure_off_seconds * normal(&mut rng)).clamp(-0.1, 0.1) * 1e9;
        let off = off.max(-0.2e9 * setup.exposure_seconds);
        let clock_ppm = within(&mut rng, CLOCK_PPM);
        Self {
            period_ns: (1e9 * setup.period_seconds) as i64,
            exposure_ns: (1e9 * setup.exposure_seconds + off) as i64,
            clock_ppm,
            setup,
            rng,
            running: false,
            next_start_ns: 0,
            open_since_ns: None,
            number: 0,
            lie_ns: 0,
            lose: 0,
        }
    }

    pub(super) fn start(&mut self, now_ns: i64) {
        if !self.running {
            self.running = true;
            self.next_start_ns = now_ns + (1e9 * FIRST_FRAME_SECONDS) as i64;
        }
    }

    /// Stops after the exposure under way.
    pub(super) fn stop(&mut self) {
        self.running = false;
    }

    /// From now on every stated start is off by so much more.
    pub(super) fn lie(&mut self, off_ns: i64) {
        self.lie_ns = off_ns;
    }

    /// Loses the next frames.
    pub(super) fn lose(&mut self, frames: u64) {
        self.lose += frames;
    }

    /// Whether voltages shall be gathered for a picture.
    pub(super) const fn wants_light(&self) -> bool {
        self.setup.pictures && (self.running || self.open_since_ns.is_some())
    }

    /// Whether its stated times are planted to be wrong.
    pub(super) const fn lies(&self) -> bool {
        self.lie_ns != 0
    }

    /// How it behaves.
    pub(super) const fn setup(&self) -> &CameraSetup {
        &self.setup
    }

    /// When the shutter moves next.
    pub(super) fn next_move_ns(&self) -> i64 {
        match self.open_since_ns {
            Some(since_ns) => since_ns + self.exposure_ns,
            None if self.running => self.next_start_ns,
            None => i64::MAX,
        }
    }

    /// Moves the shutter at its time.
    pub(super) fn move_shutter(&mut self) -> Shutter {
        let now_ns = self.next_move_ns();
        let Some(start_ns) = self.open_since_ns.take() else {
            self.open_since_ns = Some(now_ns);
            self.next_start_ns += self.period_ns;
            return Shutter::Opens;
        };
        self.number += 1;
        let jitter_ns = within(&mut self.rng, 1e9 * self.setup.start_scatter_seconds) as i64;
        if self.lose > 0 {
            self.lose -= 1;
            return Shutter::Loses;
        }
        let since_set_ns = start_ns % SET_RIGHT_NS;
        let clock_ns = (since_set_ns as f64 * 1e-6 * self.clock_ppm) as i64;
        Shutter::Closes(Exposed {
            number: self.number,
            start_ns,
            end_ns: now_ns,
            stated_start_ns: start_ns + jitter_ns + clock_ns + self.lie_ns,
        })
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn exposures(camera: &mut Camera, count: usize) -> Vec<Exposed> {
        std::iter::from_fn(|| Some(camera.move_shutter()))
            .filter_map(|shutter| match shutter {
                Shutter::Closes(exposed) => Some(exposed),
                _ => None,
            })
            .take(count)
            .collect()
    }

    #[test]
    fn exposures_follow_its_period_and_are_stated_within_two_milliseconds() {
        let mut camera = Camera::new(CameraSetup::default(), 6);
        assert_eq!(camera.next_move_ns(), i64::MAX);
        camera.start(4_000_000_000);
        let frames = exposures(&mut camera, 500);
        assert_eq!(frames[0].start_ns, 4_010_000_000);
        for two in frames.windows(2) {
            assert_eq!(two[1].start_ns - two[0].start_ns, 400_000_000);
            assert_eq!(two[1].number, two[0].number + 1);
        }
        let worst = frames.iter().map(|f| (f.stated_start_ns - f.start_ns).abs()).max().unwrap();
        assert!((500_000..2_200_000).contains(&worst), "{worst}");
        assert!(frames.iter().all(|f| (f.end_ns - f.start_ns - 200_000_000).abs() <= 1_000_000));
    }

    #[test]
    fn it_stops_lies_and_loses_frames_when_told() {
        let mut camera =
            Camera::new(CameraSetup { period_seconds: 0.1, exposure_seconds: 0.05, ..CameraSetup::default() }, 6);
        camera.start(0);
        camera.lose(2);
        let first = exposures(&mut camera, 1)[0];
        assert_eq!(first.number, 3);
        camera.lie(5_000_000_000);
        let lied = exposures(&mut camera, 1)[0];
        assert!(lied.stated_start_ns - lied.start_ns > 4_900_000_000);
        camera.stop();
        assert_eq!(camera.next_move_ns(), i64::MAX);
    }
}
