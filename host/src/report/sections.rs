//! The sections of a report.

use super::{
    ReportError,
    html::{escape, section, table},
    plots::{self, Dot, Span},
};
use crate::{
    calibration::Certificate,
    physics,
    reduction::{Recording, Reduction, is_interlock_change},
    run::{
        Header, RunReader,
        rows::{FrameRow, StampRow},
    },
    stamp::{Calibration, Reason},
    text::utc,
    words::event_words,
};

/// Everything the sections tell.
pub(super) struct Facts {
    pub title: String,
    pub simulated: bool,
    header: Header,
    frames: Vec<(FrameRow, Option<StampRow>)>,
    spans: Vec<Span>,
    zero_ns: i64,
    end_ns: i64,
    readings: u64,
    missing: u64,
    gaps: u64,
    events: Vec<(Option<i64>, String, bool)>,
    certificate: Option<Certificate>,
    reduction: Option<String>,
    run_name: String,
    clock_bound_ms: Option<f64>,
}

/// Columns in the voltage plot.
const COLUMNS: i64 = 900;

impl Facts {
    pub(super) fn gather(
        reader: &RunReader,
        recording: &Recording<'_>,
        reduction: &Reduction,
    ) -> Result<Self, ReportError> {
        let header = reader.header()?;
        let latest = reader.reductions()?.pop();
        let stamps = latest.as_ref().map(|latest| reader.stamps(latest.key)).transpose()?.unwrap_or_default();
        let stamp_of = |frame: &FrameRow| stamps.iter().find(|stamp| stamp.frame == frame.frame).cloned();
        let frames = match &latest {
            Some(latest) => reader.frames_of(latest.key)?,
            None => reader.frames()?,
        };
        let frames = frames.into_iter().map(|frame| (frame.clone(), stamp_of(&frame))).collect();
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
        for (at, volts) in &points {
            let from = seconds(at - (at - self.zero_ns).rem_euclid(column));
            match self.spans.last_mut().filter(|span| span.from_s == from) {
                Some(span) => {
                    span.lowest = span.lowest.min(*volts);
                    span.highest = span.highest.max(*volts);
                }
                None => {
                    let until_s = from + column as f64 * 1e-9;
                    self.spans.push(Span { from_s: from, until_s, lowest: *volts, highest: *volts });
                }
            }
        }
        Ok(())
    }

    fn count(&self, verdict: &str) -> usize {
        self.frames.iter().filter(|(_, stamp)| stamp.as_ref().is_some_and(|stamp| stamp.verdict == verdict)).count()
    }

    fn dots(&self, of: impl Fn(&FrameRow, &StampRow) -> Option<(f64, f64)>) -> Vec<Dot> {
        let dot = |(frame, stamp): &(FrameRow, Option<StampRow>)| {
            let stamp = stamp.as_ref()?;
            let (x, y) = of(frame, stamp)?;
            Some(Dot { x, y, good: stamp.verdict == "good" })
        };
        self.frames.iter().filter_map(dot).collect()
    }
}

fn list(items: &[(&str, String)]) -> String {
    let items: String =
        items.iter().map(|(term, text)| format!("<dt>{}</dt><dd>{}</dd>", escape(term), escape(text))).collect();
    format!("<dl>{items}</dl>")
}

pub(super) fn summary(facts: &Facts) -> String {
    let span = if facts.readings > 0 && facts.end_ns > facts.zero_ns {
        format!("{} to {}", utc(facts.zero_ns), utc(facts.end_ns))
    } else {
        "no reading could be placed in time".to_owned()
    };
    let frames = format!(
        "{}: {} good, {} marked, {} refused",
        facts.frames.len(),
        facts.count("good"),
        facts.count("marked"),
        facts.count("refused")
    );
    let clock =
        facts.clock_bound_ms.map_or("not tied to UTC".to_owned(), |ms| format!("within {ms:.2} ms of the computer's"));
    let items = [
        ("Recorded", span),
        (
            "Readings",
            format!(
                "{} recorded, {} missing, {} of these counted as lost by the controller",
                facts.readings, facts.missing, facts.gaps
            ),
        ),
        ("Frames", frames),
        ("Controller's clock", clock),
    ];
    let mut body = list(&items);
    if facts.count("good") == 0 {
        body += "<p>No frame of this run is good. The reasons stand below; the readings are kept, and the run can be reduced again with <code>ringvolt stamp</code>.</p>";
    }
    body += &reasons_table(facts);
    section("summary", "Summary", &body)
}

fn reasons_table(facts: &Facts) -> String {
    let mut rows = Vec::new();
    for rule in crate::stamp::REASONS {
        let has = |stamp: &StampRow| stamp.reasons.split(';').any(|code| code == rule.code);
        let count = facts.frames.iter().filter(|(_, stamp)| stamp.as_ref().is_some_and(has)).count();
        if count > 0 {
            let does = if rule.level == crate::stamp::Level::Refuse { "refuses" } else { "marks" };
            rows.push(vec![
                format!("<code>{}</code>", rule.code),
                count.to_string(),
                does.to_owned(),
                format!("<span>{}</span>", escape(rule.sentence)),
            ]);
        }
    }
    if rows.is_empty() {
        return "<p>No frame was marked or refused.</p>".to_owned();
    }
    table("Why frames were marked or refused", &["reason", "frames", "it", "meaning"], &rows)
}

pub(super) fn voltage(facts: &Facts) -> Result<String, ReportError> {
    if facts.spans.is_empty() {
        return Ok(section("voltage", "Voltage over time", "<p>There is no calibrated reading to show.</p>"));
    }
    let seconds = |ns: i64| (ns - facts.zero_ns) as f64 * 1e-9;
    let dots = facts.dots(|frame, stamp| {
        let exposure = frame.exposure.as_ref().ok()?;
        let middle = exposure.start_utc_ns + (exposure.end_utc_ns - exposure.start_utc_ns) / 2;
        Some((seconds(middle), stamp.value?.volts))
    });
    let events: Vec<f64> =
        facts.events.iter().filter(|(_, _, interlock)| *interlock).filter_map(|(at, ..)| at.map(seconds)).collect();
    let description = format!(
        "Accelerating voltage of {} readings over {:.0} seconds, with {} stamped frames and {} interlock events.",
        facts.readings,
        seconds(facts.end_ns),
        dots.len(),
        events.len()
    );
    let svg = plots::voltage(&facts.spans, &dots, &events, &description)?;
    let caption = "Band: lowest to highest reading. Filled circles: good frames. Open triangles: marked frames. Refused frames have no value. Strokes at the foot: interlock events.";
    Ok(section("voltage", "Voltage over time", &format!("<figure>{svg}<figcaption>{caption}</figcaption></figure>")))
}

pub(super) fn wavelength(facts: &Facts) -> Result<String, ReportError> {
    let dots = facts.dots(|_, stamp| stamp.value.map(|value| (value.volts, value.wavelength_pm)));
    if dots.is_empty() {
        return Ok(section("wavelength", "Wavelength", "<p>No frame has a wavelength.</p>"));
    }
    let low = dots.iter().map(|dot| dot.x).fold(f64::INFINITY, f64::min) * 0.97;
    let high = dots.iter().map(|dot| dot.x).fold(0.0, f64::max) * 1.03;
    let curve: Vec<(f64, f64)> = (0..=60)
        .map(|step| low + (high - low) * f64::from(step) / 60.0)
        .filter_map(|volts| Some((volts, physics::wavelength_metres(volts)? * 1e12)))
        .collect();
    let svg = plots::wavelength(
        &dots,
        &curve,
        &format!("Electron wavelength of {} frames between {low:.0} and {high:.0} volts.", dots.len()),
    )?;
    let text = "<p>The wavelength follows from the measured voltage by de Broglie's relation with relativity, h / &radic;(2 m e V (1 + eV / 2mc&sup2;)); the points lie on the curve by construction. Only rings on the screen are independent of it.</p>";
    Ok(section(
        "wavelength",
        "Wavelength",
        &format!(
            "<figure>{svg}<figcaption>Line: relation. Filled circles: good frames. Open triangles: marked frames.</figcaption></figure>{text}"
        ),
    ))
}

pub(super) fn frames(facts: &Facts) -> String {
    let rows: Vec<Vec<String>> = facts.frames.iter().map(|(frame, stamp)| frame_row(frame, stamp.as_ref())).collect();
    if rows.is_empty() {
        return section("frames", "Frames", "<p>No frame was found.</p>");
    }
    let headings =
        ["frame", "start of exposure (UTC)", "s", "V", "± V (k=2)", "pm", "± pm (k=2)", "verdict", "reasons"];
    section("frames", "Frames", &table("Every frame, with what was refused and why", &headings, &rows))
}

fn frame_row(frame: &FrameRow, stamp: Option<&StampRow>) -> Vec<String> {
    let exposure = frame.exposure.as_ref().ok();
    let value = stamp.and_then(|stamp| stamp.value);
    let number = |value: Option<f64>, decimals: usize| value.map(|v| format!("{v:.decimals$}")).unwrap_or_default();
    let mut reasons = stamp.map_or("not stamped yet".to_owned(), |stamp| stamp.reasons.clone());
    if let (Err(why), true) = (&frame.exposure, reasons.contains(Reason::ExposureUnknown.rule().code)) {
        reasons = format!("{reasons}: {why}");
    }
    vec![
        escape(&frame.frame),
        exposure.map(|e| utc(e.start_utc_ns)).unwrap_or_default(),
        number(exposure.map(|e| (e.end_utc_ns - e.start_utc_ns) as f64 * 1e-9), 3),
        number(value.map(|v| v.volts), 2),
        number(value.map(|v| 2.0 * v.volts_u), 2),
        number(value.map(|v| v.wavelength_pm), 4),
        number(value.map(|v| 2.0 * v.wavelength_u_pm), 4),
        stamp.map(|stamp| escape(&stamp.verdict)).unwrap_or_default(),
        escape(&reasons.replace(';', "; ")),
    ]
}

pub(super) fn uncertainty(facts: &Facts) -> String {
    let good: Vec<_> = facts
        .frames
        .iter()
        .filter_map(|(_, stamp)| stamp.as_ref().filter(|stamp| stamp.verdict == "good")?.value)
        .collect();
    let mean = |of: fn(&crate::run::rows::StampValue) -> f64| good.iter().map(of).sum::<f64>() / good.len() as f64;
    let figures = if good.is_empty() {
        String::new()
    } else {
        list(&[
            (
                "Differs from frame to frame",
                format!("{:.3} V (k = 1, mean over good frames)", mean(|v| v.volts_u_frame)),
            ),
            ("Common to all frames", format!("{:.3} V (k = 1, mean over good frames)", mean(|v| v.volts_u_common))),
        ])
    };
    let text = "<p>Every uncertainty has two parts. What differs from frame to frame (noise, ripple, motion, time of the exposure) becomes smaller in a mean over frames. What all frames share (the certificate, drift since it, temperature) does not: never divide it by &radic;n. The wavelength's relative uncertainty is half that of the voltage.</p>";
    section("uncertainty", "Uncertainty", &format!("{text}{figures}"))
}

pub(super) fn interlock(facts: &Facts) -> String {
    let rows: Vec<Vec<String>> = facts
        .events
        .iter()
        .map(|(at, words, _)| {
            vec![at.map_or("not placed in time".to_owned(), utc), format!("<span>{}</span>", escape(words))]
        })
        .collect();
    if rows.is_empty() {
        return section("interlock", "Interlock log", "<p>The controller told no events.</p>");
    }
    section("interlock", "Interlock log", &table("What the controller saw and did", &["UTC", "event"], &rows))
}

pub(super) fn calibration(facts: &Facts) -> String {
    let Some(certificate) = &facts.certificate else {
        return section(
            "calibration",
            "Calibration",
            "<p>This run has no certificate: no frame can have a voltage.</p>",
        );
    };
    let conditions = &certificate.conditions;
    let body = list(&[
        ("Certificate", certificate.hash.clone()),
        ("Board", certificate.device.clone()),
        ("Issued", format!("{}, valid until {}", certificate.issued, certificate.valid_until)),
        ("By", certificate.operator.clone()),
        (
            "Reference",
            format!(
                "{}; its standard uncertainty {} ppm and {} V",
                certificate.reference.identity, certificate.reference.u_ppm, certificate.reference.u_volts
            ),
        ),
        (
            "Holds for",
            format!(
                "{} to {} V at {} to {} °C",
                conditions.volts_min,
                conditions.volts_max,
                conditions.ambient_min_celsius,
                conditions.ambient_max_celsius
            ),
        ),
        ("Drift", format!("{} ppm a year (standard uncertainty)", certificate.stability.drift_u_ppm_per_year)),
    ]);
    section("calibration", "Calibration", &body)
}

pub(super) fn provenance(facts: &Facts) -> String {
    let body = list(&[
        ("Run file", facts.run_name.clone()),
        ("Recorded by", facts.header.software.clone()),
        ("Reduced", facts.reduction.clone().unwrap_or_else(|| "not yet".to_owned())),
        ("Link", facts.header.link.clone()),
        ("Frames folder", facts.header.frames_dir.clone()),
    ]);
    let hashes: Vec<Vec<String>> = facts
        .frames
        .iter()
        .map(|(frame, _)| vec![escape(&frame.file), format!("<code>{}</code>", escape(&frame.sha256))])
        .collect();
    let details = format!(
        "<details><summary>Hashes of {} frame files</summary>{}</details>",
        hashes.len(),
        table("SHA-256", &["file", "hash"], &hashes)
    );
    section("provenance", "Where this comes from", &format!("{body}{details}"))
}

pub(super) fn cautions() -> String {
    let text = "<p class=\"caution\">High voltage can kill, also after it was switched off. No number here or on any screen, least of all 0 V, says that a part is safe to touch: wait, discharge with an earthing stick, and prove it dead with an independent instrument. The hard-wired interlock protects people; the controller only watches it. Local rules and licensed practice decide.</p>";
    section("cautions", "Cautions", text)
}
