//! Where the reference's values come from: typed by a person, or read from a meter.

use super::{
    guide::{Dialogue, GuideError},
    suspect::{ended, guess},
};
use crate::instrument::{Meter, Question};

/// What a reference has to say to a point.
#[derive(Clone, Debug, PartialEq)]
pub enum Answer {
    /// Signed volts at the divider's input.
    Volts(f64),
    /// Wait for the voltage to settle again.
    Again,
    /// Take the point before this one again.
    Back,
    /// Leave this point out, for this reason.
    Skip(String),
    /// Stop here; the journal keeps what there is.
    Stop,
}

/// A source of reference values.
pub trait ReferenceSource {
    /// The reference for a point at which the divider shows about `expected_volts` (signed) by its nominal ratio.
    ///
    /// # Errors
    /// When the person can no longer be asked.
    fn read(&mut self, dialogue: &mut dyn Dialogue, expected_volts: f64) -> Result<Answer, GuideError>;
}

/// A number of volts as people type it: `2200`, `2200.4 V`, `2200,4`, `2.2 kV`.
///
/// # Errors
/// What is wrong with it.
pub fn parse_typed_volts(text: &str) -> Result<f64, &'static str> {
    let text = text.trim();
    let (digits, factor) = if let Some(digits) = text.strip_suffix("kV") {
        (digits, 1e3)
    } else if text.ends_with("mV") {
        return Err("is in millivolts; type the voltage at the divider's input, in volts");
    } else {
        (text.strip_suffix(['V', 'v']).unwrap_or(text), 1.0)
    };
    let digits = digits.trim();
    let value: f64 = number(digits)?.parse().map_err(|_| "is no number of volts, such as 2200.4")?;
    let volts = factor * value;
    if (-50_000.0..=50_000.0).contains(&volts) { Ok(volts) } else { Err("is no voltage of such a tube") }
}

/// One decimal comma is as good as a point; three digits behind it may be meant as thousands.
fn number(digits: &str) -> Result<String, &'static str> {
    match digits.split_once(',') {
        None => Ok(digits.to_owned()),
        Some((_, behind)) if behind.contains([',', '.']) => Err("has thousands separators; type plain digits"),
        Some((_, behind)) if behind.len() == 3 => {
            Err("could be thousands or a fraction; type plain digits with a point")
        }
        Some((before, behind)) => Ok(format!("{before}.{behind}")),
    }
}

/// Whether a reference can belong to what the divider shows: a tenth and 20 V are more than any divider is off.
pub(crate) fn plausible(volts: f64, expected: f64) -> bool {
    (volts - expected).abs() <= 20.0 + 0.1 * expected.abs()
}

/// A person who reads the reference and types it.
#[derive(Debug, Default)]
pub struct Typed;

const HELP: &str = "  Type what the reference shows, in volts at the divider's input.\n  \
                    r wait again, b take the point before again, s REASON leave this point out, q stop (nothing is lost).";

impl ReferenceSource for Typed {
    fn read(&mut self, dialogue: &mut dyn Dialogue, expected_volts: f64) -> Result<Answer, GuideError> {
        let mut doubted = None;
        loop {
            let line = dialogue.ask("Reference, volts (? for help): ")?;
            let line = line.trim();
            match line {
                "" => continue,
                "?" => dialogue.say(HELP),
                "r" => return Ok(Answer::Again),
                "b" => return Ok(Answer::Back),
                "q" => return Ok(Answer::Stop),
                "s" => dialogue.say("  Say why, e.g. \"s supply cannot reach it\"."),
                _ if line.starts_with("s ") => return Ok(Answer::Skip(line[2..].trim().to_owned())),
                _ => match parse_typed_volts(line) {
                    Err(problem) => dialogue.say(&format!("  \"{}\" {problem}.", line.escape_debug())),
                    Ok(volts) if plausible(volts, expected_volts) => return Ok(Answer::Volts(volts)),
                    Ok(volts) if plausible(1e3 * volts, expected_volts) => {
                        dialogue.say(&format!(
                            "  {volts} V, but the divider shows about {expected_volts:.0} V: that is in kilovolts. Type volts, or \
                             \"{volts} kV\"."
                        ));
                    }
                    Ok(volts) if doubted == Some(volts) => return Ok(Answer::Volts(volts)),
                    Ok(volts) => {
                        doubted = Some(volts);
                        let why = ended(guess(volts, expected_volts));
                        dialogue.say(&format!(
                            "  {volts} V, but the divider shows about {expected_volts:.0} V{why} Type it right, or the same \
                             once more if it is right."
                        ));
                    }
                },
            }
        }
    }
}

/// A meter that is asked over its remote interface, behind a probe or divider of known ratio.
#[derive(Debug)]
pub struct Metered {
    meter: Meter,
    question: Question,
    /// Volts at the divider's input per volt at the meter.
    ratio: f64,
    /// How many readings are averaged.
    readings: u32,
}

impl Metered {
    /// A meter; `ratio` is volts at the divider's input per volt at the meter, 1000 for a 1000:1 probe.
    pub fn new(meter: Meter, question: Question, ratio: f64, readings: u32) -> Self {
        Self { meter, question, ratio, readings: readings.max(1) }
    }

    fn mean_volts(&mut self) -> Result<f64, crate::instrument::MeterError> {
        let mut sum = 0.0;
        for _ in 0..self.readings {
            sum += self.meter.read_volts(self.question)?;
        }
        Ok(self.ratio * sum / f64::from(self.readings))
    }
}

impl ReferenceSource for Metered {
    fn read(&mut self, dialogue: &mut dyn Dialogue, expected_volts: f64) -> Result<Answer, GuideError> {
        loop {
            let problem = match self.mean_volts() {
                Ok(volts) if plausible(volts, expected_volts) => return Ok(Answer::Volts(volts)),
                Ok(volts) => format!(
                    "The meter gives {volts:.1} V, but the divider shows about {expected_volts:.0} V{} Check the probe's ratio and leads.",
                    ended(guess(volts, expected_volts))
                ),
                Err(error) => error.to_string(),
            };
            dialogue.say(&format!("  {problem}"));
            match dialogue
                .ask("Enter asks the meter again, s REASON leaves this point out, q stops (nothing is lost): ")?
                .trim()
            {
                "q" => return Ok(Answer::Stop),
                line if line.starts_with("s ") => return Ok(Answer::Skip(line[2..].trim().to_owned())),
                _ => {}
            }
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn numbers_are_read_as_people_type_them() {
        for (text, volts) in [
            ("2200", 2200.0),
            (" 2200.4 V", 2200.4),
            ("2200,4", 2200.4),
            ("-12 V", -12.0),
            ("2.2 kV", 2200.0),
            ("0", 0.0),
        ] {
            assert_eq!(parse_typed_volts(text), Ok(volts), "{text}");
        }
        for text in ["", "V", "two", "2,200", "2,200.5", "1.2.3", "nan", "inf", "1e9", "12 mV", "2200 W", "--3"] {
            assert!(parse_typed_volts(text).is_err(), "{text}");
        }
    }
}
