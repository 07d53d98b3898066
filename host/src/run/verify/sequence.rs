//! Nothing missing: numbers without a hole in every stream, windows without a hole in time.

use ringvolt_protocol::{Gap, Stream};

use super::Finding;
use crate::run::{RunError, RunReader, rows::EpochRow, schema::SEQ_BITS};

/// Windows that begin this close to the end of the one before touch it: both are whole microseconds.
const TOUCH_US: u64 = 2;

/// Holes that are told one by one; the rest are counted.
const TOLD: usize = 8;

/// What one stream of one epoch looks like.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub(super) struct Continuity {
    /// Entries in the file.
    pub present: u64,
    /// Stretches of numbers that are neither in the file nor in a counted gap: first number, how many.
    pub unexplained: Vec<(u32, u32)>,
    /// Numbers in counted gaps that are not in the file.
    pub counted: u64,
}

pub(super) fn check(reader: &RunReader) -> Result<Vec<Finding>, RunError> {
    let mut findings = Vec::new();
    let epochs = reader.epochs()?;
    if epochs.is_empty() {
        findings.push(Finding::note("sequence", "no controller was ever heard: there is nothing to check"));
    }
    for epoch in &epochs {
        let gaps = reader.gaps(epoch.epoch_key)?;
        for stream in [Stream::Readings, Stream::Events, Stream::Slow, Stream::Strobes] {
            let continuity = continuity(reader, epoch, stream, &gaps)?;
            findings.extend(told(epoch.epoch_key, stream, &continuity));
        }
        findings.push(time(reader, epoch.epoch_key)?);
    }
    Ok(findings)
}

const fn table(stream: Stream) -> (&'static str, &'static str) {
    match stream {
        Stream::Readings => ("readings", "SELECT id FROM reading WHERE id >= ?1 AND id < ?2 ORDER BY id"),
        Stream::Events => ("events", "SELECT id FROM event WHERE id >= ?1 AND id < ?2 ORDER BY id"),
        Stream::Slow => ("slow inputs", "SELECT id FROM slow WHERE id >= ?1 AND id < ?2 ORDER BY id"),
        _ => ("strobe edges", "SELECT id FROM strobe WHERE id >= ?1 AND id < ?2 ORDER BY id"),
    }
}

fn continuity(reader: &RunReader, epoch: &EpochRow, stream: Stream, gaps: &[Gap]) -> Result<Continuity, RunError> {
    let (first, next) = (epoch.hello.first, epoch.hello.next);
    let (first, next) = match stream {
        Stream::Readings => (first.readings, next.readings),
        Stream::Events => (first.events, next.events),
        Stream::Slow => (first.slow, next.slow),
        _ => (first.strobes, next.strobes),
    };
    let mut holes = Vec::new();
    let mut expected = i64::from(first);
    let mut present = 0;
    reader.read(|c| {
        let mut statement = c.prepare_cached(table(stream).1)?;
        let mut rows = statement.query([epoch.epoch_key << SEQ_BITS, (epoch.epoch_key + 1) << SEQ_BITS])?;
        while let Some(row) = rows.next()? {
            let seq = row.get::<_, i64>(0)? & i64::from(u32::MAX);
            if seq > expected {
                holes.push((expected, seq));
            }
            expected = expected.max(seq + 1);
            present += 1;
        }
        Ok(())
    })?;
    // What the controller held at its hello must have come, unless the link ended before.
    if i64::from(next) > expected && present > 0 {
        holes.push((expected, i64::from(next)));
    }
    let gaps: Vec<(i64, i64)> = gaps
        .iter()
        .filter(|gap| gap.stream == stream)
        .map(|gap| (i64::from(gap.first), i64::from(gap.first) + i64::from(gap.count)))
        .collect();
    let mut continuity = Continuity { present, ..Continuity::default() };
    for hole in holes {
        let before = continuity.unexplained.iter().map(|(_, count)| u64::from(*count)).sum::<u64>();
        explain(hole, &gaps, &mut continuity.unexplained);
        let after = continuity.unexplained.iter().map(|(_, count)| u64::from(*count)).sum::<u64>();
        continuity.counted += (hole.1 - hole.0).unsigned_abs() - (after - before);
    }
    Ok(continuity)
}

/// What of a hole lies in no gap.
fn explain(hole: (i64, i64), gaps: &[(i64, i64)], unexplained: &mut Vec<(u32, u32)>) {
    let mut inside: Vec<(i64, i64)> =
        gaps.iter().copied().filter(|(from, until)| *until > hole.0 && *from < hole.1).collect();
    inside.sort_unstable();
    let mut at = hole.0;
    let mut add = |from: i64, until: i64| {
        if let (Ok(first), Ok(count)) = (u32::try_from(from), u32::try_from(until - from))
            && count > 0
        {
            unexplained.push((first, count));
        }
    };
    for (from, until) in inside {
        add(at, from.max(at).min(hole.1));
        at = at.max(until);
    }
    add(at.min(hole.1), hole.1);
}

fn told(epoch: i64, stream: Stream, continuity: &Continuity) -> Option<Finding> {
    let name = table(stream).0;
    let Continuity { present, unexplained, counted } = continuity;
    if !unexplained.is_empty() {
        let lost: u64 = unexplained.iter().map(|(_, count)| u64::from(*count)).sum();
        let places: Vec<String> = unexplained
            .iter()
            .take(TOLD)
            .map(|(first, count)| match count {
                1 => first.to_string(),
                _ => format!("{first} to {}", u64::from(*first) + u64::from(*count) - 1),
            })
            .collect();
        let more = if unexplained.len() > TOLD { " and more" } else { "" };
        let sentence = format!(
            "epoch {epoch}: {lost} {name} are missing and in no counted gap (numbers {}{more}): frames exposed then cannot be trusted, all others can",
            places.join(", ")
        );
        return Some(Finding::fault("sequence", sentence));
    }
    if *counted > 0 {
        let sentence = format!(
            "epoch {epoch}: {present} {name}; {counted} more were lost in counted gaps, which is known and judged in every stamp"
        );
        return Some(Finding::note("sequence", sentence));
    }
    (*present > 0).then(|| Finding::fine("sequence", format!("epoch {epoch}: {present} {name}, none missing")))
}

/// Silence has no sequence numbers: windows must also touch in time.
fn time(reader: &RunReader, epoch: i64) -> Result<Finding, RunError> {
    const SUBJECT: &str = "coverage";
    let mut before: Option<(u32, u64)> = None;
    let (mut holes, mut silent_us, mut backwards, mut impossible) = (0_u64, 0_u64, 0_u64, 0_u64);
    let (mut first_us, mut covered_us) = (None, 0_u64);
    reader.each_reading(epoch, |reading| {
        if let Some((seq, end_us)) = before.filter(|(seq, _)| reading.seq == seq.wrapping_add(1)) {
            let _ = seq;
            if reading.time_us > end_us + TOUCH_US {
                holes += 1;
                silent_us += reading.time_us - end_us;
            }
            backwards += u64::from(reading.time_us + TOUCH_US < end_us);
        }
        let in_range = |codes: &ringvolt_protocol::WindowCodes| {
            let count = i64::from(codes.count);
            let (low, high) = (i64::from(codes.min) * count, i64::from(codes.max) * count);
            count == 0 || (low..=high).contains(&i64::from(codes.sum))
        };
        impossible += u64::from(!in_range(&reading.sense) || !in_range(&reading.cross));
        first_us.get_or_insert(reading.time_us);
        covered_us += u64::from(reading.duration_us);
        before = Some((reading.seq, reading.time_us.saturating_add(u64::from(reading.duration_us))));
        true
    })?;
    let seconds = |us: u64| us as f64 * 1e-6;
    if impossible > 0 {
        return Ok(Finding::fault(
            SUBJECT,
            format!("epoch {epoch}: in {impossible} readings the mean lies outside the extremes: codes were changed"),
        ));
    }
    if backwards > 0 {
        return Ok(Finding::fault(
            SUBJECT,
            format!("epoch {epoch}: {backwards} windows begin before the one before ended: times were changed"),
        ));
    }
    if holes > 0 {
        return Ok(Finding::note(
            SUBJECT,
            format!(
                "epoch {epoch}: {holes} pauses of {:.3} s in all between windows, which every stamp takes into account",
                seconds(silent_us)
            ),
        ));
    }
    Ok(Finding::fine(SUBJECT, format!("epoch {epoch}: windows cover {:.2} s without a pause", seconds(covered_us))))
}
