//! What the sections tell, gathered from the run once.

use std::collections::HashMap;

use sha2::{Digest, Sha256};

use super::{
    ReportError,
    plots::{Dot, Span},
};
use crate::{
    calibration::Certificate,
    reduction::{Recording, Reduction, is_interlock_change},
    run::{
        Finding, Header, RunReader, completeness,
        rows::{Exposure, FrameRow, NoteRow, StampRow},
    },
    stamp::Calibration,
    words::event_words,
};

/// Everything the sections tell.
pub(super) struct Facts {
    pub title: String,
    pub simulated: bool,
    pub header: Header,
    pub frames: Vec<(FrameRow, Option<StampRow>)>,
    pub spans: Vec<Span>,
    pub zero_ns: i64,
    pub end_ns: i64,
    pub readings: u64,
    pub missing: u64,
    pub gaps: u64,
    pub events: Vec<(Option<i64>, String, bool)>,
    pub certificate: Option<Certificate>,
    pub reduction: Option<String>,
    pub run_name: String,
    pub clock_bound_ms: Option<f64>,
    pub fingerprint: String,
    pub profile_hash: String,
    pub notes: Vec<NoteRow>,
    pub completeness: Vec<Finding>,
}

/// Columns in the voltage plot.
const COLUMNS: i64 = 1_600;

/// Readings this close in time are joined in the plot, nanoseconds.
const JOIN_NS: i64 = 60_000_000;

impl Facts {
    pub(super) fn gather(
        reader: &RunReader,
        recording: &Recording<'_>,
        reduction: &Reduction,
    ) -> Result<Self, ReportError> {
        let header = reader.header()?;
        let latest = reader.reductions()?.pop();
        let stamps = latest.as_ref().map(|latest| reader.stamps(latest.key)).transpose()?.unwrap_or_default();
        let mut stamps: HashMap<String, StampRow> =
            stamps.into_iter().map(|stamp| (stamp.frame.clone(), stamp)).collect();
        let mut with_stamp = |frame: FrameRow| {
            let stamp = stamps.remove(&frame.frame);
            (frame, stamp)
        };
        let frames = match &latest {
            Some(latest) => reader.frames_of(latest.key)?,
            None => reader.frames()?,
        };
        let frames = frames.into_iter().map(&mut with_stamp).collect();
        let profile_hash = Sha256::digest(header.profile_text.as_bytes());
        let mut facts = Self {
            title: format!("Run on {}", header.bench_name),
            simulated: header.simulated,
            frames,
            spans: Vec::new(),
            zero_ns: 0,
            end_ns: 0,
            readings: 0,
            missing: 0,
            gaps: 0,
            events: Vec::new(),
            certificate: reduction.certificate().cloned(),
            reduction: latest.map(|latest| format!("{} by {}", latest.command, latest.software)),
            run_name: reader.path().file_name().map(|name| name.to_string_lossy().into_owned()).unwrap_or_default(),
            clock_bound_ms: None,
            fingerprint: reader.fingerprint()?,
            profile_hash: crate::text::hex(&profile_hash),
            notes: reader.notes()?,
            completeness: completeness(reader),
            header,
        };
        facts.gather_epochs(reader, recording)?;
        facts.gather_voltage(reader, recording, reduction)?;
        Ok(facts)
    }

    fn gather_epochs(&mut self, reader: &RunReader, recording: &Recording<'_>) -> Result<(), ReportError> {
        for row in reader.epochs()? {
            let key = row.epoch_key;
            let clock = recording.epoch(key).map(|epoch| &epoch.clock);
            let (readings, missing) = reader.count_readings(key)?;
            self.readings += readings;
            self.missing += missing;
            self.gaps += reader.gaps(key)?.iter().map(|gap| u64::from(gap.count)).sum::<u64>();
            for event in reader.events(key)? {
                let at = clock.and_then(|clock| clock.utc(event.time_us)).map(|instant| instant.utc_ns);
                self.events.push((at, event_words(&event.kind), is_interlock_change(&event.kind)));
            }
            if let Some(clock) = clock {
                let (first, last) = clock.span_us();
                let bound = clock.utc(first.midpoint(last)).map(|instant| instant.bound_ns as f64 * 1e-6);
                self.clock_bound_ms = bound.or(self.clock_bound_ms);
            }
        }
        Ok(())
    }

    /// The voltage as the lowest and highest of each column's readings.
    fn gather_voltage(
        &mut self,
        reader: &RunReader,
        recording: &Recording<'_>,
        reduction: &Reduction,
    ) -> Result<(), ReportError> {
        let mut points: Vec<(i64, f64)> = Vec::new();
        for row in reader.epochs()? {
            let Some(epoch) = recording.epoch(row.epoch_key) else { continue };
            let Some(calibration) = reduction.calibration(epoch.zero_utc_ns, None) else { continue };
            reader.each_reading(row.epoch_key, |reading| {
                let at = epoch.clock.utc(reading.time_us).map(|instant| instant.utc_ns);
                if let (Some(at), Some(code)) = (at, reading.sense.mean()) {
                    points.push((at, calibration.sense_volts(code)));
                }
                true
            })?;
        }
        let (Some(first), Some(last)) = (points.first(), points.last()) else { return Ok(()) };
        (self.zero_ns, self.end_ns) = (first.0, last.0);
        let column = ((last.0 - first.0) / COLUMNS).max(10_000_000);
        let seconds = |ns: i64| (ns - self.zero_ns) as f64 * 1e-9;
        let mut before: Option<(i64, f64)> = None;
        for (at, volts) in &points {
            let from = seconds(at - (at - self.zero_ns).rem_euclid(column));
            match self.spans.last_mut().filter(|span| span.from_s == from) {
                Some(span) => {
                    span.lowest = span.lowest.min(*volts);
                    span.highest = span.highest.max(*volts);
                }
                None => {
                    let until_s = from + column as f64 * 1e-9;
                    // A column begins where the one before ended, so that a steep slope is one line and not steps; but
                    // nothing bridges a time without readings.
                    let touching = before.filter(|(ended, _)| at - ended <= column.max(JOIN_NS));
                    let last = touching.map_or(*volts, |(_, last)| last);
                    self.spans.push(Span { from_s: from, until_s, lowest: volts.min(last), highest: volts.max(last) });
                }
            }
            before = Some((*at, *volts));
        }
        Ok(())
    }

    pub(super) fn count(&self, verdict: &str) -> usize {
        self.frames.iter().filter(|(_, stamp)| stamp.as_ref().is_some_and(|stamp| stamp.verdict == verdict)).count()
    }

    pub(super) fn dots(&self, of: impl Fn(&FrameRow, &StampRow) -> Option<(f64, f64)>) -> Vec<Dot> {
        let dot = |(frame, stamp): &(FrameRow, Option<StampRow>)| {
            let stamp = stamp.as_ref()?;
            let (x, y) = of(frame, stamp)?;
            Some(Dot { x, y, good: stamp.verdict == "good" })
        };
        self.frames.iter().filter_map(dot).collect()
    }

    /// Middles of the exposures of refused frames, seconds from the first reading.
    pub(super) fn refused(&self) -> Vec<f64> {
        let is_refused = |stamp: &StampRow| stamp.verdict == "refused";
        let refused = self.frames.iter().filter(|(_, stamp)| stamp.as_ref().is_some_and(is_refused));
        refused.filter_map(|(frame, _)| Some(self.middle_s(frame.exposure.as_ref().ok()?))).collect()
    }

    /// The middle of an exposure, seconds from the first reading.
    pub(super) fn middle_s(&self, exposure: &Exposure) -> f64 {
        (exposure.start_utc_ns - self.zero_ns) as f64 * 1e-9
            + (exposure.end_utc_ns - exposure.start_utc_ns) as f64 * 0.5e-9
    }
}
