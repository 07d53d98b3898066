//! The guided sequence: tells what to set, waits until it has settled, takes the reference, writes the point down.

use std::{collections::VecDeque, time::Duration};

use jiff::Timestamp;

use super::{
    Answer, CodeEvent, CodeSource, Codes, Direction, Point, ReferenceSource, Session, SessionError, Settling,
    SettlingRules, SettlingWatch, SourceError, Step,
};

/// Codes this near the end of a 16-bit converter are no measurement.
const LAST_CODE: f64 = 32_700.0;

/// After so long without codes the person is asked what to do.
const LONGEST_QUIET_SECONDS: u32 = 10;

/// How the guide speaks with a person.
pub trait Dialogue {
    /// A line that stays.
    fn say(&mut self, line: &str);
    /// A line that the next one may replace.
    fn progress(&mut self, line: &str);
    /// Asks and waits for a line.
    ///
    /// # Errors
    /// When nobody can answer any more.
    fn ask(&mut self, question: &str) -> Result<String, GuideError>;
}

/// Why the guided sequence ended early. The journal keeps everything taken so far.
#[derive(Debug, thiserror::Error)]
pub enum GuideError {
    /// The journal could not be written.
    #[error(transparent)]
    Session(#[from] SessionError),
    /// The codes ended or failed for good.
    #[error("{0}; take the calibration up again with `ringvolt calibrate resume`")]
    Source(#[from] SourceError),
    /// Nobody answers.
    #[error("nobody answers any more; take the calibration up again with `ringvolt calibrate resume`")]
    Silent,
    /// Another board than the one the calibration began with.
    #[error("this calibration was begun with board {begun}, but the codes come from {found}; connect the right one")]
    Board {
        /// The board in the journal.
        begun: String,
        /// The board that sends codes.
        found: String,
    },
}

/// How the sequence ended.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum End {
    /// Every step is done.
    Complete,
    /// The person stopped it.
    Stopped,
}

/// What a wait ended with.
enum Waited {
    Settled,
    /// The person takes it although it has not.
    AsItIs,
    Stop,
    Skip(String),
}

/// The guided sequence over one session.
pub struct Guide<'a> {
    /// The journal.
    pub session: &'a mut Session,
    /// Codes.
    pub source: &'a mut dyn CodeSource,
    /// Reference values.
    pub reference: &'a mut dyn ReferenceSource,
    /// The person.
    pub dialogue: &'a mut dyn Dialogue,
    /// When a point counts as settled.
    pub rules: SettlingRules,
    /// What one code of the main sense is worth by design, volts (positive), before there is a certificate.
    pub nominal_volts_per_code: f64,
}

/// Codes of the last window, and whether they have settled.
struct Watched {
    watch: SettlingWatch,
    recent: VecDeque<Codes>,
    window_ns: i64,
    nominal: f64,
}

impl Watched {
    fn push(&mut self, codes: Codes) {
        self.watch.push(codes.utc_ns as f64 * 1e-9, self.nominal * codes.sense_code);
        self.recent.push_back(codes);
        let oldest = codes.utc_ns - self.window_ns;
        while self.recent.front().is_some_and(|codes| codes.utc_ns < oldest) {
            self.recent.pop_front();
        }
    }

    fn mean(&self, part: fn(&Codes) -> f64) -> f64 {
        self.recent.iter().map(part).sum::<f64>() / self.recent.len().max(1) as f64
    }

    fn volts(&self) -> f64 {
        self.nominal * self.mean(|codes| codes.sense_code)
    }

    fn celsius(&self) -> Option<f64> {
        let known: Vec<f64> = self.recent.iter().filter_map(|codes| codes.enclosure_celsius).collect();
        (!known.is_empty()).then(|| known.iter().sum::<f64>() / known.len() as f64)
    }
}

impl Guide<'_> {
    /// Goes through all steps still open.
    ///
    /// # Errors
    /// When the journal, the source or the person fails for good; the journal keeps what there is.
    pub fn run(&mut self) -> Result<End, GuideError> {
        let (begun, found) = (self.session.header().device.clone(), self.source.device());
        if begun != found {
            return Err(GuideError::Board { begun, found });
        }
        while let Some((index, step)) = self.session.next_step() {
            if self.step(index, &step)? == End::Stopped {
                return Ok(End::Stopped);
            }
        }
        Ok(End::Complete)
    }

    fn step(&mut self, index: usize, step: &Step) -> Result<End, GuideError> {
        let total = self.session.header().steps.len();
        self.dialogue.say(&format!("\nPoint {} of {total}, cycle {}. {}", index + 1, step.cycle, step.instruction()));
        loop {
            let mut watched = self.watched();
            let waited = self.wait(step, &mut watched)?;
            match waited {
                Waited::Stop => return Ok(End::Stopped),
                Waited::Skip(reason) => {
                    self.session.skip(index, &reason)?;
                    return Ok(End::Complete);
                }
                Waited::Settled | Waited::AsItIs => {}
            }
            // A front end may invert, so only the size of the code tells.
            let expected = f64::from(self.session.header().polarity) * watched.volts().abs();
            match self.reference.read(self.dialogue, expected)? {
                Answer::Stop => return Ok(End::Stopped),
                Answer::Again => {}
                Answer::Skip(reason) => {
                    self.session.skip(index, &reason)?;
                    return Ok(End::Complete);
                }
                Answer::Back => return self.back(index),
                Answer::Volts(volts) => {
                    if matches!(waited, Waited::AsItIs) || self.still(&mut watched)? {
                        self.session.take(index, point(step, volts, &watched))?;
                        return Ok(End::Complete);
                    }
                    self.dialogue.say("  The voltage moved while the reference was read; waiting again.");
                }
            }
        }
    }

    /// Begins to watch anew. What was sent while a person was reading or setting is not part of it.
    fn watched(&mut self) -> Watched {
        while let Ok(CodeEvent::Codes(_)) = self.source.next(Duration::ZERO) {}
        Watched {
            watch: SettlingWatch::new(self.rules),
            recent: VecDeque::new(),
            window_ns: (1e9 * self.rules.window_seconds) as i64,
            nominal: self.nominal_volts_per_code,
        }
    }

    fn back(&mut self, index: usize) -> Result<End, GuideError> {
        match index.checked_sub(1) {
            None => self.dialogue.say("  This is the first point."),
            Some(before) => {
                self.session.withdraw(before, "taken again")?;
                self.dialogue.say(&format!("  Point {index} is taken again: first go back to where it was."));
            }
        }
        Ok(End::Complete)
    }

    /// Whether the voltage still stands, judged with what arrived while the reference was read.
    fn still(&mut self, watched: &mut Watched) -> Result<bool, GuideError> {
        while let CodeEvent::Codes(codes) = self.source.next(Duration::ZERO)? {
            watched.push(codes);
        }
        Ok(matches!(watched.watch.state(), Settling::Settled { .. }))
    }

    fn wait(&mut self, step: &Step, watched: &mut Watched) -> Result<Waited, GuideError> {
        let (mut judged_second, mut quiet_seconds) = (0, 0);
        loop {
            match self.source.next(Duration::from_secs(1)) {
                Ok(CodeEvent::Codes(codes)) => {
                    quiet_seconds = 0;
                    watched.push(codes);
                    // Once a second is often enough to judge.
                    let second = codes.utc_ns / 1_000_000_000;
                    if second == judged_second {
                        continue;
                    }
                    judged_second = second;
                }
                Ok(CodeEvent::Quiet) if quiet_seconds < LONGEST_QUIET_SECONDS => {
                    quiet_seconds += 1;
                    self.dialogue.progress("No codes from the controller: do not assume 0 V.");
                    continue;
                }
                Ok(CodeEvent::Quiet) => {
                    quiet_seconds = 0;
                    if self.trouble("No codes came for ten seconds: do not assume 0 V.")? {
                        return Ok(Waited::Stop);
                    }
                    *watched = self.watched();
                    continue;
                }
                Ok(CodeEvent::Ended) => {
                    let problem = "the codes ended before all points were taken".to_owned();
                    return Err(SourceError::Link(problem).into());
                }
                Err(error) => {
                    if self.trouble(&error.to_string())? {
                        return Ok(Waited::Stop);
                    }
                    *watched = self.watched();
                    continue;
                }
            }
            if let Some(end) = self.judge(step, watched)? {
                return Ok(end);
            }
        }
    }

    /// Tells what is wrong with the codes; whether the person stops.
    fn trouble(&mut self, problem: &str) -> Result<bool, GuideError> {
        self.dialogue.say(&format!("  {problem}"));
        Ok(self.dialogue.ask("Enter waits on, q stops (nothing is lost): ")?.trim() == "q")
    }

    /// What the last second means: the end of the wait, or `None` to wait on.
    fn judge(&mut self, step: &Step, watched: &mut Watched) -> Result<Option<Waited>, GuideError> {
        let volts = watched.volts();
        let drift = match watched.watch.state() {
            Settling::Waiting { seconds_left } => {
                self.dialogue.progress(&format!("about {volts:.0} V, at least {seconds_left:.0} s more"));
                return Ok(None);
            }
            Settling::Moving { drift_volts, limit_volts } => {
                self.dialogue.progress(&format!(
                    "about {volts:.0} V, moving by {drift_volts:+.2} V (settled below {limit_volts:.2} V)"
                ));
                return Ok(None);
            }
            Settling::Settled { .. } => None,
            Settling::Never { drift_volts, scatter_volts } => Some((drift_volts, scatter_volts)),
        };
        let problem = match drift {
            None => match self.misplaced(step, watched) {
                None => return Ok(Some(Waited::Settled)),
                Some(problem) => problem,
            },
            Some((drift, scatter)) => format!(
                "It does not settle: it still moves by {drift:+.2} V in {:.0} s and scatters by {scatter:.2} V. Check supply and leads.",
                self.rules.window_seconds
            ),
        };
        self.dialogue.say(&format!("  {problem}"));
        let answer =
            self.dialogue.ask("Enter waits again, t takes it as it is, s REASON leaves this point out, q stops: ")?;
        match answer.trim() {
            "q" => Ok(Some(Waited::Stop)),
            "t" => Ok(Some(Waited::AsItIs)),
            line if line.starts_with("s ") => Ok(Some(Waited::Skip(line[2..].trim().to_owned()))),
            _ => {
                *watched = self.watched();
                Ok(None)
            }
        }
    }

    /// What is wrong with a settled voltage that is not the one of the step.
    fn misplaced(&self, step: &Step, watched: &Watched) -> Option<String> {
        let code = watched.mean(|codes| codes.sense_code).abs().max(watched.mean(|codes| codes.cross_code).abs());
        if code > LAST_CODE {
            return Some("A converter is at the end of its range: lower the voltage.".to_owned());
        }
        let header = self.session.header();
        let spacing =
            header.steps.iter().map(|step| step.target_volts).filter(|volts| *volts > 0.0).fold(f64::MAX, f64::min);
        let shown = watched.volts().abs();
        // The nominal ratio may itself be off by a few percent.
        let room =
            if step.direction == Direction::Zero { 0.1 * spacing } else { 0.3 * spacing + 0.05 * step.target_volts };
        if (shown - step.target_volts).abs() <= room {
            return None;
        }
        Some(match step.direction {
            Direction::Zero => {
                format!("The divider still shows about {shown:.0} V: treat as live, switch off and wait.")
            }
            _ => format!(
                "The divider shows about {shown:.0} V, but this point is at {:.0} V; set it.",
                step.target_volts
            ),
        })
    }
}

fn point(step: &Step, volts: f64, watched: &Watched) -> Point {
    let utc_ns = watched.recent.back().map_or(0, |codes| codes.utc_ns);
    let time = Timestamp::from_second(utc_ns.div_euclid(1_000_000_000)).unwrap_or_default();
    // A thousandth of a code is 0.3 mV: more digits would only be noise in the file.
    let thousandths = |value: f64| libm::round(1e3 * value) / 1e3;
    Point {
        time_utc: time.to_string(),
        direction: step.direction.word().to_owned(),
        reference_volts: volts,
        sense_code: thousandths(watched.mean(|codes| codes.sense_code)),
        cross_code: thousandths(watched.mean(|codes| codes.cross_code)),
        enclosure_celsius: watched.celsius().map(|celsius| libm::round(100.0 * celsius) / 100.0),
        left_out: None,
    }
}

#[cfg(test)]
#[path = "guide_tests.rs"]
mod tests;
