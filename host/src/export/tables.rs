//! The tables: their columns, and the rows of a run.

use std::collections::HashMap;

use super::{
    ExportError,
    columns::{Column, Kind, SIMULATED, Table, always, sometimes},
};
use crate::{
    reduction::{Recording, Reduction},
    run::{
        RunReader, event_code,
        rows::{FrameRow, StampRow},
    },
    stamp::{Calibration, Stamper},
    text::utc,
    words::{event_words, stream_words},
};

const FRAMES: &[Column] = &[
    always("frame", Kind::Text, "", "name of the frame: its file's stem"),
    always("file", Kind::Text, "", "image file, within the frames folder"),
    sometimes("start_utc", Kind::Time, "", "start of the exposure"),
    sometimes("end_utc", Kind::Time, "", "end of the exposure"),
    sometimes("start_u_s", Kind::Number, "s", "standard uncertainty (k = 1) of the start"),
    sometimes("exposure_source", Kind::Text, "", "where the exposure's time comes from"),
    sometimes(
        "volts",
        Kind::Number,
        "V",
        "mean accelerating voltage over the exposure, between cathode and anode, positive when it accelerates",
    ),
    sometimes("volts_u", Kind::Number, "V", "its standard uncertainty (k = 1)"),
    sometimes(
        "volts_u_frame",
        Kind::Number,
        "V",
        "the part of it that differs from frame to frame; a mean over frames divides only this part",
    ),
    sometimes(
        "volts_u_common",
        Kind::Number,
        "V",
        "the part of it that all frames of the run share; no mean makes it smaller",
    ),
    sometimes("wavelength_pm", Kind::Number, "pm", "electron wavelength, relativistic"),
    sometimes("wavelength_u_pm", Kind::Number, "pm", "its standard uncertainty (k = 1)"),
    sometimes("slope_volts_per_second", Kind::Number, "V/s", "change of the voltage over the exposure"),
    sometimes("span_volts", Kind::Number, "V", "spread of mains-cycle means within the exposure"),
    sometimes("ripple_volts", Kind::Number, "V", "peak-to-peak spread of conversions within a mains cycle"),
    sometimes("coverage", Kind::Number, "1", "share of the exposure that readings cover"),
    sometimes("enclosure_celsius", Kind::Number, "degC", "temperature in the divider's enclosure"),
    always(
        "verdict",
        Kind::Word(&["good", "marked", "refused"]),
        "",
        "good, marked (usable, with named doubts) or refused",
    ),
    always("reasons", Kind::Text, "", "codes of the doubts, joined by semicolons"),
    sometimes("sha256", Kind::Text, "", "SHA-256 of the image file"),
    SIMULATED,
];

const READINGS: &[Column] = &[
    always("epoch", Kind::Integer, "", "key of the controller's power-up within the run"),
    always("seq", Kind::Integer, "", "running number of the reading within the epoch"),
    sometimes("start_utc", Kind::Time, "", "when the converter began to integrate"),
    sometimes("end_utc", Kind::Time, "", "when it ended"),
    always("time_us", Kind::Integer, "us", "start of the window on the controller's clock"),
    always("duration_us", Kind::Integer, "us", "length of the window"),
    sometimes("volts", Kind::Number, "V", "mean accelerating voltage, main sense"),
    sometimes("cross_volts", Kind::Number, "V", "mean accelerating voltage, cross-sense"),
    always("sense_sum", Kind::Integer, "codes", "sum of the main sense's codes"),
    always("sense_count", Kind::Integer, "", "number of its conversions"),
    always("sense_min", Kind::Integer, "codes", "its smallest code"),
    always("sense_max", Kind::Integer, "codes", "its largest code"),
    always("cross_sum", Kind::Integer, "codes", "sum of the cross-sense's codes"),
    always("cross_count", Kind::Integer, "", "number of its conversions"),
    always("cross_min", Kind::Integer, "codes", "its smallest code"),
    always("cross_max", Kind::Integer, "codes", "its largest code"),
    always("flags", Kind::Integer, "", "what was true of the window, as bits (see the protocol's reading flags)"),
    SIMULATED,
];

const EVENTS: &[Column] = &[
    always("epoch", Kind::Integer, "", "key of the controller's power-up within the run"),
    always("seq", Kind::Integer, "", "running number of the event within the epoch"),
    sometimes("time_utc", Kind::Time, "", "when"),
    always("time_us", Kind::Integer, "us", "when, on the controller's clock"),
    always("code", Kind::Text, "", "stable code of the kind of event"),
    always("sentence", Kind::Text, "", "what happened, in words"),
    SIMULATED,
];

const SLOW: &[Column] = &[
    always("epoch", Kind::Integer, "", "key of the controller's power-up within the run"),
    sometimes("time_utc", Kind::Time, "", "when"),
    sometimes("beam_na", Kind::Integer, "nA", "beam current, mean since the row before; empty is not evaluated"),
    sometimes(
        "enclosure_celsius",
        Kind::Number,
        "degC",
        "temperature in the divider's enclosure; empty is not evaluated",
    ),
    SIMULATED,
];

const GAPS: &[Column] = &[
    always("epoch", Kind::Integer, "", "key of the controller's power-up within the run"),
    always("stream", Kind::Text, "", "what was lost"),
    always("first_seq", Kind::Integer, "", "first lost number"),
    always("count", Kind::Integer, "", "how many"),
    SIMULATED,
];

const NOTES: &[Column] = &[
    always("time_utc", Kind::Time, "", "when"),
    always("author", Kind::Text, "", "person or program"),
    always("text", Kind::Text, "", "the note"),
    SIMULATED,
];

/// All tables.
pub(super) const ALL: [&Table; 6] = [
    &Table {
        name: "frames",
        file: "frames.csv",
        description: "One row per camera frame.",
        key: &["frame"],
        columns: FRAMES,
    },
    &Table {
        name: "readings",
        file: "readings.csv",
        description: "One row per reading of the controller.",
        key: &["epoch", "seq"],
        columns: READINGS,
    },
    &Table {
        name: "events",
        file: "events.csv",
        description: "One row per event of the controller.",
        key: &["epoch", "seq"],
        columns: EVENTS,
    },
    &Table {
        name: "slow",
        file: "slow.csv",
        description: "Beam current and temperature of the enclosure.",
        key: &[],
        columns: SLOW,
    },
    &Table {
        name: "gaps",
        file: "gaps.csv",
        description: "Entries that were lost, and counted.",
        key: &[],
        columns: GAPS,
    },
    &Table { name: "notes", file: "notes.csv", description: "Notes made during the run.", key: &[], columns: NOTES },
];

type Row<'a> = &'a mut dyn FnMut(&[String]) -> Result<(), ExportError>;

/// Hands every row of a table to `row`.
pub(super) fn fill(
    table: &Table,
    reader: &RunReader,
    recording: &Recording<'_>,
    reduction: &Reduction,
    row: Row<'_>,
) -> Result<(), ExportError> {
    let mark = reader.header()?.simulated.to_string();
    match table.name {
        "frames" => frames(reader, &mark, row),
        "readings" => readings(reader, recording, reduction, &mark, row),
        "events" => events(reader, recording, &mark, row),
        "slow" => slow(reader, recording, &mark, row),
        "gaps" => gaps(reader, &mark, row),
        _ => notes(reader, &mark, row),
    }
}

/// A number that is there or not.
fn cell<T: ToString>(value: Option<T>) -> String {
    value.map(|value| value.to_string()).unwrap_or_default()
}

/// A measured number with so many decimals: fixed, so that the same run gives the same bytes.
fn fixed(value: Option<f64>, decimals: usize) -> String {
    let text = value.map(|value| format!("{value:.decimals$}")).unwrap_or_default();
    // A negative number that rounds to nothing is nothing.
    match text.strip_prefix('-') {
        Some(digits) if digits.bytes().all(|byte| matches!(byte, b'0' | b'.')) => digits.to_owned(),
        _ => text,
    }
}

fn frames(reader: &RunReader, mark: &str, row: Row<'_>) -> Result<(), ExportError> {
    let no_stamps = || ExportError::NoStamps { path: reader.path().display().to_string() };
    let reduction = reader.reductions()?.pop().ok_or_else(no_stamps)?;
    let stamps: HashMap<String, StampRow> =
        reader.stamps(reduction.key)?.into_iter().map(|stamp| (stamp.frame.clone(), stamp)).collect();
    for frame in reader.frames_of(reduction.key)? {
        // A frame that came after the reduction has no stamp yet.
        if let Some(stamp) = stamps.get(&frame.frame) {
            row(&frame_row(&frame, stamp, mark))?;
        }
    }
    Ok(())
}

fn frame_row(frame: &FrameRow, stamp: &StampRow, mark: &str) -> Vec<String> {
    let exposure = frame.exposure.as_ref().ok();
    let value = stamp.value;
    vec![
        frame.frame.clone(),
        frame.file.clone(),
        cell(exposure.map(|e| utc(e.start_utc_ns))),
        cell(exposure.map(|e| utc(e.end_utc_ns))),
        fixed(exposure.map(|e| e.start_u_ns as f64 * 1e-9), 6),
        cell(exposure.map(|e| e.source.clone())),
        fixed(value.map(|v| v.volts), 4),
        fixed(value.map(|v| v.volts_u), 4),
        fixed(value.map(|v| v.volts_u_frame), 4),
        fixed(value.map(|v| v.volts_u_common), 4),
        fixed(value.map(|v| v.wavelength_pm), 7),
        fixed(value.map(|v| v.wavelength_u_pm), 7),
        fixed(value.map(|v| v.slope_volts_per_second), 4),
        fixed(value.map(|v| v.span_volts), 4),
        fixed(value.map(|v| v.ripple_volts), 4),
        fixed(value.map(|v| v.coverage), 4),
        fixed(value.and_then(|v| v.enclosure_celsius), 2),
        stamp.verdict.clone(),
        stamp.reasons.clone(),
        frame.sha256.clone(),
        mark.to_owned(),
    ]
}

fn readings(
    reader: &RunReader,
    recording: &Recording<'_>,
    reduction: &Reduction,
    mark: &str,
    row: Row<'_>,
) -> Result<(), ExportError> {
    // Half a conversion: the window tells when conversions ended, the table when the converter was integrating.
    let lag_ns = Stamper::new(reduction.profile()).conversion_lag_ns();
    for epoch in reader.epochs()? {
        let key = epoch.epoch_key;
        let clock = recording.epoch(key).map(|epoch| &epoch.clock);
        let slow = reader.slow(key)?;
        let mut outcome = Ok(());
        reader.each_reading(key, |reading| {
            let start = clock.and_then(|clock| clock.utc(reading.time_us)).map(|instant| instant.utc_ns - lag_ns);
            let celsius = crate::reduction::temperature(&slow, reading.time_us);
            let calibration = reduction.calibration(start.unwrap_or(0), celsius);
            let volts = calibration.zip(reading.sense.mean()).map(|(c, code)| c.sense_volts(code));
            let cross = calibration.zip(reading.cross.mean()).map(|(c, code)| c.cross_volts(code));
            outcome = row(&[
                key.to_string(),
                reading.seq.to_string(),
                cell(start.map(utc)),
                cell(start.map(|start| utc(start + i64::from(reading.duration_us) * 1_000))),
                reading.time_us.to_string(),
                reading.duration_us.to_string(),
                fixed(volts, 4),
                fixed(cross, 4),
                reading.sense.sum.to_string(),
                reading.sense.count.to_string(),
                reading.sense.min.to_string(),
                reading.sense.max.to_string(),
                reading.cross.sum.to_string(),
                reading.cross.count.to_string(),
                reading.cross.min.to_string(),
                reading.cross.max.to_string(),
                reading.flags.0.to_string(),
                mark.to_owned(),
            ]);
            outcome.is_ok()
        })?;
        outcome?;
    }
    Ok(())
}

fn utc_of(recording: &Recording<'_>, epoch: i64, time_us: u64) -> String {
    cell(recording.epoch(epoch).and_then(|epoch| epoch.clock.utc(time_us)).map(|instant| utc(instant.utc_ns)))
}

fn events(reader: &RunReader, recording: &Recording<'_>, mark: &str, row: Row<'_>) -> Result<(), ExportError> {
    for epoch in reader.epochs()? {
        for event in reader.events(epoch.epoch_key)? {
            row(&[
                epoch.epoch_key.to_string(),
                event.seq.to_string(),
                utc_of(recording, epoch.epoch_key, event.time_us),
                event.time_us.to_string(),
                event_code(&event.kind).to_owned(),
                event_words(&event.kind),
                mark.to_owned(),
            ])?;
        }
    }
    Ok(())
}

fn slow(reader: &RunReader, recording: &Recording<'_>, mark: &str, row: Row<'_>) -> Result<(), ExportError> {
    for epoch in reader.epochs()? {
        for slow in reader.slow(epoch.epoch_key)? {
            row(&[
                epoch.epoch_key.to_string(),
                utc_of(recording, epoch.epoch_key, slow.time_us),
                cell(slow.beam_na),
                fixed(slow.enclosure_centicelsius.map(|c| f64::from(c) * 0.01), 2),
                mark.to_owned(),
            ])?;
        }
    }
    Ok(())
}

fn gaps(reader: &RunReader, mark: &str, row: Row<'_>) -> Result<(), ExportError> {
    for epoch in reader.epochs()? {
        for gap in reader.gaps(epoch.epoch_key)? {
            row(&[
                epoch.epoch_key.to_string(),
                stream_words(gap.stream).to_owned(),
                gap.first.to_string(),
                gap.count.to_string(),
                mark.to_owned(),
            ])?;
        }
    }
    Ok(())
}

fn notes(reader: &RunReader, mark: &str, row: Row<'_>) -> Result<(), ExportError> {
    for note in reader.notes()? {
        row(&[utc(note.utc_ns), note.author, note.text, mark.to_owned()])?;
    }
    Ok(())
}
