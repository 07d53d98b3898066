//! Loops and button with bounce; contactors that follow the permit's square wave.

use std::collections::VecDeque;

use rand::RngExt;
use rand_chacha::ChaCha8Rng;

use super::draw::stream;

/// A contact whose changes bounce.
#[derive(Clone, Debug)]
pub(super) struct Contact {
    level: bool,
    changes: VecDeque<(i64, bool)>,
}

impl Contact {
    pub(super) const fn new(level: bool) -> Self {
        Self { level, changes: VecDeque::new() }
    }

    /// The contact moves at this time: it bounces for some milliseconds.
    pub(super) fn move_to(&mut self, level: bool, now_ns: i64, rng: &mut ChaCha8Rng) {
        self.changes.clear();
        let mut at = now_ns;
        self.changes.push_back((at, level));
        for _ in 0..rng.random_range(0..5) {
            at += rng.random_range(30_000..700_000);
            self.changes.push_back((at, !level));
            at += rng.random_range(30_000..400_000);
            self.changes.push_back((at, level));
        }
    }

    /// The change that has happened by `now_ns`, if one has; call again until there is none.
    pub(super) fn change(&mut self, now_ns: i64) -> Option<(i64, bool)> {
        while let Some((at, level)) = self.changes.front().copied().filter(|(at, _)| *at <= now_ns) {
            self.changes.pop_front();
            if level != self.level {
                self.level = level;
                return Some((at, level));
            }
        }
        None
    }

    pub(super) const fn level(&self) -> bool {
        self.level
    }
}

/// Time without an edge after which the charge pump's relay drops, nanoseconds.
const PUMP_DROPS_NS: i64 = 8_000_000;
/// Edges it needs in a row to pull in.
const PUMP_EDGES: u32 = 12;
/// Time a contactor takes to close or to open, nanoseconds.
const CONTACTOR_NS: i64 = 18_000_000;

/// The hard-wired chain: permit relay and both loops in series with the contactors' coils.
#[derive(Clone, Debug, Default)]
pub(super) struct Chain {
    permit: bool,
    edges: u32,
    last_edge_ns: i64,
    closed: bool,
    turn_ns: Option<i64>,
    pub(super) welded: bool,
}

impl Chain {
    /// Lets time pass; tells when the contactors changed.
    pub(super) fn pass(&mut self, now_ns: i64, permit: bool, loops_closed: bool) -> bool {
        if permit != self.permit {
            self.permit = permit;
            self.edges = self.edges.saturating_add(1);
            self.last_edge_ns = now_ns;
        } else if now_ns - self.last_edge_ns > PUMP_DROPS_NS {
            self.edges = 0;
        }
        let driven = (self.edges >= PUMP_EDGES && loops_closed) || (self.welded && self.closed);
        if driven == self.closed {
            self.turn_ns = None;
            return false;
        }
        let since = *self.turn_ns.get_or_insert(now_ns);
        if now_ns - since < CONTACTOR_NS {
            return false;
        }
        self.closed = driven;
        self.turn_ns = None;
        true
    }

    pub(super) const fn is_closed(&self) -> bool {
        self.closed
    }
}

/// Draws for bounces.
pub(super) fn bounces(seed: u64) -> ChaCha8Rng {
    stream(seed, 5)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_contact_ends_where_it_was_moved() {
        let mut rng = bounces(1);
        for level in [true, false, true] {
            let mut contact = Contact::new(!level);
            contact.move_to(level, 1_000, &mut rng);
            let mut changes = 0;
            while contact.change(50_000_000).is_some() {
                changes += 1;
            }
            assert_eq!(contact.level(), level);
            assert!(changes % 2 == 1);
        }
    }

    #[test]
    fn only_a_square_wave_pulls_the_contactors_in() {
        let mut chain = Chain::default();
        let mut closed_at = None;
        for step in 0..400 {
            let wave = step % 2 == 0;
            if chain.pass(step * 500_000, wave, true) {
                closed_at = Some(step);
            }
        }
        assert!(chain.is_closed() && (40..60).contains(&closed_at.unwrap()));
        // A stuck level is no permit.
        for step in 400..500 {
            chain.pass(step * 500_000, true, true);
        }
        assert!(!chain.is_closed());
    }
}
