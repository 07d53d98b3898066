//! What goes wrong is told in one clear sentence, with the right exit code, and what was recorded is still there.

use std::{fs, path::Path, process::Command, thread, time::Duration};

use ringvolt::{run::RunReader, simulation::Port};
use ringvolt_protocol::{DeviceKind, Hello, MAX_FRAME, ToHost, encode};
use ringvolt_tests::{Ended, Running, example_bench, program, run};

struct Bench {
    folder: tempfile::TempDir,
}

impl Bench {
    fn new() -> Self {
        let folder = tempfile::tempdir().unwrap();
        fs::create_dir(folder.path().join("frames")).unwrap();
        Self { folder }
    }

    fn path(&self, name: &str) -> String {
        self.folder.path().join(name).display().to_string()
    }

    fn run(&self, link: &str) -> Ended {
        self.run_with(&example_bench().display().to_string(), link, "5")
    }

    fn run_with(&self, bench: &str, link: &str, seconds: &str) -> Ended {
        let (frames, out) = (self.path("frames"), self.path("run.ringvolt"));
        run(&["run", "--bench", bench, "--link", link, "--frames", &frames, "--out", &out, "--for", seconds])
    }
}

/// One line that names what is wrong, and no trace of a panic.
fn is_sentence(ended: &Ended, code: i32, words: &[&str]) {
    assert_eq!(ended.code, Some(code), "{}", ended.err);
    assert!(ended.err.starts_with("ringvolt: ") && !ended.err.contains("panicked"), "{}", ended.err);
    for word in words {
        assert!(ended.err.contains(word), "`{word}` is not in: {}", ended.err);
    }
}

#[test]
fn what_is_no_controller_is_told_apart() {
    let bench = Bench::new();
    is_sentence(&bench.run("/dev/null"), 1, &["/dev/null", "not a serial port"]);
    let bench = Bench::new();
    is_sentence(&bench.run("/dev/there-is-none"), 1, &["/dev/there-is-none", "there is no port"]);
    let bench = Bench::new();
    is_sentence(&bench.run("tcp:127.0.0.1:1"), 1, &["tcp:127.0.0.1:1"]);
    let bench = Bench::new();
    is_sentence(&bench.run("tcp:nowhere"), 2, &["tcp:nowhere"]);
}

/// A port that answers every so often with these bytes.
fn answering(bench: &Bench, bytes: impl Fn(u32) -> Vec<u8> + Send + 'static) -> String {
    let link = bench.folder.path().join("port");
    let port = Port::open(&link).unwrap();
    thread::spawn(move || {
        for turn in 0..400 {
            let mut buffer = [0; 256];
            let _ = port.read(&mut buffer);
            let _ = port.write(&bytes(turn));
            thread::sleep(Duration::from_millis(20));
        }
    });
    link.display().to_string()
}

#[test]
fn noise_is_no_hello() {
    let bench = Bench::new();
    let link = answering(&bench, |turn| (0..97u32).map(|index| (index * 31 + turn * 17) as u8).collect());
    is_sentence(&bench.run(&link), 1, &["no Ringvolt controller answered", "no hello"]);
}

#[test]
fn silence_is_told_as_silence() {
    let bench = Bench::new();
    let link = answering(&bench, |_| Vec::new());
    is_sentence(&bench.run(&link), 1, &["no Ringvolt controller answered", "nothing came"]);
}

#[test]
fn a_newer_protocol_is_named() {
    let bench = Bench::new();
    let hello = ToHost::Hello(Hello {
        protocol: 2,
        device: [1; 8],
        kind: DeviceKind::Board,
        firmware: [9, 0, 0],
        epoch: 1,
        reset_cause: Default::default(),
        time_us: 0,
        certificate: Default::default(),
        first: Default::default(),
        next: Default::default(),
    });
    let link = answering(&bench, move |_| {
        let mut frame = [0; MAX_FRAME];
        let length = encode(&hello, &mut frame).unwrap();
        frame[..length].to_vec()
    });
    is_sentence(&bench.run(&link), 1, &["version 2", "version 1", "program"]);
}

#[test]
fn an_invalid_profile_is_named_with_line_and_field() {
    let bench = Bench::new();
    let text = fs::read_to_string(example_bench()).unwrap();
    for (from, to, words) in [
        ("mains_hz = 50", "mains_hz = 51", ["mains_hz", "line"]),
        ("bulb_radius_mm = 66.0", "bulb_radius = 66.0", ["bulb_radius", "line"]),
        ("material = \"graphite\"", "material = \"cheese\"", ["material", "line"]),
        ("[tube]", "[tube", ["line", "bench.toml"]),
    ] {
        assert!(text.contains(from), "{from}");
        fs::write(bench.path("bench.toml"), text.replace(from, to)).unwrap();
        is_sentence(&bench.run_with(&bench.path("bench.toml"), "/dev/null", "5"), 2, &words);
    }
    is_sentence(&bench.run_with(&bench.path("missing.toml"), "/dev/null", "5"), 2, &["missing.toml"]);
}

#[test]
fn a_run_is_never_written_over() {
    let bench = Bench::new();
    fs::write(bench.path("run.ringvolt"), "dear old data").unwrap();
    is_sentence(&bench.run("/dev/null"), 1, &["run.ringvolt", "exists"]);
    assert_eq!(fs::read_to_string(bench.path("run.ringvolt")).unwrap(), "dear old data");
}

#[test]
fn wrong_usage_is_two() {
    for arguments in [
        &["run"][..],
        &["dance"],
        &["demo", "--out", "x", "--seconds", "1"],
        &["predict", "--bench", "nowhere.toml", "--volts", "2500"],
    ] {
        assert_eq!(run(arguments).code, Some(2), "{arguments:?}");
    }
    let bench = example_bench().display().to_string();
    for volts in ["-5", "0", "NaN", "many", "1e99", ""] {
        let ended = run(&["predict", "--bench", &bench, "--volts", volts, "--json"]);
        assert_eq!(ended.code, Some(2), "--volts {volts}: {}", ended.err);
    }
}

/// The simulated bench beside a recorder: what is recorded must survive what happens.
fn simulated(bench: &Bench) -> (Running, String) {
    let link = bench.path("controller");
    let mut running =
        Running::start(&["simulate", "--link-path", &link, "--frames", &bench.path("frames"), "--seconds", "40"]);
    running.wait_for_line("SIMULATED");
    (running, link)
}

#[test]
fn an_unreadable_frame_is_refused_with_its_reason_and_the_run_goes_on() {
    let bench = Bench::new();
    let (_running, link) = simulated(&bench);
    fs::write(bench.path("frames/broken.png"), "this is no picture").unwrap();
    let ended = bench.run_with(&example_bench().display().to_string(), &link, "8");
    assert_eq!(ended.code, Some(0), "{}", ended.err);
    let reader = RunReader::open(Path::new(&bench.path("run.ringvolt"))).unwrap();
    let frames = reader.frames().unwrap();
    let broken = frames.iter().find(|frame| frame.frame == "broken").unwrap();
    assert!(broken.exposure.as_ref().unwrap_err().contains("broken.png"));
    let reduction = reader.reductions().unwrap().pop().unwrap();
    let stamps = reader.stamps(reduction.key).unwrap();
    assert_eq!(stamps.len(), frames.len());
    assert!(stamps.iter().any(|stamp| stamp.frame == "broken" && stamp.reasons == "exposure-unknown"));
    assert!(stamps.iter().any(|stamp| stamp.verdict == "good"));
}

#[test]
fn a_full_disk_ends_the_run_with_everything_before_it() {
    let bench = Bench::new();
    let (_running, link) = simulated(&bench);
    let disk = bench.folder.path().join("disk");
    fs::create_dir(&disk).unwrap();
    // A disk of 800 KiB: a mount where that is allowed, otherwise a limit on the size of files.
    let mounted = Command::new("mount").args(["-t", "tmpfs", "-o", "size=800k", "none"]).arg(&disk).status();
    let is_mounted = mounted.is_ok_and(|status| status.success());
    println!("info: small disk by {}", if is_mounted { "mount" } else { "file size limit" });
    let limit = if is_mounted { "unlimited" } else { "600" };
    let script = format!("trap '' XFSZ; ulimit -f {limit}; exec \"$@\"");
    let out = disk.join("run.ringvolt");
    let output = Command::new("bash")
        .args(["-c", &script, "bash"])
        .arg(program())
        .args(["run", "--for", "60", "--link", &link, "--frames", &bench.path("frames"), "--bench"])
        .arg(example_bench())
        .arg("--out")
        .arg(&out)
        .output()
        .unwrap();
    let err = String::from_utf8_lossy(&output.stderr).into_owned();
    let copy = bench.folder.path().join("copy.ringvolt");
    let copied = fs::copy(&out, &copy);
    let _ = fs::copy(format!("{}-wal", out.display()), format!("{}-wal", copy.display()));
    if is_mounted {
        let _ = Command::new("umount").arg(&disk).status();
    }
    assert_eq!(output.status.code(), Some(1), "{err}");
    assert!(err.contains("run.ringvolt") && (err.contains("is full") || err.contains("could not be written")), "{err}");
    copied.unwrap();
    let reader = RunReader::open(&copy).unwrap();
    assert_eq!(reader.integrity().unwrap(), Vec::<String>::new());
    let (count, missing) = reader.count_readings(1).unwrap();
    println!("measured: {count} readings on a disk of 800 KiB");
    assert!(count > 300 && missing == 0, "{count} readings, {missing} missing");
}
