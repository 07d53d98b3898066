//! The simulated world in virtual time: owns the parts and the controller.

use std::collections::VecDeque;

use rand::RngExt;
use rand_chacha::ChaCha8Rng;
use ringvolt_firmware::{
    Controller, Journal,
    io::{Channel, Conversion, Edge, OptionalInputs},
};
use ringvolt_protocol::{CertificateRecord, Contacts, Line, PermitState, ResetCause, SettingsRecord};

use super::{
    camera::{Camera, CameraSetup, Shot, Shutter},
    certificate,
    contactors::{Contactors, PermitRelay, Weld},
    contacts::Contact,
    converter::{Converter, ConverterFault},
    device::{Device, Flash, Inbox},
    divider::{DividerString, StringFault},
    draws::{Part, stream, substream},
    enclosure::Enclosure,
    exposure::Exposing,
    high_voltage::HighVoltage,
    scenario::{Scenario, What, Which},
    supply::{STEP_NS, Supply, SupplySetup},
};
use crate::calibration::Certificate;

/// How a world is made.
#[derive(Clone, Debug)]
pub struct Setup {
    /// Everything drawn comes from here.
    pub seed: u64,
    /// What the bench believes; the truth is drawn around it within its uncertainty.
    pub certificate: Certificate,
    /// Days since the certificate's issue over which strings have drifted.
    pub days_since_issue: f64,
    /// What the controller's store holds.
    pub stored: Option<CertificateRecord>,
    /// The controller's settings.
    pub settings: SettingsRecord,
    /// Time constant of the filters, seconds; each string's own is drawn around it.
    pub filter_seconds: f64,
    /// Its standard uncertainty, seconds.
    pub filter_u_seconds: f64,
    /// The supply.
    pub supply: SupplySetup,
    /// The camera.
    pub camera: CameraSetup,
    /// Noise of a conversion, codes (standard deviation).
    pub noise_codes: f64,
    /// Room temperature, degrees Celsius.
    pub room_celsius: f64,
    /// Whether the beam current is measured.
    pub beam_fitted: bool,
    /// Whether the enclosure's temperature is measured.
    pub thermometer_fitted: bool,
    /// Voltage at which the hardware comparator trips; `None` where there is none.
    pub comparator_volts: Option<f64>,
    /// What happens.
    pub scenario: Scenario,
    /// Power-ups before and with this one.
    pub epoch: u32,
}

/// Steps between two looks at what moves slowly: contacts, contactors, disturbances. 500 us.
const TICK_STEPS: u64 = 5;
/// Steps between two samples of the voltage for pictures: 2 ms.
const LIGHT_STEPS: u64 = 20;
/// Steps between two looks of whoever attends: 100 ms.
const ATTEND_STEPS: u64 = 1_000;
/// Steps in a second.
const SECOND_STEPS: u64 = 10_000;
/// Longest bounce of door contacts, button and mirror contacts, nanoseconds.
const BOUNCE_NS: i64 = 4_000_000;

const LOOP_A: usize = 0;
const LOOP_B: usize = 1;
const MIRROR: usize = 2;
const BUTTON: usize = 3;

/// The world.
pub struct World {
    now_ns: i64,
    steps: u64,
    polarity: f64,
    reference_celsius: f64,
    high_voltage: HighVoltage,
    converters: [Converter; 2],
    faulty: [bool; 2],
    camera: Camera,
    exposing: Exposing,
    strobe: bool,
    relay: PermitRelay,
    contactors: Contactors,
    contacts: [Contact; 4],
    door: ChaCha8Rng,
    enclosure: Enclosure,
    kelvin: f64,
    optional: OptionalInputs,
    beam_fitted: bool,
    thermometer_fitted: bool,
    comparator_volts: Option<f64>,
    device: Device,
    inbox: Inbox,
    happenings: VecDeque<(i64, What)>,
    attending: bool,
    busy_until_ns: i64,
    last_disturbed_ns: i64,
    shots: VecDeque<Shot>,
}

impl World {
    /// A world at its zero, with the controller just powered up.
    pub fn new(setup: &Setup) -> Self {
        let seed = setup.seed;
        let senses = certificate::draw(setup);
        let strings = senses.map(|sense| DividerString::new(sense.string));
        let converter = |index: usize, channel, part| {
            Converter::new(channel, senses[index].converter, substream(seed, part, 1 << 32))
        };
        let contact = |index: u64, line, active| {
            Contact::new(line, active, BOUNCE_NS, substream(seed, Part::Contacts, (index + 1) << 32))
        };
        let happenings = setup.scenario.happenings.iter();
        Self {
            now_ns: 0,
            steps: 0,
            polarity: setup.settings.polarity.sign() as f64,
            reference_celsius: setup.certificate.conditions.ambient_celsius,
            high_voltage: HighVoltage::new(Supply::new(setup.supply.clone(), seed), strings),
            converters: [
                converter(0, Channel::Sense, Part::MainConverter),
                converter(1, Channel::Cross, Part::CrossConverter),
            ],
            faulty: [false; 2],
            camera: Camera::new(setup.camera.clone(), seed),
            exposing: Exposing::default(),
            strobe: setup.camera.strobe,
            relay: PermitRelay::default(),
            contactors: Contactors::new(&mut stream(seed, Part::Contactors)),
            contacts: [
                contact(0, Line::LoopA, true),
                contact(1, Line::LoopB, true),
                contact(2, Line::Contactors, true),
                contact(3, Line::Button, false),
            ],
            door: stream(seed, Part::Contacts),
            enclosure: Enclosure::new(seed, setup.room_celsius),
            kelvin: 0.0,
            optional: OptionalInputs::default(),
            beam_fitted: setup.beam_fitted,
            thermometer_fitted: setup.thermometer_fitted,
            comparator_volts: setup.comparator_volts,
            device: Device::new(seed, flash(setup), 0),
            inbox: Inbox::default(),
            happenings: happenings.map(|happening| (ns(happening.at_seconds), happening.what)).collect(),
            attending: false,
            busy_until_ns: 0,
            last_disturbed_ns: 0,
            shots: VecDeque::new(),
        }
    }

    /// True time, nanoseconds from the world's zero.
    pub const fn now_ns(&self) -> i64 {
        self.now_ns
    }

    /// When the controller polls next, true nanoseconds: bytes that came in until then are taken in there.
    pub const fn next_poll_ns(&self) -> i64 {
        self.device.next_poll_ns()
    }

    /// Bytes from the host arrive now.
    pub fn receive(&mut self, bytes: &[u8]) {
        self.device.receive(bytes);
    }

    /// Bytes for the host. What is not taken waits in the controller's journal; nothing ever blocks.
    pub fn outgoing(&self) -> &[u8] {
        self.device.outgoing()
    }

    /// The first `count` of them are on their way.
    pub fn sent(&mut self, count: usize) {
        self.device.sent(count);
    }

    /// Takes all bytes for the host.
    pub fn take_outgoing(&mut self) -> Vec<u8> {
        let bytes = self.outgoing().to_vec();
        self.sent(bytes.len());
        bytes
    }

    /// The next completed frame.
    pub fn take_shot(&mut self) -> Option<Shot> {
        self.shots.pop_front()
    }

    /// The controller, to look at.
    pub const fn controller(&self) -> &Controller<Box<Journal>> {
        self.device.controller()
    }

    /// Whether the contactors are closed.
    pub const fn is_powered(&self) -> bool {
        self.contactors.mains_on()
    }

    /// The true voltage now, volts: for judges only, like the truth of a [`Shot`].
    pub const fn true_volts(&self) -> f64 {
        self.high_voltage.volts()
    }

    /// What the controller's clock shows at a true time: for judges only.
    pub fn true_device_us(&self, true_ns: i64) -> u64 {
        self.device.clock.device_us(true_ns)
    }

    /// True temperature of the strings, degrees Celsius: for judges only.
    pub fn true_celsius(&self) -> f64 {
        self.enclosure.celsius()
    }

    /// Lets something happen now, beside the scenario.
    pub fn happen(&mut self, what: What) {
        self.apply(what, self.now_ns);
    }

    /// The controller loses power and starts again, as after a reset of this cause: a new epoch.
    pub fn restart(&mut self, cause: ResetCause) {
        self.device.restart(self.now_ns, cause);
        self.inbox = Inbox::default();
        self.relay.drive(self.now_ns, false);
        self.exposing.set_lamp(self.now_ns, false);
    }

    /// Whether this time has been reached.
    pub const fn is_at(&self, time_ns: i64) -> bool {
        self.now_ns >= time_ns
    }

    /// Lets time pass until `until_ns`.
    pub fn advance_to(&mut self, until_ns: i64) {
        loop {
            let poll_ns = self.device.next_poll_ns();
            let target_ns = poll_ns.min(until_ns);
            while self.high_voltage.end_ns() + STEP_NS <= target_ns {
                self.step();
            }
            self.now_ns = self.now_ns.max(target_ns);
            if poll_ns > until_ns {
                break;
            }
            // A restart on the way has moved the poll.
            if self.device.next_poll_ns() == poll_ns {
                self.poll(poll_ns);
            }
        }
    }

    fn step(&mut self) {
        let end_ns = self.high_voltage.end_ns() + STEP_NS;
        self.now_ns = self.now_ns.max(end_ns);
        while let Some((at_ns, what)) = self.happenings.front().copied().filter(|(at_ns, _)| *at_ns <= end_ns) {
            self.happenings.pop_front();
            self.apply(what, at_ns);
        }
        self.high_voltage.step(self.contactors.mains_on());
        self.steps += 1;
        self.convert(end_ns);
        while self.camera.next_move_ns() < end_ns {
            self.move_shutter();
        }
        if self.steps.is_multiple_of(TICK_STEPS) {
            self.tick(end_ns);
        }
    }

    fn convert(&mut self, end_ns: i64) {
        for (index, converter) in self.converters.iter_mut().enumerate() {
            while converter.end_ns() < end_ns {
                let at_ns = converter.end_ns();
                let integral = self.high_voltage.filtered_integral_at(index, at_ns);
                let string = &self.high_voltage.strings[index];
                let (polarity, kelvin) = (self.polarity, self.kelvin);
                let code = converter.finish(integral, |mean| string.tap_volts(polarity * mean, kelvin));
                if let Some(code) = code {
                    let time_us = self.device.clock.device_us(at_ns);
                    self.inbox.conversions.push(Conversion { channel: converter.channel(), time_us, code });
                }
            }
        }
    }

    /// What moves slowly.
    fn tick(&mut self, now_ns: i64) {
        self.gather_edges(now_ns);
        let loops = self.contacts[LOOP_A].is_active() && self.contacts[LOOP_B].is_active();
        let driven = self.relay.pass(now_ns) && loops;
        if self.contactors.pass(now_ns, driven) {
            self.contacts[MIRROR].change(now_ns, self.contactors.released());
        }
        let off = !(loops && self.contactors.mains_on());
        if off || self.high_voltage.supply.is_disturbed() || self.faulty != [false; 2] || self.camera.lies() {
            self.last_disturbed_ns = now_ns;
        }
        if self.steps.is_multiple_of(LIGHT_STEPS) {
            if self.camera.wants_light() {
                self.exposing.sample(now_ns, self.high_voltage.volts());
            }
            self.read_slow_inputs();
        }
        if self.steps.is_multiple_of(ATTEND_STEPS) && self.attending {
            self.attend(now_ns);
        }
        if self.steps % SECOND_STEPS == TICK_STEPS {
            self.enclosure.second();
            self.kelvin = self.enclosure.celsius() - self.reference_celsius;
            self.device.clock.retune(now_ns, self.kelvin);
        }
    }

    fn gather_edges(&mut self, until_ns: i64) {
        for contact in &mut self.contacts {
            while let Some((at_ns, active)) = contact.next_edge(until_ns) {
                let time_us = self.device.clock.device_us(at_ns);
                self.inbox.edges.push(Edge { line: contact.line(), active, time_us });
            }
        }
    }

    fn read_slow_inputs(&mut self) {
        let volts = self.high_voltage.volts();
        let beam_na = self.enclosure.beam_na(volts);
        self.optional = OptionalInputs {
            beam_na: self.beam_fitted.then_some(beam_na),
            enclosure_centicelsius: self.thermometer_fitted.then(|| self.enclosure.sensor_centicelsius()),
            comparator: self.comparator_volts.map(|limit| volts > limit),
        };
    }

    fn move_shutter(&mut self) {
        let at_ns = self.camera.next_move_ns();
        let integral = self.high_voltage.integral_at(at_ns);
        let shutter = self.camera.move_shutter();
        if self.strobe {
            let time_us = self.device.clock.device_us(at_ns);
            self.inbox.edges.push(Edge { line: Line::Strobe, active: shutter == Shutter::Opens, time_us });
        }
        match shutter {
            Shutter::Opens => self.exposing.open(at_ns, integral),
            Shutter::Loses => {}
            Shutter::Closes(exposed) => {
                let shot = self.exposing.close(&exposed, integral, self.camera.setup(), self.last_disturbed_ns);
                self.shots.push_back(shot);
            }
        }
    }

    fn poll(&mut self, poll_ns: i64) {
        self.gather_edges(self.high_voltage.end_ns());
        let [a, b, mirror, button] = &self.contacts;
        let contacts = Contacts {
            loop_a_closed: a.is_active(),
            loop_b_closed: b.is_active(),
            contactors_released: mirror.is_active(),
            button_pressed: button.is_active(),
        };
        let outputs = self.device.poll(contacts, &mut self.inbox, self.optional);
        self.relay.drive(poll_ns, outputs.permit);
        self.exposing.set_lamp(poll_ns, outputs.lamp);
    }

    /// Whoever attends does what the controller waits for.
    fn attend(&mut self, now_ns: i64) {
        if now_ns < self.busy_until_ns {
            return;
        }
        let (first, then, wait_ns) = match self.device.controller().status().permit {
            PermitState::AwaitingLoopTest => (What::OpenDoor, What::CloseDoor, 400_000_000),
            PermitState::AwaitingPress => (What::PressButton, What::ReleaseButton, 200_000_000),
            _ => return,
        };
        self.busy_until_ns = now_ns + 3 * wait_ns;
        self.later(now_ns + wait_ns / 2, first);
        self.later(now_ns + wait_ns / 2 + wait_ns, then);
    }

    fn later(&mut self, at_ns: i64, what: What) {
        let place = self.happenings.partition_point(|(time, _)| *time <= at_ns);
        self.happenings.insert(place, (at_ns, what));
    }

    fn apply(&mut self, what: What, now_ns: i64) {
        match what {
            What::SetVolts { volts } => self.high_voltage.supply.set(volts),
            What::Ramp { volts, volts_per_second } => self.high_voltage.supply.ramp(volts, now_ns, volts_per_second),
            What::Sag { fraction, seconds } => self.high_voltage.supply.sag(fraction, now_ns, seconds),
            What::Jump { fraction } => self.high_voltage.supply.jump(fraction, now_ns),
            What::Arc => self.high_voltage.supply.arc(),
            What::Mains { hertz, level } => self.high_voltage.supply.set_mains(hertz, level),
            What::OpenDoor => self.move_loops(now_ns, Some(false), Some(false)),
            What::CloseDoor => self.move_loops(now_ns, Some(true), Some(true)),
            What::OpenLoopA => self.move_loops(now_ns, Some(false), None),
            What::CloseLoopA => self.move_loops(now_ns, Some(true), None),
            What::OpenLoopB => self.move_loops(now_ns, None, Some(false)),
            What::CloseLoopB => self.move_loops(now_ns, None, Some(true)),
            What::PressButton => self.contacts[BUTTON].change(now_ns, true),
            What::ReleaseButton => self.contacts[BUTTON].change(now_ns, false),
            What::Attend => self.attending = true,
            What::Leave => self.attending = false,
            What::WeldContactor => self.weld(now_ns, Weld::Both),
            What::WeldOne => self.weld(now_ns, Weld::One),
            What::FreeContactor => self.weld(now_ns, Weld::None),
            What::StringFactor { which, factor } => self.break_string(which, StringFault::Factor(factor)),
            What::OverRange { which } => self.break_string(which, StringFault::Clamped),
            What::Silent { which } => self.break_converter(which, ConverterFault::Silent),
            What::Frozen { which } => self.break_converter(which, ConverterFault::Frozen),
            What::Mend { which } => {
                self.break_string(which, StringFault::None);
                self.break_converter(which, ConverterFault::None);
                self.faulty[index(which)] = false;
            }
            What::StartCamera => self.camera.start(now_ns),
            What::StopCamera => self.camera.stop(),
            What::CameraOff { seconds } => self.camera.lie(ns(seconds)),
            What::LoseFrames { frames } => self.camera.lose(frames),
            What::ConnectStrobe => self.strobe = true,
            What::CutStrobe => self.strobe = false,
            What::Celsius { celsius } => self.enclosure.set_room(celsius),
            What::Brownout => self.restart(ResetCause::PowerOn),
            What::WatchdogReset => self.restart(ResetCause::Watchdog),
            What::Unplug => self.device.plug(false),
            What::Plug => self.device.plug(true),
        }
        if disturbs(&what) {
            self.last_disturbed_ns = now_ns;
        }
    }

    fn move_loops(&mut self, now_ns: i64, a: Option<bool>, b: Option<bool>) {
        // The two contacts of one door do not move at the same time.
        let later_ns = self.door.random_range(0..3_000_000);
        for (index, level, at_ns) in [(LOOP_A, a, now_ns), (LOOP_B, b, now_ns + later_ns)] {
            if let Some(level) = level {
                self.contacts[index].change(at_ns, level);
            }
        }
    }

    fn weld(&mut self, now_ns: i64, weld: Weld) {
        self.contactors.set_weld(weld);
        self.contacts[MIRROR].change(now_ns, self.contactors.released());
    }

    fn break_string(&mut self, which: Which, fault: StringFault) {
        self.high_voltage.strings[index(which)].set_fault(fault);
        self.faulty[index(which)] = true;
    }

    fn break_converter(&mut self, which: Which, fault: ConverterFault) {
        self.converters[index(which)].set_fault(fault);
        self.faulty[index(which)] = true;
    }
}

/// Whether a happening is a disturbance by itself, and not only by what it does to the voltage.
const fn disturbs(what: &What) -> bool {
    matches!(
        what,
        What::SetVolts { .. }
            | What::Ramp { .. }
            | What::Sag { .. }
            | What::Jump { .. }
            | What::Arc
            | What::Mains { .. }
            | What::Mend { .. }
            | What::Brownout
            | What::WatchdogReset
            | What::WeldContactor
            | What::WeldOne
            | What::FreeContactor
    )
}

const fn index(which: Which) -> usize {
    match which {
        Which::Sense => 0,
        Which::Cross => 1,
    }
}

fn ns(seconds: f64) -> i64 {
    (seconds * 1e9) as i64
}

fn flash(setup: &Setup) -> Flash {
    Flash {
        device: setup.certificate.device_id(),
        certificate: setup.stored,
        settings: Some(setup.settings),
        epoch: setup.epoch,
    }
}

#[cfg(test)]
mod tests;
