//! The world as a whole, in virtual time.

use ringvolt_protocol::{
    Ack, Decoder, HostHello, PROTOCOL_VERSION, Reading, ReadingFlags, ToDevice, ToHost, Trip, encode,
};

use super::*;
use crate::{
    calibration::Channel as Sense,
    simulation::{Light, example_setup},
};

const MS: i64 = 1_000_000;

/// A host that says hello, acknowledges everything and keeps readings.
struct Host {
    decoder: Decoder,
    readings: Vec<Reading>,
    trips: Vec<Trip>,
    bytes: Vec<u8>,
    next_ns: i64,
    ack: Ack,
}

impl Host {
    fn new() -> Self {
        Self {
            decoder: Decoder::new(),
            readings: Vec::new(),
            trips: Vec::new(),
            bytes: Vec::new(),
            next_ns: 0,
            ack: Ack::default(),
        }
    }

    fn say(world: &mut World, message: &ToDevice) {
        let mut frame = [0; ringvolt_protocol::MAX_FRAME];
        let length = encode(message, &mut frame).unwrap();
        world.receive(&frame[..length]);
    }

    fn serve(&mut self, world: &mut World) {
        let bytes = world.take_outgoing();
        for byte in &bytes {
            match self.decoder.push::<ToHost>(*byte) {
                Some(ToHost::Reading(reading)) => {
                    self.ack.readings = reading.seq + 1;
                    self.readings.push(reading);
                }
                Some(ToHost::Event(event)) => {
                    self.ack.events = event.seq + 1;
                    if let ringvolt_protocol::EventKind::Tripped { trip, .. } = event.kind {
                        self.trips.push(trip);
                    }
                }
                Some(ToHost::Slow(slow)) => self.ack.slow = slow.seq + 1,
                Some(ToHost::Strobe(strobe)) => self.ack.strobes = strobe.seq + 1,
                _ => {}
            }
        }
        self.bytes.extend(bytes);
        if world.now_ns() >= self.next_ns {
            self.next_ns = world.now_ns() + 250 * MS;
            Self::say(world, &ToDevice::Ack(self.ack));
        }
    }

    /// Passes time up to `seconds`, in steps of 20 ms.
    fn pass(&mut self, world: &mut World, seconds: f64) {
        while world.now_ns() < ns(seconds) {
            world.advance_to((world.now_ns() + 20 * MS).min(ns(seconds)));
            self.serve(world);
        }
    }
}

fn begin(setup: &Setup) -> (World, Host) {
    let mut world = World::new(setup);
    world.advance_to(50 * MS);
    Host::say(&mut world, &ToDevice::Hello(HostHello { protocol: PROTOCOL_VERSION, host: 1 }));
    (world, Host::new())
}

fn shots(world: &mut World) -> Vec<Shot> {
    std::iter::from_fn(|| world.take_shot()).collect()
}

#[test]
fn one_seed_is_one_world() {
    let run = |seed: u64| {
        let setup = example_setup(Scenario::demonstration(20.0), seed);
        let (mut world, mut host) = begin(&setup);
        host.pass(&mut world, 8.0);
        (host.bytes, shots(&mut world))
    };
    let (one, again, other) = (run(1), run(1), run(2));
    assert!(one == again);
    assert!(one.0.len() > 20_000 && one.0 != other.0);
}

/// What a host says, and when, changes nothing of what the world draws.
#[test]
fn the_world_does_not_depend_on_how_the_host_talks() {
    let setup = example_setup(Scenario::steady(2_500.0), 3);
    let volts = |every_ms: i64| {
        let (mut world, mut host) = begin(&setup);
        let mut volts = Vec::new();
        for step in 1..600_i64 {
            world.advance_to((step * 10).max(60) * MS);
            if step * 10 % every_ms == 0 {
                host.serve(&mut world);
            }
            volts.push(world.true_volts());
        }
        volts
    };
    assert!(volts(10) == volts(50));
}

#[test]
fn the_usual_start_brings_the_voltage_up_and_readings_tell_it() {
    let setup = example_setup(Scenario::steady(2_500.0), 4);
    let (mut world, mut host) = begin(&setup);
    host.pass(&mut world, 3.6);
    assert!(world.is_powered(), "{:?}", world.controller().status());
    assert!((world.true_volts() / 2_500.0 - 1.0).abs() < 2e-3, "{}", world.true_volts());
    host.pass(&mut world, 6.0);
    // The host was not there yet when the controller began; nothing else happened.
    assert_eq!(host.trips, [Trip::HostLost]);
    // 100 readings a second, none lost.
    assert!(host.readings.windows(2).all(|two| two[1].seq == two[0].seq + 1));
    assert!((590..=600).contains(&host.readings.len()), "{}", host.readings.len());
    let late = &host.readings[500..];
    assert!(late.iter().all(|reading| reading.flags.contains(ReadingFlags::PERMIT)));
    let mean = |codes: fn(&Reading) -> f64| late.iter().map(codes).sum::<f64>() / late.len() as f64;
    let certificate = &setup.certificate;
    let celsius = Some(world.true_celsius());
    let sense = certificate.volts(Sense::Sense, mean(|r| r.sense.mean().unwrap()), celsius);
    let cross = certificate.volts(Sense::Cross, mean(|r| r.cross.mean().unwrap()), celsius);
    // Four standard uncertainties at 2.5 kV: 4 x (150 ppm + 0.2 V + drift ...) is 1.8 V; wander comes on top.
    assert!((sense - 2_500.0).abs() < 4.0 && (sense - cross).abs() < 1.0, "{sense} {cross}");
}

#[test]
fn codes_give_the_true_voltage_within_the_certificate() {
    // Readings over two seconds against the mean of true voltage over the same time: what is left is calibration.
    for seed in 10..20 {
        let setup = example_setup(Scenario::steady(3_000.0), seed);
        let (mut world, mut host) = begin(&setup);
        host.pass(&mut world, 4.0);
        host.readings.clear();
        shots(&mut world);
        let (mut sum, mut count) = (0.0, 0.0);
        while world.now_ns() < 6_000 * MS {
            world.advance_to(world.now_ns() + MS);
            host.serve(&mut world);
            sum += world.true_volts();
            count += 1.0;
        }
        let code = host.readings.iter().map(|r| r.sense.mean().unwrap()).sum::<f64>() / host.readings.len() as f64;
        let day = setup.certificate.issued_day() + 183;
        let celsius = Some(world.true_celsius());
        let volts = setup.certificate.volts(Sense::Sense, code, celsius);
        let u = crate::calibration::combined_volts(&setup.certificate.common_u(volts, code, celsius, day));
        assert!((volts - sum / count).abs() < 4.0 * u, "{seed}: {volts} {} {u}", sum / count);
    }
}

#[test]
fn frames_come_at_their_pace_and_planted_changes_mark_them() {
    let setup = example_setup(Scenario::demonstration(40.0), 5);
    let (mut world, mut host) = begin(&setup);
    host.pass(&mut world, 40.0);
    let shots = shots(&mut world);
    assert!((85..=90).contains(&shots.len()), "{}", shots.len());
    let disturbed = shots.iter().filter(|shot| shot.truth.disturbed).count();
    assert!((12..=35).contains(&disturbed), "{disturbed}");
    for happening in &setup.scenario.happenings {
        let at_ns = ns(happening.at_seconds);
        if disturbs(&happening.what) || happening.what == What::OpenDoor {
            for shot in shots.iter().filter(|shot| (shot.truth.start_ns..shot.truth.end_ns).contains(&at_ns)) {
                assert!(shot.truth.disturbed, "{happening:?}");
            }
        }
    }
    assert_eq!(host.trips, [Trip::HostLost, Trip::LoopOpened]);
    // Undisturbed frames are steady: their light is within a per mille.
    for shot in shots.iter().filter(|shot| !shot.truth.disturbed) {
        let near = |light: &&Light| (light.volts / shot.truth.volts - 1.0).abs() < 1e-3;
        let steady: f64 = shot.light.iter().filter(near).map(|light| light.share).sum();
        assert!(steady > 0.98, "{shot:?}");
    }
    assert!(shots.last().unwrap().truth.volts > 4_480.0);
}

#[test]
fn the_truth_of_a_ramp_is_its_middle() {
    let mut happenings = Scenario::start(0.3, 2_500.0);
    happenings.push((4.0, What::StartCamera));
    happenings.push((4.5, What::Ramp { volts: 3_500.0, volts_per_second: 200.0 }));
    let mut setup = example_setup(Scenario::of(happenings), 6);
    setup.supply = SupplySetup {
        ripple_fraction: 0.0,
        hum_fraction: 0.0,
        wander_fraction: 0.0,
        warm_up_fraction: 0.0,
        ..setup.supply
    };
    let (mut world, mut host) = begin(&setup);
    host.pass(&mut world, 9.0);
    let ramping: Vec<Shot> =
        shots(&mut world).into_iter().filter(|shot| (4_600 * MS..9_000 * MS).contains(&shot.truth.start_ns)).collect();
    assert!(ramping.len() >= 10);
    for shot in ramping {
        let middle = (shot.truth.start_ns + shot.truth.end_ns) as f64 * 0.5e-9;
        // The regulator follows 1.9 ms late.
        let expected = 2_500.0 + 200.0 * (middle - 4.5 - 1.9e-3);
        assert!((shot.truth.volts - expected).abs() < 0.02, "{} {expected}", shot.truth.volts);
        assert!(shot.truth.disturbed);
    }
}

/// Each fault of a string, a converter or the chain leads to its trip, and the permit is withdrawn.
#[test]
fn faults_trip_the_real_controller() {
    let sense = Which::Sense;
    // A ratio that is wrong shows as a step or as a disagreement, whichever is seen first.
    let ratio = &[Trip::RatioChanged, Trip::SensesDisagree][..];
    for (what, trips) in [
        (What::StringFactor { which: sense, factor: 0.0 }, &[Trip::SenseLost][..]),
        (What::StringFactor { which: Which::Cross, factor: 0.0 }, &[Trip::CrossLost]),
        (What::StringFactor { which: sense, factor: 1.003 }, ratio),
        (What::StringFactor { which: sense, factor: 10.0 / 9.0 }, ratio),
        (What::OverRange { which: sense }, &[Trip::TapOverRange]),
        (What::Silent { which: Which::Cross }, &[Trip::CrossSilent]),
        (What::Frozen { which: sense }, &[Trip::SenseFrozen]),
        (What::SetVolts { volts: 5_600.0 }, &[Trip::OverVoltage]),
        (What::Arc, &[Trip::Arc]),
        (What::OpenDoor, &[Trip::LoopOpened]),
        // One loop alone withdraws the permit as fast, and is named when the other has not followed.
        (What::OpenLoopA, &[Trip::LoopsDisagree]),
    ] {
        let (mut world, mut host) = begin(&example_setup(Scenario::steady(2_500.0), 7));
        host.pass(&mut world, 5.0);
        assert!(world.is_powered());
        world.happen(What::Leave);
        world.happen(what);
        host.pass(&mut world, 8.0);
        assert!(trips.iter().any(|trip| host.trips.contains(trip)), "{what:?}: {:?}", host.trips);
        assert!(!world.is_powered(), "{what:?}");
    }
}

#[test]
fn a_welded_contactor_keeps_the_mains_on_and_is_told() {
    let (mut world, mut host) = begin(&example_setup(Scenario::steady(2_500.0), 8));
    host.pass(&mut world, 5.0);
    world.happen(What::WeldContactor);
    world.happen(What::Leave);
    world.happen(What::OpenDoor);
    host.pass(&mut world, 6.0);
    assert!(host.trips.contains(&Trip::ContactorWelded), "{:?}", host.trips);
    assert!(world.is_powered() && world.true_volts() > 2_400.0);
}

#[test]
fn a_restart_begins_a_new_epoch_and_drops_the_permit() {
    let (mut world, mut host) = begin(&example_setup(Scenario::steady(2_500.0), 9));
    host.pass(&mut world, 5.0);
    world.happen(What::Leave);
    world.restart(ResetCause::Watchdog);
    world.advance_to(5_300 * MS);
    assert!(!world.is_powered());
    assert!(world.true_device_us(5_300 * MS) < 301_000);
}

#[test]
fn someone_who_attends_starts_the_tube_for_a_host_that_comes_late() {
    let mut world = World::new(&example_setup(Scenario::demonstration(40.0), 10));
    world.advance_to(6_000 * MS);
    assert!(!world.is_powered());
    Host::say(&mut world, &ToDevice::Hello(HostHello { protocol: PROTOCOL_VERSION, host: 1 }));
    let mut host = Host::new();
    host.pass(&mut world, 9.0);
    assert!(world.is_powered(), "{:?}", world.controller().status());
}

#[test]
fn nobody_reading_blocks_nothing() {
    let mut world = World::new(&example_setup(Scenario::steady(2_500.0), 11));
    Host::say(&mut world, &ToDevice::Hello(HostHello { protocol: PROTOCOL_VERSION, host: 1 }));
    world.advance_to(20_000 * MS);
    assert!(!world.outgoing().is_empty() && world.outgoing().len() <= 1_024);
    world.happen(What::Unplug);
    assert!(world.outgoing().is_empty());
}

/// Prints how fast virtual time passes; asserts nothing about it, since machines differ.
#[test]
fn an_hour_passes_without_a_false_trip_and_with_every_reading() {
    let mut setup = example_setup(Scenario::steady(3_000.0), 12);
    setup.camera.pictures = false;
    let (mut world, mut host) = begin(&setup);
    let began = std::time::Instant::now();
    let mut count = 0;
    for second in 1..=3_600 {
        host.pass(&mut world, f64::from(second));
        count += host.readings.len();
        host.readings.clear();
        host.bytes.clear();
        shots(&mut world);
    }
    println!("an hour of virtual time in {:.2} s", began.elapsed().as_secs_f64());
    assert_eq!(host.trips, [Trip::HostLost]);
    // The crystal is at most 40 ppm off, and the last windows are still open.
    assert!((359_980..=360_015).contains(&count), "{count}");
    assert!(world.is_powered());
}
