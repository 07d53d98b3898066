//! What `run` shows: JSON objects line by line, or plain lines at a terminal.

use std::io::{self, Write};

use serde_json::{Value, json};

use crate::{
    run::rows::{FrameRow, StampRow},
    session::{Now, Observer, Update},
    text::{hex, utc},
    words::event_words,
};

/// One JSON object per line, for programs and logs.
///
/// A reader that goes away is no reason to stop recording: output then goes nowhere.
pub struct JsonLines {
    figures: u32,
}

impl JsonLines {
    /// Ready to write.
    pub const fn new() -> Self {
        Self { figures: 0 }
    }
}

impl Default for JsonLines {
    fn default() -> Self {
        Self::new()
    }
}

impl Observer for JsonLines {
    fn update(&mut self, update: &Update) {
        // Figures come ten times a second; twice is enough for a log.
        if matches!(update, Update::Now(_)) {
            self.figures += 1;
            if !self.figures.is_multiple_of(5) {
                return;
            }
        }
        let _ = writeln!(io::stdout(), "{}", as_json(update));
    }
}

fn as_json(update: &Update) -> Value {
    match update {
        Update::Connecting { link } => json!({"kind": "connecting", "link": link}),
        Update::Connected { hello, resumed } => json!({
            "kind": "connected",
            "device": hex(&hello.device),
            "simulated": hello.kind == ringvolt_protocol::DeviceKind::Simulated,
            "firmware": format!("{}.{}.{}", hello.firmware[0], hello.firmware[1], hello.firmware[2]),
            "epoch": hello.epoch,
            "certificate": hex(&hello.certificate.0),
            "resumed": resumed,
        }),
        Update::LinkLost { why } => json!({"kind": "link-lost", "why": why}),
        Update::Event(event) => json!({"kind": "event", "time_us": event.time_us, "what": event_words(&event.kind)}),
        Update::Gap(gap) => json!({
            "kind": "gap", "stream": format!("{:?}", gap.stream).to_lowercase(), "first": gap.first, "count": gap.count,
        }),
        Update::Now(now) => now_json(now),
        Update::Frame(frame) => json!({"kind": "frame", "frame": frame.frame, "file": frame.file}),
        Update::Stamped { frame, stamp } => stamp_json(frame, stamp),
        Update::Notice(text) => json!({"kind": "notice", "text": text}),
    }
}

fn now_json(now: &Now) -> Value {
    json!({
        "kind": "now",
        "utc": utc(now.utc_ns),
        "volts": now.volts,
        "volts_u": now.volts_u,
        "why_none": now.why_none,
        "wavelength_pm": now.wavelength_pm,
        "slope_volts_per_second": now.slope_volts_per_second,
        "ripple_volts": now.ripple_volts,
        "difference_volts": now.difference_volts,
        "age_seconds": now.age_seconds,
        "clock_bound_ms": now.clock_bound_ms,
        "readings": now.readings,
        "lost": now.lost,
        "permit": now.status.map(|status| format!("{:?}", status.permit)),
    })
}

fn stamp_json(frame: &FrameRow, stamp: &StampRow) -> Value {
    let exposure = frame.exposure.as_ref().ok();
    json!({
        "kind": "stamp",
        "frame": stamp.frame,
        "start_utc": exposure.map(|exposure| utc(exposure.start_utc_ns)),
        "end_utc": exposure.map(|exposure| utc(exposure.end_utc_ns)),
        "volts": stamp.value.map(|value| value.volts),
        "volts_u": stamp.value.map(|value| value.volts_u),
        "wavelength_pm": stamp.value.map(|value| value.wavelength_pm),
        "wavelength_u_pm": stamp.value.map(|value| value.wavelength_u_pm),
        "verdict": stamp.verdict,
        "reasons": stamp.reasons,
    })
}

/// Plain lines for a person.
pub struct Plain {
    figures: u32,
}

impl Plain {
    /// Ready to write.
    pub const fn new() -> Self {
        Self { figures: 0 }
    }
}

impl Default for Plain {
    fn default() -> Self {
        Self::new()
    }
}

impl Observer for Plain {
    fn update(&mut self, update: &Update) {
        let line = match update {
            Update::Connecting { link } => format!("waiting for the controller on {link}"),
            Update::Connected { hello, resumed } => {
                let simulated = if hello.kind == ringvolt_protocol::DeviceKind::Simulated { " SIMULATED" } else { "" };
                let again = if *resumed { " again" } else { "" };
                format!("controller {}{simulated} answered{again}", hex(&hello.device))
            }
            Update::LinkLost { why } => format!("link lost: {why}; recording goes on when it is back"),
            Update::Event(event) => event_words(&event.kind),
            Update::Gap(gap) => format!("{} readings were lost in the controller's journal", gap.count),
            Update::Now(now) => {
                self.figures += 1;
                if !self.figures.is_multiple_of(10) {
                    return;
                }
                figures_line(now)
            }
            Update::Frame(_) => return,
            Update::Stamped { stamp, .. } => stamp_line(stamp),
            Update::Notice(text) => text.clone(),
        };
        let _ = writeln!(io::stdout(), "{line}");
    }
}

fn figures_line(now: &Now) -> String {
    match (now.volts, now.volts_u) {
        (Some(volts), Some(u)) => {
            let wavelength = now.wavelength_pm.map_or(String::new(), |pm| format!("   {pm:.4} pm"));
            format!("{volts:10.2} V  ±{:.2} V (k=2){wavelength}   {} readings", 2.0 * u, now.readings)
        }
        _ => format!("no number: {}", now.why_none.unwrap_or("unknown")),
    }
}

fn stamp_line(stamp: &StampRow) -> String {
    match stamp.value {
        Some(value) => format!(
            "{:<12} {:<8} {:.2} V ±{:.2} V (k=2)   {:.4} pm  {}",
            stamp.frame,
            stamp.verdict,
            value.volts,
            2.0 * value.volts_u,
            value.wavelength_pm,
            stamp.reasons
        ),
        None => format!("{:<12} {:<8} {}", stamp.frame, stamp.verdict, stamp.reasons),
    }
}
