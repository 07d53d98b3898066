//! The figures of a live session: what the screen shows now.

use ringvolt_protocol::{Reading, ReadingFlags, Status};

use super::{memory::Memory, recorder::Recorded, update::Now};
use crate::{
    physics,
    reduction::Reduction,
    stamp::{Calibration, Sample, Series, exposure_mean},
};

/// A number older than this is not shown.
const STALE_NS: i64 = 500_000_000;
/// Figures are means over this long: whole cycles of 50 Hz and of 60 Hz mains.
const MEAN_NS: i64 = 100_000_000;
/// Slope is taken over this long.
const SLOPE_NS: i64 = 500_000_000;

/// Keeps what the controller said last.
#[derive(Debug, Default)]
pub(super) struct Figures {
    status: Option<Status>,
}

impl Figures {
    pub(super) fn status(&mut self, status: Status) {
        self.status = Some(status);
    }

    /// The figures at this time.
    pub(super) fn now(
        &self,
        utc_ns: i64,
        memory: &Memory,
        reduction: &Reduction,
        recorded: &Recorded,
        damaged_frames: u32,
    ) -> Now {
        let slow = memory.newest_slow();
        let mut now = Now {
            utc_ns,
            status: self.status,
            readings: recorded.readings,
            lost: recorded.lost,
            damaged_frames,
            beam_microamperes: slow.and_then(|slow| slow.beam_na).map(|na| f64::from(na) * 1e-3),
            enclosure_celsius: slow.and_then(|slow| slow.enclosure_centicelsius).map(|c| f64::from(c) * 0.01),
            ..Now::default()
        };
        now.why_none = fill(&mut now, memory, reduction).err();
        now
    }
}

/// Fills in the figures that hang on the newest readings, or says why there are none.
fn fill(now: &mut Now, memory: &Memory, reduction: &Reduction) -> Result<(), &'static str> {
    let epoch = memory.epoch().ok_or("the clock is not tied yet")?;
    let newest = memory.newest().ok_or("no reading has come yet")?;
    let end = epoch.clock.utc(newest.time_us + u64::from(newest.duration_us)).ok_or("the clock is not tied yet")?;
    now.age_seconds = Some((now.utc_ns - end.utc_ns) as f64 * 1e-9);
    now.clock_bound_ms = Some(end.bound_ns as f64 * 1e-6);
    if now.utc_ns - end.utc_ns > STALE_NS {
        return Err("readings have stopped: treat as live");
    }
    let calibration =
        reduction.calibration(now.utc_ns, now.enclosure_celsius).ok_or("there is no certificate: treat as live")?;
    let readings: Vec<Reading> = memory.last_readings(60).copied().collect();
    let series = Series::new(readings, &epoch.clock, &calibration, 0);
    let samples = series.within(end.utc_ns - MEAN_NS, end.utc_ns);
    if let Some(why) = doubt(samples, calibration.hash()) {
        return Err(why);
    }
    let mean = exposure_mean(series.as_slice(), end.utc_ns - MEAN_NS, end.utc_ns)
        .ok_or("the converter is silent: treat as live")?;
    let slope = exposure_mean(series.as_slice(), end.utc_ns - SLOPE_NS, end.utc_ns);
    let lowest = samples.iter().fold(f64::INFINITY, |lowest, sample| lowest.min(sample.lowest));
    let highest = samples.iter().fold(f64::NEG_INFINITY, |highest, sample| highest.max(sample.highest));
    let cross = samples.iter().filter_map(|sample| sample.cross_volts);
    let cross = cross.clone().sum::<f64>() / cross.count().max(1) as f64;
    let code = samples.last().map_or(0.0, |sample| sample.code);
    let ripple = highest - lowest;
    now.volts = Some(mean.volts);
    now.volts_u = Some(libm::hypot(calibration.common_u_volts(mean.volts, code), 0.02 * ripple));
    now.ripple_volts = Some(ripple);
    now.difference_volts = Some(mean.volts - cross);
    now.slope_volts_per_second = slope.map(|slope| (slope.end_volts - slope.start_volts) / (SLOPE_NS as f64 * 1e-9));
    now.wavelength_pm = physics::wavelength_metres(mean.volts)
        .filter(|_| mean.volts >= reduction.profile().limits.least_volts)
        .map(|metres| metres * 1e12);
    Ok(())
}

/// Why these samples make no number, if so.
fn doubt(samples: &[Sample], certificate: [u8; 8]) -> Option<&'static str> {
    let any = |flags: ReadingFlags| samples.iter().any(|sample| sample.flags.intersects(flags));
    let rules = [
        (samples.is_empty(), "the converter is silent: treat as live"),
        (any(ReadingFlags::SENSE_SILENT), "the converter is silent: treat as live"),
        (any(ReadingFlags::SENSE_FROZEN), "the reading is frozen: treat as live"),
        (any(ReadingFlags::SENSE_OVER_RANGE), "the tap is over range: treat as live"),
        (any(ReadingFlags::SENSES_DISAGREE), "the senses disagree: treat as live"),
        (any(ReadingFlags::UNCALIBRATED), "the controller is uncalibrated: treat as live"),
        (
            samples.iter().any(|sample| sample.certificate != certificate),
            "the controller holds another certificate: treat as live",
        ),
    ];
    rules.into_iter().find(|(fires, _)| *fires).map(|(_, why)| why)
}
