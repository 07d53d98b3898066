//! All rules in one place: evidence about one exposure in, one stamp out.

use ringvolt_protocol::ReadingFlags;

use super::{
    mean::{ExposureMean, exposure_mean},
    reason::{Reason, Reasons},
    series::{Calibration, Sample, Series},
    steadiness::{Steadiness, steadiness},
};
use crate::{
    physics,
    profile::Profile,
    run::rows::{Exposure, FrameRow, StampRow, StampValue},
};

const NS: f64 = 1e-9;

/// How far to either side of an exposure readings are looked at for scatter, nanoseconds.
const AROUND_NS: i64 = 1_000_000_000;

/// What is known about the time around one exposure.
pub struct Evidence<'a> {
    /// Readings of the epoch, at least from [`Stamper::from_ns`] to [`Stamper::until_ns`].
    pub series: &'a Series,
    /// Standard uncertainty of the controller's clock against UTC, nanoseconds; `None` where it could not be tied.
    pub clock_u_ns: Option<i64>,
    /// Times of interlock changes (loops, contactors, permit, trips), UTC nanoseconds, in order.
    pub interlock_ns: &'a [i64],
    /// Whether the controller restarted within the exposure.
    pub restarted: bool,
    /// Beam current around the exposure, nanoamperes; empty where it is not measured.
    pub beam_na: &'a [i32],
    /// Enclosure temperature, degrees Celsius, where it is measured.
    pub enclosure_celsius: Option<f64>,
    /// Whether that temperature is one the certificate is made for; `None` where it is not measured.
    pub temperature_covered: Option<bool>,
    /// Whether the certificate is valid on the day of the exposure; `None` where there is no certificate.
    pub certificate_valid: Option<bool>,
}

/// Stamps frames of one bench.
#[derive(Clone, Debug)]
pub struct Stamper {
    profile: Profile,
}

impl Stamper {
    /// For this bench.
    pub fn new(profile: &Profile) -> Self {
        Self { profile: profile.clone() }
    }

    /// Delay of a reading behind the tube, nanoseconds: conversions that *end* within a window were integrating one
    /// conversion time before, half of that in the mean, and the filter lags by its time constant.
    pub fn lag_ns(&self) -> i64 {
        self.conversion_lag_ns() + (self.profile.divider.filter_seconds / NS).round() as i64
    }

    /// The converter's part of that delay, nanoseconds: half a conversion.
    pub fn conversion_lag_ns(&self) -> i64 {
        (0.5 / self.profile.controller.conversions_per_second / NS).round() as i64
    }

    /// From when on readings are wanted for this exposure.
    pub fn from_ns(&self, exposure: &Exposure) -> i64 {
        exposure.start_utc_ns - AROUND_NS - self.settle_ns()
    }

    /// Until when.
    pub fn until_ns(&self, exposure: &Exposure) -> i64 {
        exposure.end_utc_ns + AROUND_NS
    }

    fn settle_ns(&self) -> i64 {
        (self.profile.camera.afterglow_seconds / NS).round() as i64
    }

    /// A frame about which nothing can be said.
    pub fn refuse(frame: &FrameRow, reason: Reason) -> StampRow {
        let mut reasons = Reasons::default();
        reasons.add(reason);
        row(frame, &reasons, None)
    }

    /// The stamp of one frame.
    pub fn stamp<C: Calibration>(
        &self,
        frame: &FrameRow,
        evidence: &Evidence<'_>,
        calibration: Option<&C>,
    ) -> StampRow {
        let Ok(exposure) = &frame.exposure else { return Self::refuse(frame, Reason::ExposureUnknown) };
        let Some(clock_u_ns) = evidence.clock_u_ns else { return Self::refuse(frame, Reason::NoTime) };
        let Some(calibration) = calibration else { return Self::refuse(frame, Reason::Uncalibrated) };
        let (start_ns, end_ns) = (exposure.start_utc_ns, exposure.end_utc_ns);
        let mut reasons = Reasons::default();
        reasons.add_if(evidence.restarted, Reason::ControllerRestarted);
        let timing_u_ns = libm::hypot(
            libm::hypot(clock_u_ns as f64, exposure.start_u_ns as f64),
            self.profile.divider.filter_u_seconds / NS,
        );
        // What happens beside the exposure may as well have happened within it, as far as its time is uncertain.
        let guard_ns = (3.0 * timing_u_ns).round() as i64;
        let during = evidence.series.within(start_ns, end_ns);
        let around = evidence.series.within(self.from_ns(exposure), self.until_ns(exposure));
        let Some(mean) = exposure_mean(around, start_ns, end_ns) else {
            reasons.add(Reason::TooFewReadings);
            self.judge_interlock(&mut reasons, exposure, guard_ns, evidence, during);
            return row(frame, &reasons, None);
        };
        let steady = steadiness(
            around,
            start_ns - guard_ns,
            end_ns + guard_ns,
            self.settle_ns(),
            mean.volts,
            self.profile.controller.mains_hz,
        );
        let code = mean_code(during);
        self.judge_interlock(&mut reasons, exposure, guard_ns, evidence, during);
        self.judge_cover(&mut reasons, exposure, &mean, around);
        judge_flags(&mut reasons, during);
        self.judge_motion(&mut reasons, &mean, &steady);
        self.judge_senses(&mut reasons, &mean, during, &steady, calibration);
        self.judge_calibration(&mut reasons, &mean, code, during, evidence, calibration);
        self.judge_beam(&mut reasons, evidence.beam_na);
        let limit_ns = self.profile.limits.timing_mark_seconds / NS;
        reasons.add_if(timing_u_ns > limit_ns, Reason::TimingUncertain);
        let value = (!reasons.refuses())
            .then(|| self.value(exposure, &mean, &steady, code, timing_u_ns, evidence, calibration))
            .flatten();
        if value.is_none() && !reasons.refuses() {
            reasons.add(Reason::BelowLeastVoltage);
        }
        row(frame, &reasons, value)
    }

    fn judge_interlock(
        &self,
        reasons: &mut Reasons,
        exposure: &Exposure,
        guard_ns: i64,
        evidence: &Evidence<'_>,
        during: &[Sample],
    ) {
        let from = exposure.start_utc_ns - self.settle_ns() - guard_ns;
        let until = exposure.end_utc_ns + guard_ns;
        let changed = evidence.interlock_ns.iter().any(|time| (from..=until).contains(time));
        let open = during.iter().any(|sample| sample.flags.contains(ReadingFlags::LOOP_OPEN));
        reasons.add_if(changed || open, Reason::InterlockChanged);
        let given = during.iter().all(|sample| sample.flags.contains(ReadingFlags::PERMIT));
        reasons.add_if(!given, Reason::PermitWithdrawn);
    }

    fn judge_cover(&self, reasons: &mut Reasons, exposure: &Exposure, mean: &ExposureMean, around: &[Sample]) {
        let limits = &self.profile.limits;
        let seconds = (exposure.end_utc_ns - exposure.start_utc_ns) as f64 * NS;
        let rate = conversion_rate(around, self.profile.controller.conversions_per_second);
        // Which conversions a short exposure holds is a matter of luck: one more or less is no loss.
        let expected = (rate * seconds - 1.0).max(0.0);
        let enough = mean.conversions >= limits.coverage_refuse_fraction * expected;
        reasons.add_if(mean.covered < limits.coverage_refuse_fraction || !enough, Reason::TooFewReadings);
        reasons.add_if(seconds * rate < 2.0, Reason::ExposureTooShort);
        let cycle = 1.0 / f64::from(self.profile.controller.mains_hz);
        reasons.add_if(seconds < cycle, Reason::ExposureUnderOneCycle);
    }

    fn judge_motion(&self, reasons: &mut Reasons, mean: &ExposureMean, steady: &Steadiness) {
        let limits = &self.profile.limits;
        let fraction = |volts: f64| volts / mean.volts.abs().max(limits.least_volts);
        let mut grade = |volts: f64, refuse: Reason, mark: Reason| {
            if fraction(volts) > limits.span_refuse_fraction {
                reasons.add(refuse);
            } else if fraction(volts) > limits.span_mark_fraction {
                reasons.add(mark);
            }
        };
        grade(steady.span_volts, Reason::VoltageMoved, Reason::VoltageDrifted);
        grade(steady.before_volts, Reason::AfterglowOfStep, Reason::AfterglowOfDrift);
        reasons.add_if(fraction(steady.ripple_volts) > limits.ripple_mark_fraction, Reason::Ripple);
        reasons.add_if(mean.volts < limits.least_volts, Reason::BelowLeastVoltage);
    }

    fn judge_senses<C: Calibration>(
        &self,
        reasons: &mut Reasons,
        mean: &ExposureMean,
        during: &[Sample],
        steady: &Steadiness,
        calibration: &C,
    ) {
        let pairs = during.iter().filter(|sample| sample.count > 0);
        let differences: Vec<f64> = pairs.filter_map(|sample| Some(sample.volts - sample.cross_volts?)).collect();
        if differences.len() * 2 < during.len() {
            reasons.add(Reason::CrossMissing);
            return;
        }
        let difference = differences.iter().sum::<f64>() / differences.len() as f64;
        let cycles = (differences.len() as f64 / 2.0).max(1.0);
        // Both senses scatter, and they scatter independently.
        let scatter = steady.cycle_scatter_volts.unwrap_or(0.0) * libm::sqrt(2.0 / cycles);
        let u = libm::hypot(calibration.difference_u_volts(mean.volts), scatter);
        let limit = self.profile.limits.disagreement_refuse_sigmas * u;
        let flagged = during.iter().any(|sample| sample.flags.contains(ReadingFlags::SENSES_DISAGREE));
        reasons.add_if(difference.abs() > limit || flagged, Reason::SensesDisagree);
    }

    fn judge_calibration<C: Calibration>(
        &self,
        reasons: &mut Reasons,
        mean: &ExposureMean,
        code: f64,
        during: &[Sample],
        evidence: &Evidence<'_>,
        calibration: &C,
    ) {
        let uncalibrated = during.iter().any(|sample| sample.flags.contains(ReadingFlags::UNCALIBRATED));
        reasons.add_if(uncalibrated || evidence.certificate_valid.is_none(), Reason::Uncalibrated);
        let other = during.iter().any(|sample| sample.certificate != calibration.hash());
        reasons.add_if(other && !uncalibrated, Reason::CertificateMismatch);
        reasons.add_if(evidence.certificate_valid == Some(false), Reason::CertificateExpired);
        reasons.add_if(!calibration.covers(mean.volts, code), Reason::OutsideCalibratedVoltage);
        reasons.add_if(evidence.temperature_covered == Some(false), Reason::OutsideCalibratedTemperature);
    }

    fn judge_beam(&self, reasons: &mut Reasons, beam_na: &[i32]) {
        if let (Some(least), Some(most)) = (beam_na.iter().min(), beam_na.iter().max()) {
            let change = f64::from(*most) - f64::from(*least);
            reasons
                .add_if(change > self.profile.limits.beam_mark_fraction * f64::from(*most).abs(), Reason::BeamChanged);
        }
    }

    #[allow(clippy::too_many_arguments)] // The parts of one budget; a struct for them would have one user.
    fn value<C: Calibration>(
        &self,
        exposure: &Exposure,
        mean: &ExposureMean,
        steady: &Steadiness,
        code: f64,
        timing_u_ns: f64,
        evidence: &Evidence<'_>,
        calibration: &C,
    ) -> Option<StampValue> {
        let tube = &self.profile.tube;
        let seconds = (exposure.end_utc_ns - exposure.start_utc_ns) as f64 * NS;
        let slope = (mean.end_volts - mean.start_volts) / seconds;
        let volts_u_frame = root_of_squares(&[
            noise(steady, seconds),
            unresolved_ripple(steady, seconds),
            slope * timing_u_ns * NS,
            (mean.end_volts - mean.volts) / seconds * exposure.length_u_ns as f64 * NS,
        ]);
        let volts_u_common = calibration.common_u_volts(mean.volts, code);
        let volts_u = libm::hypot(volts_u_frame, volts_u_common);
        let (energy_volts, energy_u) = if tube.apply_contact_potential {
            (mean.volts + tube.contact_potential_volts, libm::hypot(volts_u, tube.contact_potential_u_volts))
        } else {
            (mean.volts, volts_u)
        };
        let wavelength_metres = physics::wavelength_metres(energy_volts)?;
        let relative = physics::wavelength_sensitivity(energy_volts)?.abs() * energy_u / energy_volts;
        Some(StampValue {
            volts: mean.volts,
            volts_u,
            volts_u_frame,
            volts_u_common,
            wavelength_pm: wavelength_metres * 1e12,
            wavelength_u_pm: wavelength_metres * 1e12 * relative,
            slope_volts_per_second: slope,
            span_volts: steady.span_volts,
            ripple_volts: steady.ripple_volts,
            coverage: mean.covered,
            enclosure_celsius: evidence.enclosure_celsius,
        })
    }
}

fn row(frame: &FrameRow, reasons: &Reasons, value: Option<StampValue>) -> StampRow {
    StampRow { frame: frame.frame.clone(), verdict: reasons.verdict().to_owned(), reasons: reasons.to_string(), value }
}

fn judge_flags(reasons: &mut Reasons, during: &[Sample]) {
    let any = |flags: ReadingFlags| during.iter().any(|sample| sample.flags.intersects(flags));
    reasons.add_if(any(ReadingFlags::SENSE_OVER_RANGE), Reason::OverRange);
    reasons.add_if(any(ReadingFlags::SENSE_FROZEN.with(ReadingFlags::SENSE_SILENT)), Reason::SenseFrozen);
    // A second sense that cannot be believed is as good as none.
    let cross = ReadingFlags::CROSS_FROZEN.with(ReadingFlags::CROSS_SILENT).with(ReadingFlags::CROSS_OVER_RANGE);
    reasons.add_if(any(cross), Reason::CrossMissing);
    reasons.add_if(any(ReadingFlags::CONFIGURATION_REPAIRED), Reason::ConfigurationRepaired);
}

fn mean_code(during: &[Sample]) -> f64 {
    let count: f64 = during.iter().map(|sample| f64::from(sample.count)).sum();
    during.iter().map(|sample| sample.code * f64::from(sample.count)).sum::<f64>() / count.max(1.0)
}

/// Conversions per second that this converter really makes: up to 10 % off its nominal rate.
fn conversion_rate(around: &[Sample], nominal: f64) -> f64 {
    let whole: Vec<&Sample> = around.iter().filter(|sample| sample.count > 0).collect();
    let seconds: f64 = whole.iter().map(|sample| (sample.end_ns - sample.start_ns) as f64 * NS).sum();
    let count: f64 = whole.iter().map(|sample| f64::from(sample.count)).sum();
    // A stretch too short to tell, or one that is itself starved, must not lower the expectation.
    if seconds < 0.5 { nominal } else { (count / seconds).clamp(0.88 * nominal, 1.12 * nominal) }
}

/// Standard uncertainty of the mean from scatter: that of one cycle mean, carried to the exposure's length.
fn noise(steady: &Steadiness, seconds: f64) -> f64 {
    // With too few cycles for a scatter, half the spread of the conversions is more than it can be.
    let scatter = steady.cycle_scatter_volts.unwrap_or(0.5 * steady.ripple_volts);
    scatter * libm::sqrt((steady.cycle_seconds / seconds).max(0.0))
}

/// Standard uncertainty from ripple that windows of whole conversions do not resolve: at each end of the exposure the
/// windows cut a cycle at an unknown phase, so a sine of amplitude A is missed by up to A/pi of a window; an exposure
/// shorter than that may have caught it anywhere.
fn unresolved_ripple(steady: &Steadiness, seconds: f64) -> f64 {
    let amplitude = 0.5 * steady.ripple_volts;
    let window = 0.5 * steady.cycle_seconds;
    amplitude * (window / (std::f64::consts::PI * seconds)).min(std::f64::consts::FRAC_1_SQRT_2)
}

fn root_of_squares(parts: &[f64]) -> f64 {
    libm::sqrt(parts.iter().map(|part| part * part).sum())
}
