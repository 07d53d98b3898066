//! What was committed is in the run file after a kill, after a loss of power, and on a disk that fills up.

use std::{
    fs,
    io::{BufRead, BufReader, Write},
    path::{Path, PathBuf},
    process::{Command, Stdio},
    time::Duration,
};

use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;
use ringvolt::run::{RunReader, Severity, verify};
use ringvolt_tests::run_file::reading;

const WRITER: &str = env!("CARGO_BIN_EXE_write-run");

/// Starts the writer, kills it a while after it told of so many commits, and gives the number of readings it said were
/// committed.
fn kill_after(path: &Path, commits: usize, while_: Duration) -> u32 {
    let mut child = Command::new(WRITER).arg(path).args(["1000000", "25"]).stdout(Stdio::piped()).spawn().unwrap();
    let mut lines = BufReader::new(child.stdout.take().unwrap()).lines().map_while(Result::ok);
    let mut heard: Vec<String> = lines.by_ref().take(commits).collect();
    std::thread::sleep(while_);
    child.kill().unwrap();
    child.wait().unwrap();
    heard.extend(lines);
    committed(&heard)
}

fn committed(lines: &[String]) -> u32 {
    lines.iter().rev().find_map(|line| line.strip_prefix("committed ")?.parse().ok()).unwrap_or(0)
}

/// Everything up to `least` must be there, unchanged and without a hole; gives how many are.
fn check(path: &Path, least: u32) -> u32 {
    let reader = match RunReader::open(path) {
        Ok(reader) => reader,
        // Killed before even the empty file was committed.
        Err(_) if least == 0 => return 0,
        Err(error) => panic!("{least} committed, but {error}"),
    };
    let mut next = 0;
    for epoch in reader.epochs().unwrap() {
        reader
            .each_reading(epoch.epoch_key, |found| {
                assert_eq!(found, reading(next));
                next += 1;
                true
            })
            .unwrap();
        let faults: Vec<_> = verify(&reader).into_iter().filter(|f| f.severity == Severity::Fault).collect();
        // It has no clock exchanges, which is the one fault it is born with.
        assert!(faults.iter().all(|fault| fault.subject == "clock"), "{faults:?}");
    }
    assert!(next >= least, "{least} committed, {next} there");
    next
}

fn beside(path: &Path, ending: &str) -> PathBuf {
    let mut name = path.as_os_str().to_owned();
    name.push(ending);
    name.into()
}

#[test]
fn a_kill_at_any_time_loses_nothing_that_was_committed() {
    let mut random = ChaCha8Rng::seed_from_u64(71);
    let folder = tempfile::tempdir().unwrap();
    let mut most = 0;
    for trial in 0..100 {
        let path = folder.path().join(format!("{trial}.ringvolt"));
        let committed =
            kill_after(&path, random.random_range(0..60), Duration::from_micros(random.random_range(0..5_000)));
        let there = check(&path, committed);
        // At most the one batch whose commit had returned but had not been told yet.
        assert!(there <= committed + 25, "{committed} told, {there} there");
        most = most.max(committed);
    }
    assert!(most >= 100, "no trial got far enough to mean anything: {most}");
    println!("measured: 100 kills, up to {most} readings committed, none of them lost");
}

/// The log's length when a commit has returned is on disk; what lies behind it may be anything after a loss of power.
#[test]
fn a_loss_of_power_loses_nothing_that_was_committed() {
    let mut random = ChaCha8Rng::seed_from_u64(72);
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("run.ringvolt");
    let mut child = Command::new(WRITER).arg(&path).args(["5000", "25"]).stdout(Stdio::piped()).spawn().unwrap();
    let mut lines = BufReader::new(child.stdout.take().unwrap()).lines().map_while(Result::ok);
    let log = beside(&path, "-wal");
    // Lengths of the log after the commits this test heard of; the writer may be ahead, so each is an upper bound, and
    // the committed number that belongs to it is the one heard *before* the length was read.
    let mut heard = 0;
    for line in lines.by_ref().take(100) {
        heard = committed(&[line]);
    }
    child.kill().unwrap();
    child.wait().unwrap();
    let (file, log_bytes) = (fs::read(&path).unwrap(), fs::read(&log).unwrap());
    let frame = 24 + 4_096;
    let frames = (log_bytes.len() - 32) / frame;
    assert!(frames > 100, "{frames}");
    let mut trials = 0;
    let mut all = 0;
    for _ in 0..200 {
        let case = folder.path().join("case.ringvolt");
        fs::write(&case, &file).unwrap();
        let _ = fs::remove_file(beside(&case, "-shm"));
        // The log ends at any byte, and half the time is followed by rubbish that the disk had there.
        let cut = random.random_range(32..=log_bytes.len());
        let mut torn = log_bytes[..cut].to_vec();
        if random.random_bool(0.5) {
            torn.extend((0..random.random_range(1..20_000)).map(|_| random.random::<u8>()));
        }
        fs::File::create(beside(&case, "-wal")).unwrap().write_all(&torn).unwrap();
        let least = committed_in(&log_bytes[..cut]);
        let there = check(&case, least);
        assert_eq!(there, least, "a commit is there whole or not at all");
        all = all.max(there);
        trials += 1;
    }
    assert!(all > 0 && check(&path, heard) >= heard);
    println!("measured: {trials} torn logs, every commit before the tear whole, none after it");
}

/// Readings in the commits that lie wholly within a log: every commit of the writer adds 25, after the first two that
/// make the tables and the header, and the third that adds the epoch. A frame whose "size of the database after commit"
/// is not zero ends a commit (SQLite, "WAL file format", section 4).
fn committed_in(log: &[u8]) -> u32 {
    let commits = log[32..]
        .chunks_exact(24 + 4_096)
        .filter(|frame| u32::from_be_bytes([frame[4], frame[5], frame[6], frame[7]]) != 0)
        .count();
    (commits as u32).saturating_sub(3) * 25
}

/// A limit on the size of files stands in for the disk that ends: the writes fail, nothing else does.
#[test]
fn a_file_that_cannot_grow_keeps_what_it_has_and_says_so() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("run.ringvolt");
    let script = format!("trap '' XFSZ; ulimit -f 600; exec '{WRITER}' '{}' 1000000 25", path.display());
    let output = Command::new("sh").args(["-c", &script]).output().unwrap();
    assert_eq!(output.status.code(), Some(1));
    let lines: Vec<String> = String::from_utf8(output.stdout).unwrap().lines().map(str::to_owned).collect();
    let sentence = lines.last().unwrap();
    assert!(sentence.starts_with("failed ") && sentence.contains("run.ringvolt"), "{sentence}");
    let committed = committed(&lines);
    assert!(committed > 100);
    assert!(check(&path, committed) >= committed);
    println!("measured: {committed} readings kept; told: {sentence}");
}

/// A real small disk, where this user may mount one.
#[test]
fn a_full_disk_keeps_what_it_has_and_says_so() {
    let folder = tempfile::tempdir().unwrap();
    let mounted = Command::new("mount")
        .args(["-t", "tmpfs", "-o", "size=600k", "tmpfs"])
        .arg(folder.path())
        .stderr(Stdio::null())
        .status()
        .is_ok_and(|status| status.success());
    if !mounted {
        println!("info: no right to mount a small disk here; the size limit of the other test stands in for it");
        return;
    }
    let path = folder.path().join("run.ringvolt");
    let output = Command::new(WRITER).arg(&path).args(["1000000", "25"]).output().unwrap();
    let lines: Vec<String> = String::from_utf8(output.stdout).unwrap().lines().map(str::to_owned).collect();
    let outcome = std::panic::catch_unwind(|| {
        let sentence = lines.last().unwrap();
        assert!(sentence.starts_with("failed the disk that holds"), "{sentence}");
        let committed = committed(&lines);
        assert!(committed > 100);
        check(&path, committed);
        println!("measured: {committed} readings kept; told: {sentence}");
    });
    assert!(Command::new("umount").arg(folder.path()).status().unwrap().success());
    outcome.unwrap();
}
