//! A scenario as a person writes it: a small TOML file.
//!
//! ```toml
//! # Times are seconds from the beginning.
//! [[happening]]
//! at_seconds = 1.5
//! do = "set-volts"
//! volts = 2500.0
//! ```
//!
//! [`ACTIONS`] is the table of what can happen; checks, messages and [`explain`] are made from it.

use std::{fmt::Write as _, path::Path};

use serde::Deserialize;
use thiserror::Error;
use toml::Spanned;

use super::scenario::{Happening, Scenario, What, Which};
use crate::text;

/// Longest script that is read, bytes.
const LONGEST_SCRIPT: u64 = 1 << 20;
/// Latest time of a happening, seconds.
const LATEST: f64 = 1e7;

/// Why a script cannot be used.
#[derive(Debug, Error)]
pub enum ScenarioError {
    /// It could not be read.
    #[error(transparent)]
    Text(#[from] text::TextError),
    /// It is not what a script must be.
    #[error("{origin}, line {line}: {problem}; the kinds of happening are listed by `ringvolt simulate --explain`")]
    Script {
        /// The file.
        origin: String,
        /// Line, counted from 1.
        line: usize,
        /// What is wrong there and what is permitted.
        problem: String,
    },
}

/// One word after `do`, the fields it takes, and what it does.
pub struct ActionWord {
    /// The word.
    pub word: &'static str,
    /// Fields it needs.
    pub fields: &'static [&'static str],
    /// What it does.
    pub meaning: &'static str,
}

const fn word(word: &'static str, fields: &'static [&'static str], meaning: &'static str) -> ActionWord {
    ActionWord { word, fields, meaning }
}

/// Everything that can happen.
pub const ACTIONS: &[ActionWord] = &[
    word("set-volts", &["volts"], "turn the supply to 0 to 20000 V; it follows at its own slew"),
    word("ramp", &["volts", "volts_per_second"], "turn the supply evenly to so many volts, 0.001 to 1000000 V/s"),
    word("sag", &["fraction", "seconds"], "let the output drop by a fraction (0 to 1) for up to 3600 s"),
    word("jump", &["fraction"], "let the output jump by a fraction (-0.99 to 10) and stay there"),
    word("arc", &[], "let the tube break down"),
    word("mains", &["hertz", "level"], "new mains: 40 to 70 Hz, level 0 to 1.3 of the nominal"),
    word("open-door", &[], "open both interlock loops"),
    word("close-door", &[], "close both interlock loops"),
    word("open-loop-a", &[], "open loop A alone"),
    word("close-loop-a", &[], "close loop A"),
    word("open-loop-b", &[], "open loop B alone"),
    word("close-loop-b", &[], "close loop B"),
    word("press-button", &[], "press the reset button"),
    word("release-button", &[], "release the reset button"),
    word("attend", &[], "someone opens the door or presses the button whenever the controller waits for it"),
    word("leave", &[], "nobody attends any more"),
    word("weld-contactor", &[], "weld both contactors if they are closed: the mains stays on"),
    word("weld-one", &[], "weld one of the two contactors"),
    word("free-contactor", &[], "replace welded contactors"),
    word(
        "string-factor",
        &["which", "factor"],
        "a string reads 0 to 10 times the truth: 0 is open, 2 half the low side open",
    ),
    word("over-range", &["which"], "a string's low side is open: its converter stands at the end of its scale"),
    word("silent", &["which"], "a converter gives nothing"),
    word("frozen", &["which"], "a converter repeats itself"),
    word("mend", &["which"], "a string and its converter are whole again"),
    word("start-camera", &[], "start the camera"),
    word("stop-camera", &[], "stop the camera after the exposure under way"),
    word("camera-off", &["seconds"], "the camera's stated times are off by so many seconds from now on"),
    word("lose-frames", &["frames"], "the camera loses so many frames"),
    word("connect-strobe", &[], "connect the camera's strobe line"),
    word("cut-strobe", &[], "cut the camera's strobe line"),
    word("celsius", &["celsius"], "a new room temperature, -40 to 85 degrees Celsius, followed slowly"),
    word("brownout", &[], "take the controller's power away for a moment"),
    word("watchdog-reset", &[], "let the controller's watchdog restart it"),
    word("unplug", &[], "pull the plug of the link"),
    word("plug", &[], "put the plug of the link back"),
];

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct File {
    #[serde(default)]
    happening: Vec<Spanned<Raw>>,
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct Raw {
    at_seconds: Spanned<f64>,
    #[serde(rename = "do")]
    word: Spanned<String>,
    volts: Option<Spanned<f64>>,
    volts_per_second: Option<Spanned<f64>>,
    fraction: Option<Spanned<f64>>,
    seconds: Option<Spanned<f64>>,
    hertz: Option<Spanned<f64>>,
    level: Option<Spanned<f64>>,
    factor: Option<Spanned<f64>>,
    celsius: Option<Spanned<f64>>,
    which: Option<Spanned<String>>,
    frames: Option<Spanned<u64>>,
}

/// What is wrong, and the byte at which it is.
struct Wrong {
    offset: usize,
    problem: String,
}

impl Scenario {
    /// Reads a script file.
    ///
    /// # Errors
    /// When it cannot be read or is wrong; the message names file, line, field and what is permitted.
    pub fn load(path: &Path) -> Result<Self, ScenarioError> {
        let text = text::read(path, LONGEST_SCRIPT)?;
        Self::parse(&text, &path.display().to_string())
    }

    /// As [`Self::load`], from text; `origin` names it in messages.
    ///
    /// # Errors
    /// As [`Self::load`].
    pub fn parse(script: &str, origin: &str) -> Result<Self, ScenarioError> {
        let at = |offset: usize, problem: String| ScenarioError::Script {
            origin: origin.to_owned(),
            line: text::line_at(script, offset),
            problem,
        };
        let file: File = toml::from_str(script).map_err(|error| {
            at(error.span().map_or(0, |span| span.start), error.message().trim().replace('\n', ", "))
        })?;
        let happenings = file.happening.iter().map(happening).collect::<Result<_, _>>();
        happenings.map(sorted).map_err(|wrong: Wrong| at(wrong.offset, wrong.problem))
    }
}

/// The table of actions as text.
pub fn explain() -> String {
    ACTIONS.iter().fold(String::new(), |mut text, action| {
        let _ = writeln!(text, "{:<15} {:<24} {}", action.word, action.fields.join(", "), action.meaning);
        text
    })
}

fn sorted(mut happenings: Vec<Happening>) -> Scenario {
    happenings.sort_by(|a, b| a.at_seconds.total_cmp(&b.at_seconds));
    Scenario { happenings }
}

fn happening(raw: &Spanned<Raw>) -> Result<Happening, Wrong> {
    let row = Row { raw: raw.get_ref() };
    let at_seconds = row.number("at_seconds", Some(&row.raw.at_seconds), 0.0, LATEST)?;
    let what = row.what()?;
    row.nothing_else()?;
    Ok(Happening { at_seconds, what })
}

/// One happening under check.
struct Row<'a> {
    raw: &'a Raw,
}

impl Row<'_> {
    fn word(&self) -> &str {
        self.raw.word.get_ref()
    }

    fn missing<T>(&self, field: &str) -> Result<T, Wrong> {
        let problem = format!("`do = \"{}\"` needs the field `{field}`", self.word());
        Err(Wrong { offset: self.raw.word.span().start, problem })
    }

    fn number(&self, field: &str, value: Option<&Spanned<f64>>, low: f64, high: f64) -> Result<f64, Wrong> {
        let Some(value) = value else { return self.missing(field) };
        let number = *value.get_ref();
        if (low..=high).contains(&number) {
            return Ok(number);
        }
        let problem = format!("{field} is {number}; permitted is {low} to {high}");
        Err(Wrong { offset: value.span().start, problem })
    }

    fn volts(&self) -> Result<f64, Wrong> {
        self.number("volts", self.raw.volts.as_ref(), 0.0, 20_000.0)
    }

    fn seconds(&self, low: f64, high: f64) -> Result<f64, Wrong> {
        self.number("seconds", self.raw.seconds.as_ref(), low, high)
    }

    fn fraction(&self, low: f64, high: f64) -> Result<f64, Wrong> {
        self.number("fraction", self.raw.fraction.as_ref(), low, high)
    }

    fn which(&self) -> Result<Which, Wrong> {
        let Some(which) = &self.raw.which else { return self.missing("which") };
        match which.get_ref().as_str() {
            "sense" => Ok(Which::Sense),
            "cross" => Ok(Which::Cross),
            other => {
                let problem = format!("which is \"{other}\"; permitted is \"sense\" or \"cross\"");
                Err(Wrong { offset: which.span().start, problem })
            }
        }
    }

    fn what(&self) -> Result<What, Wrong> {
        let raw = self.raw;
        Ok(match self.word() {
            "set-volts" => What::SetVolts { volts: self.volts()? },
            "ramp" => {
                let rate = self.number("volts_per_second", raw.volts_per_second.as_ref(), 1e-3, 1e6)?;
                What::Ramp { volts: self.volts()?, volts_per_second: rate }
            }
            "sag" => What::Sag { fraction: self.fraction(0.0, 1.0)?, seconds: self.seconds(0.0, 3_600.0)? },
            "jump" => What::Jump { fraction: self.fraction(-0.99, 10.0)? },
            "arc" => What::Arc,
            "mains" => What::Mains {
                hertz: self.number("hertz", raw.hertz.as_ref(), 40.0, 70.0)?,
                level: self.number("level", raw.level.as_ref(), 0.0, 1.3)?,
            },
            "open-door" => What::OpenDoor,
            "close-door" => What::CloseDoor,
            "open-loop-a" => What::OpenLoopA,
            "close-loop-a" => What::CloseLoopA,
            "open-loop-b" => What::OpenLoopB,
            "close-loop-b" => What::CloseLoopB,
            "press-button" => What::PressButton,
            "release-button" => What::ReleaseButton,
            "attend" => What::Attend,
            "leave" => What::Leave,
            "weld-contactor" => What::WeldContactor,
            "weld-one" => What::WeldOne,
            "free-contactor" => What::FreeContactor,
            "string-factor" => What::StringFactor {
                which: self.which()?,
                factor: self.number("factor", raw.factor.as_ref(), 0.0, 10.0)?,
            },
            "over-range" => What::OverRange { which: self.which()? },
            "silent" => What::Silent { which: self.which()? },
            "frozen" => What::Frozen { which: self.which()? },
            "mend" => What::Mend { which: self.which()? },
            "start-camera" => What::StartCamera,
            "stop-camera" => What::StopCamera,
            "camera-off" => What::CameraOff { seconds: self.seconds(-LATEST, LATEST)? },
            "lose-frames" => match &raw.frames {
                Some(frames) => What::LoseFrames { frames: *frames.get_ref() },
                None => return self.missing("frames"),
            },
            "connect-strobe" => What::ConnectStrobe,
            "cut-strobe" => What::CutStrobe,
            "celsius" => What::Celsius { celsius: self.number("celsius", raw.celsius.as_ref(), -40.0, 85.0)? },
            "brownout" => What::Brownout,
            "watchdog-reset" => What::WatchdogReset,
            "unplug" => What::Unplug,
            "plug" => What::Plug,
            other => {
                let words: Vec<&str> = ACTIONS.iter().map(|action| action.word).collect();
                let problem = format!("`do` is \"{other}\"; permitted is {}", words.join(", "));
                return Err(Wrong { offset: raw.word.span().start, problem });
            }
        })
    }

    /// A field that the happening does not take is a mistake, not an ornament.
    fn nothing_else(&self) -> Result<(), Wrong> {
        let raw = self.raw;
        let start = |value: &Option<Spanned<f64>>| value.as_ref().map(|value| value.span().start);
        let given = [
            ("volts", start(&raw.volts)),
            ("volts_per_second", start(&raw.volts_per_second)),
            ("fraction", start(&raw.fraction)),
            ("seconds", start(&raw.seconds)),
            ("hertz", start(&raw.hertz)),
            ("level", start(&raw.level)),
            ("factor", start(&raw.factor)),
            ("celsius", start(&raw.celsius)),
            ("which", raw.which.as_ref().map(|value| value.span().start)),
            ("frames", raw.frames.as_ref().map(|value| value.span().start)),
        ];
        let takes = ACTIONS.iter().find(|action| action.word == self.word()).map_or(&[][..], |action| action.fields);
        for (field, offset) in given {
            if let Some(offset) = offset.filter(|_| !takes.contains(&field)) {
                let problem = format!("`do = \"{}\"` takes no field `{field}`", self.word());
                return Err(Wrong { offset, problem });
            }
        }
        Ok(())
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn message(script: &str) -> String {
        Scenario::parse(script, "bench.toml").unwrap_err().to_string()
    }

    #[test]
    fn a_script_is_read_in_the_order_of_time() {
        let script = "
            [[happening]]
            at_seconds = 2
            do = 'string-factor'
            which = 'cross'
            factor = 1.003
            [[happening]]
            at_seconds = 0.5
            do = 'open-loop-b'
        ";
        let scenario = Scenario::parse(script, "x").unwrap();
        let factor = What::StringFactor { which: Which::Cross, factor: 1.003 };
        assert_eq!(scenario, Scenario::of([(0.5, What::OpenLoopB), (2.0, factor)]));
    }

    #[test]
    fn mistakes_are_named_with_their_line() {
        for (script, parts) in [
            (
                "[[happening]]\nat_seconds = 1\ndo = 'opne'\n",
                ["bench.toml, line 3", "\"opne\"", "open-door, close-door"],
            ),
            ("[[happening]]\nat_seconds = -1\ndo = 'arc'\n", ["line 2", "at_seconds is -1", "0 to 10000000"]),
            ("[[happening]]\nat_seconds = 1\ndo = 'set-volts'\n", ["line 3", "needs the field `volts`", "set-volts"]),
            ("[[happening]]\nat_seconds = 1\ndo = 'set-volts'\nvolts = 1e6\n", ["line 4", "volts is 1000000", "20000"]),
            ("[[happening]]\nat_seconds = 1\ndo = 'arc'\nvolts = 5\n", ["line 4", "takes no field `volts`", "arc"]),
            ("[[happening]]\nat_seconds = 1\ndo = 'mend'\nwhich = 'c'\n", ["line 4", "\"c\"", "\"cross\""]),
            ("[[happening]]\nat_seconds = 1\ndo = 'arc'\ncolour = 5\n", ["line 4", "colour", "unknown field"]),
            ("[[happening]]\nat_seconds = 'now'\ndo = 'arc'\n", ["line 2", "string", "f64"]),
            ("[[happening]]\nat_seconds = nan\ndo = 'arc'\n", ["line 2", "at_seconds is NaN", "0 to"]),
            ("[[happening\n", ["line 1", "bench.toml", ""]),
            ("wrong = 1\n", ["line 1", "unknown field", "wrong"]),
        ] {
            let message = message(script);
            for part in parts {
                assert!(message.contains(part), "{message}: no {part}");
            }
        }
    }

    /// Each row of the table, with all its fields, is understood: table and parser do not part ways.
    #[test]
    fn every_word_of_the_table_is_understood() {
        for action in ACTIONS {
            let mut script = format!("[[happening]]\nat_seconds = 1\ndo = \"{}\"\n", action.word);
            for field in action.fields {
                let value = match *field {
                    "which" => "'sense'",
                    "frames" => "3",
                    "hertz" => "60.0",
                    _ => "0.5",
                };
                script.push_str(&format!("{field} = {value}\n"));
            }
            let scenario = Scenario::parse(&script, "x").unwrap_or_else(|error| panic!("{}: {error}", action.word));
            assert_eq!(scenario.happenings.len(), 1);
            assert!(explain().contains(action.word));
        }
    }
}
