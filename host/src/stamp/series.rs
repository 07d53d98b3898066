//! Readings as samples of volts on the UTC time line.

use ringvolt_protocol::{Reading, ReadingFlags};

use crate::clock::ClockMap;

/// What makes volts of codes, and how well: a certificate with the polarity, temperature and day of one frame.
///
/// A trait so that the arithmetic of stamps can be checked with any other law.
pub trait Calibration {
    /// Accelerating voltage of the main sense at this mean code, volts: polarity times the signed value.
    fn sense_volts(&self, code: f64) -> f64;
    /// The same of the cross-sense.
    fn cross_volts(&self, code: f64) -> f64;
    /// Standard uncertainty that all frames of a run share, at this voltage and mean code, volts.
    fn common_u_volts(&self, volts: f64, code: f64) -> f64;
    /// Standard uncertainty of the difference of the two senses, volts.
    fn difference_u_volts(&self, volts: f64) -> f64;
    /// Whether this voltage at this mean code was calibrated.
    fn covers(&self, volts: f64, code: f64) -> bool;
    /// First eight bytes of its hash, as the controller carries it.
    fn hash(&self) -> [u8; 8];
}

/// One reading in volts, at the time its voltage was at the tube.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Sample {
    /// When the converter began to integrate, less the divider's delay.
    pub start_ns: i64,
    /// When it ended, less the divider's delay.
    pub end_ns: i64,
    /// Mean, volts.
    pub volts: f64,
    /// Mean of the cross-sense, volts; `None` where it gave nothing.
    pub cross_volts: Option<f64>,
    /// Lowest conversion, volts.
    pub lowest: f64,
    /// Highest conversion, volts.
    pub highest: f64,
    /// Mean code of the main sense.
    pub code: f64,
    /// Conversions of the main sense; a sample with none has no volts to use.
    pub count: u8,
    /// What was true of the window.
    pub flags: ReadingFlags,
    /// The certificate the controller held.
    pub certificate: [u8; 8],
}

impl Sample {
    /// The middle of its interval.
    pub const fn middle_ns(&self) -> i64 {
        self.start_ns + (self.end_ns - self.start_ns) / 2
    }

    /// How much of it lies within an interval, nanoseconds.
    pub fn overlap_ns(&self, start_ns: i64, end_ns: i64) -> i64 {
        (self.end_ns.min(end_ns) - self.start_ns.max(start_ns)).max(0)
    }
}

/// Samples in the order of time.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Series {
    samples: Vec<Sample>,
}

impl Series {
    /// Places readings of one epoch. A conversion that ended within a window had been integrating for the time of one
    /// conversion before; the divider's filter adds its own delay: together `lag_ns`. Readings without a time are left
    /// out.
    pub fn new(
        readings: impl IntoIterator<Item = Reading>,
        clock: &ClockMap,
        calibration: &impl Calibration,
        lag_ns: i64,
    ) -> Self {
        let place = |reading: Reading| sample(&reading, clock, calibration, lag_ns);
        Self { samples: readings.into_iter().filter_map(place).collect() }
    }

    /// From samples in the order of time.
    pub const fn from_samples(samples: Vec<Sample>) -> Self {
        Self { samples }
    }

    /// All of them.
    pub fn as_slice(&self) -> &[Sample] {
        &self.samples
    }

    /// Those that touch an interval.
    pub fn within(&self, start_ns: i64, end_ns: i64) -> &[Sample] {
        let from = self.samples.partition_point(|sample| sample.end_ns <= start_ns);
        let to = self.samples.partition_point(|sample| sample.start_ns < end_ns);
        &self.samples[from..to.max(from)]
    }
}

fn sample(reading: &Reading, clock: &ClockMap, calibration: &impl Calibration, lag_ns: i64) -> Option<Sample> {
    let start_ns = clock.utc(reading.time_us)?.utc_ns - lag_ns;
    let code = reading.sense.mean().unwrap_or(0.0);
    let ends = [reading.sense.min, reading.sense.max].map(|code| calibration.sense_volts(f64::from(code)));
    Some(Sample {
        start_ns,
        end_ns: start_ns + i64::from(reading.duration_us) * 1_000,
        volts: calibration.sense_volts(code),
        cross_volts: reading.cross.mean().map(|code| calibration.cross_volts(code)),
        lowest: ends[0].min(ends[1]),
        highest: ends[0].max(ends[1]),
        code,
        count: reading.sense.count,
        flags: reading.flags,
        certificate: reading.certificate.0,
    })
}
