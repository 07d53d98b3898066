//! Sentences for people about what the controller says, in one place for screens, tables and reports.

use ringvolt_protocol::{EventKind, Line, ResetCause, Stream};

/// One event as a sentence.
pub fn event_words(kind: &EventKind) -> String {
    match kind {
        EventKind::Started { cause } => format!("The controller started after {}.", cause_words(*cause)),
        EventKind::Line { line, active } => line_words(*line, *active).to_owned(),
        EventKind::PermitGiven => "The permit was given.".to_owned(),
        EventKind::PermitWithdrawn => "The permit was withdrawn.".to_owned(),
        EventKind::Tripped { trip, .. } => format!("Trip: {}", trip.row().sentence),
        EventKind::Cleared { trip } => format!("Cleared by the reset button: {}.", trip.row().code),
        EventKind::UncalibratedStart => "A person started the controller uncalibrated.".to_owned(),
        EventKind::HostLost => "The computer was not heard any more.".to_owned(),
        EventKind::HostBack => "The computer was heard.".to_owned(),
        EventKind::CertificateStored { .. } => "A certificate was stored.".to_owned(),
        EventKind::SettingsStored => "Settings were stored.".to_owned(),
        EventKind::ConfigurationRepaired { cross } => {
            format!("The {} had to be configured again.", converter(*cross))
        }
        EventKind::BusRecovered { cross, freed } => {
            let outcome = if *freed { "and is free" } else { "but stays held" };
            format!("The bus of the {} was held; it was clocked {outcome}.", converter(*cross))
        }
        EventKind::LampStarted { chip_us } => format!("The sync lamp started with chips of {chip_us} us."),
        EventKind::LampStopped => "The sync lamp stopped.".to_owned(),
        EventKind::LateLoop { pause_us } => format!("The controller paused for {pause_us} us."),
        // A kind of a newer firmware.
        other => format!("{other:?}."),
    }
}

const fn converter(cross: bool) -> &'static str {
    if cross { "second converter" } else { "main converter" }
}

/// Why a controller had stopped.
pub const fn cause_words(cause: ResetCause) -> &'static str {
    match cause {
        ResetCause::PowerOn => "power-up",
        ResetCause::External => "an external reset",
        ResetCause::Watchdog => "its watchdog found it dead",
        ResetCause::Panic => "it stopped itself",
        _ => "an unknown cause",
    }
}

const fn line_words(line: Line, active: bool) -> &'static str {
    match (line, active) {
        (Line::LoopA, true) => "Loop A closed.",
        (Line::LoopA, false) => "Loop A opened.",
        (Line::LoopB, true) => "Loop B closed.",
        (Line::LoopB, false) => "Loop B opened.",
        (Line::Contactors, true) => "Both contactors released.",
        (Line::Contactors, false) => "A contactor pulled in.",
        (Line::Button, true) => "The reset button was pressed.",
        (Line::Button, false) => "The reset button was released.",
        (Line::Strobe, true) => "An exposure began.",
        (Line::Strobe, false) => "An exposure ended.",
        (Line::Comparator, true) => "The over-voltage comparator tripped.",
        (Line::Comparator, false) => "The over-voltage comparator is back.",
        _ => "An input changed.",
    }
}

/// A journaled stream.
pub const fn stream_words(stream: Stream) -> &'static str {
    match stream {
        Stream::Readings => "readings",
        Stream::Events => "events",
        Stream::Slow => "slow inputs",
        Stream::Strobes => "strobe edges",
        _ => "entries",
    }
}
