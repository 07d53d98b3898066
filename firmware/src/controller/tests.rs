//! The whole controller on a bench of numbers: contacts, two converters and a host, in virtual time.

extern crate std;
use std::{boxed::Box, println, vec::Vec};

use proptest::prelude::*;
use ringvolt_protocol::{Ack, CodeToVolts, Decoder, DeviceKind, MAX_FRAME, PermitState, TRIPS, TripRow, encode};

use super::*;
use crate::io::{Conversion, Edge, OptionalInputs};

const DEVICE: [u8; 8] = *b"a bench.";
/// Volts a code: 2500 V are 8000 codes.
const SLOPE: f64 = 0.3125;

fn certificate() -> CertificateRecord {
    let line = CodeToVolts { slope_pv: 312_500_000_000, code_max: 16_000, ..CodeToVolts::default() };
    CertificateRecord {
        hash: CertificateHash([7; 8]),
        device: DEVICE,
        sense: line,
        cross: line,
        difference_ppm: 300,
        difference_mv: 200,
        expires_day: 30_000,
    }
}

fn settings() -> SettingsRecord {
    SettingsRecord { beam_limit_na: 200_000, bleed_ms: 1_000, ..SettingsRecord::default() }
}

fn boot() -> Boot {
    Boot {
        device: DEVICE,
        kind: DeviceKind::Simulated,
        epoch: 1,
        reset_cause: ResetCause::PowerOn,
        certificate: Some(certificate()),
        settings: Ok(Some(settings())),
    }
}

/// A small generator of its own: the same numbers on every machine.
#[derive(Clone)]
struct Draw(u64);

impl Draw {
    fn unit(&mut self) -> f64 {
        self.0 ^= self.0 << 13;
        self.0 ^= self.0 >> 7;
        self.0 ^= self.0 << 17;
        (self.0 >> 11) as f64 / (1u64 << 53) as f64
    }

    /// Nearly normal, standard deviation 1: twelve uniform numbers.
    fn normal(&mut self) -> f64 {
        (0..12).map(|_| self.unit()).sum::<f64>() - 6.0
    }
}

struct Converter {
    channel: Channel,
    period_us: f64,
    next_us: f64,
    gain: f64,
    noise: f64,
    stuck: Option<i16>,
    silent: bool,
}

/// The bench.
struct Rig {
    controller: Controller<Box<Journal>>,
    now_us: u64,
    contacts: Contacts,
    /// Contactors follow the permit unless they are told otherwise.
    contactors: Option<bool>,
    volts: f64,
    /// Volts that the supply gives while the contactors are in.
    set_volts: f64,
    converters: [Converter; 2],
    optional: OptionalInputs,
    host_talks: bool,
    to_device: Vec<u8>,
    decoder: Decoder,
    heard: Vec<ToHost>,
    draw: Draw,
    permit_edges: Vec<u64>,
    outputs: Outputs,
}

impl Rig {
    fn new(boot: Boot, seed: u64) -> Self {
        let converter = |channel, period_us| Converter {
            channel,
            period_us,
            next_us: 900.0,
            gain: 1.0,
            noise: 1.0,
            stuck: None,
            silent: false,
        };
        Self {
            controller: Controller::new(boot, Box::new(Journal::new())),
            now_us: 0,
            contacts: AT_REST,
            contactors: None,
            volts: 0.0,
            set_volts: 2_500.0,
            converters: [converter(Channel::Sense, 1_163.0), converter(Channel::Cross, 1_270.0)],
            optional: OptionalInputs { beam_na: Some(50_000), comparator: Some(false), ..OptionalInputs::default() },
            host_talks: true,
            to_device: Vec::new(),
            decoder: Decoder::new(),
            heard: Vec::new(),
            draw: Draw(seed.wrapping_mul(0x9e37_79b9_7f4a_7c15) | 1),
            permit_edges: Vec::new(),
            outputs: Outputs { permit: false, hv_lamp_dark: false, lamp: false, led: false, store: None },
        }
    }

    fn say(&mut self, message: &ToDevice) {
        let mut frame = [0; MAX_FRAME];
        let length = encode(message, &mut frame).unwrap();
        self.to_device.extend_from_slice(&frame[..length]);
    }

    fn is_given(&self) -> bool {
        self.controller.interlock().is_given()
    }

    fn is_latched(&self, trip: Trip) -> bool {
        self.controller.interlock().latched().contains(trip)
    }

    fn convert(&mut self) -> Vec<Conversion> {
        let mut conversions = Vec::new();
        for converter in &mut self.converters {
            while converter.next_us <= self.now_us as f64 {
                let noisy = self.volts * converter.gain / SLOPE + converter.noise * self.draw.normal();
                let code = converter.stuck.unwrap_or(noisy.round().clamp(-32_768.0, 32_767.0) as i16);
                if !converter.silent {
                    conversions.push(Conversion {
                        channel: converter.channel,
                        time_us: converter.next_us as u64,
                        code,
                    });
                }
                converter.next_us += converter.period_us;
            }
        }
        conversions
    }

    fn poll_with(&mut self, edges: &[Edge]) {
        self.now_us += 500;
        let conversions = self.convert();
        if self.host_talks && self.now_us.is_multiple_of(500_000) {
            self.say(&ToDevice::Heartbeat);
        }
        let received = core::mem::take(&mut self.to_device);
        let inputs = Inputs {
            edges,
            conversions: &conversions,
            optional: self.optional,
            received: &received,
            ..Inputs::quiet(self.contacts)
        };
        let before = self.outputs.permit;
        self.outputs = self.controller.poll(self.now_us, &inputs);
        if self.outputs.permit != before {
            self.permit_edges.push(self.now_us);
        }
        let given = self.is_given();
        self.contacts.contactors_released = self.contactors.unwrap_or(!given);
        let source = if self.contacts.contactors_released { 0.0 } else { self.set_volts };
        // Rises within some milliseconds, bleeds with one second.
        let time_us = if source > self.volts { 5e3 } else { 1e6 };
        self.volts += (source - self.volts) * 500.0 / time_us;
        let taken = self.controller.outgoing().len().min(64);
        let bytes = self.controller.outgoing()[..taken].to_vec();
        self.heard.extend(bytes.iter().filter_map(|byte| self.decoder.push::<ToHost>(*byte)));
        self.controller.sent(taken);
    }

    fn run_us(&mut self, us: u64) {
        for _ in 0..us / 500 {
            self.poll_with(&[]);
        }
    }

    fn hello(&mut self) {
        self.say(&ToDevice::Hello(HostHello { protocol: PROTOCOL_VERSION, host: 1 }));
        self.run_us(2_000);
    }

    fn cycle_loops(&mut self) {
        (self.contacts.loop_a_closed, self.contacts.loop_b_closed) = (false, false);
        self.run_us(20_000);
        (self.contacts.loop_a_closed, self.contacts.loop_b_closed) = (true, true);
        self.run_us(20_000);
    }

    fn press(&mut self, us: u64) {
        self.contacts.button_pressed = true;
        self.run_us(us);
        self.contacts.button_pressed = false;
        self.run_us(2_000);
    }

    /// A person puts the bench into operation.
    fn start(&mut self) {
        self.run_us(1_500_000);
        self.hello();
        self.cycle_loops();
        self.press(200_000);
        assert!(self.is_given(), "latched {:?}", self.controller.interlock().latched().iter().collect::<Vec<_>>());
    }

    fn started(seed: u64) -> Self {
        let mut rig = Self::new(boot(), seed);
        rig.start();
        rig.run_us(2_500_000);
        assert!(rig.is_given());
        rig
    }
}

#[test]
fn a_person_starts_it_and_the_square_wave_runs() {
    let mut rig = Rig::new(boot(), 1);
    rig.start();
    assert_eq!(rig.controller.status().permit, PermitState::Given);
    rig.permit_edges.clear();
    rig.run_us(100_000);
    assert_eq!(rig.permit_edges.len(), 200);
    assert!(rig.permit_edges.windows(2).all(|pair| pair[1] - pair[0] == 500));
}

#[test]
fn neither_loops_nor_button_alone_start_it() {
    let mut rig = Rig::new(boot(), 2);
    rig.run_us(1_500_000);
    rig.hello();
    rig.press(200_000);
    assert!(!rig.is_given());
    assert_eq!(rig.controller.status().permit, PermitState::AwaitingLoopTest);
    rig.cycle_loops();
    rig.run_us(10_000_000);
    assert!(!rig.is_given());
    assert_eq!(rig.controller.status().permit, PermitState::AwaitingPress);
    for us in [20_000, 3_200_000, 6_000_000] {
        rig.press(us);
        assert!(!rig.is_given(), "a press of {us} us is not a press for a reset");
    }
    rig.press(60_000);
    assert!(rig.is_given());
}

#[test]
fn without_a_certificate_only_the_long_press_starts_it() {
    let mut rig = Rig::new(Boot { certificate: None, ..boot() }, 3);
    rig.run_us(1_500_000);
    rig.hello();
    rig.cycle_loops();
    rig.press(200_000);
    assert!(!rig.is_given());
    rig.press(6_000_000);
    assert!(rig.is_given());
    rig.run_us(200_000);
    let status = rig.controller.status();
    assert!(status.uncalibrated && status.hv_present && status.sense_mv.is_none());
    rig.run_us(2_000_000);
    assert!(rig.is_given());
}

/// Issue text: worst case over 1000 random phases at most 1 ms. Edges are caught by interrupt, as on the board.
#[test]
fn an_open_loop_takes_the_permit_within_a_millisecond() {
    let mut rig = Rig::started(4);
    let mut worst_us = 0;
    for trial in 0..1_000 {
        if !rig.is_given() {
            rig.run_us(150_000);
            rig.cycle_loops();
            rig.press(60_000);
        }
        let opened_us = rig.now_us + 1 + (rig.draw.unit() * 498.0) as u64;
        let (a, b) = [(true, true), (true, false), (false, true)][trial % 3];
        let edge = |line| Edge { line, active: false, time_us: opened_us };
        let mut edges = Vec::new();
        if a {
            rig.contacts.loop_a_closed = false;
            edges.push(edge(Line::LoopA));
        }
        if b {
            rig.contacts.loop_b_closed = false;
            edges.push(edge(Line::LoopB));
        }
        assert!(rig.is_given());
        rig.poll_with(&edges);
        while rig.is_given() {
            rig.poll_with(&[]);
        }
        let level = rig.outputs.permit;
        worst_us = worst_us.max(rig.now_us - opened_us);
        rig.permit_edges.clear();
        rig.run_us(600_000);
        assert!(rig.permit_edges.is_empty() && rig.outputs.permit == level, "no edge after the withdrawal");
        let expected = if a && b { Trip::LoopOpened } else { Trip::LoopsDisagree };
        assert!(rig.is_latched(expected), "{expected:?} of trial {trial}");
        assert!(!(a && b && rig.is_latched(Trip::LoopsDisagree)));
        // Both must open and close again.
        (rig.contacts.loop_a_closed, rig.contacts.loop_b_closed) = (true, true);
        rig.press(60_000);
        assert!(!rig.is_given() || (a && b));
    }
    println!("permit withdrawn at most {worst_us} us after the loop opened");
    assert!(worst_us <= u64::from(Trip::LoopOpened.row().latency_us));
}

/// Plants the cause of a trip in a running bench; `None` where it belongs to a bench that is off or starting.
fn plant(rig: &mut Rig, trip: Trip) -> Option<()> {
    let code = |rig: &Rig| Some((rig.volts / SLOPE) as i16);
    match trip {
        Trip::LoopOpened => (rig.contacts.loop_a_closed, rig.contacts.loop_b_closed) = (false, false),
        Trip::LoopsDisagree => rig.contacts.loop_b_closed = false,
        Trip::ContactorDropped => rig.contactors = Some(true),
        Trip::ButtonStuck => rig.contacts.button_pressed = true,
        Trip::SenseSilent => rig.converters[0].silent = true,
        Trip::CrossSilent => rig.converters[1].silent = true,
        Trip::SenseFrozen => rig.converters[0].stuck = code(rig),
        Trip::CrossFrozen => rig.converters[1].stuck = code(rig),
        // A slow leak at the low side would be followed by the running ratio: it shows as a disagreement.
        Trip::SensesDisagree => rig.converters[0].gain = 1.0026,
        Trip::SenseLost => rig.converters[0].gain = 0.0,
        Trip::CrossLost => rig.converters[1].gain = 0.0,
        Trip::RatioChanged => rig.converters[1].gain = 1.003,
        Trip::TapOverRange => rig.converters[1].stuck = Some(32_767),
        Trip::OverVoltage => rig.volts = 5_020.0,
        Trip::Comparator => rig.optional.comparator = Some(true),
        Trip::OverCurrent => rig.optional.beam_na = Some(200_100),
        Trip::Arc => rig.volts *= 0.4,
        Trip::HostLost => rig.host_talks = false,
        _ => return None,
    }
    Some(())
}

fn planted(row: &TripRow, seed: u64) -> Option<u64> {
    let mut rig = Rig::started(seed);
    let phase = (rig.draw.unit() * 400.0) as u64;
    rig.run_us(phase * 500);
    plant(&mut rig, row.trip)?;
    let from_us = rig.now_us;
    // The settings of this bench, not the longest that a person may choose.
    let most_us = match row.trip {
        Trip::HostLost => 5_001_000,
        Trip::ContactorDropped => 101_000,
        _ => u64::from(row.latency_us),
    };
    while rig.is_given() && rig.now_us - from_us <= most_us + 1_000 {
        rig.poll_with(&[]);
    }
    let took_us = rig.now_us - from_us;
    assert!(!rig.is_given(), "{} is not seen within {most_us} us", row.code);
    // A poll may begin just before the cause: its length belongs to the latency.
    assert!(took_us <= most_us, "{}: {took_us} us, stated {most_us} us", row.code);
    // One cause may withdraw the permit before another is sure of its name.
    let named_us = if row.trip == Trip::LoopsDisagree { 501_000 } else { most_us };
    rig.run_us(named_us.saturating_sub(took_us));
    let same = match row.trip {
        // A change of 0.26 % may be seen as a step of the ratio too: both are true.
        Trip::SensesDisagree => rig.is_latched(row.trip) || rig.is_latched(Trip::RatioChanged),
        _ => rig.is_latched(row.trip),
    };
    assert!(same, "{}: {:?}", row.code, rig.controller.interlock().latched().iter().collect::<Vec<_>>());
    Some(took_us)
}

#[test]
fn every_trip_of_a_running_bench_comes_within_its_stated_time() {
    let mut planted_trips = 0;
    for row in &TRIPS {
        let took: Option<Vec<u64>> = (0..10).map(|seed| planted(row, 100 + seed)).collect();
        if let Some(took) = took {
            planted_trips += 1;
            println!("{:20} at most {} us, stated {} us", row.code, took.iter().max().unwrap(), row.latency_us);
        }
    }
    assert_eq!(planted_trips, 18);
}

#[test]
fn a_welded_contactor_is_told_and_cannot_be_reset() {
    let mut rig = Rig::started(5);
    rig.contactors = Some(false);
    (rig.contacts.loop_a_closed, rig.contacts.loop_b_closed) = (false, false);
    rig.run_us(103_000);
    assert!(rig.is_latched(Trip::ContactorWelded) && !rig.outputs.hv_lamp_dark);
    rig.cycle_loops();
    rig.press(200_000);
    assert!(!rig.is_given());
    rig.contactors = None;
    rig.contacts.contactors_released = true;
    rig.run_us(10_000_000);
    rig.press(200_000);
    assert!(rig.is_given());
}

#[test]
fn voltage_that_stays_after_switching_off_is_told_and_a_bleed_is_not() {
    let mut rig = Rig::started(6);
    (rig.contacts.loop_a_closed, rig.contacts.loop_b_closed) = (false, false);
    rig.run_us(20_000_000);
    assert!(!rig.is_latched(Trip::VoltageAfterOff));
    assert!(rig.outputs.hv_lamp_dark, "everything agrees that nothing is left");
    let mut rig = Rig::started(7);
    (rig.contacts.loop_a_closed, rig.contacts.loop_b_closed) = (false, false);
    rig.run_us(2_000);
    for _ in 0..20_000 {
        // An open bleeder: the capacitor keeps what it has.
        rig.volts = 2_000.0;
        rig.poll_with(&[]);
        assert!(!rig.outputs.hv_lamp_dark);
    }
    assert!(rig.is_latched(Trip::VoltageAfterOff));
}

#[test]
fn a_restart_and_damaged_settings_are_told() {
    let mut rig = Rig::new(Boot { reset_cause: ResetCause::Watchdog, ..boot() }, 8);
    rig.run_us(10_000);
    assert!(rig.is_latched(Trip::Restarted));
    rig.start();
    let mut rig = Rig::new(Boot { settings: Err(crate::io::Unreadable), ..boot() }, 9);
    rig.run_us(1_500_000);
    rig.hello();
    rig.cycle_loops();
    rig.press(200_000);
    assert!(!rig.is_given() && rig.is_latched(Trip::SettingsUnreadable));
}

/// A minute each of clean benches, on and off, quiet and noisy. A day of it is `clean_running.rs` of the host's tests.
#[test]
fn a_clean_bench_does_not_trip() {
    for (noise, volts) in [(0.3, 2_500.0), (2.0, 2_500.0), (2.0, 700.0), (1.0, 4_900.0)] {
        let mut rig = Rig::new(boot(), 10);
        rig.set_volts = volts;
        rig.converters.iter_mut().for_each(|converter| converter.noise = noise);
        rig.start();
        rig.run_us(30_000_000);
        assert!(rig.is_given(), "{noise} codes at {volts} V");
        (rig.contacts.loop_a_closed, rig.contacts.loop_b_closed) = (false, false);
        rig.run_us(30_000_000);
        let latched: Vec<Trip> = rig.controller.interlock().latched().iter().collect();
        assert_eq!(latched, [Trip::LoopOpened], "{noise} codes, off after {volts} V");
    }
}

#[test]
fn the_lamp_is_dark_only_when_both_senses_are_right_and_low() {
    let spoil: [fn(&mut Rig); 6] = [
        |rig| rig.converters[0].silent = true,
        |rig| rig.converters[1].silent = true,
        |rig| rig.converters[1].stuck = Some(0),
        |rig| rig.converters[0].stuck = Some(32_767),
        |rig| rig.converters[1].stuck = Some(1_000),
        |rig| rig.contactors = Some(false),
    ];
    for spoil in spoil {
        let mut rig = Rig::new(boot(), 11);
        rig.set_volts = 0.0;
        rig.run_us(2_000_000);
        assert!(rig.outputs.hv_lamp_dark);
        spoil(&mut rig);
        rig.run_us(2_200_000);
        assert!(!rig.outputs.hv_lamp_dark);
    }
    let mut rig = Rig::new(Boot { certificate: None, ..boot() }, 11);
    rig.run_us(2_000_000);
    assert!(!rig.outputs.hv_lamp_dark);
}

#[test]
fn nobody_is_answered_before_a_hello_of_this_version() {
    let mut rig = Rig::new(boot(), 12);
    let rude = [
        ToDevice::Echo { token: 1 },
        ToDevice::Ask(Request::ReadSettings),
        ToDevice::WriteSettings(settings()),
        ToDevice::Lamp(LampSettings { on: true, chip_us: 1_000 }),
        ToDevice::Heartbeat,
    ];
    rude.iter().for_each(|message| rig.say(message));
    rig.run_us(1_000_000);
    assert_eq!(rig.heard, []);
    assert!(!rig.outputs.lamp && rig.is_latched(Trip::HostLost));
    rig.say(&ToDevice::Hello(HostHello { protocol: PROTOCOL_VERSION + 1, host: 1 }));
    rude.iter().for_each(|message| rig.say(message));
    rig.run_us(1_000_000);
    assert!(matches!(rig.heard.as_slice(), [ToHost::Hello(hello)] if hello.protocol == PROTOCOL_VERSION));
    assert!(!rig.controller.interlock().present().is_empty());
}

#[test]
fn readings_are_contiguous_and_a_backlog_holds_nothing_up() {
    let mut rig = Rig::new(boot(), 13);
    rig.run_us(60_000_000);
    rig.hello();
    rig.heard.clear();
    // 64 bytes a poll take a second or two for the backlog.
    let mut slowest_us = 0;
    for token in 0..20 {
        rig.say(&ToDevice::Echo { token });
        let asked_us = rig.now_us;
        let is_reply = |message: &ToHost| matches!(message, ToHost::EchoReply(reply) if reply.token == token);
        while !rig.heard.iter().any(is_reply) {
            rig.poll_with(&[]);
            assert!(rig.now_us - asked_us < 100_000);
        }
        slowest_us = slowest_us.max(rig.now_us - asked_us);
        rig.run_us(50_000);
    }
    println!("slowest echo during the backlog {slowest_us} us");
    assert!(slowest_us <= 12_000);
    rig.run_us(5_000_000);
    let readings: Vec<&Reading> =
        rig.heard.iter().filter_map(|m| if let ToHost::Reading(r) = m { Some(r) } else { None }).collect();
    assert!(readings.len() > 6_500, "{}", readings.len());
    for (seq, reading) in readings.iter().enumerate() {
        assert_eq!(reading.seq as usize, seq);
    }
    for pair in readings.windows(2) {
        assert_eq!(pair[0].time_us + u64::from(pair[0].duration_us), pair[1].time_us);
        assert!((7..=9).contains(&pair[1].sense.count) && (7..=9).contains(&pair[1].cross.count));
    }
    assert!(rig.heard.iter().filter(|m| matches!(m, ToHost::Status(_))).count() >= 50);
    assert!(!rig.heard.iter().any(|m| matches!(m, ToHost::Gap(_))));
}

#[test]
fn records_are_stored_only_while_the_permit_is_withdrawn() {
    let mut rig = Rig::started(14);
    rig.heard.clear();
    rig.say(&ToDevice::WriteSettings(settings()));
    rig.run_us(20_000);
    let refused = ToHost::Refused { request: Request::WriteSettings, why: Refusal::PermitGiven };
    assert!(rig.heard.contains(&refused) && rig.outputs.store.is_none());
    (rig.contacts.loop_a_closed, rig.contacts.loop_b_closed) = (false, false);
    rig.run_us(2_000);
    let other = CertificateRecord { device: [0; 8], ..certificate() };
    let nameless = CertificateRecord { hash: CertificateHash::NONE, ..certificate() };
    for (record, why) in [(other, Refusal::OtherDevice), (nameless, Refusal::OutOfRange)] {
        rig.say(&ToDevice::WriteCertificate(record));
        rig.run_us(20_000);
        assert!(rig.heard.contains(&ToHost::Refused { request: Request::WriteCertificate, why }));
    }
    rig.say(&ToDevice::WriteCertificate(certificate()));
    rig.poll_with(&[]);
    assert_eq!(rig.outputs.store, Some(StoreRequest::Certificate(certificate())));
    rig.poll_with(&[]);
    assert_eq!(rig.outputs.store, None, "asked for once");
}

fn message() -> impl Strategy<Value = ToDevice> {
    prop_oneof![
        any::<u32>().prop_map(|host| ToDevice::Hello(HostHello { protocol: PROTOCOL_VERSION, host })),
        Just(ToDevice::Heartbeat),
        any::<u32>().prop_map(|token| ToDevice::Echo { token }),
        any::<[u32; 4]>()
            .prop_map(|[readings, events, slow, strobes]| { ToDevice::Ack(Ack { readings, events, slow, strobes }) }),
        Just(ToDevice::Rewind),
        prop_oneof![Just(Request::ReadCertificate), Just(Request::ReadSettings), Just(Request::Lamp)]
            .prop_map(ToDevice::Ask),
        any::<i32>().prop_map(|limit_mv| ToDevice::WriteSettings(SettingsRecord { limit_mv, ..settings() })),
        any::<[u8; 8]>().prop_map(|hash| {
            ToDevice::WriteCertificate(CertificateRecord { hash: CertificateHash(hash), ..certificate() })
        }),
        any::<(bool, u32)>().prop_map(|(on, chip_us)| ToDevice::Lamp(LampSettings { on, chip_us })),
    ]
}

/// What the person and the wires do between two messages.
fn deed() -> impl Strategy<Value = (Contacts, u64)> {
    let contacts = any::<[bool; 4]>().prop_map(|[a, b, released, button]| Contacts {
        loop_a_closed: a,
        loop_b_closed: b,
        contactors_released: released,
        button_pressed: button,
    });
    let good = Just(Contacts { contactors_released: true, ..AT_REST });
    let pressed = Just(Contacts { button_pressed: true, ..AT_REST });
    let open = Just(Contacts { loop_a_closed: false, loop_b_closed: false, ..AT_REST });
    (prop_oneof![contacts, good, pressed, open], 1u64..200)
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(200))]

    /// Two controllers see the same wires; one of them gets any messages besides the heartbeats that both get.
    #[test]
    fn no_message_changes_what_the_interlock_does(
        steps in proptest::collection::vec((deed(), proptest::collection::vec(message(), 0..4)), 1..40),
        noise in proptest::collection::vec(any::<u8>(), 0..300),
    ) {
        let mut told = Controller::new(boot(), Box::new(Journal::new()));
        let mut left_alone = Controller::new(boot(), Box::new(Journal::new()));
        let frame = |message: &ToDevice| {
            let mut frame = [0; MAX_FRAME];
            let length = encode(message, &mut frame).unwrap();
            frame[..length].to_vec()
        };
        let hello = frame(&ToDevice::Hello(HostHello { protocol: PROTOCOL_VERSION, host: 1 }));
        let heartbeat = frame(&ToDevice::Heartbeat);
        let mut now_us = 0;
        for (index, ((contacts, polls), messages)) in steps.iter().enumerate() {
            let beat = if index == 0 { hello.clone() } else { heartbeat.clone() };
            let mut extra = beat.clone();
            messages.iter().for_each(|message| extra.extend(frame(message)));
            extra.extend(&noise);
            extra.push(0);
            for poll in 0..*polls {
                now_us += 500;
                let conversions = [Channel::Sense, Channel::Cross].map(|channel| Conversion {
                    channel,
                    time_us: now_us,
                    code: (now_us / 500 % 3) as i16,
                });
                let inputs = Inputs { conversions: &conversions, ..Inputs::quiet(*contacts) };
                let (with, without) = if poll == 0 { (extra.as_slice(), beat.as_slice()) } else { (&[][..], &[][..]) };
                let a = told.poll(now_us, &Inputs { received: with, ..inputs });
                let b = left_alone.poll(now_us, &Inputs { received: without, ..inputs });
                prop_assert_eq!(told.interlock(), left_alone.interlock());
                prop_assert_eq!((a.permit, a.hv_lamp_dark), (b.permit, b.hv_lamp_dark));
                prop_assert!(a.store.is_none() || !told.interlock().is_given());
                told.sent(told.outgoing().len());
            }
        }
    }

    /// No inputs whatever make it panic, and the permit's edges come only while it is given.
    #[test]
    fn any_inputs_are_survived(
        steps in proptest::collection::vec(
            (any::<[bool; 4]>(), 0u64..5_000_000, any::<Vec<(bool, u32, i16)>>(), any::<Vec<u8>>(), any::<(Option<i32>, Option<bool>)>()),
            1..60,
        ),
        wild: [i64; 4],
    ) {
        let line = CodeToVolts { offset_nv: wild[0], slope_pv: wild[1], bend_av: wild[2], code_min: 0, code_max: 0 };
        let cross = CodeToVolts { slope_pv: wild[3], ..line };
        let odd = CertificateRecord { sense: line, cross, difference_ppm: u32::MAX, difference_mv: u32::MAX, ..certificate() };
        let mut controller = Controller::new(Boot { certificate: Some(odd), ..boot() }, Box::new(Journal::new()));
        let mut now_us = 0u64;
        let mut level = false;
        for (contacts, pause_us, conversions, received, (beam_na, comparator)) in steps {
            now_us = (now_us + pause_us).saturating_sub(100);
            let conversions: Vec<Conversion> = conversions
                .into_iter()
                .map(|(cross, age_us, code)| Conversion {
                    channel: if cross { Channel::Cross } else { Channel::Sense },
                    time_us: now_us.saturating_sub(u64::from(age_us % 20_000)),
                    code,
                })
                .collect();
            let [loop_a_closed, loop_b_closed, contactors_released, button_pressed] = contacts;
            let contacts = Contacts { loop_a_closed, loop_b_closed, contactors_released, button_pressed };
            let optional = OptionalInputs { beam_na, comparator, enclosure_centicelsius: None };
            let inputs = Inputs { conversions: &conversions, received: &received, optional, ..Inputs::quiet(contacts) };
            let outputs = controller.poll(now_us, &inputs);
            prop_assert!(outputs.permit == level || controller.interlock().is_given() || !outputs.permit);
            level = outputs.permit;
        }
    }
}

/// What a poll costs when nothing happens; printed, since a timing gates nothing.
#[test]
fn quiet_polls_are_counted() {
    let mut rig = Rig::started(15);
    rig.run_us(1_000_000);
    let polls = 1_000_000u64;
    let began = std::time::Instant::now();
    let mut now_us = rig.now_us;
    for _ in 0..polls {
        now_us += 500;
        let _ = rig.controller.poll(now_us, &Inputs::quiet(rig.contacts));
    }
    println!("a poll without anything new: {} ns", began.elapsed().as_nanos() / u128::from(polls));
    println!(
        "RAM: journal {} bytes, controller without it {} bytes",
        size_of::<Journal>(),
        size_of::<Controller<&'static mut Journal>>()
    );
    // RP2040: 264 KiB, of which the image keeps 24 KiB for everything but the journal.
    assert!(size_of::<Journal>() <= 236 * 1024);
    assert!(size_of::<Controller<&'static mut Journal>>() <= 8 * 1024);
}
