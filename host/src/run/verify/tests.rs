use std::path::PathBuf;

use ringvolt_protocol::{
    Ack, CertificateHash, DeviceKind, Event, EventKind, Gap, Hello, Reading, ReadingFlags, ResetCause, Stream,
    WindowCodes,
};

use super::*;
use crate::{
    calibration::Certificate,
    run::{
        RunHeader, RunWriter,
        rows::{EchoRow, EpochRow, FrameRow, Record, StampRow},
    },
};

fn certificate() -> Certificate {
    Certificate::parse(include_str!("../../../examples/certificate.toml"), "example").unwrap()
}

struct Run {
    _folder: tempfile::TempDir,
    path: PathBuf,
}

/// A small run without a fault, changed by `change` before it is closed.
fn run(change: impl FnOnce(&mut RunWriter, i64)) -> Run {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("run.ringvolt");
    std::fs::create_dir(folder.path().join("frames")).unwrap();
    std::fs::write(folder.path().join("frames/a.png"), b"picture").unwrap();
    let header = RunHeader {
        simulated: true,
        certificate_text: Some(certificate().to_toml()),
        frames_dir: "frames".to_owned(),
        ..RunHeader::default()
    };
    let mut writer = RunWriter::create(&path, &header).unwrap();
    let hello = Hello {
        protocol: 1,
        device: [1; 8],
        kind: DeviceKind::Simulated,
        firmware: [0, 1, 0],
        epoch: 1,
        reset_cause: ResetCause::PowerOn,
        time_us: 0,
        certificate: CertificateHash::NONE,
        first: Ack::default(),
        next: Ack::default(),
    };
    let key = writer.epoch(&EpochRow { epoch_key: 0, hello, utc_ns: 0, link: "port".to_owned() }).unwrap();
    for seq in 0..100 {
        writer.record(key, &Record::Reading(reading(seq))).unwrap();
    }
    writer.record(key, &Record::Event(Event { seq: 0, time_us: 1, kind: EventKind::PermitGiven })).unwrap();
    let echo = EchoRow { asked_mono_ns: 1, answered_mono_ns: 2, utc_minus_mono_ns: 3, received_us: 4, sent_us: 5 };
    writer.echo(key, &echo).unwrap();
    let frame = FrameRow {
        frame: "a".to_owned(),
        file: "a.png".to_owned(),
        noticed_utc_ns: 0,
        // Of the seven letters "picture": `printf picture | sha256sum`.
        sha256: "2cea274d0bedc39ec4ab6ba9e59ec889e3ed6fb56a1cf088a64d9b383378dc97".to_owned(),
        exposure: Err("unknown".to_owned()),
    };
    writer.frame(&frame).unwrap();
    let reduction = writer.begin_reduction(0, "run", "ringvolt", "", None).unwrap();
    let stamp = StampRow {
        frame: "a".to_owned(),
        verdict: "refused".to_owned(),
        reasons: "exposure-unknown".to_owned(),
        value: None,
    };
    writer.stamp(reduction, &stamp).unwrap();
    writer.finish_reduction(reduction).unwrap();
    change(&mut writer, key);
    writer.commit().unwrap();
    Run { _folder: folder, path }
}

fn reading(seq: u32) -> Reading {
    let codes = WindowCodes { sum: 900, min: 90, max: 110, count: 9 };
    Reading {
        seq,
        time_us: u64::from(seq) * 10_000,
        duration_us: 10_000,
        sense: codes,
        cross: codes,
        flags: ReadingFlags::PERMIT,
        certificate: certificate().hash8(),
    }
}

fn sql(run: &Run, sql: &str) {
    rusqlite::Connection::open(&run.path).unwrap().execute_batch(sql).unwrap();
}

/// Subjects and sentences of all faults.
fn faults(run: &Run) -> Vec<String> {
    let findings = verify(&RunReader::open(&run.path).unwrap());
    let faults = findings.into_iter().filter(|finding| finding.severity == Severity::Fault);
    faults.map(|finding| format!("{}: {}", finding.subject, finding.sentence)).collect()
}

#[test]
fn a_whole_run_has_no_fault() {
    assert_eq!(faults(&run(|_, _| {})), Vec::<String>::new());
}

#[test]
fn each_kind_of_damage_is_the_fault_it_is() {
    let damages = [
        ("DELETE FROM reading WHERE (id & 0xffffffff) BETWEEN 20 AND 22", "numbers 20 to 22"),
        ("DELETE FROM reading WHERE (id & 0xffffffff) < 5", "numbers 0 to 4"),
        ("UPDATE reading SET sense_sum = 5000 WHERE (id & 0xffffffff) = 7", "mean lies outside the extremes"),
        ("UPDATE reading SET time_us = 5000 WHERE (id & 0xffffffff) = 7", "times were changed"),
        ("UPDATE reading SET sense_count = 300 WHERE (id & 0xffffffff) = 7", "impossible value"),
        ("DELETE FROM echo", "no clock exchange"),
        ("UPDATE meta SET value = '0' WHERE key = 'simulated'", "mark SIMULATED is gone"),
        ("UPDATE meta SET value = replace(value, '2.', '3.') WHERE key = 'certificate_text'", "certificate"),
        ("UPDATE stamp SET verdict = 'good'", "break the rules"),
        ("UPDATE stamp SET volts = 2500.0", "stamps"),
        ("UPDATE frame SET sha256 = 'ff'", "not the file that was recorded"),
        ("DELETE FROM held_certificate", "name a certificate hash"),
        ("PRAGMA foreign_keys = OFF; DELETE FROM epoch", "belong to nothing"),
    ];
    for (change, expected) in damages {
        let run = run(|_, _| {});
        sql(&run, change);
        let faults = faults(&run);
        assert!(faults.iter().any(|fault| fault.contains(expected)), "{change}: {faults:?}");
    }
}

#[test]
fn a_counted_gap_is_an_honest_loss_and_no_fault() {
    let whole = run(|writer, key| {
        writer.record(key, &Record::Gap(Gap { stream: Stream::Readings, first: 20, count: 3 })).unwrap();
    });
    sql(&whole, "DELETE FROM reading WHERE (id & 0xffffffff) BETWEEN 20 AND 22");
    assert_eq!(faults(&whole), Vec::<String>::new());
    // One more than was announced.
    sql(&whole, "DELETE FROM reading WHERE (id & 0xffffffff) = 23");
    let faults = faults(&whole);
    assert!(faults.len() == 1 && faults[0].contains("1 readings") && faults[0].contains("numbers 23"), "{faults:?}");
}

#[test]
fn a_changed_picture_is_told_and_a_missing_one_is_a_note() {
    let run = run(|_, _| {});
    let picture = run.path.with_file_name("frames").join("a.png");
    std::fs::write(&picture, b"another").unwrap();
    assert!(faults(&run)[0].contains("a.png is not the file"));
    std::fs::remove_file(&picture).unwrap();
    assert_eq!(faults(&run), Vec::<String>::new());
}

#[test]
fn a_name_that_leads_out_of_the_folder_is_not_followed() {
    let run = run(|_, _| {});
    sql(&run, "UPDATE frame SET file = '../run.ringvolt'");
    assert_eq!(faults(&run), Vec::<String>::new());
}

#[test]
fn bytes_overwritten_anywhere_never_panic() {
    let whole = run(|_, _| {});
    let bytes = std::fs::read(&whole.path).unwrap();
    let mut told = 0;
    for at in (0..bytes.len()).step_by(211) {
        let mut damaged = bytes.clone();
        for byte in damaged.iter_mut().skip(at).take(24) {
            *byte = byte.wrapping_mul(31).wrapping_add(at as u8 | 1);
        }
        std::fs::write(&whole.path, &damaged).unwrap();
        match RunReader::open(&whole.path) {
            Ok(reader) => {
                let findings = verify(&reader);
                told += usize::from(findings.iter().any(|finding| finding.severity == Severity::Fault));
            }
            Err(error) => {
                assert!(error.to_string().contains("run.ringvolt"));
                told += 1;
            }
        }
    }
    // Much of a small file is unused space, where a changed byte harms nothing.
    assert!(told > 50, "{told}");
    for length in [0, 1, 99, 100, 1_000, 4_096, 8_192, bytes.len() - 1] {
        std::fs::write(&whole.path, &bytes[..length]).unwrap();
        if let Ok(reader) = RunReader::open(&whole.path) {
            assert!(verify(&reader).iter().any(|finding| finding.severity == Severity::Fault), "{length}");
        }
    }
}
