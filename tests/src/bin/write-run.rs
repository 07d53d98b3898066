//! Writes a run file and says after each commit what is on disk: for tests that kill it, fill its disk or measure it.
//!
//! `write-run FILE READINGS [PER_COMMIT]` prints `committed N` lines; N readings are in the file then. A failure is
//! printed as `failed SENTENCE` and ends it.

use std::{env, io::Write, path::Path, process::ExitCode};

use ringvolt::run::{
    RunError, RunHeader, RunWriter,
    rows::{EpochRow, Record},
};
use ringvolt_tests::run_file::{hello, reading};

fn main() -> ExitCode {
    let arguments: Vec<String> = env::args().skip(1).collect();
    let number = |index: usize| arguments.get(index).and_then(|text| text.parse::<u32>().ok());
    let (Some(path), Some(readings)) = (arguments.first(), number(1)) else {
        eprintln!("write-run FILE READINGS [PER_COMMIT]");
        return ExitCode::from(2);
    };
    match write(Path::new(path), readings, number(2).unwrap_or(25).max(1)) {
        Ok(()) => ExitCode::SUCCESS,
        Err(error) => {
            say(&format!("failed {error}"));
            ExitCode::from(1)
        }
    }
}

fn write(path: &Path, readings: u32, per_commit: u32) -> Result<(), RunError> {
    let mut writer = RunWriter::create(path, &RunHeader { simulated: true, ..RunHeader::default() })?;
    let key = writer.epoch(&EpochRow { epoch_key: 0, hello: hello(), utc_ns: 0, link: "none".to_owned() })?;
    writer.commit()?;
    for seq in 0..readings {
        writer.record(key, &Record::Reading(reading(seq)))?;
        if (seq + 1) % per_commit == 0 || seq + 1 == readings {
            writer.commit()?;
            say(&format!("committed {}", seq + 1));
        }
    }
    Ok(())
}

/// One line, out at once. Whoever listened may have gone.
fn say(line: &str) {
    let mut out = std::io::stdout().lock();
    let _ = writeln!(out, "{line}").and_then(|()| out.flush());
}
