//! Whether the stamps of the newest reduction keep the rules of a stamp.

use std::collections::HashSet;

use super::Finding;
use crate::run::{
    RunError, RunReader,
    rows::{StampRow, StampValue},
};

const SUBJECT: &str = "stamps";

pub(super) fn check(reader: &RunReader) -> Result<Vec<Finding>, RunError> {
    let frames = reader.frames()?;
    let Some(latest) = reader.reductions()?.pop() else {
        let sentence = "the run has no finished reduction: `ringvolt stamp` makes one from the readings";
        return Ok(vec![Finding::note(SUBJECT, sentence)]);
    };
    let stamps = reader.stamps(latest.key)?;
    let wrong: Vec<String> =
        stamps.iter().filter_map(|stamp| Some(format!("{}: {}", stamp.frame, fault(stamp)?))).collect();
    if let Some(first) = wrong.first() {
        let sentence = format!(
            "{} stamps break the rules of a stamp ({first}): they were changed by hand; `ringvolt stamp` makes them anew",
            wrong.len()
        );
        return Ok(vec![Finding::fault(SUBJECT, sentence)]);
    }
    let stamped: HashSet<&str> = stamps.iter().map(|stamp| stamp.frame.as_str()).collect();
    let without = frames.iter().filter(|frame| !stamped.contains(frame.frame.as_str())).count();
    if without > 0 {
        let sentence = format!("{without} frames came after the newest reduction: `ringvolt stamp` includes them");
        return Ok(vec![Finding::note(SUBJECT, sentence)]);
    }
    Ok(vec![Finding::fine(SUBJECT, format!("{} in the newest reduction, each with a value or a reason", stamps.len()))])
}

fn fault(stamp: &StampRow) -> Option<&'static str> {
    match (stamp.verdict.as_str(), stamp.value) {
        ("refused", Some(_)) => Some("refused, yet it has a value"),
        ("refused" | "marked", _) if stamp.reasons.is_empty() => Some("refused or marked without a reason"),
        ("good", _) if !stamp.reasons.is_empty() => Some("good, yet it has reasons"),
        ("good" | "marked", None) => Some("usable, yet it has no value"),
        ("good" | "marked", Some(value)) => value_fault(&value),
        ("refused", None) => None,
        _ => Some("its verdict is no verdict"),
    }
}

fn value_fault(value: &StampValue) -> Option<&'static str> {
    let whole = value.volts_u_frame.mul_add(value.volts_u_frame, value.volts_u_common * value.volts_u_common);
    let parts = libm::sqrt(whole);
    if !(value.volts.is_finite() && value.volts_u > 0.0 && value.wavelength_pm > 0.0 && value.wavelength_u_pm > 0.0) {
        return Some("a voltage, wavelength or uncertainty that cannot be");
    }
    if (parts - value.volts_u).abs() > 1e-6 * value.volts_u {
        return Some("the parts of its uncertainty do not make up the whole");
    }
    (!(0.0..=1.000_001).contains(&value.coverage)).then_some("a coverage outside 0 to 1")
}
