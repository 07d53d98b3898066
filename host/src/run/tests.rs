use std::path::PathBuf;

use ringvolt_protocol::{
    DeviceKind, Event, EventKind, Gap, Hello, Line, Reading, ResetCause, Slow, Stream, Strobe, WindowCodes,
};

use super::{
    rows::{EchoRow, EpochRow, Exposure, FrameRow, NoteRow, Record, StampRow, StampValue},
    *,
};

fn hello(epoch: u32) -> Hello {
    Hello {
        protocol: 1,
        device: [0x5e; 8],
        kind: DeviceKind::Board,
        firmware: [0, 1, 0],
        epoch,
        reset_cause: ResetCause::Watchdog,
        time_us: 1_234,
        certificate: Default::default(),
        first: Default::default(),
        next: Default::default(),
    }
}

fn reading(seq: u32) -> Reading {
    Reading {
        seq,
        time_us: u64::from(seq) * 10_000,
        duration_us: 10_000,
        sense: WindowCodes { sum: -70_000, min: -8_001, max: 7_999, count: 9 },
        cross: WindowCodes { sum: 66_000, min: 7_300, max: 7_400, count: 9 },
        flags: ringvolt_protocol::ReadingFlags::PERMIT,
        certificate: ringvolt_protocol::CertificateHash([seq as u8 / 100; 8]),
    }
}

struct Scratch {
    _folder: tempfile::TempDir,
    path: PathBuf,
}

fn scratch() -> Scratch {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("run.ringvolt");
    Scratch { _folder: folder, path }
}

fn epoch_row(epoch: u32) -> EpochRow {
    EpochRow { epoch_key: 0, hello: hello(epoch), utc_ns: 5, link: "port".to_owned() }
}

#[test]
fn what_goes_in_comes_out() {
    let scratch = scratch();
    let header =
        RunHeader { bench_name: "bench".to_owned(), certificate_text: Some("c".to_owned()), ..RunHeader::default() };
    let mut writer = RunWriter::create(&scratch.path, &header).unwrap();
    let key = writer.epoch(&epoch_row(3)).unwrap();
    assert_eq!(writer.epoch(&epoch_row(3)).unwrap(), key);
    let event = Event { seq: 0, time_us: 7, kind: EventKind::Line { line: Line::LoopA, active: false } };
    let slow = Slow { seq: 0, time_us: 9, beam_na: Some(50_000), enclosure_centicelsius: None };
    let strobe = Strobe { seq: 0, time_us: 11, rising: true };
    let gap = Gap { stream: Stream::Readings, first: 4, count: 2 };
    for record in [Record::Event(event), Record::Slow(slow), Record::Strobe(strobe), Record::Gap(gap)] {
        writer.record(key, &record).unwrap();
    }
    for seq in (0..500).filter(|seq| ![4, 5].contains(seq)) {
        writer.record(key, &Record::Reading(reading(seq))).unwrap();
        writer.record(key, &Record::Reading(reading(seq))).unwrap();
    }
    let echo = EchoRow { asked_mono_ns: 1, answered_mono_ns: 2, utc_minus_mono_ns: 3, received_us: 4, sent_us: 5 };
    writer.echo(key, &echo).unwrap();
    let exposure =
        Exposure { start_utc_ns: 10, end_utc_ns: 20, start_u_ns: 1, length_u_ns: 2, source: "exif".to_owned() };
    let frame = |name: &str, exposure| FrameRow {
        frame: name.to_owned(),
        file: format!("{name}.png"),
        noticed_utc_ns: 30,
        sha256: String::new(),
        exposure,
    };
    let frames = [frame("a", Ok(exposure)), frame("b", Err("unknown".to_owned()))];
    for frame in &frames {
        writer.frame(frame).unwrap();
    }
    let note = NoteRow { utc_ns: 1, author: "person".to_owned(), text: "panel meter 2.5 kV".to_owned() };
    writer.note(&note).unwrap();
    writer.mark_simulated().unwrap();
    writer.commit().unwrap();

    // Read while the writer is still open.
    let reader = RunReader::open(&scratch.path).unwrap();
    assert_eq!(reader.header().unwrap().bench_name, "bench");
    assert!(reader.header().unwrap().simulated);
    assert_eq!(reader.epochs().unwrap()[0].hello, hello(3));
    assert_eq!(reader.events(key).unwrap(), [event]);
    assert_eq!(reader.slow(key).unwrap(), [slow]);
    assert_eq!(reader.strobes(key).unwrap(), [strobe]);
    assert_eq!(reader.gaps(key).unwrap(), [gap]);
    assert_eq!(reader.echoes(key).unwrap(), [echo]);
    assert_eq!(reader.frames().unwrap(), frames);
    assert_eq!(reader.notes().unwrap(), [note]);
    assert_eq!(reader.count_readings(key).unwrap(), (498, 2));
    let some = reader.readings(key, 1_005_000, 1_030_000).unwrap();
    assert_eq!(some, [100, 101, 102, 103].map(reading));
    assert_eq!(reader.readings(key, 0, 0).unwrap(), [reading(0)]);
    assert_eq!(reader.readings(key, 45_000, 55_000).unwrap(), []);
    assert_eq!(reader.readings(key, 4_995_000, u64::MAX >> 1).unwrap(), [reading(499)]);
    assert_eq!(reader.readings(key + 1, 0, u64::MAX >> 1).unwrap(), []);
    assert_eq!(reader.integrity().unwrap(), Vec::<String>::new());
}

#[test]
fn a_reduction_counts_when_it_is_complete_and_the_older_one_stays() {
    let scratch = scratch();
    let mut writer = RunWriter::create(&scratch.path, &RunHeader::default()).unwrap();
    let frame = FrameRow {
        frame: "a".to_owned(),
        file: "a.png".to_owned(),
        noticed_utc_ns: 0,
        sha256: String::new(),
        exposure: Err("unknown".to_owned()),
    };
    writer.frame(&frame).unwrap();
    let value = StampValue {
        volts: 2_500.0,
        volts_u: 0.5,
        volts_u_frame: 0.1,
        volts_u_common: 0.49,
        wavelength_pm: 24.5,
        wavelength_u_pm: 0.002,
        slope_volts_per_second: 0.1,
        span_volts: 0.2,
        ripple_volts: 1.0,
        coverage: 1.0,
        enclosure_celsius: Some(23.0),
    };
    let stamp = |value: Option<StampValue>| StampRow {
        frame: "a".to_owned(),
        verdict: "good".to_owned(),
        reasons: String::new(),
        value,
    };
    let first = writer.begin_reduction(1, "run", "ringvolt 0", "p", None).unwrap();
    writer.stamp(first, &stamp(Some(value))).unwrap();
    writer.finish_reduction(first).unwrap();
    let second = writer.begin_reduction(2, "stamp", "ringvolt 0", "p", Some("c")).unwrap();
    writer.stamp(second, &stamp(None)).unwrap();
    writer.commit().unwrap();
    let reader = RunReader::open(&scratch.path).unwrap();
    assert_eq!(reader.reductions().unwrap().iter().map(|r| r.key).collect::<Vec<_>>(), [first]);
    assert_eq!(reader.stamps(first).unwrap(), [stamp(Some(value))]);
    writer.finish_reduction(second).unwrap();
    assert_eq!(reader.reductions().unwrap().len(), 2);
    assert_eq!(reader.stamps(first).unwrap().len(), 1);
}

#[test]
fn a_run_is_never_written_over() {
    let scratch = scratch();
    drop(RunWriter::create(&scratch.path, &RunHeader::default()).unwrap());
    let again = RunWriter::create(&scratch.path, &RunHeader::default()).err().unwrap();
    assert!(matches!(again, RunError::Exists { .. }), "{again}");
}

#[test]
fn a_clean_end_leaves_one_file() {
    let scratch = scratch();
    let mut writer = RunWriter::create(&scratch.path, &RunHeader::default()).unwrap();
    writer.epoch(&epoch_row(1)).unwrap();
    writer.commit().unwrap();
    drop(writer);
    let files = std::fs::read_dir(scratch.path.parent().unwrap()).unwrap().count();
    assert_eq!(files, 1);
}

#[test]
fn what_is_no_run_is_refused_in_words() {
    let scratch = scratch();
    let refusal = |bytes: &[u8]| {
        std::fs::write(&scratch.path, bytes).unwrap();
        let reader = RunReader::open(&scratch.path).err().map(|error| error.to_string());
        let writer = RunWriter::append(&scratch.path).err().map(|error| error.to_string());
        (reader.unwrap(), writer.unwrap())
    };
    for bytes in [&b"certainly no database, but long enough to have a header of its own"[..], b"", b"SQLite format 3\0"]
    {
        let (reader, writer) = refusal(bytes);
        assert!(reader.contains("run.ringvolt") && writer.contains("run.ringvolt"), "{reader} / {writer}");
    }
    assert!(RunReader::open(&scratch.path.with_extension("gone")).is_err());
}

#[test]
fn a_newer_layout_is_refused() {
    let scratch = scratch();
    drop(RunWriter::create(&scratch.path, &RunHeader::default()).unwrap());
    let connection = rusqlite::Connection::open(&scratch.path).unwrap();
    connection.execute_batch("PRAGMA user_version = 99").unwrap();
    drop(connection);
    let error = RunReader::open(&scratch.path).err().unwrap();
    assert!(matches!(error, RunError::Newer { found: 99, .. }), "{error}");
}

#[test]
fn impossible_values_are_errors_and_not_panics() {
    let scratch = scratch();
    let mut writer = RunWriter::create(&scratch.path, &RunHeader::default()).unwrap();
    let key = writer.epoch(&epoch_row(1)).unwrap();
    writer.record(key, &Record::Reading(reading(0))).unwrap();
    writer.commit().unwrap();
    for sql in [
        "UPDATE reading SET sense_count = 5000",
        "UPDATE reading SET sense_count = 9, sense_min = 99999",
        "UPDATE reading SET sense_min = 0, time_us = -4",
        "UPDATE reading SET time_us = 'noon'",
    ] {
        let connection = rusqlite::Connection::open(&scratch.path).unwrap();
        connection.execute_batch(sql).unwrap();
        let reader = RunReader::open(&scratch.path).unwrap();
        let error = reader.each_reading(key, |_| true).unwrap_err();
        assert!(matches!(error, RunError::Damaged { .. }), "{sql}: {error}");
    }
}

#[test]
fn a_full_disk_is_told_and_what_was_committed_stays() {
    let scratch = scratch();
    let mut writer = RunWriter::create(&scratch.path, &RunHeader::default()).unwrap();
    let key = writer.epoch(&epoch_row(1)).unwrap();
    writer.commit().unwrap();
    writer.limit_pages(60).unwrap();
    let mut committed = 0;
    let error = loop {
        let batch = (committed..committed + 100).try_for_each(|seq| writer.record(key, &Record::Reading(reading(seq))));
        match batch.and_then(|()| writer.commit()) {
            Ok(()) => committed += 100,
            Err(error) => break error,
        }
    };
    assert!(matches!(error, RunError::Full { .. }), "{error}");
    drop(writer);
    let reader = RunReader::open(&scratch.path).unwrap();
    assert_eq!(reader.count_readings(key).unwrap(), (u64::from(committed), 0));
    assert!(committed >= 100);
}
