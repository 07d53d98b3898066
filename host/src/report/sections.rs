//! The sections of a report: each is a function from the facts to HTML.

use super::{
    ReportError,
    facts::Facts,
    html::{Cell, escape, list, section, table},
    plots,
};
use crate::{
    physics,
    run::{
        Severity,
        rows::{FrameRow, StampRow},
    },
    stamp::Reason,
    text::utc,
};

pub(super) fn summary(facts: &Facts) -> String {
    let span = if facts.readings > 0 && facts.end_ns > facts.zero_ns {
        format!("{} to {} UTC", day_and_clock(facts.zero_ns), day_and_clock(facts.end_ns))
    } else {
        "no reading could be placed in time".to_owned()
    };
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
        ("Controller's clock", clock),
    ];
    let mut body = verdicts(facts) + &list(&items);
    if facts.count("good") == 0 {
        body += "<p>No frame of this run is good. The reasons stand below; the readings are kept, and the run can be reduced again with <code>ringvolt stamp</code>.</p>";
    }
    body += &reasons_table(facts);
    section("summary", "Summary", &body)
}

/// The three counts, large: what most readers came for.
fn verdicts(facts: &Facts) -> String {
    let tile = |verdict: &str, means: &str| {
        format!(
            "<li class=\"{verdict}\"><b>{}</b> <span>{verdict}</span> <small>{means}</small></li>",
            facts.count(verdict)
        )
    };
    let total = facts.frames.len();
    format!(
        "<ul class=\"verdicts\" aria-label=\"Verdicts on {total} frames\">{}{}{}</ul>",
        tile("good", "no rule fired"),
        tile("marked", "usable, with named doubts"),
        tile("refused", "no value, for stated reasons")
    )
}

fn reasons_table(facts: &Facts) -> String {
    let mut rows = Vec::new();
    for rule in crate::stamp::REASONS {
        let has = |stamp: &StampRow| stamp.reasons.split(';').any(|code| code == rule.code);
        let count = facts.frames.iter().filter(|(_, stamp)| stamp.as_ref().is_some_and(has)).count();
        if count > 0 {
            let does = if rule.level == crate::stamp::Level::Refuse { "refuses" } else { "marks" };
            rows.push(vec![
                Cell::Words(rule.code.to_owned()),
                Cell::Number(count.to_string()),
                Cell::Words(does.to_owned()),
                Cell::Words(rule.sentence.to_owned()),
            ]);
        }
    }
    if rows.is_empty() {
        return "<p>No frame was marked or refused.</p>".to_owned();
    }
    table("Why frames were marked or refused", &["reason", "frames", "effect", "meaning"], &rows)
}

pub(super) fn voltage(facts: &Facts) -> Result<String, ReportError> {
    if facts.spans.is_empty() {
        return Ok(section("voltage", "Voltage over time", "<p>There is no calibrated reading to show.</p>"));
    }
    let seconds = |ns: i64| (ns - facts.zero_ns) as f64 * 1e-9;
    let dots = facts.dots(|frame, stamp| {
        let exposure = frame.exposure.as_ref().ok()?;
        Some((facts.middle_s(exposure), stamp.value?.volts))
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
    let svg = plots::voltage(&facts.spans, &dots, &facts.refused(), &events, &description)?;
    let caption = format!(
        "Band: lowest to highest reading in each column. Circles: good frames. Triangles: marked frames. Crosses at the top: refused frames, which have no value. Strokes at the foot: interlock events. Zero is {} UTC.",
        day_and_clock(facts.zero_ns)
    );
    Ok(section("voltage", "Voltage over time", &figure(&svg, &caption)))
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
        &(figure(&svg, "Line: the relation below. Circles: good frames. Triangles: marked frames.") + text),
    ))
}

fn figure(svg: &str, caption: &str) -> String {
    format!("<figure>{svg}<figcaption>{}</figcaption></figure>", escape(caption))
}

/// To the millisecond, for people; tables carry nine decimals.
fn day_and_clock(utc_ns: i64) -> String {
    let text = utc(utc_ns + 500_000);
    format!("{} {}", text.get(..10).unwrap_or_default(), text.get(11..23).unwrap_or_default())
}

pub(super) fn frames(facts: &Facts) -> String {
    let rows: Vec<Vec<Cell>> = facts.frames.iter().map(|(frame, stamp)| frame_row(frame, stamp.as_ref())).collect();
    if rows.is_empty() {
        return section("frames", "Frames", "<p>No frame was found.</p>");
    }
    let headings = ["frame", "exposure from (UTC)", "for, s", "V", "± V", "pm", "± pm", "verdict", "reasons"];
    let caption = "Every frame, with what was refused and why. ± is the expanded uncertainty, k = 2, about 95 %.";
    section("frames", "Frames", &table(caption, &headings, &rows))
}

fn frame_row(frame: &FrameRow, stamp: Option<&StampRow>) -> Vec<Cell> {
    let exposure = frame.exposure.as_ref().ok();
    let value = stamp.and_then(|stamp| stamp.value);
    let number = |value: Option<f64>, decimals: usize| {
        Cell::Number(value.map(|v| format!("{v:.decimals$}")).unwrap_or_default())
    };
    let mut reasons = stamp.map_or("not stamped yet".to_owned(), |stamp| stamp.reasons.replace(';', ", "));
    if let (Err(why), true) = (&frame.exposure, reasons.contains(Reason::ExposureUnknown.rule().code)) {
        reasons = format!("{reasons}: {why}");
    }
    vec![
        Cell::Words(frame.frame.clone()),
        Cell::Number(exposure.map(|e| day_and_clock(e.start_utc_ns)).unwrap_or_default()),
        number(exposure.map(|e| (e.end_utc_ns - e.start_utc_ns) as f64 * 1e-9), 3),
        number(value.map(|v| v.volts), 2),
        number(value.map(|v| 2.0 * v.volts_u), 2),
        number(value.map(|v| v.wavelength_pm), 4),
        number(value.map(|v| 2.0 * v.wavelength_u_pm), 4),
        Cell::Verdict(stamp.map(|stamp| stamp.verdict.clone()).unwrap_or_default()),
        Cell::Words(reasons),
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
    let rows: Vec<Vec<Cell>> = facts
        .events
        .iter()
        .map(|(at, words, _)| {
            let at = at.map_or("not placed in time".to_owned(), day_and_clock);
            vec![Cell::Words(at), Cell::Words(words.clone())]
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

/// What is missing, and whether it is accounted for.
pub(super) fn completeness(facts: &Facts) -> String {
    let rows: Vec<Vec<Cell>> = facts
        .completeness
        .iter()
        .map(|finding| {
            let weight = match finding.severity {
                Severity::Fine => "fine",
                Severity::Note => "note",
                Severity::Fault => "FAULT",
            };
            vec![
                Cell::Words(finding.subject.to_owned()),
                Cell::Words(weight.to_owned()),
                Cell::Words(finding.sentence.clone()),
            ]
        })
        .collect();
    let text = "<p>A number that is missing, or a pause between windows, is judged in the stamp of every frame it touches. <code>ringvolt verify</code> also compares the frame files.</p>";
    let table = table("What is there, what is missing, and what may be trusted", &["part", "it is", "found"], &rows);
    section("completeness", "Completeness", &(table + text))
}

pub(super) fn notes(facts: &Facts) -> String {
    if facts.notes.is_empty() {
        return String::new();
    }
    let row = |note: &crate::run::rows::NoteRow| {
        let words = [day_and_clock(note.utc_ns), note.author.clone(), note.text.clone()];
        words.map(Cell::Words).to_vec()
    };
    let rows: Vec<Vec<Cell>> = facts.notes.iter().map(row).collect();
    section("notes", "Notes", &table("Written during the run", &["UTC", "by", "note"], &rows))
}

pub(super) fn provenance(facts: &Facts) -> String {
    let body = list(&[
        ("Run file", facts.run_name.clone()),
        ("Fingerprint of the run", facts.fingerprint.clone()),
        ("SHA-256 of the profile", facts.profile_hash.clone()),
        (
            "SHA-256 of the certificate",
            facts.certificate.as_ref().map_or("none".to_owned(), |certificate| certificate.hash.clone()),
        ),
        ("Recorded by", facts.header.software.clone()),
        ("Reduced", facts.reduction.clone().unwrap_or_else(|| "not yet".to_owned())),
        ("Link", facts.header.link.clone()),
        ("Frames folder", facts.header.frames_dir.clone()),
    ]);
    let hash = |(frame, _): &(FrameRow, Option<StampRow>)| {
        vec![Cell::Words(frame.file.clone()), Cell::Words(frame.sha256.clone())]
    };
    let hashes: Vec<Vec<Cell>> = facts.frames.iter().map(hash).collect();
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
