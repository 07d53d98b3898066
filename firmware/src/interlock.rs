//! Loops, contactor feedback, reset button and latched trips: whether the permit may be given.
//!
//! A pure state machine: the time that passed and what is seen go in, whether the permit is given comes out. It has no
//! access to messages, so no message can change it. `tests/exploration.rs` visits every state it can reach.
//!
//! # The truth table
//!
//! | permit | loops | mirror contacts | button | what happens |
//! | --- | --- | --- | --- | --- |
//! | given | both open | any | any | withdrawn at once, *loop opened* latched |
//! | given | one open | any | any | withdrawn at once; *loop opened* latched when the other opens within the discrepancy time, else *loops disagree* |
//! | given | both closed | released, longer than the contactor time | any | withdrawn, *contactor dropped* latched |
//! | given | both closed | not released | any | stays, unless a cause is present |
//! | withdrawn | one open, longer than the discrepancy time | any | any | *loops disagree* latched, both loops to be tested again |
//! | withdrawn | any | not released, longer than the contactor time | any | *contactor welded* latched and present |
//! | withdrawn | any open | any | pressed | the press is void |
//! | withdrawn | both closed, each seen open since the withdrawal and the last *loops disagree* | released | pressed, then released within 50 ms to 3 s | all trips cleared, given |
//! | withdrawn | as above, and no certificate is the only cause | released | held 5 to 15 s, then released | given, uncalibrated |
//! | any | any | any | held for 30 s | withdrawn, *button stuck* latched and present |

use ringvolt_protocol::{Contacts, PermitState, Trip, TripSet};

/// A press must last at least this long, microseconds.
pub const PRESS_LEAST_US: u32 = 50_000;
/// A press that lasts longer is void.
pub const PRESS_MOST_US: u32 = 3_000_000;
/// The long press that starts without a certificate lasts at least this long.
pub const LONG_LEAST_US: u32 = 5_000_000;
/// And at most so long.
pub const LONG_MOST_US: u32 = 15_000_000;
/// A button held this long is stuck.
pub const STUCK_US: u32 = 30_000_000;

/// The times of the interlock, microseconds. Settings decide the first two; the others are the constants above, and are
/// values here so that an exploration can visit every state with few ticks between one limit and the next.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
pub struct InterlockTimes {
    /// How long the loops may differ.
    pub discrepancy_us: u32,
    /// How long the contactors may take to follow.
    pub contactor_us: u32,
    /// Shortest and longest press that counts.
    pub press_us: (u32, u32),
    /// Shortest and longest press that starts without a certificate.
    pub long_us: (u32, u32),
    /// A button held this long is stuck.
    pub stuck_us: u32,
}

impl InterlockTimes {
    /// With the times that settings decide.
    pub const fn new(discrepancy_us: u32, contactor_us: u32) -> Self {
        Self {
            discrepancy_us,
            contactor_us,
            press_us: (PRESS_LEAST_US, PRESS_MOST_US),
            long_us: (LONG_LEAST_US, LONG_MOST_US),
            stuck_us: STUCK_US,
        }
    }
}

/// What one loop has shown since the permit was withdrawn.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
enum LoopTest {
    /// Not open yet.
    Untested,
    /// Open now.
    Open,
    /// Open, then closed again.
    Passed,
}

impl LoopTest {
    const fn see(self, closed: bool) -> Self {
        match (self, closed) {
            (_, false) => Self::Open,
            (Self::Untested, true) => Self::Untested,
            (Self::Open | Self::Passed, true) => Self::Passed,
        }
    }
}

/// Where the permit stands.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
enum Phase {
    /// Withdrawn. The button counts only once it was seen released while all was well.
    Withdrawn { armed: bool },
    /// Withdrawn, all is well, and the button is down.
    Pressed,
    /// Given.
    Given { uncalibrated: bool },
}

/// The interlock.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
pub struct Interlock {
    times: InterlockTimes,
    phase: Phase,
    latched: TripSet,
    present: TripSet,
    test_a: LoopTest,
    test_b: LoopTest,
    /// How long the loops have differed; stops at the discrepancy time.
    differ_us: u32,
    /// How long ago one loop alone withdrew the permit, until it is known whether the other follows.
    lone_us: Option<u32>,
    /// How long the contactors have not followed; stops at the contactor time.
    contactor_us: u32,
    /// How long the button is down; stops at the stuck time.
    pressed_us: u32,
    /// How long a press that counts has lasted; stops at the longest that means anything.
    held_us: u32,
}

/// What a step changed.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Changes {
    /// Trips that latched in this step.
    pub latched: TripSet,
    /// Trips that were cleared in this step.
    pub cleared: TripSet,
    /// Whether the permit was given in this step.
    pub given: bool,
    /// Whether it was withdrawn in this step.
    pub withdrawn: bool,
    /// Whether a person started without a certificate in this step.
    pub uncalibrated_start: bool,
}

impl Interlock {
    /// Just powered up: withdrawn, nothing tested.
    pub const fn new(times: InterlockTimes) -> Self {
        Self {
            times,
            phase: Phase::Withdrawn { armed: false },
            latched: TripSet::EMPTY,
            present: TripSet::EMPTY,
            test_a: LoopTest::Untested,
            test_b: LoopTest::Untested,
            differ_us: 0,
            lone_us: None,
            contactor_us: 0,
            pressed_us: 0,
            held_us: 0,
        }
    }

    /// New times from new settings; they are written only while the permit is withdrawn.
    pub const fn set_times(&mut self, times: InterlockTimes) {
        self.times = times;
    }

    /// Whether the permit is given.
    pub const fn is_given(&self) -> bool {
        matches!(self.phase, Phase::Given { .. })
    }

    /// Whether the permit is given without a certificate, by a person's long press.
    pub const fn is_uncalibrated(&self) -> bool {
        matches!(self.phase, Phase::Given { uncalibrated: true })
    }

    /// Latched trips.
    pub const fn latched(&self) -> TripSet {
        self.latched
    }

    /// Causes that are there now.
    pub const fn present(&self) -> TripSet {
        self.present
    }

    /// Latches a trip from outside, at power-up.
    pub fn latch(&mut self, trip: Trip) {
        self.latched.insert(trip);
    }

    /// What a screen shows.
    pub fn permit_state(&self, contacts: Contacts) -> PermitState {
        match self.phase {
            Phase::Given { .. } => PermitState::Given,
            Phase::Pressed => PermitState::AwaitingRelease,
            Phase::Withdrawn { .. } if self.blocking() != TripSet::EMPTY || !both_closed(contacts) => {
                PermitState::Withdrawn
            }
            Phase::Withdrawn { .. } if !self.loops_tested() => PermitState::AwaitingLoopTest,
            Phase::Withdrawn { .. } if !contacts.contactors_released => PermitState::Withdrawn,
            Phase::Withdrawn { .. } => PermitState::AwaitingPress,
        }
    }

    fn loops_tested(&self) -> bool {
        self.test_a == LoopTest::Passed && self.test_b == LoopTest::Passed
    }

    /// Causes that no press can overcome.
    fn blocking(&self) -> TripSet {
        let mut causes = self.present;
        causes.remove(Trip::NoCertificate);
        causes
    }

    /// Lets `elapsed_us` pass, then sees the contacts and the causes that others have found.
    pub fn step(&mut self, elapsed_us: u32, contacts: Contacts, causes: TripSet) -> Changes {
        let was_given = self.is_given();
        let before = self.latched;
        self.pass(elapsed_us, contacts);
        self.see(contacts, causes, was_given);
        let mut changes = self.turn(contacts);
        changes.latched = TripSet(self.latched.0 & !before.0);
        changes.withdrawn = was_given && !self.is_given();
        changes
    }

    /// Timers.
    fn pass(&mut self, elapsed_us: u32, contacts: Contacts) {
        let run = |timer: u32, runs: bool, most: u32| if runs { timer.saturating_add(elapsed_us).min(most) } else { 0 };
        let differ = contacts.loop_a_closed != contacts.loop_b_closed;
        self.differ_us = run(self.differ_us, differ, self.times.discrepancy_us);
        self.lone_us = self.lone_us.map(|lone_us| run(lone_us, true, self.times.discrepancy_us));
        let follows = contacts.contactors_released != self.is_given();
        self.contactor_us = run(self.contactor_us, !follows, self.times.contactor_us);
        self.pressed_us = run(self.pressed_us, contacts.button_pressed, self.times.stuck_us);
        // Time until the release is seen belongs to the press.
        self.held_us = run(self.held_us, self.phase == Phase::Pressed, self.times.long_us.1 + 1);
    }

    /// Loop tests and causes.
    fn see(&mut self, contacts: Contacts, causes: TripSet, was_given: bool) {
        self.test_a = self.test_a.see(contacts.loop_a_closed);
        self.test_b = self.test_b.see(contacts.loop_b_closed);
        let late = self.contactor_us >= self.times.contactor_us;
        let (opened, lone) = self.judge_opening(contacts, was_given);
        let differ = lone || self.differ_us >= self.times.discrepancy_us;
        let mut present = causes;
        let mut add_if = |yes: bool, trip: Trip| {
            if yes {
                present.insert(trip);
            }
        };
        add_if(opened, Trip::LoopOpened);
        add_if(differ, Trip::LoopsDisagree);
        add_if(late && !was_given, Trip::ContactorWelded);
        add_if(late && was_given, Trip::ContactorDropped);
        add_if(self.pressed_us >= self.times.stuck_us, Trip::ButtonStuck);
        if self.is_uncalibrated() {
            present.remove(Trip::NoCertificate);
        }
        // What the loops had shown before they disagreed proves nothing any more.
        if differ && !self.present.contains(Trip::LoopsDisagree) {
            self.restart_loop_test(contacts);
        }
        self.present = present;
        self.latched.0 |= present.0;
    }

    /// Whether the loops opened together, and whether one opened alone. One open loop withdraws the permit at once; which
    /// of the two it was is known when the other follows, or has had the discrepancy time to do so.
    fn judge_opening(&mut self, contacts: Contacts, was_given: bool) -> (bool, bool) {
        if was_given && !both_closed(contacts) {
            self.restart_loop_test(contacts);
            self.lone_us = Some(0);
        }
        let Some(lone_us) = self.lone_us else {
            return (self.latched.contains(Trip::LoopOpened) && !both_closed(contacts), false);
        };
        let opened = self.test_a != LoopTest::Untested && self.test_b != LoopTest::Untested;
        let lone = !opened && lone_us >= self.times.discrepancy_us;
        if opened || lone {
            self.lone_us = None;
        }
        (opened, lone)
    }

    fn restart_loop_test(&mut self, contacts: Contacts) {
        self.test_a = LoopTest::Untested.see(contacts.loop_a_closed);
        self.test_b = LoopTest::Untested.see(contacts.loop_b_closed);
    }

    /// The permit.
    fn turn(&mut self, contacts: Contacts) -> Changes {
        let mut changes = Changes::default();
        match self.phase {
            Phase::Given { .. } => {
                if self.present != TripSet::EMPTY || !both_closed(contacts) {
                    self.withdraw(contacts);
                }
            }
            Phase::Withdrawn { armed } => {
                let ready = self.is_ready(contacts);
                self.phase = match (ready, contacts.button_pressed) {
                    (true, false) => Phase::Withdrawn { armed: true },
                    (true, true) if armed => Phase::Pressed,
                    // Pressed too early: void until it is released again.
                    (_, true) => Phase::Withdrawn { armed: false },
                    (false, false) => Phase::Withdrawn { armed: false },
                };
            }
            Phase::Pressed => changes = self.pressed(contacts),
        }
        changes
    }

    fn pressed(&mut self, contacts: Contacts) -> Changes {
        if !self.is_ready(contacts) {
            self.phase = Phase::Withdrawn { armed: false };
            return Changes::default();
        }
        if contacts.button_pressed {
            return Changes::default();
        }
        let held = self.held_us;
        let short = (self.times.press_us.0..=self.times.press_us.1).contains(&held);
        let long = (self.times.long_us.0..=self.times.long_us.1).contains(&held);
        let calibrated = !self.present.contains(Trip::NoCertificate);
        if (short && calibrated) || (long && !calibrated) {
            let changes =
                Changes { cleared: self.latched, given: true, uncalibrated_start: !calibrated, ..Changes::default() };
            self.latched = TripSet::EMPTY;
            self.present = TripSet::EMPTY;
            self.phase = Phase::Given { uncalibrated: !calibrated };
            self.contactor_us = 0;
            self.lone_us = None;
            return changes;
        }
        self.phase = Phase::Withdrawn { armed: true };
        Changes::default()
    }

    fn is_ready(&self, contacts: Contacts) -> bool {
        both_closed(contacts)
            && self.loops_tested()
            && contacts.contactors_released
            && self.blocking() == TripSet::EMPTY
    }

    fn withdraw(&mut self, contacts: Contacts) {
        self.phase = Phase::Withdrawn { armed: false };
        self.restart_loop_test(contacts);
        self.contactor_us = 0;
    }
}

const fn both_closed(contacts: Contacts) -> bool {
    contacts.loop_a_closed && contacts.loop_b_closed
}
