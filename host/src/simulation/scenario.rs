//! What happens on the simulated bench, and when: a script.
//!
//! A script is a TOML file with one `[[happening]]` after another:
//!
//! ```toml
//! [[happening]]
//! at_seconds = 1.5
//! do = "set-volts"
//! volts = 2500.0
//! ```

use std::path::Path;

use serde::Deserialize;
use thiserror::Error;

use crate::text;

/// Which string a fault is in.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Which {
    /// The main sense.
    Sense,
    /// The cross-sense.
    Cross,
}

/// One thing that happens.
#[derive(Clone, Copy, Debug, PartialEq, Deserialize)]
#[serde(tag = "do", rename_all = "kebab-case")]
pub enum What {
    /// The supply's knob is turned at once.
    SetVolts {
        /// To so many volts.
        volts: f64,
    },
    /// The knob is turned evenly.
    Ramp {
        /// To so many volts.
        volts: f64,
        /// So fast.
        volts_per_second: f64,
    },
    /// The mains sag, and the voltage with them.
    Sag {
        /// By this fraction.
        fraction: f64,
        /// For so long.
        seconds: f64,
    },
    /// The voltage jumps.
    Jump {
        /// By this fraction.
        fraction: f64,
    },
    /// The tube breaks down.
    Arc,
    /// A door opens: both loops.
    OpenDoor,
    /// It closes.
    CloseDoor,
    /// Loop A alone opens.
    OpenLoopA,
    /// Loop B alone opens.
    OpenLoopB,
    /// Loop A closes.
    CloseLoopA,
    /// Loop B closes.
    CloseLoopB,
    /// The reset button is pressed.
    PressButton,
    /// It is released.
    ReleaseButton,
    /// A contactor welds.
    WeldContactor,
    /// The welded contactor is replaced.
    FreeContactor,
    /// A string reads this factor of the truth: 0 is open, 2 a low side half open, 1.11 one of ten elements shorted.
    StringFactor {
        /// Which.
        which: Which,
        /// The factor.
        factor: f64,
    },
    /// A converter stands at the end of its scale.
    OverRange {
        /// Which.
        which: Which,
    },
    /// A converter gives nothing.
    Silent {
        /// Which.
        which: Which,
    },
    /// A converter repeats itself.
    Frozen {
        /// Which.
        which: Which,
    },
    /// A string and its converter are whole again.
    Mend {
        /// Which.
        which: Which,
    },
    /// The camera begins to take frames.
    StartCamera,
    /// It stops.
    StopCamera,
    /// The enclosure's temperature.
    Celsius {
        /// Degrees.
        celsius: f64,
    },
}

/// One happening.
#[derive(Clone, Copy, Debug, PartialEq, Deserialize)]
pub struct Happening {
    /// When, seconds of true time.
    pub at_seconds: f64,
    /// What.
    #[serde(flatten)]
    pub what: What,
}

/// A script.
#[derive(Clone, Debug, Default, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Scenario {
    /// In the order of time.
    #[serde(default, rename = "happening")]
    pub happenings: Vec<Happening>,
}

/// Why a script cannot be used.
#[derive(Debug, Error)]
pub enum ScenarioError {
    /// It could not be read.
    #[error(transparent)]
    Text(#[from] text::TextError),
    /// It is not what a script must be.
    #[error("{origin}, line {line}: {problem}; the kinds of happening are listed by `ringvolt simulate --help`")]
    Script {
        /// The file.
        origin: String,
        /// Line.
        line: usize,
        /// What is wrong.
        problem: String,
    },
}

const LONGEST_SCRIPT: u64 = 1 << 20;

impl Scenario {
    /// Reads a script.
    ///
    /// # Errors
    /// With file, line and what is wrong.
    pub fn load(path: &Path) -> Result<Self, ScenarioError> {
        Self::parse(&text::read(path, LONGEST_SCRIPT)?, &path.display().to_string())
    }

    /// Reads a script from its text.
    ///
    /// # Errors
    /// With line and what is wrong.
    pub fn parse(script: &str, origin: &str) -> Result<Self, ScenarioError> {
        let fault = |line: usize, problem: String| ScenarioError::Script { origin: origin.to_owned(), line, problem };
        let mut scenario: Self = toml::from_str(script).map_err(|error: toml::de::Error| {
            let line = error.span().map_or(1, |span| text::line_at(script, span.start));
            fault(line, error.message().lines().next().unwrap_or("is no TOML").to_owned())
        })?;
        for (index, happening) in scenario.happenings.iter().enumerate() {
            if let Some(problem) = problem(happening) {
                let line = nth_happening_line(script, index);
                return Err(fault(line, problem.to_owned()));
            }
        }
        scenario.happenings.sort_by(|a, b| a.at_seconds.total_cmp(&b.at_seconds));
        Ok(scenario)
    }

    fn of(happenings: impl IntoIterator<Item = (f64, What)>) -> Self {
        Self { happenings: happenings.into_iter().map(|(at_seconds, what)| Happening { at_seconds, what }).collect() }
    }

    /// Someone tests the door, presses Reset and turns the knob: the tube is up some two seconds after `from`.
    pub fn start(from: f64, volts: f64) -> Vec<(f64, What)> {
        vec![
            (from + 0.1, What::OpenDoor),
            (from + 0.5, What::CloseDoor),
            (from + 0.8, What::PressButton),
            (from + 1.0, What::ReleaseButton),
            (from + 1.1, What::SetVolts { volts }),
        ]
    }

    /// A steady tube at one voltage, from the start on, with the camera running from 4 s.
    pub fn steady(volts: f64) -> Self {
        let mut happenings = Self::start(0.3, volts);
        happenings.push((4.0, What::StartCamera));
        Self::of(happenings)
    }

    /// The scenario of `demo` and of `simulate` without a script: five voltages, with a step, a sag and an opened door
    /// in between, over `seconds` (20 or more).
    pub fn demonstration(seconds: f64) -> Self {
        let span = (seconds - 4.0).max(16.0);
        let at = |share: f64| 4.0 + share * span;
        let mut happenings = Self::start(0.3, 2_500.0);
        happenings.push((4.0, What::StartCamera));
        happenings.push((at(0.16), What::Jump { fraction: 0.03 }));
        for (share, volts) in [(0.24, 3_000.0), (0.42, 3_500.0), (0.56, 4_000.0)] {
            happenings.push((at(share), What::SetVolts { volts }));
        }
        happenings.push((at(0.50), What::Sag { fraction: 0.04, seconds: 0.5 }));
        happenings.push((at(0.66), What::OpenDoor));
        happenings.push((at(0.66) + 0.6, What::CloseDoor));
        happenings.push((at(0.66) + 1.0, What::PressButton));
        happenings.push((at(0.66) + 1.2, What::ReleaseButton));
        happenings.push((at(0.82), What::SetVolts { volts: 4_500.0 }));
        happenings.push((seconds - 0.8, What::StopCamera));
        let mut scenario = Self::of(happenings);
        scenario.happenings.sort_by(|a, b| a.at_seconds.total_cmp(&b.at_seconds));
        scenario
    }
}

fn problem(happening: &Happening) -> Option<&'static str> {
    let fraction = |value: f64| !(-0.99..=10.0).contains(&value);
    let volts = |value: f64| !(0.0..=20_000.0).contains(&value);
    if !(0.0..=1e7).contains(&happening.at_seconds) {
        return Some("at_seconds must be 0 to 10000000");
    }
    match happening.what {
        What::SetVolts { volts: v } | What::Ramp { volts: v, .. } if volts(v) => Some("volts must be 0 to 20000"),
        What::Ramp { volts_per_second, .. } if !(1e-3..=1e6).contains(&volts_per_second) => {
            Some("volts_per_second must be 0.001 to 1000000")
        }
        What::Sag { fraction: f, .. } | What::Jump { fraction: f } if fraction(f) => {
            Some("fraction must be -0.99 to 10")
        }
        What::Sag { seconds, .. } if !(0.0..=3_600.0).contains(&seconds) => Some("seconds must be 0 to 3600"),
        What::StringFactor { factor, .. } if !(0.0..=10.0).contains(&factor) => Some("factor must be 0 to 10"),
        What::Celsius { celsius } if !(-40.0..=85.0).contains(&celsius) => Some("celsius must be -40 to 85"),
        _ => None,
    }
}

/// The line of the n-th `[[happening]]`.
fn nth_happening_line(script: &str, index: usize) -> usize {
    let heads = script.lines().enumerate().filter(|(_, line)| line.trim_start().starts_with("[[happening]]"));
    heads.map(|(line, _)| line + 1).nth(index).unwrap_or(1)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_script_is_read_in_the_order_of_time() {
        let script = "[[happening]]\nat_seconds = 2.0\ndo = \"arc\"\n[[happening]]\nat_seconds = 1.0\ndo = \"set-volts\"\nvolts = 2500.0\n";
        let scenario = Scenario::parse(script, "script").unwrap();
        assert_eq!(scenario.happenings[0].what, What::SetVolts { volts: 2_500.0 });
        assert_eq!(scenario.happenings[1].what, What::Arc);
    }

    #[test]
    fn what_is_wrong_is_told_with_its_line() {
        for (script, words) in [
            ("[[happening]]\nat_seconds = 1.0\ndo = \"dance\"\n", "dance"),
            ("\n[[happening]]\nat_seconds = -1.0\ndo = \"arc\"\n", "line 2"),
            ("[[happening]]\nat_seconds = 1.0\ndo = \"set-volts\"\nvolts = 99999.0\n", "volts must be"),
            ("[[happening]]\ndo = \"arc\"\n", "at_seconds"),
            ("happening = 3", "line 1"),
        ] {
            let error = Scenario::parse(script, "my.toml").unwrap_err().to_string();
            assert!(error.contains(words) && error.contains("my.toml"), "{error}");
        }
    }
}
