//! The whole job in two processes over a real pseudo-terminal and real image files, judged by the bench's own truth.

use std::{collections::HashMap, path::Path, time::Duration};

use ringvolt::run::RunReader;
use ringvolt_tests::{Running, example_bench, run, table};

type Row = HashMap<String, String>;

fn by_frame(rows: Vec<Row>) -> HashMap<String, Row> {
    rows.into_iter().map(|row| (row["frame"].clone(), row)).collect()
}

/// Undisturbed frames: close to the truth, and nearly all good. Disturbed ones: never silently good.
fn judge(tables: &Path, truth: &Path) {
    let frames = by_frame(table(&tables.join("frames.csv")));
    let truth = by_frame(table(truth));
    let (mut clean, mut good, mut covered) = (0, 0, 0);
    for (name, frame) in &frames {
        let Some(truth) = truth.get(name) else { panic!("{name} is in no truth") };
        let verdict = frame["verdict"].as_str();
        assert_eq!(frame["volts"].is_empty(), verdict == "refused", "{name}: {frame:?}");
        assert_eq!(frame["reasons"].is_empty(), verdict == "good", "{name}: {frame:?}");
        if truth["disturbed"] == "1" {
            assert_ne!(verdict, "good", "{name} was disturbed: {frame:?} {truth:?}");
            continue;
        }
        clean += 1;
        good += u32::from(verdict == "good");
        let number = |text: &str| text.parse::<f64>().unwrap();
        if verdict != "refused" {
            let (volts, really) = (number(&frame["volts"]), number(&truth["true_volts"]));
            assert!((volts - really).abs() < 0.002 * really + 1.0, "{name}: {volts} against {really}");
            covered += u32::from((volts - really).abs() < 2.0 * number(&frame["volts_u"]));
        }
    }
    println!(
        "measured: {} frames, {clean} undisturbed, {good} of them good, {covered} within 2u of the truth",
        frames.len()
    );
    assert!(clean >= 20, "too few clean frames to judge");
    assert!(f64::from(good) >= 0.98 * f64::from(clean), "{good} of {clean} clean frames are good");
}

#[test]
fn a_minute_over_the_pseudo_terminal_loses_nothing_and_stamps_every_frame() {
    let folder = tempfile::tempdir().unwrap();
    let path = |name: &str| folder.path().join(name).display().to_string();
    let (link, frames, out, tables) = (path("controller"), path("frames"), path("run.ringvolt"), path("tables"));
    let mut bench =
        Running::start(&["simulate", "--link-path", &link, "--frames", &frames, "--seed", "11", "--seconds", "70"]);
    bench.wait_for_line("SIMULATED");
    let bench_file = example_bench().display().to_string();
    let ended =
        run(&["run", "--bench", &bench_file, "--link", &link, "--frames", &frames, "--out", &out, "--for", "60"]);
    assert_eq!(ended.code, Some(0), "{}", ended.err);
    assert!(ended.out.lines().all(|line| serde_json::from_str::<serde_json::Value>(line).is_ok()));

    let reader = RunReader::open(Path::new(&out)).unwrap();
    assert!(reader.header().unwrap().simulated);
    let epochs = reader.epochs().unwrap();
    assert_eq!(epochs.len(), 1);
    let key = epochs[0].epoch_key;
    let (count, missing) = reader.count_readings(key).unwrap();
    assert!(count >= 5_990 && missing == 0, "{count} readings, {missing} missing");
    assert_eq!(reader.gaps(key).unwrap(), []);
    let mut end = None;
    reader
        .each_reading(key, |reading| {
            assert!(end.is_none_or(|end| end == reading.time_us), "a hole before {reading:?}");
            end = Some(reading.time_us + u64::from(reading.duration_us));
            true
        })
        .unwrap();

    // Every file in the folder by then has a row, with a stamp.
    let exported = run(&["export", &out, "--out", &tables]);
    assert_eq!(exported.code, Some(0), "{}", exported.err);
    drop(bench);
    judge(Path::new(&tables), &folder.path().join("truth.csv"));
}

#[test]
fn the_demonstration_leaves_what_it_promises() {
    let folder = tempfile::tempdir().unwrap();
    let out = folder.path().join("demo").display().to_string();
    for _ in 0..2 {
        // The second time clears the first away.
        let ended = run(&["demo", "--out", &out, "--seconds", "20", "--seed", "5"]);
        assert_eq!(ended.code, Some(0), "{}", ended.err);
        assert!(ended.out.contains("SIMULATED run, summary"), "{}", ended.out);
        for name in
            ["run.ringvolt", "frames", "report.html", "tables/frames.csv", "tables/datapackage.json", "truth.csv"]
        {
            assert!(folder.path().join("demo").join(name).exists(), "{name} is missing");
        }
        let header = std::fs::read_to_string(folder.path().join("demo/truth.csv")).unwrap();
        assert!(header.starts_with("frame,start_utc,end_utc,true_volts,disturbed\n"));
        for name in ["report.html", "tables/datapackage.json"] {
            let text = std::fs::read_to_string(folder.path().join("demo").join(name)).unwrap();
            assert!(text.contains("SIMULATED"), "{name} lacks the mark");
        }
    }
}

#[test]
fn the_same_run_gives_the_same_bytes() {
    let folder = tempfile::tempdir().unwrap();
    let out = folder.path().join("demo").display().to_string();
    assert_eq!(run(&["demo", "--out", &out, "--seconds", "20", "--seed", "9"]).code, Some(0));
    let run_file = folder.path().join("demo/run.ringvolt").display().to_string();
    let mut before = Vec::new();
    for turn in 0..2 {
        let tables = folder.path().join(format!("tables{turn}"));
        let report = folder.path().join(format!("report{turn}.html"));
        assert_eq!(run(&["stamp", &run_file]).code, Some(0));
        assert_eq!(run(&["export", &run_file, "--out", &tables.display().to_string()]).code, Some(0));
        assert_eq!(run(&["report", &run_file, "--out", &report.display().to_string()]).code, Some(0));
        let mut bytes = vec![std::fs::read(&report).unwrap()];
        for name in ["frames.csv", "readings.csv", "events.csv", "slow.csv", "datapackage.json"] {
            bytes.push(std::fs::read(tables.join(name)).unwrap());
        }
        if turn == 1 {
            assert!(bytes == before, "a second reduction gave other bytes");
        }
        before = bytes;
    }
}

#[test]
fn the_program_takes_its_link_away_and_its_run_can_be_read_while_it_records() {
    let folder = tempfile::tempdir().unwrap();
    let path = |name: &str| folder.path().join(name).display().to_string();
    let (link, frames, out) = (path("controller"), path("frames"), path("run.ringvolt"));
    let mut bench = Running::start(&["simulate", "--link-path", &link, "--frames", &frames, "--seconds", "60"]);
    bench.wait_for_line("SIMULATED");
    let bench_file = example_bench().display().to_string();
    let recorder =
        Running::start(&["run", "--bench", &bench_file, "--link", &link, "--frames", &frames, "--out", &out]);
    std::thread::sleep(Duration::from_secs(3));
    let reader = RunReader::open(Path::new(&out)).unwrap();
    let first = reader.count_readings(1).unwrap().0;
    std::thread::sleep(Duration::from_secs(1));
    let second = reader.count_readings(1).unwrap().0;
    assert!(first > 100 && second >= first + 80, "{first}, then {second}");
    drop(reader);
    drop(recorder);
    drop(bench);
    assert!(std::fs::symlink_metadata(&link).is_err(), "the link is still there");
    assert!(!folder.path().join("run.ringvolt-wal").exists(), "a clean end leaves one file");
}
