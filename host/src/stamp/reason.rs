//! The one table of rules that refuse or mark a frame: from it come verdicts, codes, sentences and documentation.

use std::fmt;

/// What a rule does when it fires.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub enum Level {
    /// The frame is usable, with a named doubt.
    Mark,
    /// The frame has no value.
    Refuse,
}

/// Why a frame is not simply good. The order is that of the table and of the codes in a stamp.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash)]
#[allow(missing_docs)] // Each is explained by its row in `REASONS`.
pub enum Reason {
    ExposureUnknown,
    NoTime,
    ExposureTooShort,
    ControllerRestarted,
    TooFewReadings,
    OverRange,
    SenseFrozen,
    SensesDisagree,
    InterlockChanged,
    PermitWithdrawn,
    VoltageMoved,
    AfterglowOfStep,
    BelowLeastVoltage,
    Uncalibrated,
    CertificateMismatch,
    CertificateExpired,
    VoltageDrifted,
    AfterglowOfDrift,
    Ripple,
    BeamChanged,
    CrossMissing,
    OutsideCalibratedVoltage,
    OutsideCalibratedTemperature,
    TimingUncertain,
    ExposureUnderOneCycle,
    ConfigurationRepaired,
}

/// One row: what the rule is called, does and tells.
#[derive(Clone, Copy, Debug)]
pub struct Rule {
    /// Which.
    pub reason: Reason,
    /// Stable code for tables.
    pub code: &'static str,
    /// What it does.
    pub level: Level,
    /// One sentence for a person.
    pub sentence: &'static str,
}

const fn refuse(reason: Reason, code: &'static str, sentence: &'static str) -> Rule {
    Rule { reason, code, level: Level::Refuse, sentence }
}

const fn mark(reason: Reason, code: &'static str, sentence: &'static str) -> Rule {
    Rule { reason, code, level: Level::Mark, sentence }
}

/// Every rule, in the order of [`Reason`].
pub const REASONS: [Rule; 26] = [
    refuse(Reason::ExposureUnknown, "exposure-unknown", "It is not known when this frame was exposed."),
    refuse(Reason::NoTime, "no-time", "The controller's clock could not be tied to UTC at that time."),
    refuse(Reason::ExposureTooShort, "exposure-too-short", "The exposure is shorter than two conversions."),
    refuse(Reason::ControllerRestarted, "controller-restarted", "The controller restarted during the exposure."),
    refuse(
        Reason::TooFewReadings,
        "too-few-readings",
        "Less of the exposure is covered by conversions than the limit.",
    ),
    refuse(Reason::OverRange, "over-range", "A converter stood at the end of its scale."),
    refuse(Reason::SenseFrozen, "sense-frozen", "The converter repeated itself or gave nothing."),
    refuse(Reason::SensesDisagree, "senses-disagree", "The two senses contradict each other."),
    refuse(
        Reason::InterlockChanged,
        "interlock-changed",
        "The interlock changed during the exposure or shortly before.",
    ),
    refuse(Reason::PermitWithdrawn, "permit-withdrawn", "The permit was not given throughout the exposure."),
    refuse(
        Reason::VoltageMoved,
        "voltage-moved",
        "The voltage moved by more than the refusing limit within the exposure.",
    ),
    refuse(Reason::AfterglowOfStep, "afterglow-of-step", "The screen still glowed from another voltage."),
    refuse(Reason::BelowLeastVoltage, "below-least-voltage", "The voltage was too low to accelerate."),
    refuse(Reason::Uncalibrated, "uncalibrated", "There is no valid calibration."),
    refuse(
        Reason::CertificateMismatch,
        "certificate-mismatch",
        "The controller held another certificate than this run has.",
    ),
    refuse(Reason::CertificateExpired, "certificate-expired", "The certificate was no longer, or not yet, valid."),
    mark(
        Reason::VoltageDrifted,
        "voltage-drifted",
        "The voltage moved by more than the marking limit within the exposure.",
    ),
    mark(
        Reason::AfterglowOfDrift,
        "afterglow-of-drift",
        "The voltage shortly before the exposure differed by more than the marking limit.",
    ),
    mark(Reason::Ripple, "ripple", "The conversions spread by more than the marking limit."),
    mark(Reason::BeamChanged, "beam-changed", "The beam current changed by more than the marking limit."),
    mark(Reason::CrossMissing, "cross-missing", "The second sense gave nothing to compare with."),
    mark(
        Reason::OutsideCalibratedVoltage,
        "outside-calibrated-voltage",
        "The voltage lies outside the calibrated range.",
    ),
    mark(
        Reason::OutsideCalibratedTemperature,
        "outside-calibrated-temperature",
        "The temperature lies outside the range of the certificate.",
    ),
    mark(Reason::TimingUncertain, "timing-uncertain", "The exposure's time is less certain than the marking limit."),
    mark(
        Reason::ExposureUnderOneCycle,
        "exposure-under-one-cycle",
        "The exposure is shorter than a mains cycle: part of the ripple is unresolved.",
    ),
    mark(
        Reason::ConfigurationRepaired,
        "configuration-repaired",
        "A converter had to be configured again during the exposure.",
    ),
];

impl Reason {
    /// Its row.
    pub const fn rule(self) -> &'static Rule {
        &REASONS[self as usize]
    }

    /// The reason with this code.
    pub fn from_code(code: &str) -> Option<Self> {
        REASONS.iter().find(|rule| rule.code == code).map(|rule| rule.reason)
    }
}

/// The reasons of one frame, each at most once, in the order of the table.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct Reasons(Vec<Reason>);

impl Reasons {
    /// Adds one.
    pub fn add(&mut self, reason: Reason) {
        if let Err(at) = self.0.binary_search(&reason) {
            self.0.insert(at, reason);
        }
    }

    /// Adds one where `fires`.
    pub fn add_if(&mut self, fires: bool, reason: Reason) {
        if fires {
            self.add(reason);
        }
    }

    /// All of them.
    pub fn as_slice(&self) -> &[Reason] {
        &self.0
    }

    /// Whether one of them refuses.
    pub fn refuses(&self) -> bool {
        self.0.iter().any(|reason| reason.rule().level == Level::Refuse)
    }

    /// `good`, `marked` or `refused`.
    pub fn verdict(&self) -> &'static str {
        match (self.0.is_empty(), self.refuses()) {
            (true, _) => "good",
            (false, false) => "marked",
            (false, true) => "refused",
        }
    }
}

/// Codes joined by `;`.
impl fmt::Display for Reasons {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let codes: Vec<&str> = self.0.iter().map(|reason| reason.rule().code).collect();
        f.write_str(&codes.join(";"))
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_reason_finds_its_own_row() {
        for (index, rule) in REASONS.iter().enumerate() {
            assert_eq!(rule.reason as usize, index, "{}", rule.code);
            assert_eq!(Reason::from_code(rule.code), Some(rule.reason));
            assert!(rule.sentence.ends_with('.'));
        }
    }

    #[test]
    fn the_verdict_follows_the_worst_reason() {
        let mut reasons = Reasons::default();
        assert_eq!(reasons.verdict(), "good");
        reasons.add(Reason::Ripple);
        assert_eq!(reasons.verdict(), "marked");
        reasons.add(Reason::OverRange);
        reasons.add(Reason::Ripple);
        assert_eq!(reasons.verdict(), "refused");
        assert_eq!(reasons.to_string(), "over-range;ripple");
    }
}
