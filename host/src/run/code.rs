//! Stable words for what is stored as text.

use ringvolt_protocol::{EventKind, Stream};

/// The word for an event's kind. Never change one: exports carry them.
pub fn event_code(kind: &EventKind) -> &'static str {
    match kind {
        EventKind::Started { .. } => "started",
        EventKind::Line { .. } => "line",
        EventKind::PermitGiven => "permit-given",
        EventKind::PermitWithdrawn => "permit-withdrawn",
        EventKind::Tripped { .. } => "tripped",
        EventKind::Cleared { .. } => "cleared",
        EventKind::UncalibratedStart => "uncalibrated-start",
        EventKind::HostLost => "host-lost",
        EventKind::HostBack => "host-back",
        EventKind::CertificateStored { .. } => "certificate-stored",
        EventKind::SettingsStored => "settings-stored",
        EventKind::ConfigurationRepaired { .. } => "configuration-repaired",
        EventKind::BusRecovered { .. } => "bus-recovered",
        EventKind::LampStarted { .. } => "lamp-started",
        EventKind::LampStopped => "lamp-stopped",
        EventKind::LateLoop { .. } => "late-loop",
        // A kind of a newer protocol; its detail is stored all the same.
        _ => "other",
    }
}

/// The word for a stream.
pub(super) fn stream_code(stream: Stream) -> &'static str {
    match stream {
        Stream::Readings => "readings",
        Stream::Events => "events",
        Stream::Slow => "slow",
        Stream::Strobes => "strobes",
        _ => "other",
    }
}

/// The stream of a word.
pub(super) fn stream_of(code: &str) -> Option<Stream> {
    [Stream::Readings, Stream::Events, Stream::Slow, Stream::Strobes].into_iter().find(|s| stream_code(*s) == code)
}
