//! `ringvolt predict`: wavelength and rings at given voltages.

use std::path::{Path, PathBuf};

use super::{Failure, bench};
use crate::{
    calibration::{Certificate, Validity, combined_volts, day_of_utc_ns},
    physics::{Material, Prediction, Screen, predict},
    profile::{Profile, ScreenShape},
};

/// Wavelength and rings this tube would show at given voltages.
#[derive(Debug, clap::Args)]
pub struct Args {
    /// The bench profile.
    #[arg(long, value_name = "FILE")]
    bench: PathBuf,
    /// Accelerating voltages, volts, separated by commas.
    #[arg(long, value_name = "VOLTS", allow_hyphen_values = true)]
    volts: String,
    /// Print JSON.
    #[arg(long)]
    json: bool,
}

/// Where the voltage's uncertainty comes from.
enum Known {
    Certificate { certificate: Box<Certificate>, day: i64, caution: Option<String> },
    Nothing(String),
}

/// Without a calibration, the divider is known no better than its parts: 1 % (a judgement, for parts of 1 % and less).
const UNCALIBRATED_FRACTION: f64 = 0.01;

/// Carries out `ringvolt predict`.
///
/// # Errors
/// A profile with faults, or voltages that are none.
pub fn run(args: &Args) -> Result<(), Failure> {
    let profile = bench::load(&args.bench)?;
    let volts = voltages(&args.volts, profile.controller.limit_volts)?;
    let material = Material::from_name(&profile.tube.material).map_err(Failure::usage)?;
    let known = known(&profile.calibration.certificate);
    let predictions: Vec<Prediction> =
        volts.into_iter().filter_map(|volts| prediction(&profile, &known, volts, material)).collect();
    if args.json {
        return json(&predictions, &known);
    }
    bench::print(&table(&profile, &known, &predictions))
}

/// The list of voltages, each with the sentence it deserves.
fn voltages(list: &str, limit: f64) -> Result<Vec<f64>, Failure> {
    let one = |text: &str| {
        let shown: String = text.chars().filter(|char| !char.is_control()).take(40).collect();
        let wrong = |problem: &str| Failure::Usage(format!("--volts \"{shown}\" {problem}"));
        let volts: f64 =
            text.trim().parse().map_err(|_| wrong("is no number of volts; write for instance --volts 2500,3500"))?;
        if volts.is_nan() || volts <= 0.0 {
            return Err(wrong(
                "accelerates nothing; accelerating voltages are positive numbers, whatever the bench's polarity",
            ));
        }
        if volts > limit {
            return Err(wrong(&format!("is above the bench's approved limit of {limit} V (controller.limit_volts)")));
        }
        if volts < 1.0 {
            return Err(wrong("is below 1 V, where no tube shows rings"));
        }
        Ok(volts)
    };
    let volts: Vec<f64> = list.split(',').take(1001).map(one).collect::<Result<_, _>>()?;
    if volts.len() > 1000 {
        return Err(Failure::Usage("--volts holds more than 1000 voltages; ask in parts".to_owned()));
    }
    Ok(volts)
}

fn known(path: &Path) -> Known {
    let day = day_of_utc_ns(i64::try_from(jiff::Timestamp::now().as_nanosecond()).unwrap_or(0));
    match Certificate::load(path) {
        Ok(certificate) => {
            let caution = match certificate.validity(day) {
                Validity::Valid => None,
                Validity::Expired => {
                    Some(format!("the certificate expired on {}: frames would be refused", certificate.valid_until))
                }
                Validity::NotYet => {
                    Some(format!("the certificate begins on {}: frames would be refused", certificate.issued))
                }
            };
            Known::Certificate { certificate: Box::new(certificate), day, caution }
        }
        Err(error) => Known::Nothing(error.to_string()),
    }
}

impl Known {
    /// Standard uncertainty of the divider's voltage, volts, with an enclosure at the calibration's temperature.
    fn volts_u(&self, volts: f64, polarity: f64) -> f64 {
        match self {
            Self::Nothing(_) => UNCALIBRATED_FRACTION * volts,
            Self::Certificate { certificate, day, .. } => {
                let signed = polarity * volts;
                let celsius = Some(certificate.conditions.ambient_celsius);
                combined_volts(&certificate.common_u(signed, certificate.sense.code(signed), celsius, *day))
            }
        }
    }

    fn words(&self) -> String {
        match self {
            Self::Nothing(problem) => {
                format!("UNCALIBRATED: voltages are taken as known to 1 % (k = 1), because {problem}")
            }
            Self::Certificate { certificate, caution, .. } => {
                let simulated = if certificate.simulated { ", SIMULATED" } else { "" };
                let caution = caution.as_ref().map_or_else(String::new, |caution| format!("; caution: {caution}"));
                format!(
                    "Uncertainties (k = 1) from certificate {} of {}{simulated}, at its temperature, without noise of single frames{caution}",
                    &certificate.hash[..16],
                    certificate.issued
                )
            }
        }
    }
}

/// `volts` stays what was asked for; a contact potential the profile applies goes into the wavelength.
fn prediction(profile: &Profile, known: &Known, volts: f64, material: Material) -> Option<Prediction> {
    let tube = &profile.tube;
    let to_screen = 1e-3 * tube.target_to_screen_mm;
    let screen = match tube.screen {
        ScreenShape::Flat => Screen::Flat { to_screen },
        ScreenShape::Bulb => Screen::Bulb { radius: 1e-3 * tube.bulb_radius_mm, to_screen },
    };
    let u = known.volts_u(volts, profile.polarity().sign() as f64);
    let (contact, contact_u) = if tube.apply_contact_potential {
        (tube.contact_potential_volts, tube.contact_potential_u_volts)
    } else {
        (0.0, 0.0)
    };
    let found = predict(volts + contact, libm::hypot(u, contact_u), screen, material)?;
    Some(Prediction { volts, ..found })
}

fn json(predictions: &[Prediction], known: &Known) -> Result<(), Failure> {
    // Standard output holds the list alone; what the uncertainties rest on goes beside it.
    eprintln!("{}", known.words());
    let text = serde_json::to_string_pretty(predictions)
        .map_err(|error| Failure::Job(format!("cannot write JSON: {error}")))?;
    bench::print(&format!("{text}\n"))
}

fn table(profile: &Profile, known: &Known, predictions: &[Prediction]) -> String {
    let tube = &profile.tube;
    let shape = match tube.screen {
        ScreenShape::Flat => "flat screen".to_owned(),
        ScreenShape::Bulb => format!("bulb of {} mm", tube.bulb_radius_mm),
    };
    let contact = match (tube.apply_contact_potential, tube.contact_potential_volts) {
        (true, volts) => format!("with the contact potential of {volts} V"),
        (false, _) => "without contact potential".to_owned(),
    };
    let mut text = format!(
        "{}: {}, {shape}, target to screen {} mm; wavelengths {contact}.\n{}.\n",
        profile.bench.name,
        tube.material,
        tube.target_to_screen_mm,
        known.words()
    );
    for prediction in predictions {
        text.push_str(&format!(
            "\n{} V: wavelength {:.4} pm, u {:.4} pm\n  ring  spacing, pm  model    deflection, rad  radius, mm  along the screen, mm\n",
            prediction.volts, prediction.wavelength_pm, prediction.wavelength_u_pm
        ));
        for ring in &prediction.rings {
            text.push_str(&format!(
                "  {:<4}  {:>11.3}  {:<7}  {:>15.6}  {:>10.4}  {:>20.4}\n",
                ring.ring,
                ring.spacing_pm,
                format!("{:?}", ring.model).to_lowercase(),
                ring.deflection_rad,
                ring.radius_mm,
                ring.arc_mm
            ));
        }
        if prediction.rings.is_empty() {
            text.push_str("  no ring reaches the screen\n");
        }
    }
    text
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::{calibration, profile};

    fn example() -> Profile {
        Profile::parse(&profile::example(), "").unwrap()
    }

    fn calibrated(day: i64) -> Known {
        Known::Certificate { certificate: Box::new(calibration::example()), day, caution: None }
    }

    #[test]
    fn voltages_are_read_and_nonsense_is_refused() {
        assert_eq!(voltages("2500, 3500.5", 5300.0).unwrap(), [2500.0, 3500.5]);
        for (text, wanted) in [
            ("", "no number"),
            ("2500,", "no number"),
            ("two", "no number"),
            ("2.5kV", "no number"),
            ("nan", "accelerates nothing"),
            ("-2500", "accelerates nothing"),
            ("0", "accelerates nothing"),
            ("inf", "above"),
            ("6000", "approved limit of 5300 V"),
            ("0.5", "below 1 V"),
        ] {
            let Err(Failure::Usage(sentence)) = voltages(text, 5300.0) else { panic!("{text}") };
            assert!(sentence.contains(wanted), "{sentence}");
        }
        assert!(voltages(&vec!["1000"; 2000].join(","), 5300.0).is_err());
    }

    #[test]
    fn the_wavelengths_uncertainty_comes_from_the_certificate() {
        let certificate = calibration::example();
        let found = prediction(&example(), &calibrated(certificate.issued_day()), 2500.0, Material::Graphite).unwrap();
        // By hand: 150 ppm of 2500 V, 0.2 V, the fit's 0.02 V and the hysteresis; times 0.501220 / 2500 V.
        let fit = certificate.sense.fit_u_volts(certificate.sense.code(2500.0));
        let hysteresis = 2500.0 * certificate.sense.hysteresis_fraction / libm::sqrt(12.0);
        let volts_u = libm::sqrt(0.375 * 0.375 + 0.04 + fit * fit + hysteresis * hysteresis);
        let wanted = 24.4986 * 0.501_220 * volts_u / 2500.0;
        assert!((found.wavelength_u_pm / wanted - 1.0).abs() < 1e-5, "{} {wanted}", found.wavelength_u_pm);
        assert!((found.wavelength_pm - 24.4986).abs() < 1e-4);
    }

    #[test]
    fn without_a_certificate_it_says_so_and_is_never_sure() {
        let known = known(Path::new("absent.toml"));
        assert!(known.words().starts_with("UNCALIBRATED"));
        let found = prediction(&example(), &known, 2500.0, Material::Graphite).unwrap();
        assert!((found.wavelength_u_pm / found.wavelength_pm / 0.00501 - 1.0).abs() < 1e-3);
    }

    #[test]
    fn the_contact_potential_is_applied_only_where_the_profile_says_so() {
        let mut profile = example();
        let day = calibration::example().issued_day();
        let without = prediction(&profile, &calibrated(day), 2500.0, Material::Graphite).unwrap();
        profile.tube.apply_contact_potential = true;
        let with = prediction(&profile, &calibrated(day), 2500.0, Material::Graphite).unwrap();
        // -3 V at 2.5 kV is +602 ppm, and 1 V of uncertainty 200 ppm.
        assert!(((with.wavelength_pm / without.wavelength_pm - 1.0) * 1e6 - 602.0).abs() < 1.0);
        assert!(with.wavelength_u_pm > 1.5 * without.wavelength_u_pm && with.volts == 2500.0);
        assert!(table(&profile, &calibrated(day), &[with]).contains("with the contact potential of -3 V"));
    }
}
