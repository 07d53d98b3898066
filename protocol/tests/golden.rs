//! The bytes of every message as first released. A line here never changes; a new message adds a line.
//!
//! The bytes are this project's own: they freeze the wire. What can be checked from outside is checked in
//! `published.rs`. To see the frame of a new message, add its line with an empty string and read the failure.

use ringvolt_protocol::{
    Ack, CertificateHash, CertificateRecord, CodeToVolts, Contacts, Decoder, DeviceKind, EchoReply, Event, EventKind,
    Gap, Hello, HostHello, LampSettings, Line, MAX_FRAME, PROTOCOL_VERSION, PermitState, Polarity, Reading,
    ReadingFlags, Refusal, Request, ResetCause, SettingsRecord, Slow, Status, Stream, Strobe, ToDevice, ToHost, Trip,
    TripSet, WindowCodes, encode,
};
use serde::{Serialize, de::DeserializeOwned};

const DEVICE: [u8; 8] = [0xe6, 0x61, 0x64, 0x08, 0x43, 0x00, 0x7f, 0x21];
const HASH: CertificateHash = CertificateHash([1, 2, 3, 4, 5, 6, 7, 8]);

fn certificate() -> CertificateRecord {
    CertificateRecord {
        hash: HASH,
        device: DEVICE,
        sense: CodeToVolts {
            offset_nv: -200_000_000,
            slope_pv: 312_562_500_000,
            bend_av: -40_000,
            code_min: -40,
            code_max: 16_100,
        },
        cross: CodeToVolts { offset_nv: 0, slope_pv: 299_000_000_001, bend_av: 0, code_min: 0, code_max: 32_000 },
        difference_ppm: 400,
        difference_mv: 250,
        expires_day: 21_154,
    }
}

fn settings() -> SettingsRecord {
    SettingsRecord {
        window_ns: 8_333_333,
        mains_hz: 60,
        polarity: Polarity::Negative,
        limit_mv: 5_000_000,
        limit_code: 16_000,
        beam_limit_na: 250_000,
        discrepancy_ms: 400,
        contactor_ms: 80,
        grace_ms: 6_000,
        bleed_ms: 1_500,
        noise_floor_millicodes: 60,
        lamp: LampSettings { on: true, chip_us: 73_000 },
    }
}

fn to_host(name: &str) -> ToHost {
    let ack = Ack { readings: 300, events: 7, slow: 2, strobes: 0 };
    let event = |kind| ToHost::Event(Event { seq: 9, time_us: 1_234_567, kind });
    match name {
        "hello" => ToHost::Hello(Hello {
            protocol: 1,
            device: DEVICE,
            kind: DeviceKind::Board,
            firmware: [0, 1, 0],
            epoch: 17,
            reset_cause: ResetCause::Watchdog,
            time_us: 5_000_000_000,
            certificate: HASH,
            first: ack,
            next: Ack { readings: 400, ..ack },
        }),
        "reading" => ToHost::Reading(Reading {
            seq: 4_000_000_000,
            time_us: 1 << 40,
            duration_us: 10_000,
            sense: WindowCodes { sum: 72_000, min: 7_990, max: 8_010, count: 9 },
            cross: WindowCodes { sum: -8, min: -2, max: 0, count: 8 },
            flags: ReadingFlags::PERMIT.with(ReadingFlags::LATE),
            certificate: HASH,
        }),
        "started" => event(EventKind::Started { cause: ResetCause::Panic }),
        "line" => event(EventKind::Line { line: Line::Contactors, active: true }),
        "permit given" => event(EventKind::PermitGiven),
        "permit withdrawn" => event(EventKind::PermitWithdrawn),
        "tripped" => event(EventKind::Tripped { trip: Trip::OverVoltage, sense_mv: Some(5_000_001), cross_mv: None }),
        "cleared" => event(EventKind::Cleared { trip: Trip::SettingsUnreadable }),
        "uncalibrated start" => event(EventKind::UncalibratedStart),
        "host lost" => event(EventKind::HostLost),
        "host back" => event(EventKind::HostBack),
        "certificate stored" => event(EventKind::CertificateStored { hash: HASH, reading_seq: 12 }),
        "settings stored" => event(EventKind::SettingsStored),
        "configuration repaired" => event(EventKind::ConfigurationRepaired { cross: true }),
        "bus recovered" => event(EventKind::BusRecovered { cross: false, freed: true }),
        "lamp started" => event(EventKind::LampStarted { chip_us: 73_000 }),
        "lamp stopped" => event(EventKind::LampStopped),
        "late loop" => event(EventKind::LateLoop { pause_us: 399_000 }),
        "slow" => {
            ToHost::Slow(Slow { seq: 3, time_us: 3_000_000, beam_na: Some(-41), enclosure_centicelsius: Some(2_345) })
        }
        "slow, not evaluated" => ToHost::Slow(Slow { seq: 4, time_us: 3_200_000, ..Slow::default() }),
        "strobe" => ToHost::Strobe(Strobe { seq: 5, time_us: 77, rising: true }),
        "gap" => ToHost::Gap(Gap { stream: Stream::Strobes, first: 100, count: 28 }),
        "status" => ToHost::Status(Status {
            time_us: 9_999_999,
            contacts: Contacts {
                loop_a_closed: true,
                loop_b_closed: false,
                contactors_released: true,
                button_pressed: false,
            },
            permit: PermitState::AwaitingLoopTest,
            latched: TripSet(0x0040_0003),
            present: TripSet(2),
            uncalibrated: false,
            hv_present: true,
            sense_mv: Some(-12),
            cross_mv: None,
            comparator: Some(false),
            idle_per_mille: Some(871),
            damaged_frames: 1,
        }),
        "echo reply" => ToHost::EchoReply(EchoReply { token: 0xdead_beef, received_us: 1_000, sent_us: 1_250 }),
        "certificate" => ToHost::Certificate(Some(certificate())),
        "no certificate" => ToHost::Certificate(None),
        "settings" => ToHost::Settings(settings()),
        "done" => ToHost::Done(Request::WriteSettings),
        "refused" => ToHost::Refused { request: Request::WriteCertificate, why: Refusal::PermitGiven },
        "busy" => ToHost::Busy,
        _ => panic!("no message {name}"),
    }
}

fn to_device(name: &str) -> ToDevice {
    match name {
        "hello" => ToDevice::Hello(HostHello { protocol: 1, host: 0x1234_5678 }),
        "heartbeat" => ToDevice::Heartbeat,
        "echo" => ToDevice::Echo { token: 0xdead_beef },
        "ack" => ToDevice::Ack(Ack { readings: 300, events: 7, slow: 2, strobes: 0 }),
        "rewind" => ToDevice::Rewind,
        "ask certificate" => ToDevice::Ask(Request::ReadCertificate),
        "ask settings" => ToDevice::Ask(Request::ReadSettings),
        "write certificate" => ToDevice::WriteCertificate(certificate()),
        "write settings" => ToDevice::WriteSettings(settings()),
        "lamp" => ToDevice::Lamp(LampSettings { on: false, chip_us: 1_000 }),
        "goodbye" => ToDevice::Goodbye,
        _ => panic!("no message {name}"),
    }
}

/// Name and frame, delimiter and all, of each message to the host.
const TO_HOST: [(&str, &str); 30] = [
    ("hello", "010701e661640843037f2101020114110280e497d0120102030405060708ac02070205900307020565f8dc8b00"),
    ("reading", "190180d0acf30e808080808020904e80e508ec7c947d090f03100880120102030405060708b0d7165400"),
    ("started", "06020987ad4b06035e01fd7400"),
    ("line", "0d020987ad4b0102019f057b3100"),
    ("permit given", "0b020987ad4b028ad5b7ad00"),
    ("permit withdrawn", "0b020987ad4b031ce5b0da00"),
    ("tripped", "0d020987ad4b040e0182ade204051db03e0900"),
    ("cleared", "0c020987ad4b0516f011576400"),
    ("uncalibrated start", "0b020987ad4b069311daaa00"),
    ("host lost", "0b020987ad4b070521dddd00"),
    ("host back", "0b020987ad4b08943c624d00"),
    ("certificate stored", "14020987ad4b0901020304050607080c5125b33500"),
    ("settings stored", "0b020987ad4b0ab85d6ca300"),
    ("configuration repaired", "0c020987ad4b0b01b9b9077900"),
    ("bus recovered", "07020987ad4b0c06014ef4950b00"),
    ("lamp started", "0e020987ad4b0da8ba0439cee62c00"),
    ("lamp stopped", "0b020987ad4b0ea19901a400"),
    ("late loop", "0e020987ad4b0f98ad18fb3b06b300"),
    ("slow", "100303c08db701015101d2242a353b8700"),
    ("slow, not evaluated", "07030480a8c3010105c9173f2400"),
    ("strobe", "0904054d017e8b3d9a00"),
    ("gap", "090503641c9b634c0100"),
    ("status", "0706fface204010201070183808002020401011702010501e70601040650b200"),
    ("echo reply", "0f07effdb6f50de807e209b75ccd7d00"),
    (
        "certificate",
        "1008010102030405060708e661640843157f21ff87debe01c086eae29812fff0044fc8fb010782b8cfdcb311010f80f4039003fa01a2a50199aab40d00",
    ),
    ("no certificate", "020803f798028900"),
    ("settings", "220995d0fc033c0180ade20480fa0190a10f900350f02edc0b3c01a8ba04b376e82f00"),
    ("done", "070a03cfab3f2200"),
    ("refused", "030b0205715422c100"),
    ("busy", "060ca6a3b4db00"),
];

/// The same of each message to the device.
const TO_DEVICE: [(&str, &str); 11] = [
    ("hello", "010b01f8acd191013065dfba00"),
    ("heartbeat", "06011bdf05a500"),
    ("echo", "0b02effdb6f50d3b752bf400"),
    ("ack", "0603ac02070205161df11f00"),
    ("rewind", "0604942b6fd500"),
    ("ask certificate", "020505bae6ae3c00"),
    ("ask settings", "0705012cd6a94b00"),
    (
        "write certificate",
        "0f060102030405060708e661640843157f21ff87debe01c086eae29812fff0044fc8fb010782b8cfdcb311010f80f4039003fa01a2a501e6c738e600",
    ),
    ("write settings", "220795d0fc033c0180ade20480fa0190a10f900350f02edc0b3c01a8ba048863551000"),
    ("lamp", "020807e807b41b33ec00"),
    ("goodbye", "06092957deab00"),
];

fn hex(bytes: &[u8]) -> String {
    bytes.iter().map(|byte| format!("{byte:02x}")).collect()
}

fn check<M>(name: &str, message: &M, golden: &str, wrong: &mut String)
where
    M: Serialize + DeserializeOwned + PartialEq + std::fmt::Debug,
{
    let mut frame = [0; MAX_FRAME];
    let length = encode(message, &mut frame).unwrap();
    let got = hex(&frame[..length]);
    if got != golden {
        *wrong += &format!("    (\"{name}\", \"{got}\"),\n");
    }
    // The released bytes themselves, not ours, must still mean the same.
    let bytes: Vec<u8> =
        (0..golden.len() / 2).map(|at| u8::from_str_radix(&golden[2 * at..2 * at + 2], 16).unwrap()).collect();
    let mut decoder = Decoder::new();
    let decoded: Vec<M> = bytes.iter().filter_map(|byte| decoder.push(*byte)).collect();
    if decoded.len() != 1 || decoded[0] != *message {
        *wrong += &format!("    {name}: the released bytes now mean {decoded:?}\n");
    }
}

#[test]
fn every_message_has_the_bytes_it_was_released_with() {
    assert_eq!(PROTOCOL_VERSION, 1);
    let mut wrong = String::new();
    for (name, golden) in TO_HOST {
        check(name, &to_host(name), golden, &mut wrong);
    }
    for (name, golden) in TO_DEVICE {
        check(name, &to_device(name), golden, &mut wrong);
    }
    assert!(wrong.is_empty(), "the wire has changed:\n{wrong}");
}

/// A variant without a line above is a variant that nothing freezes: the first byte of a message is its number.
#[test]
fn every_variant_of_both_enums_and_of_the_event_kinds_is_frozen() {
    let number = |golden: &str, at: usize| {
        let bytes: Vec<u8> =
            (0..golden.len() / 2 - 1).map(|at| u8::from_str_radix(&golden[2 * at..2 * at + 2], 16).unwrap()).collect();
        let mut content = bytes.clone();
        let used = cobs::decode(&bytes, &mut content).unwrap();
        content[..used][at]
    };
    let numbers = |table: &[(&str, &str)]| {
        table.iter().map(|(_, golden)| number(golden, 0)).collect::<std::collections::BTreeSet<u8>>()
    };
    assert!(numbers(&TO_HOST).into_iter().eq(0..13));
    assert!(numbers(&TO_DEVICE).into_iter().eq(0..10));
    // Variant, number of one byte, time of three bytes, then the kind.
    let kinds: std::collections::BTreeSet<u8> = TO_HOST
        .iter()
        .filter(|(name, _)| matches!(to_host(name), ToHost::Event(_)))
        .map(|(_, golden)| number(golden, 5))
        .collect();
    assert!(kinds.into_iter().eq(0..16));
}
