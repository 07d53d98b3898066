//! `ringvolt divider`: what the divider of a profile does, and what is wrong with it.

use std::path::PathBuf;

use super::{Failure, bench};
use crate::{
    calibration::Certificate,
    divider::{Review, Surroundings, Verdict, review},
    profile::Profile,
};

/// How far the temperature may be from the calibration's where no certificate says, kelvin.
const USUAL_KELVIN: f64 = 5.0;

/// Ratio, stress, settling, bleeding and accuracy of the divider in a profile.
#[derive(Debug, clap::Args)]
pub struct Args {
    /// The bench profile; its tables [divider.sense], [divider.cross] and [divider.supply] describe the parts.
    #[arg(long, value_name = "FILE")]
    bench: PathBuf,
    /// Judge at this voltage instead of the profile's limit, volts.
    #[arg(long, value_name = "VOLTS")]
    volts: Option<f64>,
    /// Print JSON.
    #[arg(long)]
    json: bool,
}

/// Carries out `ringvolt divider`. A finding of danger is the answer and no failure of the command.
///
/// # Errors
/// A profile with faults, or without any of the three tables.
pub fn run(args: &Args) -> Result<(), Failure> {
    let profile = bench::load(&args.bench)?;
    let divider = &profile.divider;
    if divider.sense.is_none() && divider.cross.is_none() && divider.supply.is_none() {
        let sentence = "the profile describes no parts: add [divider.sense], [divider.cross] and [divider.supply]; \
                        `ringvolt bench explain` lists their fields";
        return Err(Failure::Usage(format!("{}: {sentence}", args.bench.display())));
    }
    let volts = args.volts.unwrap_or(profile.controller.limit_volts);
    if !(1.0..=30_000.0).contains(&volts) {
        return Err(Failure::Usage(format!("--volts is {volts}; permitted are 1 to 30000 V")));
    }
    let around = Surroundings {
        volts,
        kelvin: kelvin(&profile),
        mains_hz: f64::from(profile.controller.mains_hz),
        window_seconds: 1e-9 * f64::from(profile.window_ns()),
    };
    let found = review(divider.sense.as_ref(), divider.cross.as_ref(), divider.supply.as_ref(), &around);
    if args.json {
        let text = serde_json::to_string_pretty(&found)
            .map_err(|error| Failure::Job(format!("cannot write JSON: {error}")))?;
        return bench::print(&format!("{text}\n"));
    }
    bench::print(&table(&profile, &around, &found))
}

fn kelvin(profile: &Profile) -> f64 {
    Certificate::load(&profile.calibration.certificate).map_or(USUAL_KELVIN, |certificate| {
        let conditions = &certificate.conditions;
        let below = conditions.ambient_celsius - conditions.ambient_min_celsius;
        below.max(conditions.ambient_max_celsius - conditions.ambient_celsius)
    })
}

fn table(profile: &Profile, around: &Surroundings, found: &Review) -> String {
    let mut text = format!("{} at {} V\n\n", profile.bench.name, around.volts);
    for finding in &found.findings {
        let word = match finding.verdict {
            Verdict::Pass => "pass  ",
            Verdict::Doubt => "DOUBT ",
            Verdict::Danger => "DANGER",
        };
        text.push_str(&format!("{word} {:<6} {}: {}\n", finding.part, finding.topic, finding.sentence));
        if finding.verdict != Verdict::Pass {
            text.push_str(&format!("              limit from: {}\n", finding.source));
        }
    }
    for part in ["sense", "cross"] {
        let terms: Vec<_> = found.budget.iter().filter(|term| term.part == part).collect();
        if terms.is_empty() {
            continue;
        }
        text.push_str(&format!(
            "\nAccuracy of {part} at {} V, within {} K of the calibration, ppm\n",
            around.volts, around.kelvin
        ));
        for term in terms {
            let fate = if term.calibrated_out { "taken out by calibration" } else { "stays" };
            text.push_str(&format!("  {:<26} {:>9.1}  {fate}\n", term.name, term.ppm));
        }
        text.push_str(&format!("  {:<26} {:>9.1}  (k = 1)\n", "together, what stays", found.left_ppm(part)));
    }
    text
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::profile;

    #[test]
    fn the_example_is_safe_but_for_what_every_supply_stores() {
        let profile = Profile::parse(&profile::example(), "").unwrap();
        let divider = &profile.divider;
        let around = Surroundings { volts: 5300.0, kelvin: 5.0, mains_hz: 50.0, window_seconds: 0.01 };
        let found = review(divider.sense.as_ref(), divider.cross.as_ref(), divider.supply.as_ref(), &around);
        let bad: Vec<_> = found.findings.iter().filter(|finding| finding.verdict != Verdict::Pass).collect();
        assert!(bad.is_empty(), "{bad:#?}");
        let text = table(&profile, &around, &found);
        assert!(text.contains("pass   sense  ratio: ratio 5001.0") && text.contains("together, what stays"), "{text}");
    }
}
