//! Visits every state that the interlock can reach, under every combination of contacts and causes, and checks in each
//! what must never fail.
//!
//! It is the interlock itself that steps, with its limits moved so close together that a tick decides between one and the
//! next: with ticks of one microsecond every order of events in time occurs, and both sides of each limit. A monitor beside
//! it remembers only what the wires have shown, and says from that alone when the permit may be given.

use std::{
    collections::HashSet,
    hash::{BuildHasherDefault, Hash, Hasher},
};

use ringvolt_firmware::interlock::{Changes, Interlock, InterlockTimes};
use ringvolt_protocol::{Contacts, Trip, TripSet};

const TIMES: InterlockTimes =
    InterlockTimes { discrepancy_us: 2, contactor_us: 2, press_us: (1, 2), long_us: (4, 5), stuck_us: 7 };
/// A tick, and a pause of the main loop longer than every limit.
const STEPS: [u32; 2] = [1, 9];

/// Multiplies and rotates: the states are many, and nobody chooses them to collide.
#[derive(Default)]
struct Mixer(u64);

impl Hasher for Mixer {
    fn write(&mut self, bytes: &[u8]) {
        bytes.iter().for_each(|byte| self.write_u64(u64::from(*byte)));
    }
    fn write_u8(&mut self, value: u8) {
        self.write_u64(u64::from(value));
    }
    fn write_u32(&mut self, value: u32) {
        self.write_u64(u64::from(value));
    }
    fn write_u64(&mut self, value: u64) {
        self.0 = (self.0.rotate_left(5) ^ value).wrapping_mul(0x517c_c1b7_2722_0a95);
    }
    fn write_isize(&mut self, value: isize) {
        self.write_u64(value as u64);
    }
    fn finish(&self) -> u64 {
        self.0
    }
}

type Visited = HashSet<(Interlock, Monitor), BuildHasherDefault<Mixer>>;

/// What one loop's wire has shown since the permit was withdrawn, or since the loops disagreed.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Hash)]
struct Shown {
    opened: bool,
    closed_after: bool,
}

impl Shown {
    fn see(&mut self, closed: bool) {
        self.closed_after = closed && self.opened;
        self.opened |= !closed;
    }
}

/// Remembers the wires; knows nothing of the machine but whether the permit was given and a disagreement was told.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Hash)]
struct Monitor {
    a: Shown,
    b: Shown,
    /// The button was seen up while all was well, and all has been well since.
    armed: bool,
    /// How long the button has been down since then.
    press: Option<u32>,
    /// How long the button is down at all, the loops differ, the contactors have not followed: up to their limits.
    down: u32,
    differ: u32,
    unfollowed: u32,
    /// How long ago the permit was withdrawn by one loop alone, until a cause is latched.
    unexplained: Option<u32>,
}

/// What the monitor allows in one step.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Allowed {
    Nothing,
    Start,
    UncalibratedStart,
}

fn run(timer: u32, runs: bool, elapsed: u32, most: u32) -> u32 {
    if runs { (timer + elapsed).min(most) } else { 0 }
}

fn both_closed(contacts: Contacts) -> bool {
    contacts.loop_a_closed && contacts.loop_b_closed
}

impl Monitor {
    /// Before the interlock steps: time and timers.
    fn pass(&mut self, elapsed: u32, contacts: Contacts, given: bool) {
        self.down = run(self.down, contacts.button_pressed, elapsed, TIMES.stuck_us);
        let differ = contacts.loop_a_closed != contacts.loop_b_closed;
        self.differ = run(self.differ, differ, elapsed, TIMES.discrepancy_us);
        let follows = contacts.contactors_released != given;
        self.unfollowed = run(self.unfollowed, !follows, elapsed, TIMES.contactor_us);
        self.press = self.press.map(|press| run(press, true, elapsed, TIMES.long_us.1 + 1));
        self.unexplained = self.unexplained.map(|since| run(since, true, elapsed, TIMES.discrepancy_us));
    }

    /// While the permit is withdrawn: what this step may do.
    fn judge(&mut self, contacts: Contacts, causes: TripSet, disagreed: bool) -> Allowed {
        self.a.see(contacts.loop_a_closed);
        self.b.see(contacts.loop_b_closed);
        if disagreed {
            (self.a, self.b) = (Shown::default(), Shown::default());
            self.a.see(contacts.loop_a_closed);
            self.b.see(contacts.loop_b_closed);
        }
        let mut others = causes;
        others.remove(Trip::NoCertificate);
        let well = both_closed(contacts)
            && self.a.closed_after
            && self.b.closed_after
            && contacts.contactors_released
            && others == TripSet::EMPTY
            && self.down < TIMES.stuck_us;
        if !well {
            (self.armed, self.press) = (false, None);
            return Allowed::Nothing;
        }
        if contacts.button_pressed {
            if self.armed && self.press.is_none() {
                self.press = Some(0);
            }
            return Allowed::Nothing;
        }
        self.armed = true;
        match self.press.take() {
            Some(press) if causes.contains(Trip::NoCertificate) => {
                let long = (TIMES.long_us.0..=TIMES.long_us.1).contains(&press);
                if long { Allowed::UncalibratedStart } else { Allowed::Nothing }
            }
            Some(press) if (TIMES.press_us.0..=TIMES.press_us.1).contains(&press) => Allowed::Start,
            _ => Allowed::Nothing,
        }
    }
}

fn all_contacts() -> impl Iterator<Item = Contacts> {
    (0..16u8).map(|bits| Contacts {
        loop_a_closed: bits & 1 != 0,
        loop_b_closed: bits & 2 != 0,
        contactors_released: bits & 4 != 0,
        button_pressed: bits & 8 != 0,
    })
}

fn set(trips: &[Trip]) -> TripSet {
    trips.iter().fold(TripSet::EMPTY, |mut set, trip| {
        set.insert(*trip);
        set
    })
}

/// One step of both, with everything checked that must never fail.
fn step(state: &(Interlock, Monitor), elapsed: u32, contacts: Contacts, causes: TripSet) -> (Interlock, Monitor) {
    let (mut interlock, mut monitor) = *state;
    let before = interlock;
    let given_before = before.is_given();
    monitor.pass(elapsed, contacts, given_before);
    let changes = interlock.step(elapsed, contacts, causes);
    let told = |trip| interlock.latched().contains(trip);
    let disagreed = changes.latched.contains(Trip::LoopsDisagree)
        || (interlock.present().contains(Trip::LoopsDisagree) && !before.present().contains(Trip::LoopsDisagree));
    if given_before {
        check_given(&before, &interlock, &monitor, contacts, causes);
        if !interlock.is_given() {
            monitor = Monitor { down: monitor.down, differ: monitor.differ, ..Monitor::default() };
            monitor.a.see(contacts.loop_a_closed);
            monitor.b.see(contacts.loop_b_closed);
            monitor.unexplained = (interlock.latched() == TripSet::EMPTY).then_some(0);
            assert!(monitor.unexplained.is_none() || contacts.loop_a_closed != contacts.loop_b_closed);
        }
    } else {
        let allowed = monitor.judge(contacts, causes, disagreed);
        assert_eq!(interlock.is_given(), allowed != Allowed::Nothing, "the permit is given exactly when it may be");
        assert_eq!(changes.uncalibrated_start, allowed == Allowed::UncalibratedStart);
        if interlock.is_given() {
            monitor = Monitor { down: monitor.down, ..Monitor::default() };
        } else {
            assert!(monitor.unfollowed < TIMES.contactor_us || told(Trip::ContactorWelded), "a weld is told");
            assert!(monitor.differ < TIMES.discrepancy_us || told(Trip::LoopsDisagree), "a disagreement is told");
        }
    }
    if monitor.unexplained.is_some_and(|since| since >= TIMES.discrepancy_us) {
        assert!(told(Trip::LoopOpened) || told(Trip::LoopsDisagree), "an opening is told within the discrepancy time");
    }
    if interlock.latched() != TripSet::EMPTY {
        monitor.unexplained = None;
    }
    check_always(&before, &interlock, &changes, contacts, causes);
    (interlock, monitor)
}

/// From a state with the permit given.
fn check_given(before: &Interlock, after: &Interlock, monitor: &Monitor, contacts: Contacts, causes: TripSet) {
    let mut against = causes;
    if before.is_uncalibrated() {
        against.remove(Trip::NoCertificate);
    }
    let stays = both_closed(contacts)
        && against == TripSet::EMPTY
        && monitor.unfollowed < TIMES.contactor_us
        && monitor.down < TIMES.stuck_us;
    assert_eq!(after.is_given(), stays, "the permit stays exactly while all is well, and goes in the very step");
    let told = |trip| after.latched().contains(trip);
    assert!(monitor.unfollowed < TIMES.contactor_us || told(Trip::ContactorDropped));
    assert!(both_closed(contacts) || contacts.loop_a_closed || contacts.loop_b_closed || told(Trip::LoopOpened));
}

/// From any state.
fn check_always(before: &Interlock, after: &Interlock, changes: &Changes, contacts: Contacts, causes: TripSet) {
    let given = after.is_given();
    assert_eq!(changes.given, given && !before.is_given());
    assert_eq!(changes.withdrawn, !given && before.is_given());
    if given {
        assert!(both_closed(contacts), "no permit with a loop open");
        assert_eq!(after.latched(), TripSet::EMPTY, "no permit with a latched trip");
        assert_eq!(after.present(), TripSet::EMPTY, "no permit with a cause");
        assert!(after.is_uncalibrated() || !causes.contains(Trip::NoCertificate), "no permit without a certificate");
    }
    if !changes.given {
        assert_eq!(before.latched().0 & !after.latched().0, 0, "only a start clears trips");
        assert_eq!(changes.cleared, TripSet::EMPTY);
    } else {
        assert_eq!(before.latched().0 & !changes.cleared.0, 0, "what is cleared is told");
    }
    assert_eq!(after.present().0 & !after.latched().0, 0, "what is present is latched");
    assert_eq!(changes.latched.0, after.latched().0 & !before.latched().0 & !changes.cleared.0, "what latched is told");
    if !given && !before.is_given() {
        assert_eq!(causes.0 & !after.latched().0, 0, "a cause latches while the permit is withdrawn too");
    }
}

/// From every state there is a way back: everything put right, both loops cycled, one press.
fn check_way_back(state: &(Interlock, Monitor)) {
    let good = Contacts { loop_a_closed: true, loop_b_closed: true, contactors_released: true, button_pressed: false };
    let open = Contacts { loop_a_closed: false, loop_b_closed: false, ..good };
    let pressed = Contacts { button_pressed: true, ..good };
    let mut at = *state;
    // Withdraws if it is given, and lets what is undecided be decided.
    for contacts in [open, open, open, good, good, pressed, pressed] {
        at = step(&at, 1, contacts, TripSet::EMPTY);
        assert!(!at.0.is_given());
    }
    at = step(&at, 1, good, TripSet::EMPTY);
    assert!(at.0.is_given(), "no way back from {state:?}");
}

#[test]
fn every_reachable_state_keeps_every_promise() {
    let alphabet = [
        set(&[]),
        set(&[Trip::SenseSilent]),
        set(&[Trip::NoCertificate]),
        set(&[Trip::SenseSilent, Trip::NoCertificate]),
    ];
    let begin = (Interlock::new(TIMES), Monitor::default());
    let mut visited = Visited::default();
    visited.insert(begin);
    let mut waiting = vec![begin];
    let (mut steps, mut starts, mut uncalibrated) = (0u64, 0u64, 0u64);
    while let Some(state) = waiting.pop() {
        check_way_back(&state);
        for elapsed in STEPS {
            for contacts in all_contacts() {
                for causes in alphabet {
                    let next = step(&state, elapsed, contacts, causes);
                    steps += 1;
                    if next.0.is_given() && !state.0.is_given() {
                        starts += 1;
                        uncalibrated += u64::from(next.0.is_uncalibrated());
                    }
                    if visited.insert(next) {
                        waiting.push(next);
                    }
                }
            }
        }
    }
    println!(
        "{} states visited, {steps} steps checked, {starts} starts, {uncalibrated} of them uncalibrated",
        visited.len()
    );
    // Promises are kept by a machine that does nothing too: it must have done something.
    assert!(starts > 0 && uncalibrated > 0 && uncalibrated < starts);
    assert!(visited.len() > 1_000);
}
