//! The guided calibration as a process: slips at the keyboard, killed in the middle, taken up again, certified.

use std::{
    fmt::Write as _,
    fs,
    io::Write as _,
    path::{Path, PathBuf},
    process::{Command, Output, Stdio},
    thread,
    time::{Duration, Instant},
};

use ringvolt::calibration::{Certificate, Session, plan};

const HIGHEST_VOLTS: f64 = 4400.0;

struct Bench {
    folder: tempfile::TempDir,
}

impl Bench {
    fn new() -> Self {
        let folder = tempfile::tempdir().unwrap();
        let examples = Path::new(env!("CARGO_MANIFEST_DIR")).join("examples");
        for name in ["bench.toml", "certificate.toml"] {
            fs::copy(examples.join(name), folder.path().join(name)).unwrap();
        }
        Self { folder }
    }

    fn path(&self, name: &str) -> PathBuf {
        self.folder.path().join(name)
    }

    /// Codes as the divider would send them, two a second, for the steps from `first` on.
    fn codes(&self, name: &str, first: usize) -> PathBuf {
        let mut table = "time_utc,sense_code,cross_code,enclosure_celsius\n".to_owned();
        let mut half_seconds = 0_i64;
        for step in &plan(HIGHEST_VOLTS, 4, 1).unwrap()[first..] {
            for _ in 0..90 {
                half_seconds += 1;
                // A few hundredths of a code that no pattern of ours shares.
                let noise = ((half_seconds * 7919) % 101) as f64 / 1000.0 - 0.05;
                let at = jiff::Timestamp::from_millisecond(1_790_000_000_000 + 500 * half_seconds).unwrap();
                let (sense, cross) =
                    ((step.target_volts - 0.21) / 0.3125625 + noise, (step.target_volts + 0.34) / 0.33 - noise);
                writeln!(table, "{at},{sense:.3},{cross:.3},23.1").unwrap();
            }
        }
        let path = self.path(name);
        fs::write(&path, table).unwrap();
        path
    }

    fn command(&self, arguments: &[&str]) -> Command {
        let mut command = Command::new(env!("CARGO_BIN_EXE_ringvolt"));
        command.current_dir(self.folder.path()).args(arguments);
        command.stdin(Stdio::piped()).stdout(Stdio::piped()).stderr(Stdio::piped());
        command
    }

    fn run(&self, arguments: &[&str], typed: &str) -> Output {
        let mut child = self.command(arguments).spawn().unwrap();
        // A command that refuses its arguments does not read; that is no error here.
        let _ = child.stdin.take().unwrap().write_all(typed.as_bytes());
        child.wait_with_output().unwrap()
    }
}

fn text(output: &Output) -> String {
    format!("{}{}", String::from_utf8_lossy(&output.stdout), String::from_utf8_lossy(&output.stderr))
}

const RUN: &[&str] = &[
    "calibrate",
    "run",
    "--bench",
    "bench.toml",
    "--journal",
    "c.jsonl",
    "--codes",
    "first.csv",
    "--highest",
    "4400",
    "--levels",
    "4",
    "--cycles",
    "1",
    "--simulated",
    "--operator",
    "somebody",
    "--reference",
    "probe and meter",
    "--reference-u-ppm",
    "150",
    "--reference-u-volts",
    "0.2",
    "--out",
    "new.toml",
];

#[test]
fn a_guided_calibration_survives_being_killed() {
    let bench = Bench::new();
    bench.codes("first.csv", 0);
    bench.codes("second.csv", 3);
    let mut child = bench.command(RUN).spawn().unwrap();
    let mut keyboard = child.stdin.take().unwrap();
    keyboard.write_all(b"0.0\nabout eleven hundred\n1.1\n1100.2\n2200.1\n").unwrap();
    let journal = bench.path("c.jsonl");
    let begun = Instant::now();
    while Session::read(&journal).map_or(0, |(_, points)| points.len()) < 3 {
        assert!(begun.elapsed() < Duration::from_secs(30), "three points were not taken");
        thread::sleep(Duration::from_millis(20));
    }
    let in_use = bench.run(&["calibrate", "resume", "c.jsonl", "--bench", "bench.toml", "--codes", "second.csv"], "");
    assert_eq!(in_use.status.code(), Some(2), "{}", text(&in_use));
    assert!(text(&in_use).contains("in use"), "{}", text(&in_use));
    child.kill().unwrap();
    child.wait().unwrap();

    let resume = [
        "calibrate",
        "resume",
        "c.jsonl",
        "--bench",
        "bench.toml",
        "--codes",
        "second.csv",
        "--out",
        "new.toml",
        "--html",
        "new.html",
    ];
    let output = bench.run(&resume, "3300.4\n4400.2\n3299.9\n2199.8\n1100.0\n0.0\n");
    assert_eq!(output.status.code(), Some(0), "{}", text(&output));
    assert!(
        text(&output).contains("3 of 9 points are done") && text(&output).contains("SIMULATED"),
        "{}",
        text(&output)
    );
    let certificate = Certificate::load(&bench.path("new.toml")).unwrap();
    assert!(certificate.simulated);
    let volts: Vec<f64> = certificate.points.iter().map(|point| point.reference_volts).collect();
    assert_eq!(volts, [0.0, 1100.2, 2200.1, 3300.4, 4400.2, 3299.9, 2199.8, 1100.0, 0.0]);
    assert!((certificate.sense.coefficients[1] / 0.3125625 - 1.0).abs() < 2e-4);
    assert!(fs::read_to_string(bench.path("new.html")).unwrap().contains("SIMULATED"));
}

#[test]
fn codes_that_end_leave_the_journal_and_say_how_to_go_on() {
    let bench = Bench::new();
    let codes = bench.codes("first.csv", 0);
    let table = fs::read_to_string(&codes).unwrap();
    fs::write(&codes, table.lines().take(150).map(|line| format!("{line}\n")).collect::<String>()).unwrap();
    let output = bench.run(RUN, "0\n1100\n2200\n");
    assert_eq!(output.status.code(), Some(1), "{}", text(&output));
    assert!(text(&output).contains("calibrate resume"), "{}", text(&output));
    assert_eq!(Session::read(&bench.path("c.jsonl")).unwrap().1.len(), 2);
}

#[test]
fn a_keyboard_that_closes_ends_in_a_sentence() {
    let bench = Bench::new();
    bench.codes("first.csv", 0);
    let output = bench.run(RUN, "0\n");
    assert_eq!(output.status.code(), Some(1), "{}", text(&output));
    assert!(text(&output).contains("nobody answers"), "{}", text(&output));
}

#[test]
fn wrong_usage_is_told_and_nothing_is_written() {
    let bench = Bench::new();
    bench.codes("first.csv", 0);
    let with = |old: &str, new: &str| -> Vec<String> {
        RUN.iter().map(|word| if *word == old { new.to_owned() } else { (*word).to_owned() }).collect()
    };
    for (arguments, wanted) in [
        (with("4400", "9000"), "approved limit"),
        (with("4400", "nan"), "a highest voltage of NaN"),
        (with("first.csv", "absent.csv"), "absent.csv"),
        (with("bench.toml", "absent.toml"), "absent.toml"),
        (with("4", "0"), "levels"),
        (with("150", "1e9"), "reference-u-ppm"),
    ] {
        let words: Vec<&str> = arguments.iter().map(String::as_str).collect();
        let output = bench.run(&words, "");
        assert_eq!(output.status.code(), Some(2), "{}", text(&output));
        assert!(text(&output).contains(wanted), "{}", text(&output));
        assert!(!bench.path("c.jsonl").exists(), "{}", text(&output));
    }
}

#[test]
fn a_check_goes_into_the_chart_and_a_drifted_bench_is_an_alarm() {
    let bench = Bench::new();
    // Only the second point's codes: 1100 V.
    let table = fs::read_to_string(bench.codes("codes.csv", 1)).unwrap();
    fs::write(bench.path("codes.csv"), table.lines().take(91).map(|line| format!("{line}\n")).collect::<String>())
        .unwrap();
    let check = |volts: &str| {
        bench.run(
            &["calibrate", "check", "--bench", "bench.toml", "--codes", "codes.csv", "--reference-volts", volts],
            "",
        )
    };
    let output = check("1100.1");
    assert_eq!(output.status.code(), Some(0), "{}", text(&output));
    assert!(
        text(&output).contains("SIMULATED") && text(&output).contains("as the certificate says"),
        "{}",
        text(&output)
    );
    let output = check("1110");
    assert_eq!(output.status.code(), Some(1), "{}", text(&output));
    assert!(text(&output).contains("Calibrate again"), "{}", text(&output));
    assert_eq!(fs::read_to_string(bench.path("certificate.checks.csv")).unwrap().lines().count(), 3);
    for (typed, wanted) in [("1.1", "too little"), ("eleven", "no number"), ("nan", "no voltage")] {
        let output = check(typed);
        assert_eq!(output.status.code(), Some(2), "{}", text(&output));
        assert!(text(&output).contains(wanted), "{}", text(&output));
    }
}
