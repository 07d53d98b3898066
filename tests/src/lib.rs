//! Helpers for checks that run the whole program.

pub mod virtual_bench;

use std::{
    collections::HashMap,
    fs,
    io::{BufRead, BufReader, Read},
    path::{Path, PathBuf},
    process::{Child, Command, ExitStatus, Stdio},
    time::{Duration, Instant},
};

/// The built program, beside the test's own binary.
pub fn program() -> PathBuf {
    let mut folder = std::env::current_exe().expect("the test knows its own path");
    // target/PROFILE/deps/test-hash
    folder.pop();
    folder.pop();
    let program = folder.join("ringvolt");
    assert!(
        program.exists(),
        "{} is not built: run `cargo build --release` first, as tests/run does",
        program.display()
    );
    program
}

/// The folder of the repository.
pub fn root() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).parent().expect("tests lies in the repository").to_owned()
}

/// The example bench's profile.
pub fn example_bench() -> PathBuf {
    root().join("host/examples/bench.toml")
}

/// How a program ended.
pub struct Ended {
    /// Exit code; `None` where a signal ended it.
    pub code: Option<i32>,
    /// Standard output.
    pub out: String,
    /// Standard error.
    pub err: String,
}

/// Runs the program to its end.
pub fn run(arguments: &[&str]) -> Ended {
    let output = Command::new(program()).args(arguments).stdin(Stdio::null()).output().expect("the program starts");
    Ended {
        code: output.status.code(),
        out: String::from_utf8_lossy(&output.stdout).into_owned(),
        err: String::from_utf8_lossy(&output.stderr).into_owned(),
    }
}

/// A program that runs beside the test; it is stopped when this is dropped.
pub struct Running {
    child: Child,
}

impl Running {
    /// Starts the program.
    pub fn start(arguments: &[&str]) -> Self {
        let child = Command::new(program())
            .args(arguments)
            .stdin(Stdio::null())
            .stdout(Stdio::piped())
            .stderr(Stdio::piped())
            .spawn()
            .expect("the program starts");
        Self { child }
    }

    /// Waits until it has printed a line that contains `words`.
    pub fn wait_for_line(&mut self, words: &str) -> String {
        let out = self.child.stdout.take().expect("standard output is a pipe");
        let mut reader = BufReader::new(out);
        let mut line = String::new();
        while reader.read_line(&mut line).expect("its output is text") > 0 {
            if line.contains(words) {
                // The rest is read away, so that it never waits for us.
                std::thread::spawn(move || std::io::copy(&mut reader, &mut std::io::sink()));
                return line;
            }
            line.clear();
        }
        let mut err = String::new();
        if let Some(mut pipe) = self.child.stderr.take() {
            let _ = pipe.read_to_string(&mut err);
        }
        panic!("it ended without a line with `{words}`: {err}");
    }

    /// Its process number.
    pub fn id(&self) -> u32 {
        self.child.id()
    }

    /// Kills it at once.
    pub fn kill(&mut self) {
        let _ = self.child.kill();
        let _ = self.child.wait();
    }

    /// Waits for its end.
    pub fn wait(&mut self, at_most: Duration) -> ExitStatus {
        let since = Instant::now();
        loop {
            if let Some(status) = self.child.try_wait().expect("it can be waited for") {
                return status;
            }
            assert!(since.elapsed() < at_most, "it has not ended after {at_most:?}");
            std::thread::sleep(Duration::from_millis(20));
        }
    }
}

impl Drop for Running {
    fn drop(&mut self) {
        // Interrupted first, so that it takes its link away.
        let _ = Command::new("kill").args(["-INT", &self.child.id().to_string()]).status();
        for _ in 0..100 {
            if matches!(self.child.try_wait(), Ok(Some(_))) {
                return;
            }
            std::thread::sleep(Duration::from_millis(20));
        }
        self.kill();
    }
}

/// A table as rows of name and value.
pub fn table(path: &Path) -> Vec<HashMap<String, String>> {
    let text = fs::read_to_string(path).unwrap_or_else(|error| panic!("{}: {error}", path.display()));
    let mut reader = csv::Reader::from_reader(text.as_bytes());
    reader.deserialize().map(|row| row.expect("the table is well formed")).collect()
}

pub mod run_file;
