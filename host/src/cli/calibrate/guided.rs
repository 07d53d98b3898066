//! `ringvolt calibrate run` and `resume`: the guided sequence.

use std::{
    fs::File,
    path::{Path, PathBuf},
    time::Duration,
};

use super::{
    IssueArgs, ReferenceArgs,
    fit::{Origin, finish},
    live::LinkSource,
    terminal::Terminal,
};
use crate::{
    calibration::{
        CodeSource, CsvSource, End, Guide, Header, Metered, ReferenceSource, Session, SettlingRules, Typed, plan,
    },
    cli::{Failure, bench},
    instrument::{Address, Meter, Question},
    link,
    profile::Profile,
};

/// Where the codes come from.
#[derive(Debug, clap::Args)]
#[group(required = true, multiple = false)]
pub(super) struct SourceArgs {
    /// Codes from the controller: a serial port, or tcp:HOST:PORT.
    #[arg(long, value_name = "LINK")]
    link: Option<String>,
    /// Codes from a CSV table with the columns time_utc, sense_code, cross_code and enclosure_celsius.
    #[arg(long, value_name = "FILE")]
    codes: Option<PathBuf>,
}

impl SourceArgs {
    /// Whether the codes come from a controller, and so never end.
    pub(super) const fn is_live(&self) -> bool {
        self.link.is_some()
    }
}

/// How the reference is read.
#[derive(Debug, clap::Args)]
struct MeterArgs {
    /// Read the reference from a SCPI meter at tcp:HOST:PORT or serial:PATH@BAUD; typed by hand if left out.
    #[arg(long, value_name = "ADDRESS")]
    meter: Option<String>,
    /// Volts at the divider's input per volt at the meter: 1000 for a 1000:1 probe.
    #[arg(long, value_name = "RATIO", default_value_t = 1.0, allow_hyphen_values = true)]
    meter_ratio: f64,
    /// Ask with READ?, leaving the meter's own settings, instead of MEAS:VOLT:DC?.
    #[arg(long)]
    meter_read: bool,
    /// How many readings are averaged.
    #[arg(long, value_name = "COUNT", default_value_t = 5, value_parser = clap::value_parser!(u32).range(1..=1000))]
    meter_readings: u32,
    /// How long a reading may take, seconds.
    #[arg(long, value_name = "SECONDS", default_value_t = 10.0)]
    meter_timeout: f64,
}

/// When a point counts as settled.
#[derive(Debug, clap::Args)]
struct SettlingArgs {
    /// Wait at least this long at each point, seconds: 30, or five thermal time constants if that is longer.
    #[arg(long, value_name = "SECONDS", default_value_t = 30.0)]
    dwell: f64,
    /// Call a supply that has not settled by then one that never settles, seconds.
    #[arg(long, value_name = "SECONDS", default_value_t = 600.0)]
    patience: f64,
}

/// Begin a guided calibration.
#[derive(Debug, clap::Args)]
pub(super) struct RunArgs {
    /// The bench profile.
    #[arg(long, value_name = "FILE")]
    bench: PathBuf,
    /// The journal to begin: every point is in it as soon as it is taken.
    #[arg(long, value_name = "FILE.jsonl")]
    journal: PathBuf,
    /// Highest voltage, volts; the profile's limit if left out.
    #[arg(long, value_name = "VOLTS")]
    highest: Option<f64>,
    /// Steps from zero to the highest voltage.
    #[arg(long, value_name = "COUNT", default_value_t = 10)]
    levels: u32,
    /// How often up and down.
    #[arg(long, value_name = "COUNT", default_value_t = 3)]
    cycles: u32,
    /// The codes come from a simulated bench.
    #[arg(long)]
    simulated: bool,
    #[command(flatten)]
    source: SourceArgs,
    #[command(flatten)]
    meter: MeterArgs,
    #[command(flatten)]
    settling: SettlingArgs,
    #[command(flatten)]
    reference: ReferenceArgs,
    #[command(flatten)]
    issue: IssueArgs,
}

/// Take a guided calibration up where it ended.
#[derive(Debug, clap::Args)]
pub(super) struct ResumeArgs {
    /// The journal.
    #[arg(value_name = "JOURNAL")]
    journal: PathBuf,
    /// The bench profile.
    #[arg(long, value_name = "FILE")]
    bench: PathBuf,
    #[command(flatten)]
    source: SourceArgs,
    #[command(flatten)]
    meter: MeterArgs,
    #[command(flatten)]
    settling: SettlingArgs,
    #[command(flatten)]
    issue: IssueArgs,
}

const CAUTION: &str = "\
High voltage can kill. Work with a second person, one hand in the pocket, the
enclosure closed; change leads only with the supply off and everything earthed.
0 V on a screen is no proof of dead.
Warm everything up for 30 minutes first. Keep the reference on the tube's own
pin, not on the supply's terminal.";

pub(super) fn run(args: &RunArgs) -> Result<(), Failure> {
    let profile = bench::load(&args.bench)?;
    let (operator, reference) = args.reference.complete()?;
    let highest = args.highest.unwrap_or(profile.controller.limit_volts);
    if highest > profile.controller.limit_volts {
        let limit = profile.controller.limit_volts;
        return Err(Failure::Usage(format!("--highest {highest} V is above the bench's approved limit of {limit} V")));
    }
    let steps = plan(highest, args.levels, args.cycles).map_err(Failure::usage)?;
    let source = open_source(&args.source, &profile.controller.device, args.simulated)?;
    let polarity = profile.polarity().sign() as i8;
    let header = Header {
        schema: 1,
        bench: profile.bench.name.clone(),
        device: source.device(),
        simulated: source.simulated(),
        operator,
        reference,
        polarity,
        steps,
    };
    let session = Session::create(&args.journal, header).map_err(Failure::usage)?;
    guide(&profile, session, source, &args.meter, &args.settling, &args.issue)
}

pub(super) fn resume(args: &ResumeArgs) -> Result<(), Failure> {
    let profile = bench::load(&args.bench)?;
    let (session, notice) = Session::resume(&args.journal).map_err(Failure::usage)?;
    let header = session.header();
    if header.bench != profile.bench.name {
        let sentence = format!(
            "the journal is of \"{}\", the profile of \"{}\"; take the right one",
            header.bench, profile.bench.name
        );
        return Err(Failure::Usage(sentence));
    }
    let source = open_source(&args.source, &profile.controller.device, header.simulated)?;
    if let Some(notice) = notice {
        println!("{notice}");
    }
    println!("{} of {} points are done.", session.done(), header.steps.len());
    guide(&profile, session, source, &args.meter, &args.settling, &args.issue)
}

fn guide(
    profile: &Profile,
    mut session: Session,
    mut source: Box<dyn CodeSource>,
    meter: &MeterArgs,
    settling: &SettlingArgs,
    issue: &IssueArgs,
) -> Result<(), Failure> {
    let mut reference = open_reference(meter)?;
    let rules = rules(settling)?;
    let mut dialogue = Terminal::new();
    println!("{CAUTION}");
    if session.header().simulated {
        println!("SIMULATED: the codes come from an invented bench.");
    }
    let end = Guide {
        session: &mut session,
        source: source.as_mut(),
        reference: reference.as_mut(),
        dialogue: &mut dialogue,
        rules,
        nominal_volts_per_code: profile.divider.nominal_volts_per_code,
    }
    .run()
    .map_err(Failure::job)?;
    let header = session.header();
    if end == End::Stopped {
        println!(
            "Stopped after {} of {} points; `ringvolt calibrate resume` goes on.",
            session.done(),
            header.steps.len()
        );
        return Ok(());
    }
    let origin = Origin {
        operator: header.operator.clone(),
        reference: header.reference.clone(),
        device: header.device.clone(),
        simulated: header.simulated,
    };
    finish(profile, session.points(), &origin, issue)
}

fn rules(args: &SettlingArgs) -> Result<SettlingRules, Failure> {
    let within = |name: &str, value: f64, least: f64| {
        if (least..=36_000.0).contains(&value) {
            return Ok(value);
        }
        Err(Failure::Usage(format!("--{name} is {value}; permitted are {least} to 36000 s")))
    };
    let dwell_seconds = within("dwell", args.dwell, 5.0)?;
    let patience_seconds = within("patience", args.patience, dwell_seconds + 30.0)?;
    Ok(SettlingRules { dwell_seconds, patience_seconds, ..SettlingRules::default() })
}

fn open_reference(args: &MeterArgs) -> Result<Box<dyn ReferenceSource>, Failure> {
    let Some(address) = &args.meter else { return Ok(Box::new(Typed)) };
    if !(1e-3..=1e6).contains(&args.meter_ratio.abs()) {
        return Err(Failure::Usage(format!(
            "--meter-ratio is {}; permitted are 0.001 to 1000000 of either sign",
            args.meter_ratio
        )));
    }
    if !(0.1..=600.0).contains(&args.meter_timeout) {
        return Err(Failure::Usage(format!("--meter-timeout is {}; permitted are 0.1 to 600 s", args.meter_timeout)));
    }
    let address: Address = address.parse().map_err(Failure::usage)?;
    let mut meter = Meter::open(&address, Duration::from_secs_f64(args.meter_timeout)).map_err(Failure::job)?;
    println!("Reference meter: {}.", meter.identity().map_err(Failure::job)?);
    let question = if args.meter_read { Question::Read } else { Question::Measure };
    Ok(Box::new(Metered::new(meter, question, args.meter_ratio, args.meter_readings)))
}

/// Opens the source of codes. `device` is the profile's board, empty for any; `simulated` is what a table is.
pub(super) fn open_source(args: &SourceArgs, device: &str, simulated: bool) -> Result<Box<dyn CodeSource>, Failure> {
    match (&args.link, &args.codes) {
        (Some(link), _) => open_link(link, device),
        (None, Some(codes)) => open_table(codes, device, simulated),
        (None, None) => Err(Failure::Usage("say where the codes come from: --link or --codes".to_owned())),
    }
}

fn open_link(link: &str, device: &str) -> Result<Box<dyn CodeSource>, Failure> {
    let address: link::Address = link.parse().map_err(Failure::usage)?;
    let source = LinkSource::connect(&address).map_err(Failure::Job)?;
    let found = source.device();
    if !device.is_empty() && found != device {
        let sentence = format!("the profile's board is {device}, but {address} is board {found}; take the right one");
        return Err(Failure::Job(sentence));
    }
    Ok(Box::new(source))
}

fn open_table(path: &Path, device: &str, simulated: bool) -> Result<Box<dyn CodeSource>, Failure> {
    let file = File::open(path).map_err(|error| Failure::Usage(format!("cannot read {}: {error}", path.display())))?;
    if device.is_empty() {
        let sentence =
            "controller.device in the profile is empty, but a table does not say which board it is from; fill it in";
        return Err(Failure::Usage(sentence.to_owned()));
    }
    Ok(Box::new(CsvSource::new(Box::new(file), &path.display().to_string(), device, simulated)))
}
