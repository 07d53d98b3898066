//! From what was recorded to stamps: the same way for a live session and for a run file read years later.
//!
//! [`Source`] is what a stamp needs of the recording: the epochs with their clocks, and readings, events and slow inputs
//! around a time. A live session answers from memory, a run file from its tables; [`Reduction::stamp`] cannot tell the
//! difference, so that a stamp made live and one made again from the file follow the same rules.

mod recording;

pub use recording::Recording;

use ringvolt_protocol::{EventKind, Line, Polarity, Reading, Slow};
use thiserror::Error;

use crate::{
    calibration::{Certificate, Validity, day_of_utc_ns},
    clock::ClockMap,
    profile::Profile,
    run::rows::{FrameRow, StampRow},
    stamp::{CertificateAt, Evidence, Reason, Series, Stamper},
};

/// One epoch of the controller's clock.
#[derive(Clone, Debug)]
pub struct Epoch {
    /// Key within the run.
    pub key: i64,
    /// Its way to UTC.
    pub clock: ClockMap,
    /// UTC of its zero.
    pub zero_utc_ns: i64,
}

impl Epoch {
    /// An epoch with a clock; `None` where the clock does not even reach its own exchanges.
    pub fn new(key: i64, clock: ClockMap) -> Option<Self> {
        let (first_us, _) = clock.span_us();
        let zero_utc_ns = clock.utc(first_us)?.utc_ns - i64::try_from(first_us).ok()?.checked_mul(1_000)?;
        Some(Self { key, clock, zero_utc_ns })
    }
}

/// Something recorded could not be read.
#[derive(Debug, Error)]
#[error("{0}")]
pub struct SourceError(pub String);

/// What a stamp needs of a recording.
pub trait Source {
    /// All epochs in the order of time.
    fn epochs(&self) -> &[Epoch];

    /// Readings of an epoch that touch a stretch of device time, in order.
    ///
    /// # Errors
    /// When the recording cannot be read.
    fn readings(&self, epoch: i64, from_us: u64, until_us: u64) -> Result<Vec<Reading>, SourceError>;

    /// Device times of interlock changes (see [`is_interlock_change`]) within a stretch, in order.
    ///
    /// # Errors
    /// When the recording cannot be read.
    fn interlock_us(&self, epoch: i64, from_us: u64, until_us: u64) -> Result<Vec<u64>, SourceError>;

    /// Slow inputs within a stretch, in order.
    ///
    /// # Errors
    /// When the recording cannot be read.
    fn slow(&self, epoch: i64, from_us: u64, until_us: u64) -> Result<Vec<Slow>, SourceError>;
}

/// Whether an event means that the interlock changed: loops, contactors, permit or a trip.
pub fn is_interlock_change(kind: &EventKind) -> bool {
    matches!(
        kind,
        EventKind::Line { line: Line::LoopA | Line::LoopB | Line::Contactors, .. }
            | EventKind::PermitGiven
            | EventKind::PermitWithdrawn
            | EventKind::Tripped { .. }
    )
}

/// Slow inputs this far from an exposure still tell its temperature, microseconds.
const TEMPERATURE_REACH_US: u64 = 60_000_000;
/// A beam current is the mean over this long before its time, microseconds: the one that covers an exposure's end may come
/// so much later.
const BEAM_REACH_US: u64 = 200_000;

/// A way to reduce a recording: one profile with one certificate.
#[derive(Clone, Debug)]
pub struct Reduction {
    profile: Profile,
    certificate: Option<Certificate>,
    stamper: Stamper,
}

impl Reduction {
    /// With this profile and certificate; without one, every frame is refused.
    pub fn new(profile: &Profile, certificate: Option<&Certificate>) -> Self {
        Self { profile: profile.clone(), certificate: certificate.cloned(), stamper: Stamper::new(profile) }
    }

    /// The profile in use.
    pub const fn profile(&self) -> &Profile {
        &self.profile
    }

    /// The certificate in use.
    pub const fn certificate(&self) -> Option<&Certificate> {
        self.certificate.as_ref()
    }

    /// The polarity of the bench.
    pub const fn polarity(&self) -> Polarity {
        if self.profile.controller.polarity_negative { Polarity::Negative } else { Polarity::Positive }
    }

    /// The certificate as a frame at this time and temperature sees it.
    pub fn calibration(&self, utc_ns: i64, enclosure_celsius: Option<f64>) -> Option<CertificateAt<'_>> {
        self.certificate.as_ref().map(|certificate| CertificateAt {
            certificate,
            polarity: self.polarity().sign() as f64,
            enclosure_celsius,
            day: day_of_utc_ns(utc_ns),
        })
    }

    /// The stamp of one frame.
    ///
    /// # Errors
    /// Only when the recording itself cannot be read; doubts about the frame are in the stamp.
    pub fn stamp(&self, frame: &FrameRow, source: &impl Source) -> Result<StampRow, SourceError> {
        let Ok(exposure) = &frame.exposure else { return Ok(Stamper::refuse(frame, Reason::ExposureUnknown)) };
        let Some(epoch) = source.epochs().iter().rev().find(|epoch| epoch.zero_utc_ns <= exposure.start_utc_ns) else {
            return Ok(Stamper::refuse(frame, Reason::NoTime));
        };
        let (from_ns, until_ns) = (self.stamper.from_ns(exposure), self.stamper.until_ns(exposure));
        let lag_us = self.stamper.lag_ns().unsigned_abs() / 1_000 + 20_000;
        let Some(start_us) = epoch.clock.device_us(exposure.start_utc_ns) else {
            return Ok(Stamper::refuse(frame, Reason::NoTime));
        };
        let before_us = (exposure.start_utc_ns - from_ns).unsigned_abs() / 1_000 + lag_us;
        let after_us = (until_ns - exposure.start_utc_ns).unsigned_abs() / 1_000 + lag_us;
        let (from_us, until_us) = (start_us.saturating_sub(before_us), start_us + after_us);
        let length_us = (exposure.end_utc_ns - exposure.start_utc_ns).unsigned_abs() / 1_000;

        let readings = source.readings(epoch.key, from_us, until_us)?;
        let slow = source.slow(
            epoch.key,
            start_us.saturating_sub(TEMPERATURE_REACH_US),
            start_us + length_us + TEMPERATURE_REACH_US,
        )?;
        let interlock = source.interlock_us(epoch.key, from_us, until_us)?;
        let enclosure_celsius = temperature(&slow, start_us + length_us / 2);
        let calibration = self.calibration(exposure.start_utc_ns, enclosure_celsius);
        let Some(calibration) = calibration else { return Ok(Stamper::refuse(frame, Reason::Uncalibrated)) };
        let series = Series::new(readings, &epoch.clock, &calibration, self.stamper.lag_ns());
        let utc = |time_us: u64| epoch.clock.utc(time_us).map(|instant| instant.utc_ns);
        let evidence = Evidence {
            series: &series,
            clock_u_ns: epoch.clock.utc(start_us).map(|instant| instant.u_ns),
            interlock_ns: &interlock.into_iter().filter_map(utc).collect::<Vec<_>>(),
            restarted: source
                .epochs()
                .iter()
                .any(|other| other.key != epoch.key && (from_ns..=exposure.end_utc_ns).contains(&other.zero_utc_ns)),
            beam_na: &beam(&slow, start_us, start_us + length_us + BEAM_REACH_US),
            enclosure_celsius,
            temperature_covered: enclosure_celsius.map(|celsius| covers_temperature(calibration.certificate, celsius)),
            certificate_valid: Some(calibration.certificate.validity(calibration.day) == Validity::Valid),
        };
        Ok(self.stamper.stamp(frame, &evidence, Some(&calibration)))
    }
}

fn covers_temperature(certificate: &Certificate, celsius: f64) -> bool {
    (certificate.conditions.ambient_min_celsius..=certificate.conditions.ambient_max_celsius).contains(&celsius)
}

/// The temperature nearest in time, degrees Celsius, where it is measured.
pub fn temperature(slow: &[Slow], time_us: u64) -> Option<f64> {
    let measured = slow.iter().filter_map(|slow| Some((slow.time_us.abs_diff(time_us), slow.enclosure_centicelsius?)));
    measured.min_by_key(|(away, _)| *away).map(|(_, centicelsius)| f64::from(centicelsius) * 0.01)
}

fn beam(slow: &[Slow], from_us: u64, until_us: u64) -> Vec<i32> {
    slow.iter().filter(|slow| (from_us..=until_us).contains(&slow.time_us)).filter_map(|slow| slow.beam_na).collect()
}
