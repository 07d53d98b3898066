//! How long the work of a long day takes, and in how much memory. Printed, not gated: a busy machine is no fault.

use std::{
    fs,
    path::Path,
    process::{Command, Stdio},
    time::Instant,
};

use ringvolt::{
    calibration::example,
    profile,
    run::{
        RunHeader, RunReader, RunWriter,
        rows::{EchoRow, EpochRow, Exposure, FrameRow, Record},
    },
};
use ringvolt_protocol::{DeviceKind, Hello, Reading, ReadingFlags, Slow, WindowCodes};
use ringvolt_tests::program;

const READINGS: u32 = 3_600_000;
const FRAMES: i64 = 5_000;
const UTC0: i64 = 1_796_000_000_000_000_000;

/// Ten hours at the default rate at a steady 2500 V, with a frame every seven seconds.
fn ten_hours(path: &Path) {
    let certificate = example();
    let header = RunHeader {
        simulated: true,
        bench_name: "SIMULATED day".to_owned(),
        profile_text: profile::example(),
        certificate_text: Some(certificate.to_toml()),
        ..RunHeader::default()
    };
    let mut writer = RunWriter::create(path, &header).unwrap();
    let hello = Hello {
        protocol: 1,
        device: certificate.device_id(),
        kind: DeviceKind::Simulated,
        firmware: [0, 1, 0],
        epoch: 1,
        reset_cause: Default::default(),
        time_us: 0,
        certificate: certificate.hash8(),
        first: Default::default(),
        next: Default::default(),
    };
    let key = writer.epoch(&EpochRow { epoch_key: 0, hello, utc_ns: UTC0, link: "none".to_owned() }).unwrap();
    for seq in 0..READINGS {
        let code = 7_998 + (seq * 7 % 5) as i16;
        let codes = |code: i16| WindowCodes { sum: i32::from(code) * 9, min: code - 2, max: code + 2, count: 9 };
        let reading = Reading {
            seq,
            time_us: u64::from(seq) * 10_000,
            duration_us: 10_000,
            sense: codes(code),
            cross: codes((f64::from(code) * 0.3125625 / 0.33).round() as i16),
            flags: ReadingFlags::PERMIT,
            certificate: certificate.hash8(),
        };
        writer.record(key, &Record::Reading(reading)).unwrap();
        if seq % 20 == 0 {
            let slow = Slow {
                seq: seq / 20,
                time_us: reading.time_us,
                beam_na: Some(50_000),
                enclosure_centicelsius: Some(2_300),
            };
            writer.record(key, &Record::Slow(slow)).unwrap();
        }
        if seq % 25 == 0 {
            let mono_ns = reading.time_us as i64 * 1_000;
            let echo = EchoRow {
                asked_mono_ns: mono_ns - 400_000 - i64::from(seq % 7) * 90_000,
                answered_mono_ns: mono_ns + 400_000 + i64::from(seq % 11) * 60_000,
                utc_minus_mono_ns: UTC0,
                received_us: reading.time_us,
                sent_us: reading.time_us,
            };
            writer.echo(key, &echo).unwrap();
        }
    }
    for number in 0..FRAMES {
        let start_utc_ns = UTC0 + 5_000_000_000 + number * 7_000_000_000;
        let exposure = Exposure {
            start_utc_ns,
            end_utc_ns: start_utc_ns + 200_000_000,
            start_u_ns: 2_000_000,
            length_u_ns: 100_000,
            source: "exif".to_owned(),
        };
        let frame = FrameRow {
            frame: format!("frame{number:05}"),
            file: format!("frame{number:05}.png"),
            noticed_utc_ns: exposure.end_utc_ns,
            sha256: String::new(),
            exposure: Ok(exposure),
        };
        writer.frame(&frame).unwrap();
    }
    writer.commit().unwrap();
}

#[test]
fn five_thousand_frames_of_ten_hours_are_stamped() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("day.ringvolt");
    ten_hours(&path);
    let bytes = fs::metadata(&path).unwrap().len();
    let since = Instant::now();
    let mut child = Command::new(program()).arg("stamp").arg(&path).stdout(Stdio::piped()).spawn().unwrap();
    let mut most_kib = 0;
    while child.try_wait().unwrap().is_none() {
        let status = fs::read_to_string(format!("/proc/{}/status", child.id())).unwrap_or_default();
        let peak =
            status.lines().find_map(|line| line.strip_prefix("VmHWM:")?.trim().strip_suffix(" kB")?.parse().ok());
        most_kib = most_kib.max(peak.unwrap_or(0));
        std::thread::sleep(std::time::Duration::from_millis(10));
    }
    let seconds = since.elapsed().as_secs_f64();
    println!(
        "measured: {FRAMES} frames over {READINGS} readings ({:.1} bytes a reading) stamped in {seconds:.1} s with {:.0} MB",
        bytes as f64 / f64::from(READINGS),
        most_kib as f64 / 1_024.0
    );
    let reader = RunReader::open(&path).unwrap();
    let reduction = reader.reductions().unwrap().pop().unwrap();
    let stamps = reader.stamps(reduction.key).unwrap();
    assert_eq!(stamps.len() as i64, FRAMES);
    let good = stamps.iter().filter(|stamp| stamp.verdict == "good").count();
    assert!(good as i64 > FRAMES * 99 / 100, "{good} good: {:?}", stamps[0]);
}
