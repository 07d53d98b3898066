use std::{path::Path, time::Instant};

use ringvolt_protocol::{Ack, DeviceKind, Event, EventKind, Hello, Reading, ResetCause, WindowCodes};

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
const BEGAN: i64 = 1_796_113_445_000_000_000;

fn reduction() -> Reduction {
    let profile = Profile::parse(&profile::example(), "example").unwrap();
    Reduction::new(&profile, Some(&Certificate::parse(CERTIFICATE, "example").unwrap()))
}

/// A run of so many seconds and frames, of which every third is refused, or all.
fn run(path: &Path, simulated: bool, seconds: u32, frames: u32, all_refused: bool) {
    let header = RunHeader {
        simulated,
        bench_name: "<b>bench</b> & \"co\"".to_owned(),
        profile_text: profile::example(),
        certificate_text: Some(CERTIFICATE.to_owned()),
        link: "<script>alert(1)</script>".to_owned(),
        ..RunHeader::default()
    };
    let mut writer = RunWriter::create(path, &header).unwrap();
    let hello = Hello {
        protocol: 1,
        device: [1; 8],
        kind: DeviceKind::Board,
        firmware: [0, 1, 0],
        epoch: 1,
        reset_cause: ResetCause::PowerOn,
        time_us: 0,
        certificate: Default::default(),
        first: Ack::default(),
        next: Ack::default(),
    };
    let key = writer.epoch(&EpochRow { epoch_key: 0, hello, utc_ns: BEGAN, link: String::new() }).unwrap();
    for step in 0..i64::from(seconds) * 4 {
        let us = step * 250_000;
        let echo = EchoRow {
            asked_mono_ns: us * 1_000,
            answered_mono_ns: us * 1_000 + 400_000,
            utc_minus_mono_ns: BEGAN,
            received_us: us as u64 + 200,
            sent_us: us as u64 + 200,
        };
        writer.echo(key, &echo).unwrap();
    }
    for seq in 0..seconds * 100 {
        let base = 8_000 + (seq % 4_000) as i16;
        let codes = WindowCodes { sum: i32::from(base) * 9, min: base - 5, max: base + 5, count: 9 };
        let time_us = u64::from(seq) * 10_000;
        let reading = Reading { seq, time_us, duration_us: 10_000, sense: codes, cross: codes, ..Reading::default() };
        writer.record(key, &Record::Reading(reading)).unwrap();
    }
    writer.record(key, &Record::Event(Event { seq: 0, time_us: 5, kind: EventKind::PermitGiven })).unwrap();
    writer
        .note(&NoteRow { utc_ns: BEGAN, author: "person".to_owned(), text: "<img src=x onerror=y>".to_owned() })
        .unwrap();
    let reduction = writer.begin_reduction(0, "run", "ringvolt", "", None).unwrap();
    for index in 0..frames {
        let name = format!("frame{index:05}<i>");
        let at = BEGAN + i64::from(index) * i64::from(seconds) * 1_000_000_000 / i64::from(frames.max(1));
        let exposure = Exposure {
            start_utc_ns: at,
            end_utc_ns: at + 200_000_000,
            start_u_ns: 1_000,
            length_u_ns: 1_000,
            source: "exif".to_owned(),
        };
        let frame = FrameRow {
            frame: name.clone(),
            file: format!("{name}.png"),
            noticed_utc_ns: at,
            sha256: "0".repeat(64),
            exposure: Ok(exposure),
        };
        writer.frame(&frame).unwrap();
        let volts = 2_500.0 + f64::from(index);
        let value = StampValue {
            volts,
            volts_u: 0.5,
            volts_u_frame: 0.3,
            volts_u_common: 0.4,
            wavelength_pm: crate::physics::wavelength_metres(volts).unwrap() * 1e12,
            wavelength_u_pm: 0.0025,
            slope_volts_per_second: 0.0,
            span_volts: 0.2,
            ripple_volts: 1.0,
            coverage: 1.0,
            enclosure_celsius: Some(23.0),
        };
        let refused = all_refused || index % 3 == 0;
        let stamp = StampRow {
            frame: name,
            verdict: if refused { "refused" } else { "good" }.to_owned(),
            reasons: if refused { "senses-disagree;over-range" } else { "" }.to_owned(),
            value: (!refused).then_some(value),
        };
        writer.stamp(reduction, &stamp).unwrap();
    }
    writer.finish_reduction(reduction).unwrap();
}

fn page(simulated: bool, seconds: u32, frames: u32, all_refused: bool) -> String {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("run.ringvolt");
    run(&path, simulated, seconds, frames, all_refused);
    html(&RunReader::open(&path).unwrap(), &reduction()).unwrap()
}

#[test]
fn text_from_files_is_text_in_the_page() {
    let page = page(false, 5, 6, false);
    for raw in ["<script", "<b>bench", "<img", "onerror=y>", "frame00000<i>"] {
        assert!(!page.contains(raw), "{raw}");
    }
    assert!(page.contains("&lt;script&gt;alert(1)") && page.contains("&lt;img src=x onerror=y&gt;"));
}

#[test]
fn the_mark_is_there_when_simulated_and_only_then() {
    let (marked, plain) = (page(true, 5, 6, false), page(false, 5, 6, false));
    assert!(marked.contains("<title>SIMULATED: ") && marked.contains("class=\"banner\" role=\"note\">SIMULATED"));
    // The example certificate names its reference as simulated, so the word itself is in both.
    assert!(!plain.contains("<title>SIMULATED") && !plain.contains("class=\"banner\""));
}

#[test]
fn every_link_within_the_page_leads_somewhere_and_none_leads_out() {
    let page = page(false, 5, 6, false);
    let links: Vec<&str> = page.split("href=\"#").skip(1).filter_map(|rest| rest.split('"').next()).collect();
    assert!(links.len() > 8, "{links:?}");
    assert!(links.iter().all(|id| page.contains(&format!(" id=\"{id}\""))), "{links:?}");
    // The one address in it names the SVG language.
    let outside: Vec<&str> =
        page.split("http").skip(1).filter(|rest| !rest.starts_with("://www.w3.org/2000/svg")).collect();
    assert!(outside.is_empty(), "{outside:?}");
}

#[test]
fn a_run_with_nothing_good_in_it_is_told_sensibly() {
    let refused = page(false, 5, 6, true);
    assert!(refused.contains("No frame of this run is good") && refused.contains("No frame has a wavelength"));
    assert!(refused.contains("The two senses contradict each other."));
    let empty = page(false, 0, 0, true);
    assert!(empty.contains("No frame was found") && empty.contains("no reading could be placed in time"));
}

#[test]
fn a_picture_travels_in_the_page() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("run.ringvolt");
    run(&path, false, 2, 1, false);
    let picture = Picture { png: b"foobar".to_vec(), alt: "two \"rings\"".to_owned(), caption: "a < b".to_owned() };
    let extra =
        ExtraSection { id: "samples", heading: "Samples".to_owned(), pictures: vec![picture], ..Default::default() };
    let page = html_with(&RunReader::open(&path).unwrap(), &reduction(), &[extra]).unwrap();
    assert!(page.contains("src=\"data:image/png;base64,Zm9vYmFy\" alt=\"two &quot;rings&quot;\""));
    assert!(page.contains("<a href=\"#samples\">Samples</a>") && page.contains("a &lt; b"));
}

/// The time is only told: a limit on it would fail on a busy machine and prove nothing.
#[test]
fn an_hour_with_500_frames_is_small_and_the_same_each_time() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("run.ringvolt");
    run(&path, false, 3_600, 500, false);
    let reader = RunReader::open(&path).unwrap();
    let before = Instant::now();
    let page = html(&reader, &reduction()).unwrap();
    println!("measured: report of 1 h and 500 frames in {:?}, {} bytes", before.elapsed(), page.len());
    assert!(page.len() < 5_000_000);
    assert!(page == html(&reader, &reduction()).unwrap());
}
