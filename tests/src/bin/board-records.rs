//! `board-records BENCH.toml`: the records a controller of this bench holds in its flash, as hexadecimal in JSON, for the
//! emulated board to start with.

use std::{path::Path, process::ExitCode};

use ringvolt::{calibration::Certificate, profile::Profile};

fn main() -> ExitCode {
    let Some(bench) = std::env::args().nth(1) else {
        eprintln!("usage: board-records BENCH.toml");
        return ExitCode::from(2);
    };
    match records(Path::new(&bench)) {
        Ok(text) => {
            println!("{text}");
            ExitCode::SUCCESS
        }
        Err(why) => {
            eprintln!("board-records: {why}");
            ExitCode::FAILURE
        }
    }
}

fn records(bench: &Path) -> Result<String, String> {
    let profile = Profile::load(bench).map_err(|error| error.to_string())?;
    let certificate = Certificate::load(&profile.calibration.certificate).map_err(|error| error.to_string())?;
    let settings = profile.settings_record(Some(&certificate)).map_err(|error| error.to_string())?;
    let record = certificate.record().map_err(|error| error.to_string())?;
    let mut buffer = [0; 256];
    let certificate = postcard::to_slice(&record, &mut buffer).map_err(|error| error.to_string())?;
    let certificate = hex(certificate);
    let settings = hex(postcard::to_slice(&settings, &mut buffer).map_err(|error| error.to_string())?);
    Ok(format!(r#"{{"certificate":"{certificate}","settings":"{settings}"}}"#))
}

fn hex(bytes: &[u8]) -> String {
    bytes.iter().map(|byte| format!("{byte:02x}")).collect()
}
