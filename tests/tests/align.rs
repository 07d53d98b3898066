//! A run reduced again with exposures from other sources, through the real command.

use std::{fs, path::Path};

use ringvolt::run::RunReader;
use ringvolt_tests::{run, table};

/// Issue figure in small: never destroying an earlier result, always from raw data.
#[test]
fn a_run_is_aligned_with_a_table_and_the_earlier_result_stays() {
    let folder = tempfile::tempdir().unwrap();
    let path = |name: &str| folder.path().join(name).display().to_string();
    let demo = path("demo");
    assert_eq!(run(&["demo", "--out", &demo, "--seconds", "20", "--seed", "3"]).code, Some(0));
    let run_file = path("demo/run.ringvolt");
    let before = table(Path::new(&path("demo/tables/frames.csv")));
    // The truth's own times, as a table a person could have: every frame but one.
    let truth = table(Path::new(&path("demo/truth.csv")));
    let mut rows = String::from("frame,start_utc,end_utc,start_u_s\n");
    for row in truth.iter().skip(1) {
        rows += &format!("{},{},{},0.0001\n", row["frame"], row["start_utc"], row["end_utc"]);
    }
    fs::write(path("times.csv"), rows).unwrap();
    let aligned = run(&["align", &run_file, "--source", "table", "--table", &path("times.csv")]);
    assert_eq!(aligned.code, Some(0), "{}", aligned.err);

    let reader = RunReader::open(Path::new(&run_file)).unwrap();
    let reductions = reader.reductions().unwrap();
    assert_eq!(reductions.len(), 2);
    assert_eq!(reader.stamps(reductions[0].key).unwrap().len(), before.len());
    drop(reader);
    assert_eq!(run(&["export", &run_file, "--out", &path("tables2")]).code, Some(0));
    let after = table(Path::new(&path("tables2/frames.csv")));
    let of = |rows: &[std::collections::HashMap<String, String>], frame: &str, column: &str| {
        rows.iter().find(|row| row["frame"] == frame).unwrap()[column].clone()
    };
    let missing = &truth[0]["frame"];
    assert_eq!(of(&after, missing, "reasons"), "exposure-unknown");
    let mut compared = 0;
    for row in truth.iter().skip(1).filter(|row| row["disturbed"] == "0") {
        let frame = &row["frame"];
        assert_eq!(of(&after, frame, "exposure_source"), "table");
        assert_eq!(of(&after, frame, "start_utc"), row["start_utc"]);
        assert_eq!(of(&before, frame, "exposure_source"), "exif");
        let really: f64 = row["true_volts"].parse().unwrap();
        if let Ok(volts) = of(&after, frame, "volts").parse::<f64>() {
            assert!((volts - really).abs() < 0.002 * really + 1.0, "{frame}: {volts} {really}");
            compared += 1;
        }
    }
    assert!(compared >= 8, "{compared}");
}

/// The simulated camera's strobe tells its true exposures; its EXIF times are off by a millisecond or so.
#[test]
fn strobe_edges_give_the_true_exposures() {
    let folder = tempfile::tempdir().unwrap();
    let path = |name: &str| folder.path().join(name).display().to_string();
    assert_eq!(run(&["demo", "--out", &path("demo"), "--seconds", "20", "--seed", "8"]).code, Some(0));
    let run_file = path("demo/run.ringvolt");
    let aligned = run(&["align", &run_file, "--source", "strobe", "--within", "0.15"]);
    assert_eq!(aligned.code, Some(0), "{}", aligned.err);
    assert_eq!(run(&["export", &run_file, "--out", &path("tables2")]).code, Some(0));
    let truth = table(Path::new(&path("demo/truth.csv")));
    let ns = |text: &str| text.parse::<jiff::Timestamp>().unwrap().as_nanosecond();
    let mut worst = 0;
    let frames = table(Path::new(&path("tables2/frames.csv")));
    for frame in &frames {
        assert_eq!(frame["exposure_source"], "strobe", "{frame:?}");
        let really = truth.iter().find(|row| row["frame"] == frame["frame"]).unwrap();
        for column in ["start_utc", "end_utc"] {
            worst = worst.max((ns(&frame[column]) - ns(&really[column])).abs());
        }
    }
    println!("measured: strobe edges of {} frames off by {:.3} ms at worst", frames.len(), worst as f64 * 1e-6);
    assert!(frames.len() > 20 && worst < 1_000_000, "{worst} ns");
}

#[test]
fn what_cannot_be_aligned_is_refused_in_words() {
    let folder = tempfile::tempdir().unwrap();
    let path = |name: &str| folder.path().join(name).display().to_string();
    let demo = path("demo");
    assert_eq!(run(&["demo", "--out", &demo, "--seconds", "20", "--seed", "4"]).code, Some(0));
    let run_file = path("demo/run.ringvolt");
    fs::write(path("bad.csv"), "frame,start_utc,exposure_s\nframe00001,noon,0.2\n").unwrap();
    fs::write(path("other.csv"), "frame,start_utc,exposure_s\nx,2026-01-01T00:00:00Z,0.2\n").unwrap();
    fs::write(path("no.y4m"), "RIFF").unwrap();
    for (arguments, code, words) in [
        (vec!["--source", "table"], 2, "--table"),
        (vec!["--source", "table", "--table", &path("bad.csv")], 2, "noon"),
        (vec!["--source", "table", "--table", &path("other.csv")], 1, "none of its frames"),
        (vec!["--source", "strobe", "--within", "0.0000001"], 1, "no shift of the camera's clock"),
        (vec!["--source", "lamp"], 2, "--patch"),
        (vec!["--source", "lamp", "--patch", "0,0,8,8"], 1, "sync lamp"),
        (vec!["--source", "lamp", "--patch", "0,0,8,8", "--video", &path("no.y4m")], 1, "Y4M"),
        (vec!["--source", "lamp", "--patch", "0,0,8,8", "--within", "-1"], 2, "--within"),
    ] {
        let mut all = vec!["align", run_file.as_str()];
        all.extend(&arguments);
        let ended = run(&all);
        assert_eq!(ended.code, Some(code), "{arguments:?}: {}", ended.err);
        assert!(ended.err.contains(words) && !ended.err.contains("panicked"), "{arguments:?}: {}", ended.err);
    }
    let reader = RunReader::open(Path::new(&run_file)).unwrap();
    assert_eq!(reader.reductions().unwrap().len(), 1);
}
