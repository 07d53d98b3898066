//! `ringvolt bench`: check, begin and explain bench profiles.

use std::{
    collections::BTreeMap,
    io::{self, BufRead, IsTerminal, Write},
    path::{Path, PathBuf},
};

use clap::Subcommand;

use super::Failure;
use crate::{
    calibration::{Certificate, CertificateError, Validity, day_of_utc_ns},
    profile::{self, Field, Kind, Presence, Profile, ProfileError, fields},
    text::TextError,
};

/// Check, begin or explain a bench profile: the file that describes one bench.
#[derive(Debug, clap::Args)]
pub struct Args {
    #[command(subcommand)]
    action: Action,
}

#[derive(Debug, Subcommand)]
enum Action {
    /// Check every field of a profile, and the certificate it names.
    Check {
        /// The profile.
        file: PathBuf,
    },
    /// Write a commented profile: asks for what it must know, or writes the example where nobody can answer.
    New {
        /// Where to write it; standard output if left out. An existing file is never overwritten.
        #[arg(long, value_name = "FILE")]
        out: Option<PathBuf>,
    },
    /// Print every field with its unit, permitted range, default and meaning.
    Explain,
}

/// Carries out `ringvolt bench`.
///
/// # Errors
/// A profile with faults, or a file that cannot be read or written.
pub fn run(args: &Args) -> Result<(), Failure> {
    match &args.action {
        Action::Check { file } => check(file),
        Action::New { out } => new(out.as_deref()),
        Action::Explain => print(&profile::explain()),
    }
}

/// Reads a profile, with the failure its kind deserves: a file that cannot be opened is a failed job, one that is
/// wrong is a usage error.
pub(super) fn load(file: &Path) -> Result<Profile, Failure> {
    Profile::load(file).map_err(|error| match error {
        ProfileError::Text(TextError::Read { .. }) => Failure::Usage(format!("{error}; check the path")),
        _ => Failure::usage(error),
    })
}

/// Writes to standard output; a closed pipe is not worth a message.
pub(super) fn print(text: &str) -> Result<(), Failure> {
    let mut out = io::stdout().lock();
    match out.write_all(text.as_bytes()).and_then(|()| out.flush()) {
        Err(error) if error.kind() != io::ErrorKind::BrokenPipe => {
            Err(Failure::Job(format!("cannot write to standard output: {error}")))
        }
        _ => Ok(()),
    }
}

fn check(file: &Path) -> Result<(), Failure> {
    let profile = load(file)?;
    let mut text = format!("{}: the profile of \"{}\" is in order.\n", file.display(), profile.bench.name);
    let certificate = match Certificate::load(&profile.calibration.certificate) {
        Ok(certificate) => {
            text.push_str(&certificate_line(&profile, &certificate));
            Some(certificate)
        }
        // A bench without a certificate is not wrong, only not calibrated yet.
        Err(CertificateError::Text(error)) => {
            text.push_str(&format!(
                "No calibration yet ({error}): everything is marked UNCALIBRATED until there is one.\n"
            ));
            None
        }
        Err(error) => return Err(Failure::job(error)),
    };
    profile
        .settings_record(certificate.as_ref())
        .map_err(|error| Failure::Usage(format!("{}: {error}", file.display())))?;
    print(&text)
}

fn certificate_line(profile: &Profile, certificate: &Certificate) -> String {
    let mut text = format!(
        "Certificate {} of {}, valid until {}{}.\n",
        &certificate.hash[..16],
        certificate.issued,
        certificate.valid_until,
        if certificate.simulated { ", SIMULATED" } else { "" }
    );
    match certificate.validity(day_of_utc_ns(jiff::Timestamp::now().as_nanosecond() as i64)) {
        Validity::Valid => {}
        Validity::NotYet => text.push_str("Caution: it begins in the future; check this computer's date.\n"),
        Validity::Expired => {
            text.push_str("Caution: it has expired: no frame gets a value until you calibrate again.\n")
        }
    }
    if certificate.bench != profile.bench.name {
        text.push_str(&format!("Caution: it was made for \"{}\".\n", certificate.bench));
    }
    if !profile.controller.device.is_empty() && certificate.device != profile.controller.device {
        text.push_str(&format!("Caution: it was made with board {}.\n", certificate.device));
    }
    let limit = profile.controller.limit_volts;
    let (low, high) = (certificate.conditions.volts_min, certificate.conditions.volts_max);
    let highest = if profile.controller.polarity_negative { -low } else { high };
    if limit > highest {
        text.push_str(&format!(
            "Caution: it ends at {highest} V, below the limit of {limit} V; frames above are marked.\n"
        ));
    }
    text
}

fn new(out: Option<&Path>) -> Result<(), Failure> {
    if let Some(path) = out.filter(|path| path.exists()) {
        return Err(Failure::Usage(format!("{} exists and is not overwritten; choose another name", path.display())));
    }
    let text = if io::stdin().is_terminal() && io::stderr().is_terminal() {
        let stdin = io::stdin();
        ask(&mut stdin.lock(), &mut io::stderr())?
    } else {
        profile::example()
    };
    let Some(path) = out else { return print(&text) };
    // The file must not have appeared while someone was answering.
    let written = std::fs::File::create_new(path).and_then(|mut file| file.write_all(text.as_bytes()));
    written.map_err(|error| Failure::Job(format!("cannot write {}: {error}", path.display())))?;
    let name = path.display();
    eprintln!("Wrote {name}. Go through it, then check it with `ringvolt bench check {name}`.");
    Ok(())
}

/// Asks for every required field and writes the rest with its default.
fn ask(answers: &mut impl BufRead, questions: &mut impl Write) -> Result<String, Failure> {
    let lost = |error: io::Error| {
        Failure::Job(format!("the terminal closed before all was answered ({error}); nothing was written"))
    };
    let begin = "A few questions about your bench. Enter takes the value in brackets, ? shows what is permitted.\n\
                 High voltage can kill: measure nothing inside the enclosure that is not dead and earthed.\n";
    questions.write_all(begin.as_bytes()).map_err(lost)?;
    let mut values = BTreeMap::new();
    for field in fields() {
        if asked(field, &values) {
            let value = one(field, answers, questions).map_err(lost)?;
            values.insert(field.path, value);
        }
    }
    Ok(profile::commented("Bench profile. Lines you were not asked about hold defaults: read them too.", &values))
}

fn asked(field: &Field, values: &BTreeMap<&str, String>) -> bool {
    let bulb =
        field.path == "tube.bulb_radius_mm" && values.get("tube.screen").is_some_and(|shape| shape == "\"bulb\"");
    // Parts of the divider are looked up at the bench, not from memory: the explanation names their tables.
    bulb || field.presence == Presence::Required && !field.path.matches('.').count().gt(&1)
}

/// Asks until an answer passes the field's own check.
fn one(field: &Field, answers: &mut impl BufRead, questions: &mut impl Write) -> io::Result<String> {
    loop {
        writeln!(questions, "\n{}", field.about)?;
        write!(questions, "{} [{}]: ", field.path, field.example.trim_matches('"'))?;
        questions.flush()?;
        let mut line = String::new();
        if answers.read_line(&mut line)? == 0 {
            return Err(io::ErrorKind::UnexpectedEof.into());
        }
        let value = match line.trim() {
            "" => field.example.to_owned(),
            "?" => {
                writeln!(questions, "  permitted are {}", field.permitted())?;
                continue;
            }
            answer => literal(field, answer),
        };
        match profile::check_answer(field, &value) {
            Ok(()) => return Ok(value),
            Err(problem) => writeln!(questions, "  that {problem}")?,
        }
    }
}

/// What a person typed, as TOML.
fn literal(field: &Field, answer: &str) -> String {
    match field.kind {
        Kind::Number { .. }
        | Kind::Numbers { .. }
        | Kind::Count { .. }
        | Kind::Whole { .. }
        | Kind::Switch { .. }
        | Kind::Endings { .. } => answer.to_owned(),
        _ => serde_json::Value::String(answer.trim_matches('"').to_owned()).to_string(),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn answered(lines: &str) -> (Result<String, Failure>, String) {
        let mut asked = Vec::new();
        let text = ask(&mut lines.as_bytes(), &mut asked);
        (text, String::from_utf8(asked).unwrap())
    }

    #[test]
    fn enter_all_the_way_gives_a_profile_that_loads() {
        let (text, asked) = answered(&"\n".repeat(40));
        let profile = Profile::parse(&text.unwrap(), "bench.toml").unwrap();
        assert_eq!(profile.tube.bulb_radius_mm, 66.0);
        assert!(asked.contains("tube.bulb_radius_mm [66.0]"));
    }

    #[test]
    fn nonsense_is_asked_again_with_what_is_permitted() {
        // name, material, screen flat (so no radius is asked), then a distance typed in metres, as text, and right.
        let (text, asked) =
            answered(&format!("My \"old\" tube\ngraphite\nflat\n0.13\nabout 13\n?\n140\n{}", "\n".repeat(30)));
        let profile = Profile::parse(&text.unwrap(), "bench.toml").unwrap();
        assert_eq!(profile.bench.name, "My \"old\" tube");
        assert_eq!(profile.tube.target_to_screen_mm, 140.0);
        assert!(!asked.contains("bulb_radius_mm"));
        assert_eq!(asked.matches("permitted are 10 to 1000 mm").count(), 2, "{asked}");
    }

    #[test]
    fn a_terminal_that_closes_writes_nothing() {
        let (text, _) = answered("one\n");
        assert!(text.unwrap_err().to_string().contains("nothing was written"));
    }
}
