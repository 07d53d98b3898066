//! Calibrating over a controller's link: the simulated bench behind a real pseudo-terminal.

use std::{
    io::Write as _,
    process::{Command, Stdio},
    thread,
    time::Duration,
};

use ringvolt::calibration::Session;
use ringvolt_tests::{Running, example_bench, program, run};

#[test]
fn a_controller_takes_its_certificate_and_gives_codes_that_settle() {
    let folder = tempfile::tempdir().unwrap();
    let path = |name: &str| folder.path().join(name).display().to_string();
    let (link, frames, journal, bench) =
        (path("controller"), path("frames"), path("c.jsonl"), example_bench().display().to_string());
    // A bench on which nothing happens while this test looks.
    let script = path("script.toml");
    std::fs::write(&script, "[[happening]]\nat_seconds = 250.0\ndo = \"set-volts\"\nvolts = 2500.0\n").unwrap();
    let mut simulated = Running::start(&[
        "simulate",
        "--link-path",
        &link,
        "--frames",
        &frames,
        "--seed",
        "4",
        "--seconds",
        "300",
        "--script",
        &script,
    ]);
    simulated.wait_for_line("SIMULATED");

    let stored = run(&["calibrate", "store", "--bench", &bench, "--link", &link]);
    assert_eq!(stored.code, Some(0), "{}", stored.err);
    assert!(stored.out.contains("Board 5eed000000000001 holds certificate"), "{}", stored.out);

    // The high voltage of the simulated bench is still off: the zero point settles, and the person takes more than the
    // five seconds after which a silent host would have lost the permit.
    let begin = ["--operator", "check", "--reference", "none", "--reference-u-ppm", "1", "--reference-u-volts", "1"];
    let mut child = Command::new(program())
        .args([
            "calibrate",
            "run",
            "--bench",
            &bench,
            "--journal",
            &journal,
            "--link",
            &link,
            "--levels",
            "4",
            "--cycles",
            "1",
            "--dwell",
            "6",
        ])
        .args(begin)
        .stdin(Stdio::piped())
        .stdout(Stdio::piped())
        .spawn()
        .unwrap();
    thread::sleep(Duration::from_secs(28));
    child.stdin.take().unwrap().write_all(b"0.0\n").unwrap();
    let ended = child.wait_with_output().unwrap();
    let heard = String::from_utf8_lossy(&ended.stdout);
    assert!(heard.contains("SIMULATED") && heard.contains("Point 1 of 9"), "{heard}");
    let (header, points) = Session::read(journal.as_ref()).unwrap();
    assert!(header.simulated && header.device == "5eed000000000001");
    assert_eq!(points.len(), 1, "{heard}");
    assert!(points[0].sense_code.abs() < 5.0 && points[0].enclosure_celsius.is_some(), "{points:?}");
}

#[test]
fn what_is_no_controller_is_told() {
    let bench = example_bench().display().to_string();
    let ended = run(&["calibrate", "store", "--bench", &bench, "--link", "/dev/null"]);
    assert_eq!(ended.code, Some(1), "{}", ended.err);
    assert!(ended.err.contains("/dev/null is not a serial port"), "{}", ended.err);
}
