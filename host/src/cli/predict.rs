//! `ringvolt predict`: what a bench's tube shows at given voltages.

use std::path::PathBuf;

use clap::Args as ClapArgs;

use super::{Failure, bench_files};
use crate::{
    clock::{Clock, RealClock},
    physics::{self, Material, Prediction, Screen},
    profile::{Profile, ScreenShape},
    reduction::Reduction,
    stamp::Calibration,
};

/// Predict wavelength and rings at given accelerating voltages.
#[derive(Debug, ClapArgs)]
pub struct Args {
    /// The bench profile.
    #[arg(long, value_name = "FILE")]
    pub bench: PathBuf,
    /// Accelerating voltages, volts, with commas between.
    #[arg(long, value_name = "VOLTS", value_delimiter = ',', required = true, allow_hyphen_values = true)]
    pub volts: Vec<String>,
    /// Print a JSON list instead of a table.
    #[arg(long)]
    pub json: bool,
}

/// Predicts and prints.
pub fn run(args: &Args) -> Result<(), Failure> {
    let bench = bench_files::load(&args.bench)?;
    let screen = screen(&bench.profile);
    let material = Material::from_name(&bench.profile.tube.material).map_err(Failure::usage)?;
    let reduction = Reduction::new(&bench.profile, bench.certificate.as_ref());
    let mut predictions = Vec::new();
    for text in &args.volts {
        let volts = volts(text)?;
        let u = voltage_u(&reduction, volts);
        let prediction = physics::predict(volts, u.unwrap_or(0.0), screen, material);
        predictions.push(prediction.ok_or_else(|| Failure::Usage(format!("--volts {text}: nothing accelerates")))?);
    }
    if args.json {
        let text = serde_json::to_string_pretty(&predictions).map_err(Failure::job)?;
        println!("{text}");
    } else {
        print_table(&predictions, reduction.certificate().is_some());
    }
    Ok(())
}

/// The highest voltage a prediction is made for: beyond it no tube of this kind is left whole.
const HIGHEST_VOLTS: f64 = 1e6;

fn volts(text: &str) -> Result<f64, Failure> {
    let number: Option<f64> = text.trim().parse().ok();
    number.filter(|volts| *volts > 0.0 && *volts <= HIGHEST_VOLTS).ok_or_else(|| {
        Failure::Usage(format!(
            "--volts {text}: give voltages in volts above 0 and up to {HIGHEST_VOLTS}, such as 2500,3500"
        ))
    })
}

/// The tube's screen.
pub fn screen(profile: &Profile) -> Screen {
    let tube = &profile.tube;
    let to_screen = tube.target_to_screen_mm * 1e-3;
    match tube.screen {
        ScreenShape::Flat => Screen::Flat { to_screen },
        ScreenShape::Bulb => Screen::Bulb { radius: tube.bulb_radius_mm * 1e-3, to_screen },
    }
}

/// What the bench's certificate leaves uncertain at this voltage today, volts; `None` without a certificate.
fn voltage_u(reduction: &Reduction, volts: f64) -> Option<f64> {
    let calibration = reduction.calibration(RealClock::new().utc_ns(), None)?;
    let code = calibration.certificate.sense.code(calibration.polarity * volts);
    Some(calibration.common_u_volts(volts, code))
}

fn print_table(predictions: &[Prediction], calibrated: bool) {
    for prediction in predictions {
        let u = if calibrated {
            format!(" ±{:.4} pm (k=1, from the certificate)", prediction.wavelength_u_pm)
        } else {
            " (no certificate: uncertainty unknown)".to_owned()
        };
        println!("{} V   wavelength {:.4} pm{u}", prediction.volts, prediction.wavelength_pm);
        println!("  ring  model    spacing pm  deflection rad  radius mm    arc mm");
        for ring in &prediction.rings {
            println!(
                "  {:<5} {:<8} {:>10.3}  {:>14.6}  {:>9.4}  {:>8.4}",
                ring.ring,
                ring.model.name(),
                ring.spacing_pm,
                ring.deflection_rad,
                ring.radius_mm,
                ring.arc_mm
            );
        }
    }
}
