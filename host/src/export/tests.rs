use std::path::PathBuf;

use ringvolt_protocol::{Ack, DeviceKind, Event, EventKind, Hello, Reading, ResetCause, Slow, WindowCodes};

use super::*;
use crate::{
    calibration::Certificate,
    profile::{self, Profile},
    run::{
        RunHeader, RunWriter,
        rows::{EchoRow, EpochRow, Exposure, FrameRow, NoteRow, Record, StampRow, StampValue},
    },
};

const CERTIFICATE: &str = include_str!("../../examples/certificate.toml");

fn reduction() -> Reduction {
    let profile = Profile::parse(&profile::example(), "example").unwrap();
    Reduction::new(&profile, Some(&Certificate::parse(CERTIFICATE, "example").unwrap()))
}

fn stamp(frame: &str, verdict: &str, reasons: &str, volts: Option<f64>) -> StampRow {
    let value = volts.map(|volts| StampValue {
        volts,
        volts_u: 0.5,
        volts_u_frame: 0.3,
        volts_u_common: 0.4,
        wavelength_pm: 24.4986,
        wavelength_u_pm: 0.0025,
        slope_volts_per_second: -0.000_01,
        span_volts: 0.2,
        ripple_volts: 1.0,
        coverage: 1.0,
        enclosure_celsius: None,
    });
    StampRow { frame: frame.to_owned(), verdict: verdict.to_owned(), reasons: reasons.to_owned(), value }
}

/// A small SIMULATED run; `began` tells runs apart.
fn run(path: &Path, began: i64) {
    let header = RunHeader {
        simulated: true,
        bench_name: "bench, \"quoted\"".to_owned(),
        profile_text: profile::example(),
        certificate_text: Some(CERTIFICATE.to_owned()),
        ..RunHeader::default()
    };
    let mut writer = RunWriter::create(path, &header).unwrap();
    let hello = Hello {
        protocol: 1,
        device: [1; 8],
        kind: DeviceKind::Simulated,
        firmware: [0, 1, 0],
        epoch: 1,
        reset_cause: ResetCause::PowerOn,
        time_us: 0,
        certificate: Default::default(),
        first: Ack::default(),
        next: Ack::default(),
    };
    let key = writer.epoch(&EpochRow { epoch_key: 0, hello, utc_ns: began, link: String::new() }).unwrap();
    for step in 0..20_i64 {
        let us = step * 50_000;
        let echo = EchoRow {
            asked_mono_ns: us * 1_000,
            answered_mono_ns: us * 1_000 + 400_000,
            utc_minus_mono_ns: began,
            received_us: us as u64 + 200,
            sent_us: us as u64 + 200,
        };
        writer.echo(key, &echo).unwrap();
    }
    let codes = WindowCodes { sum: 72_000, min: 7_990, max: 8_010, count: 9 };
    for seq in 0..90 {
        let reading = Reading {
            seq,
            time_us: u64::from(seq) * 10_000,
            duration_us: 10_000,
            sense: codes,
            cross: codes,
            ..Reading::default()
        };
        writer.record(key, &Record::Reading(reading)).unwrap();
    }
    writer.record(key, &Record::Event(Event { seq: 0, time_us: 5, kind: EventKind::PermitGiven })).unwrap();
    let slow = Slow { seq: 0, time_us: 5, beam_na: None, enclosure_centicelsius: Some(2_312) };
    writer.record(key, &Record::Slow(slow)).unwrap();
    writer
        .note(&NoteRow { utc_ns: 1, author: "person".to_owned(), text: "two\nlines; \"quotes\"".to_owned() })
        .unwrap();
    let reduction = writer.begin_reduction(0, "run", "ringvolt", "", None).unwrap();
    let exposure = |at: i64| Exposure {
        start_utc_ns: at,
        end_utc_ns: at + 200_000_000,
        start_u_ns: 1_000,
        length_u_ns: 1_000,
        source: "exif".to_owned(),
    };
    let stamps = [
        stamp("a", "good", "", Some(2_500.0)),
        stamp("b", "marked", "ripple", Some(2_501.0)),
        stamp("c", "refused", "no-time", None),
    ];
    for (index, stamp) in stamps.iter().enumerate() {
        let frame = FrameRow {
            frame: stamp.frame.clone(),
            file: format!("{}.png", stamp.frame),
            noticed_utc_ns: 0,
            sha256: "00".repeat(32),
            exposure: Ok(exposure(began + index as i64 * 1_000_000_000)),
        };
        writer.frame(&frame).unwrap();
        writer.stamp(reduction, stamp).unwrap();
    }
    writer.finish_reduction(reduction).unwrap();
}

struct Exported {
    folder: tempfile::TempDir,
    tables: PathBuf,
}

const BEGAN: i64 = 1_796_113_445_000_000_000;

fn exported() -> Exported {
    let folder = tempfile::tempdir().unwrap();
    run(&folder.path().join("run.ringvolt"), BEGAN);
    let tables = folder.path().join("tables");
    write(&folder.path().join("run.ringvolt"), &tables).unwrap();
    Exported { folder, tables }
}

fn write(run: &Path, tables: &Path) -> Result<usize, ExportError> {
    export(&RunReader::open(run).unwrap(), &reduction(), tables)
}

fn rows(path: &Path) -> Vec<csv::StringRecord> {
    csv::Reader::from_path(path).unwrap().records().map(|row| row.unwrap()).collect()
}

#[test]
fn every_column_is_described_once_and_every_row_has_every_column() {
    let exported = exported();
    let text = fs::read_to_string(exported.tables.join(DESCRIPTION)).unwrap();
    let package: serde_json::Value = serde_json::from_str(&text).unwrap();
    for resource in package["resources"].as_array().unwrap() {
        let path = exported.tables.join(resource["path"].as_str().unwrap());
        let names: Vec<&str> =
            resource["schema"]["fields"].as_array().unwrap().iter().map(|f| f["name"].as_str().unwrap()).collect();
        let mut csv = csv::Reader::from_path(&path).unwrap();
        assert_eq!(csv.headers().unwrap().iter().collect::<Vec<_>>(), names, "{}", path.display());
        assert_eq!(resource["bytes"].as_u64().unwrap(), fs::metadata(&path).unwrap().len());
        let mark = names.iter().position(|name| *name == "simulated").unwrap();
        for row in csv.records() {
            assert_eq!(&row.unwrap()[mark], "true");
        }
    }
    assert!(package["title"].as_str().unwrap().starts_with("SIMULATED"));
}

#[test]
fn a_refused_frame_has_empty_value_columns() {
    let exported = exported();
    let frames = rows(&exported.tables.join("frames.csv"));
    assert_eq!(frames.len(), 3);
    let at = |name: &str| tables::ALL[0].columns.iter().position(|column| column.name == name).unwrap();
    for column in tables::ALL[0].columns.iter().filter(|c| !c.unit.is_empty() && c.name != "start_u_s") {
        assert_eq!(&frames[2][at(column.name)], "", "{}", column.name);
    }
    assert_eq!(&frames[0][at("volts")], "2500.0000");
    assert_eq!(&frames[0][at("start_utc")], "2026-12-01T08:24:05.000000000Z");
    // Minus ten microvolts a second round to nothing, without a sign.
    assert_eq!(&frames[0][at("slope_volts_per_second")], "0.0000");
    assert_eq!(rows(&exported.tables.join("readings.csv")).len(), 90);
    assert_eq!(&rows(&exported.tables.join("notes.csv"))[0][2], "two\nlines; \"quotes\"");
}

#[test]
fn the_same_run_gives_the_same_bytes_again() {
    let exported = exported();
    let all = || {
        let mut files: Vec<(PathBuf, Vec<u8>)> = fs::read_dir(&exported.tables)
            .unwrap()
            .map(|entry| entry.unwrap().path())
            .map(|path| (path.clone(), fs::read(&path).unwrap()))
            .collect();
        files.sort();
        files
    };
    let before = all();
    write(&exported.folder.path().join("run.ringvolt"), &exported.tables).unwrap();
    assert_eq!(all(), before);
    assert_eq!(before.len(), 7);
}

#[test]
fn tables_of_another_run_and_foreign_files_are_not_written_over() {
    let exported = exported();
    let other = exported.folder.path().join("other.ringvolt");
    run(&other, BEGAN + 1);
    let before = fs::read(exported.tables.join("frames.csv")).unwrap();
    assert!(matches!(write(&other, &exported.tables), Err(ExportError::OtherRun { .. })));
    assert_eq!(fs::read(exported.tables.join("frames.csv")).unwrap(), before);
    fs::write(exported.tables.join("thesis.txt"), "years of work").unwrap();
    let mine = exported.folder.path().join("run.ringvolt");
    assert!(matches!(write(&mine, &exported.tables), Err(ExportError::Foreign { .. })));
}
