//! What a live session remembers: the last minutes of the recording, enough to stamp frames as they come.

use std::collections::VecDeque;

use ringvolt_protocol::{Event, Reading, Slow};

use crate::{
    clock::{ClockMap, Exchange, MapLimits},
    reduction::{Epoch, Source, SourceError, is_interlock_change},
};

/// Readings kept: twenty minutes at the default rate.
const READINGS: usize = 120_000;
/// Clock exchanges kept for the live mapping: the window of one knot, to both sides.
const EXCHANGES: usize = 480;
/// Events and slow inputs kept.
const OTHERS: usize = 4_096;

/// The last minutes of the current epoch.
#[derive(Debug, Default)]
pub(super) struct Memory {
    key: i64,
    readings: VecDeque<Reading>,
    events: VecDeque<Event>,
    slow: VecDeque<Slow>,
    exchanges: VecDeque<Exchange>,
    epochs: Vec<Epoch>,
}

fn keep<T>(queue: &mut VecDeque<T>, item: T, most: usize) {
    if queue.len() == most {
        queue.pop_front();
    }
    queue.push_back(item);
}

impl Memory {
    /// A new epoch began: what was remembered belongs to another clock.
    pub(super) fn begin_epoch(&mut self, key: i64) {
        *self = Self { key, epochs: std::mem::take(&mut self.epochs), ..Self::default() };
    }

    pub(super) fn reading(&mut self, reading: Reading) {
        keep(&mut self.readings, reading, READINGS);
    }

    pub(super) fn event(&mut self, event: Event) {
        keep(&mut self.events, event, OTHERS);
    }

    pub(super) fn slow_inputs(&mut self, slow: Slow) {
        keep(&mut self.slow, slow, OTHERS);
    }

    pub(super) fn exchange(&mut self, exchange: Exchange) {
        keep(&mut self.exchanges, exchange, EXCHANGES);
    }

    /// Makes the mapping anew from the exchanges so far.
    pub(super) fn update_clock(&mut self) {
        let exchanges: Vec<Exchange> = self.exchanges.iter().copied().collect();
        let Some(clock) = ClockMap::new(&exchanges, MapLimits::default()) else { return };
        let Some(epoch) = Epoch::new(self.key, clock) else { return };
        self.epochs.retain(|known| known.key != epoch.key);
        self.epochs.push(epoch);
    }

    /// The current epoch, once its clock is known.
    pub(super) fn epoch(&self) -> Option<&Epoch> {
        self.epochs.last().filter(|epoch| epoch.key == self.key)
    }

    /// The newest reading.
    pub(super) fn newest(&self) -> Option<&Reading> {
        self.readings.back()
    }

    /// The newest slow inputs.
    pub(super) fn newest_slow(&self) -> Option<&Slow> {
        self.slow.back()
    }

    /// The last `count` readings, oldest first.
    pub(super) fn last_readings(&self, count: usize) -> impl Iterator<Item = &Reading> {
        self.readings.range(self.readings.len().saturating_sub(count)..)
    }

    fn ours<T: Clone>(
        &self,
        epoch: i64,
        queue: &VecDeque<T>,
        time: impl Fn(&T) -> u64,
        from: u64,
        until: u64,
    ) -> Vec<T> {
        if epoch != self.key {
            return Vec::new();
        }
        let start = queue.partition_point(|item| time(item) < from);
        let end = queue.partition_point(|item| time(item) <= until);
        queue.range(start..end.max(start)).cloned().collect()
    }
}

impl Source for Memory {
    fn epochs(&self) -> &[Epoch] {
        &self.epochs
    }

    fn readings(&self, epoch: i64, from_us: u64, until_us: u64) -> Result<Vec<Reading>, SourceError> {
        // A reading that began before touches the stretch as well.
        Ok(self.ours(epoch, &self.readings, |reading| reading.time_us, from_us.saturating_sub(50_000), until_us))
    }

    fn interlock_us(&self, epoch: i64, from_us: u64, until_us: u64) -> Result<Vec<u64>, SourceError> {
        let events = self.ours(epoch, &self.events, |event| event.time_us, from_us, until_us);
        Ok(events.into_iter().filter(|event| is_interlock_change(&event.kind)).map(|event| event.time_us).collect())
    }

    fn slow(&self, epoch: i64, from_us: u64, until_us: u64) -> Result<Vec<Slow>, SourceError> {
        Ok(self.ours(epoch, &self.slow, |slow| slow.time_us, from_us, until_us))
    }
}
