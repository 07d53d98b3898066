//! A run file as a source of stamps.

use std::collections::HashMap;

use ringvolt_protocol::{Event, Reading, Slow};

use super::{Epoch, Source, SourceError, is_interlock_change};
use crate::{
    clock::{ClockMap, Exchange, MapLimits},
    run::{RunError, RunReader},
};

/// The recording in a run file: clocks, events and slow inputs in memory, readings as they are asked for.
pub struct Recording<'a> {
    reader: &'a RunReader,
    epochs: Vec<Epoch>,
    events: HashMap<i64, Vec<Event>>,
    slow: HashMap<i64, Vec<Slow>>,
}

impl<'a> Recording<'a> {
    /// Ties every epoch's clock.
    ///
    /// # Errors
    /// When the file cannot be read.
    pub fn open(reader: &'a RunReader) -> Result<Self, RunError> {
        let mut recording = Self { reader, epochs: Vec::new(), events: HashMap::new(), slow: HashMap::new() };
        for row in reader.epochs()? {
            let key = row.epoch_key;
            let exchanges: Vec<Exchange> = reader
                .echoes(key)?
                .into_iter()
                .map(|echo| Exchange {
                    asked_mono_ns: echo.asked_mono_ns,
                    answered_mono_ns: echo.answered_mono_ns,
                    received_us: echo.received_us,
                    sent_us: echo.sent_us,
                    utc_less_mono_ns: echo.utc_minus_mono_ns,
                })
                .collect();
            let clock = ClockMap::new(&exchanges, MapLimits::default());
            recording.epochs.extend(clock.and_then(|clock| Epoch::new(key, clock)));
            recording.events.insert(key, reader.events(key)?);
            recording.slow.insert(key, reader.slow(key)?);
        }
        recording.epochs.sort_by_key(|epoch| epoch.zero_utc_ns);
        Ok(recording)
    }

    /// The epoch with this key, where its clock could be tied.
    pub fn epoch(&self, key: i64) -> Option<&Epoch> {
        self.epochs.iter().find(|epoch| epoch.key == key)
    }
}

impl Source for Recording<'_> {
    fn epochs(&self) -> &[Epoch] {
        &self.epochs
    }

    fn readings(&self, epoch: i64, from_us: u64, until_us: u64) -> Result<Vec<Reading>, SourceError> {
        self.reader.readings(epoch, from_us, until_us).map_err(|error| SourceError(error.to_string()))
    }

    fn interlock_us(&self, epoch: i64, from_us: u64, until_us: u64) -> Result<Vec<u64>, SourceError> {
        let events = self.events.get(&epoch).map(Vec::as_slice).unwrap_or_default();
        let inside = events.iter().filter(|event| (from_us..=until_us).contains(&event.time_us));
        Ok(inside.filter(|event| is_interlock_change(&event.kind)).map(|event| event.time_us).collect())
    }

    fn slow(&self, epoch: i64, from_us: u64, until_us: u64) -> Result<Vec<Slow>, SourceError> {
        let slow = self.slow.get(&epoch).map(Vec::as_slice).unwrap_or_default();
        let from = slow.partition_point(|slow| slow.time_us < from_us);
        let until = slow.partition_point(|slow| slow.time_us <= until_us);
        Ok(slow[from..until.max(from)].to_vec())
    }
}
