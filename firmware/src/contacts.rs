//! Input lines after the glitch filter, with the time of the edge that began the new state.

use heapless::Vec;
use ringvolt_protocol::{Contacts, Line};

use crate::io::Edge;

/// A level must last this long to count, microseconds.
pub const GLITCH_US: u64 = 200;
/// A loop that has not been closed for [`GLITCH_US`] in a row within this time chatters, and counts as open, microseconds.
pub const CHATTER_US: u64 = 2_000;

/// One filtered line.
#[derive(Clone, Copy, Debug)]
struct Filter {
    line: Line,
    /// The level that counts.
    active: bool,
    /// The level the pin has shown last, and since when.
    seen: bool,
    since_us: u64,
    /// When the pin last showed the level that counts for long enough.
    steady_us: u64,
}

impl Filter {
    const fn new(line: Line) -> Self {
        Self { line, active: false, seen: false, since_us: 0, steady_us: 0 }
    }

    fn see(&mut self, active: bool, time_us: u64) {
        if self.seen == self.active && time_us.saturating_sub(self.since_us) >= GLITCH_US {
            self.steady_us = time_us;
        }
        if active != self.seen {
            self.seen = active;
            self.since_us = time_us;
        }
    }

    /// The time of the change, if the new level has lasted long enough by `now_us`.
    fn settle(&mut self, now_us: u64) -> Option<u64> {
        let lasted = now_us.saturating_sub(self.since_us) >= GLITCH_US;
        if self.seen != self.active && lasted {
            self.active = self.seen;
            self.steady_us = now_us;
            return Some(self.since_us);
        }
        let is_loop = matches!(self.line, Line::LoopA | Line::LoopB);
        let chatters = is_loop && self.active && now_us.saturating_sub(self.steady_us) >= CHATTER_US;
        chatters.then(|| {
            self.active = false;
            self.steady_us
        })
    }
}

/// A filtered change.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Change {
    /// Which line.
    pub line: Line,
    /// Its new state.
    pub active: bool,
    /// When the pin changed, microseconds.
    pub time_us: u64,
}

/// The filtered lines.
#[derive(Clone, Debug)]
pub struct Lines {
    filters: [Filter; 4],
}

impl Default for Lines {
    fn default() -> Self {
        Self::new()
    }
}

impl Lines {
    /// Everything reads inactive: open, not released, not pressed.
    pub const fn new() -> Self {
        Self {
            filters: [
                Filter::new(Line::LoopA),
                Filter::new(Line::LoopB),
                Filter::new(Line::Contactors),
                Filter::new(Line::Button),
            ],
        }
    }

    /// Takes the edges since the last poll and the levels now; gives the changes that have lasted.
    pub fn update(&mut self, now_us: u64, edges: &[Edge], levels: Contacts) -> Vec<Change, 4> {
        for edge in edges {
            if let Some(filter) = self.filters.iter_mut().find(|filter| filter.line == edge.line) {
                filter.see(edge.active, edge.time_us.min(now_us));
            }
        }
        let sampled = [levels.loop_a_closed, levels.loop_b_closed, levels.contactors_released, levels.button_pressed];
        let mut changes = Vec::new();
        for (filter, level) in self.filters.iter_mut().zip(sampled) {
            // An edge that was missed shows here, with the time of this poll.
            filter.see(level, now_us);
            if let Some(time_us) = filter.settle(now_us) {
                // Four lines, one change each: there is room.
                let _ = changes.push(Change { line: filter.line, active: filter.active, time_us });
            }
        }
        changes
    }

    /// The filtered levels.
    pub const fn contacts(&self) -> Contacts {
        let [a, b, contactors, button] = &self.filters;
        Contacts {
            loop_a_closed: a.active,
            loop_b_closed: b.active,
            contactors_released: contactors.active,
            button_pressed: button.active,
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn levels(loop_a_closed: bool) -> Contacts {
        Contacts { loop_a_closed, ..Contacts::default() }
    }

    fn edge(active: bool, time_us: u64) -> Edge {
        Edge { line: Line::LoopA, active, time_us }
    }

    #[test]
    fn a_level_counts_after_the_glitch_time_and_keeps_the_time_of_its_edge() {
        let mut lines = Lines::new();
        assert!(lines.update(1_000, &[edge(true, 900)], levels(true)).is_empty());
        let changes = lines.update(1_500, &[], levels(true));
        assert_eq!(changes.as_slice(), [Change { line: Line::LoopA, active: true, time_us: 900 }]);
        assert!(lines.contacts().loop_a_closed);
    }

    #[test]
    fn a_glitch_between_polls_is_passed_over() {
        let mut lines = Lines::new();
        lines.update(1_000, &[], levels(true));
        lines.update(1_500, &[], levels(true));
        let glitch = [edge(false, 1_600), edge(true, 1_700)];
        assert!(lines.update(2_000, &glitch, levels(true)).is_empty());
        assert!(lines.update(2_500, &[], levels(true)).is_empty());
    }

    #[test]
    fn a_loop_that_chatters_counts_as_open_until_it_stays_closed() {
        let mut lines = Lines::new();
        lines.update(1_000, &[], levels(true));
        lines.update(1_500, &[], levels(true));
        let mut opened_us = None;
        for now_us in (2_000..8_000).step_by(500) {
            // Open for 100 us in every 250: never a level that lasts.
            let edges = [
                edge(false, now_us - 480),
                edge(true, now_us - 380),
                edge(false, now_us - 230),
                edge(true, now_us - 130),
            ];
            if !lines.update(now_us, &edges, levels(true)).is_empty() {
                opened_us.get_or_insert(now_us);
            }
        }
        assert!(opened_us.is_some_and(|at_us| at_us <= 4_000), "{opened_us:?}");
        assert!(!lines.contacts().loop_a_closed);
        lines.update(8_500, &[], levels(true));
        assert!(lines.contacts().loop_a_closed);
    }

    #[test]
    fn a_glitch_just_before_the_end_of_a_pause_is_no_chatter() {
        let mut lines = Lines::new();
        lines.update(1_000, &[], levels(true));
        lines.update(1_500, &[], levels(true));
        assert!(lines.update(401_500, &[edge(false, 401_300), edge(true, 401_400)], levels(true)).is_empty());
        assert!(lines.update(402_000, &[], levels(true)).is_empty());
    }

    #[test]
    fn a_missed_edge_shows_at_the_poll() {
        let mut lines = Lines::new();
        assert!(lines.update(1_000, &[], levels(true)).is_empty());
        assert_eq!(lines.update(1_500, &[], levels(true))[0].time_us, 1_000);
    }
}
