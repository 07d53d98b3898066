//! The simulated bench in virtual time, talked to by the real conversation: what a session does, without disk and clock.

use std::collections::VecDeque;

use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;
use ringvolt::{
    calibration::{Certificate, example},
    clock::{ClockMap, Exchange, MapLimits},
    link::{Conversation, Heard},
    profile::{self, Profile},
    reduction::{Epoch, Source, SourceError, is_interlock_change},
    run::rows::{Exposure, FrameRow},
    simulation::{self, Scenario, Setup, Shot, World},
};
use ringvolt_protocol::{Event, Gap, Hello, Reading, Slow, Status};

/// The built-in bench's profile.
pub fn example_profile() -> Profile {
    Profile::parse(&profile::example(), "the built-in bench").expect("the built-in bench is right")
}

/// A world like the built-in bench.
pub fn example_setup(certificate: &Certificate, scenario: Scenario, seed: u64) -> Setup {
    simulation::setup(&example_profile(), certificate, scenario, seed).expect("the built-in bench can be simulated")
}

/// The built-in certificate.
pub fn example_certificate() -> Certificate {
    example()
}

/// A world, the conversation with it, and all that came out.
pub struct VirtualBench {
    /// The world.
    pub world: World,
    /// The host's side.
    pub conversation: Conversation,
    /// Readings of the present epoch, in order.
    pub readings: Vec<Reading>,
    /// Its events.
    pub events: Vec<Event>,
    /// Its slow inputs.
    pub slow: Vec<Slow>,
    /// Its gaps.
    pub gaps: Vec<Gap>,
    /// The state it told last.
    pub status: Option<Status>,
    /// Hellos heard.
    pub hellos: Vec<Hello>,
    /// Frames completed.
    pub shots: Vec<Shot>,
    exchanges: Vec<Exchange>,
    zero_utc_ns: i64,
    rng: ChaCha8Rng,
    to_device: VecDeque<(i64, Vec<u8>)>,
    to_host: VecDeque<(i64, Vec<u8>)>,
    /// Whether bytes travel at all.
    pub connected: bool,
    acknowledged_ns: i64,
}

/// How often the host looks, nanoseconds.
const TURN_NS: i64 = 1_000_000;

impl VirtualBench {
    /// A bench at its zero, whose zero is this UTC.
    pub fn new(setup: &Setup, zero_utc_ns: i64) -> Self {
        Self {
            world: World::new(setup),
            conversation: Conversation::new(7, 0),
            readings: Vec::new(),
            events: Vec::new(),
            slow: Vec::new(),
            gaps: Vec::new(),
            status: None,
            hellos: Vec::new(),
            shots: Vec::new(),
            exchanges: Vec::new(),
            zero_utc_ns,
            rng: ChaCha8Rng::seed_from_u64(setup.seed ^ 0x11),
            to_device: VecDeque::new(),
            to_host: VecDeque::new(),
            connected: true,
            acknowledged_ns: 0,
        }
    }

    /// Lets so many seconds pass, with the delays of a USB link and acknowledgements five times a second.
    pub fn run_for(&mut self, seconds: f64) {
        let until_ns = self.world.now_ns() + (seconds * 1e9) as i64;
        while self.world.now_ns() < until_ns {
            self.turn();
        }
    }

    /// One look of the host.
    pub fn turn(&mut self) {
        let now_ns = self.world.now_ns();
        self.conversation.tick(now_ns);
        let out = self.conversation.outgoing().to_vec();
        self.conversation.written(out.len());
        if !out.is_empty() && self.connected {
            self.to_device.push_back((now_ns + self.rng.random_range(100_000..1_100_000), out));
        }
        let next_ns = now_ns + TURN_NS;
        while let Some((at_ns, bytes)) = self.to_device.front().filter(|(at, _)| *at <= next_ns) {
            self.world.advance_to(*at_ns);
            self.world.receive(bytes);
            self.to_device.pop_front();
        }
        self.world.advance_to(next_ns);
        let bytes = self.world.outgoing().to_vec();
        if !bytes.is_empty() && self.connected {
            self.world.sent(bytes.len());
            self.to_host.push_back((next_ns + self.rng.random_range(100_000..1_100_000), bytes));
        }
        self.hear(next_ns);
        self.shots.extend(std::iter::from_fn(|| self.world.take_shot()));
        if next_ns - self.acknowledged_ns > 200_000_000 && self.connected {
            self.acknowledged_ns = next_ns;
            let expected = self.conversation.expected();
            self.conversation.acknowledge(expected);
        }
    }

    fn hear(&mut self, now_ns: i64) {
        let mut heard = Vec::new();
        while let Some((_, bytes)) = self.to_host.front().filter(|(at, _)| *at <= now_ns) {
            // Read at the host's next look, which is later than they came.
            self.conversation.receive(bytes, now_ns + 200_000, &mut heard);
            self.to_host.pop_front();
        }
        for heard in heard {
            match heard {
                Heard::Hello { hello, resumed } => {
                    self.hellos.push(hello);
                    if !resumed {
                        self.readings.clear();
                        self.events.clear();
                        self.slow.clear();
                        self.exchanges.clear();
                    }
                }
                Heard::Reading(reading) => self.readings.push(reading),
                Heard::Event(event) => self.events.push(event),
                Heard::Slow(slow) => self.slow.push(slow),
                Heard::Gap(gap) => self.gaps.push(gap),
                Heard::Status(status) => self.status = Some(status),
                Heard::Echo(echo) => self.exchanges.push(Exchange {
                    asked_mono_ns: echo.asked_mono_ns,
                    answered_mono_ns: echo.answered_mono_ns,
                    received_us: echo.received_us,
                    sent_us: echo.sent_us,
                    utc_less_mono_ns: self.zero_utc_ns,
                }),
                Heard::Strobe(_) | Heard::Answer(_) => {}
            }
        }
    }

    /// What was recorded, as a source of stamps.
    pub fn recording(&self) -> Recorded<'_> {
        let clock = ClockMap::new(&self.exchanges, MapLimits::default());
        let epochs = clock.and_then(|clock| Epoch::new(1, clock)).into_iter().collect();
        Recorded { bench: self, epochs }
    }

    /// A frame as the camera states it.
    pub fn frame(&self, shot: &Shot, profile: &Profile) -> FrameRow {
        let start_utc_ns = self.zero_utc_ns + shot.stated_start_ns;
        let exposure = Exposure {
            start_utc_ns,
            end_utc_ns: start_utc_ns + (shot.stated_exposure_seconds * 1e9) as i64,
            start_u_ns: (profile.camera.start_u_seconds * 1e9) as i64,
            length_u_ns: (profile.camera.exposure_u_seconds * 1e9) as i64,
            source: "exif".to_owned(),
        };
        FrameRow {
            frame: shot.name.clone(),
            file: format!("{}.png", shot.name),
            noticed_utc_ns: exposure.end_utc_ns,
            sha256: String::new(),
            exposure: Ok(exposure),
        }
    }
}

/// What a virtual bench has told, as a source of stamps.
pub struct Recorded<'a> {
    bench: &'a VirtualBench,
    epochs: Vec<Epoch>,
}

impl Source for Recorded<'_> {
    fn epochs(&self) -> &[Epoch] {
        &self.epochs
    }

    fn readings(&self, _epoch: i64, from_us: u64, until_us: u64) -> Result<Vec<Reading>, SourceError> {
        let inside = |reading: &&Reading| {
            reading.time_us + u64::from(reading.duration_us) >= from_us && reading.time_us <= until_us
        };
        Ok(self.bench.readings.iter().filter(inside).copied().collect())
    }

    fn interlock_us(&self, _epoch: i64, from_us: u64, until_us: u64) -> Result<Vec<u64>, SourceError> {
        let inside = |event: &&Event| (from_us..=until_us).contains(&event.time_us) && is_interlock_change(&event.kind);
        Ok(self.bench.events.iter().filter(inside).map(|event| event.time_us).collect())
    }

    fn slow(&self, _epoch: i64, from_us: u64, until_us: u64) -> Result<Vec<Slow>, SourceError> {
        let inside = |slow: &&Slow| (from_us..=until_us).contains(&slow.time_us);
        Ok(self.bench.slow.iter().filter(inside).copied().collect())
    }
}
