//! Contacts that bounce: interlock loops, mirror contacts, the button.

use std::collections::VecDeque;

use rand::RngExt;
use rand_chacha::ChaCha8Rng;
use ringvolt_protocol::Line;

/// One contact as the controller's pin sees it.
#[derive(Clone, Debug)]
pub struct Contact {
    line: Line,
    /// Longest bounce, nanoseconds.
    bounce_ns: i64,
    rng: ChaCha8Rng,
    active: bool,
    pending: VecDeque<(i64, bool)>,
}

impl Contact {
    /// A contact at rest.
    pub(super) fn new(line: Line, active: bool, bounce_ns: i64, rng: ChaCha8Rng) -> Self {
        Self { line, bounce_ns, rng, active, pending: VecDeque::new() }
    }

    /// Which line.
    pub const fn line(&self) -> Line {
        self.line
    }

    /// The level at the last time that was asked for.
    pub const fn is_active(&self) -> bool {
        self.active
    }

    /// Moves the contact: it touches and parts a few times before it rests.
    pub(super) fn change(&mut self, now_ns: i64, active: bool) {
        // What was still bouncing from before is cut short.
        self.pending.retain(|(time, _)| *time <= now_ns);
        let resting = self.pending.back().map_or(self.active, |(_, level)| *level);
        if resting == active {
            return;
        }
        self.pending.push_back((now_ns, active));
        let bounces = self.rng.random_range(1..6);
        let mut times: Vec<i64> = (0..2 * bounces).map(|_| now_ns + self.rng.random_range(1..self.bounce_ns)).collect();
        times.sort_unstable();
        times.dedup();
        if times.len() % 2 == 1 {
            times.pop();
        }
        for (index, time) in times.into_iter().enumerate() {
            self.pending.push_back((time, (index % 2 == 1) == active));
        }
    }

    /// Takes the next edge up to `until_ns`.
    pub(super) fn next_edge(&mut self, until_ns: i64) -> Option<(i64, bool)> {
        let edge = *self.pending.front().filter(|(time, _)| *time <= until_ns)?;
        self.pending.pop_front();
        self.active = edge.1;
        Some(edge)
    }
}

#[cfg(test)]
mod tests {
    use rand::SeedableRng;

    use super::*;

    fn edges(contact: &mut Contact) -> Vec<(i64, bool)> {
        std::iter::from_fn(|| contact.next_edge(i64::MAX)).collect()
    }

    #[test]
    fn a_contact_bounces_and_comes_to_rest() {
        let mut contact = Contact::new(Line::LoopA, true, 3_000_000, ChaCha8Rng::seed_from_u64(2));
        for (round, active) in [false, true, false, true].into_iter().enumerate() {
            let at = round as i64 * 1_000_000_000;
            contact.change(at, active);
            let edges = edges(&mut contact);
            assert!(edges.len() >= 3 && edges.len() % 2 == 1, "{edges:?}");
            assert_eq!(edges[0], (at, active));
            assert!(edges.windows(2).all(|two| two[0].0 < two[1].0 && two[0].1 != two[1].1), "{edges:?}");
            assert!(edges.last().unwrap().0 < at + 3_000_000);
            assert_eq!(contact.is_active(), active);
        }
    }

    #[test]
    fn moving_it_where_it_is_changes_nothing() {
        let mut contact = Contact::new(Line::Button, false, 3_000_000, ChaCha8Rng::seed_from_u64(2));
        contact.change(5, false);
        assert!(edges(&mut contact).is_empty());
    }

    #[test]
    fn a_change_cuts_a_bounce_short() {
        let mut contact = Contact::new(Line::LoopB, true, 3_000_000, ChaCha8Rng::seed_from_u64(4));
        contact.change(0, false);
        contact.change(1, true);
        let edges = edges(&mut contact);
        assert_eq!(edges[..2], [(0, false), (1, true)]);
        assert!(contact.is_active());
    }
}
