//! The simulated world in virtual time: owns the parts and the controller.

use std::collections::VecDeque;

use rand::RngExt;
use ringvolt_firmware::{
    Controller, Journal,
    io::{Boot, Channel, Conversion, Edge, Inputs, OptionalInputs, Outputs, StoreOutcome},
};
use ringvolt_protocol::{CertificateRecord, Contacts, DeviceId, DeviceKind, Line, ResetCause, SettingsRecord};

use super::{
    camera::{Camera, CameraSetup, Shot},
    contacts::{Chain, Contact, bounces},
    converter::{StringAndConverter, StringFault, StringSetup},
    draw::{normal, stream},
    scenario::{Happening, Scenario, What, Which},
    supply::{Supply, SupplySetup},
};
use crate::calibration::{Certificate, ChannelFit};

/// How a world is made.
#[derive(Clone, Debug)]
pub struct Setup {
    /// Everything drawn comes from here.
    pub seed: u64,
    /// What the bench believes; the truth is drawn around it within its uncertainty.
    pub certificate: Certificate,
    /// What the controller's store holds.
    pub stored: Option<CertificateRecord>,
    /// The controller's settings.
    pub settings: SettingsRecord,
    /// Time constant of both filters, seconds.
    pub filter_seconds: f64,
    /// The supply.
    pub supply: SupplySetup,
    /// The camera.
    pub camera: CameraSetup,
    /// Noise of a conversion, codes.
    pub noise_codes: f64,
    /// What happens.
    pub scenario: Scenario,
    /// Power-ups before this one.
    pub epoch: u32,
}

/// Length of a step, nanoseconds: short against a conversion, a quarter of a millisecond.
const STEP_NS: i64 = 250_000;

/// The world.
pub struct World {
    now_ns: i64,
    supply: Supply,
    sense: StringAndConverter,
    cross: StringAndConverter,
    camera: Camera,
    chain: Chain,
    loop_a: Contact,
    loop_b: Contact,
    mirror: Contact,
    button: Contact,
    celsius: f64,
    oscillator_rate: f64,
    controller: Controller<Box<Journal>>,
    outputs: Outputs,
    bounces: rand_chacha::ChaCha8Rng,
    happenings: VecDeque<Happening>,
    shots: VecDeque<Shot>,
    edges: Vec<Edge>,
    conversions: Vec<Conversion>,
    received: Vec<u8>,
    stored: Option<StoreOutcome>,
}

impl World {
    /// A world at its zero, with the controller just powered up.
    pub fn new(setup: &Setup) -> Self {
        let mut rng = stream(setup.seed, 2);
        let device = setup.certificate.device_id();
        let [sense_fit, cross_fit] = true_fits(&setup.certificate, &mut rng);
        let stability = &setup.certificate.stability;
        let string = |fit: ChannelFit, rng: &mut rand_chacha::ChaCha8Rng| StringSetup {
            fit,
            ambient_celsius: setup.certificate.conditions.ambient_celsius,
            temperature_per_kelvin: 1e-6
                * (stability.temperature_ppm_per_kelvin + normal(rng, stability.temperature_u_ppm_per_kelvin)),
            polarity: setup.settings.polarity.sign() as f64,
            filter_seconds: setup.filter_seconds,
            noise_codes: setup.noise_codes,
        };
        let sense = StringAndConverter::new(string(sense_fit, &mut rng), setup.seed, 3);
        let cross = StringAndConverter::new(string(cross_fit, &mut rng), setup.seed, 4);
        Self {
            now_ns: 0,
            supply: Supply::new(setup.supply.clone(), setup.seed),
            sense,
            cross,
            camera: Camera::new(setup.camera.clone(), setup.seed),
            chain: Chain::default(),
            loop_a: Contact::new(true),
            loop_b: Contact::new(true),
            mirror: Contact::new(true),
            button: Contact::new(false),
            celsius: setup.certificate.conditions.ambient_celsius + rng.random_range(-1.5..1.5),
            oscillator_rate: rng.random_range(-30e-6..30e-6),
            controller: controller(setup, device),
            outputs: Outputs { permit: false, hv_lamp_dark: false, lamp: false, led: false, store: None },
            bounces: bounces(setup.seed),
            happenings: setup.scenario.happenings.iter().copied().collect(),
            shots: VecDeque::new(),
            edges: Vec::new(),
            conversions: Vec::new(),
            received: Vec::new(),
            stored: None,
        }
    }

    /// True time, nanoseconds from the world's zero.
    pub const fn now_ns(&self) -> i64 {
        self.now_ns
    }

    /// Bytes from the host arrive now.
    pub fn receive(&mut self, bytes: &[u8]) {
        self.received.extend_from_slice(bytes);
    }

    /// Bytes for the host.
    pub fn outgoing(&self) -> &[u8] {
        self.controller.outgoing()
    }

    /// The first `count` of them are on their way.
    pub fn sent(&mut self, count: usize) {
        self.controller.sent(count);
    }

    /// The next completed frame.
    pub fn take_shot(&mut self) -> Option<Shot> {
        self.shots.pop_front()
    }

    /// The controller, to look at.
    pub const fn controller(&self) -> &Controller<Box<Journal>> {
        &self.controller
    }

    /// Whether the contactors are closed.
    pub const fn is_powered(&self) -> bool {
        self.chain.is_closed()
    }

    /// The true voltage now, volts: for judges, like [`Truth`](super::Truth).
    pub fn true_volts(&self) -> f64 {
        self.supply.volts(self.now_ns as f64 * 1e-9, self.chain.is_closed())
    }

    /// Lets something happen now, beside the scenario.
    pub fn happen(&mut self, what: What) {
        self.apply(what);
    }

    /// The controller loses power and starts again, as after a reset of this cause.
    pub fn restart(&mut self, setup: &Setup, cause: ResetCause, epoch: u32) {
        let again = Setup { epoch, ..setup.clone() };
        let mut boot = boot(&again, setup.certificate.device_id());
        boot.reset_cause = cause;
        self.controller = Controller::new(boot, Box::default());
        self.outputs.permit = false;
        self.received.clear();
    }

    /// Whether the next step lies at or beyond this time.
    pub const fn is_at(&self, time_ns: i64) -> bool {
        self.now_ns + STEP_NS > time_ns
    }

    /// Lets time pass until `until_ns`.
    pub fn advance_to(&mut self, until_ns: i64) {
        while self.now_ns + STEP_NS <= until_ns {
            self.step();
        }
    }

    fn step(&mut self) {
        let (from_ns, to_ns) = (self.now_ns, self.now_ns + STEP_NS);
        self.now_ns = to_ns;
        while self.happenings.front().is_some_and(|next| next.at_seconds * 1e9 <= to_ns as f64) {
            if let Some(happening) = self.happenings.pop_front() {
                self.apply(happening.what);
            }
        }
        let loops = self.loop_a.level() && self.loop_b.level();
        if self.chain.pass(to_ns, self.outputs.permit, loops) {
            self.camera.disturb(to_ns);
            self.mirror.move_to(!self.chain.is_closed(), to_ns, &mut self.bounces);
        }
        let on = self.chain.is_closed();
        self.supply.pass(STEP_NS as f64 * 1e-9, on);
        let volts = self.supply.volts((from_ns + STEP_NS / 2) as f64 * 1e-9, on);
        if !self.supply.is_settled(on) {
            self.camera.disturb(to_ns);
        }
        let sense = self.sense.pass(from_ns, to_ns, volts, self.celsius);
        let cross = self.cross.pass(from_ns, to_ns, volts, self.celsius);
        self.convert(Channel::Sense, sense);
        self.convert(Channel::Cross, cross);
        self.shots.extend(self.camera.pass(from_ns, to_ns, volts));
        self.gather_edges(to_ns);
        // Every second step is a poll; bytes that came in between wait for it, as they do on the board.
        if (to_ns / STEP_NS) % 2 == 0 {
            self.poll(volts);
        }
    }

    fn device_us(&self, true_ns: i64) -> u64 {
        let ns = true_ns as f64 * (1.0 + self.oscillator_rate);
        (ns * 1e-3) as u64
    }

    fn convert(&mut self, channel: Channel, conversion: Option<(i64, i16)>) {
        if let Some((end_ns, code)) = conversion {
            let time_us = self.device_us(end_ns);
            self.conversions.push(Conversion { channel, time_us, code });
        }
    }

    fn gather_edges(&mut self, now_ns: i64) {
        let rate = 1.0 + self.oscillator_rate;
        for (line, contact) in [
            (Line::LoopA, &mut self.loop_a),
            (Line::LoopB, &mut self.loop_b),
            (Line::Contactors, &mut self.mirror),
            (Line::Button, &mut self.button),
        ] {
            while let Some((at_ns, active)) = contact.change(now_ns) {
                self.edges.push(Edge { line, active, time_us: (at_ns as f64 * rate * 1e-3) as u64 });
            }
        }
    }

    fn poll(&mut self, volts: f64) {
        let now_us = self.device_us(self.now_ns);
        let inputs = Inputs {
            contacts: Contacts {
                loop_a_closed: self.loop_a.level(),
                loop_b_closed: self.loop_b.level(),
                contactors_released: self.mirror.level(),
                button_pressed: self.button.level(),
            },
            edges: &self.edges,
            conversions: &self.conversions,
            notices: &[],
            optional: OptionalInputs {
                beam_na: Some((volts.max(0.0) * 20.0) as i32),
                enclosure_centicelsius: Some((self.celsius * 100.0) as i16),
                comparator: Some(false),
            },
            received: &self.received,
            stored: self.stored.take(),
            idle_per_mille: None,
        };
        self.outputs = self.controller.poll(now_us, &inputs);
        self.edges.clear();
        self.conversions.clear();
        self.received.clear();
        // The simulated store is a flash that never fails.
        self.stored = self.outputs.store.map(|_| StoreOutcome::Stored);
    }

    fn apply(&mut self, what: What) {
        let now = self.now_ns;
        if !matches!(what, What::StartCamera | What::StopCamera) {
            self.camera.disturb(now);
        }
        match what {
            What::SetVolts { volts } => self.supply.set(volts),
            What::Ramp { volts, volts_per_second } => self.supply.ramp(volts, volts_per_second),
            What::Sag { fraction, seconds } => self.supply.sag(fraction, seconds),
            What::Jump { fraction } => self.supply.jump(fraction),
            What::Arc => self.supply.arc(),
            What::OpenDoor => self.move_loops(Some(false), Some(false)),
            What::CloseDoor => self.move_loops(Some(true), Some(true)),
            What::OpenLoopA => self.move_loops(Some(false), None),
            What::CloseLoopA => self.move_loops(Some(true), None),
            What::OpenLoopB => self.move_loops(None, Some(false)),
            What::CloseLoopB => self.move_loops(None, Some(true)),
            What::PressButton => self.button.move_to(true, now, &mut self.bounces),
            What::ReleaseButton => self.button.move_to(false, now, &mut self.bounces),
            What::WeldContactor => self.chain.welded = true,
            What::FreeContactor => self.chain.welded = false,
            What::StringFactor { which, factor } => self.string(which).fault.factor = Some(factor),
            What::OverRange { which } => self.string(which).fault.over_range = true,
            What::Silent { which } => self.string(which).fault.silent = true,
            What::Frozen { which } => self.string(which).fault.frozen = true,
            What::Mend { which } => self.string(which).fault = StringFault::default(),
            What::StartCamera => self.camera.start(now),
            What::StopCamera => self.camera.stop(),
            What::Celsius { celsius } => self.celsius = celsius,
        }
    }

    fn move_loops(&mut self, a: Option<bool>, b: Option<bool>) {
        if let Some(level) = a {
            self.loop_a.move_to(level, self.now_ns, &mut self.bounces);
        }
        if let Some(level) = b {
            // The second contact of one door moves a little later.
            let later = self.now_ns + self.bounces.random_range(0..3_000_000);
            self.loop_b.move_to(level, later, &mut self.bounces);
        }
    }

    fn string(&mut self, which: Which) -> &mut StringAndConverter {
        match which {
            Which::Sense => &mut self.sense,
            Which::Cross => &mut self.cross,
        }
    }
}

fn boot(setup: &Setup, device: DeviceId) -> Boot {
    Boot {
        device,
        kind: DeviceKind::Simulated,
        epoch: setup.epoch,
        reset_cause: ResetCause::PowerOn,
        certificate: setup.stored,
        settings: Ok(Some(setup.settings)),
    }
}

fn controller(setup: &Setup, device: DeviceId) -> Controller<Box<Journal>> {
    Controller::new(boot(setup, device), Box::default())
}

/// The true lines of both strings, drawn around the certificate's within what it states: the reference's errors are
/// common to both, fit and drift are each string's own.
fn true_fits(certificate: &Certificate, rng: &mut rand_chacha::ChaCha8Rng) -> [ChannelFit; 2] {
    let scale = 1.0 + 1e-6 * normal(rng, certificate.reference.u_ppm);
    let offset = normal(rng, certificate.reference.u_volts);
    // The world does not know the date; half a year of drift is drawn, whatever the calendar says.
    let drift = 0.5 * certificate.stability.drift_u_ppm_per_year;
    [&certificate.sense, &certificate.cross].map(|fit| {
        let own = scale * (1.0 + 1e-6 * normal(rng, drift));
        let noise = [normal(rng, libm::sqrt(fit.covariance[0][0].max(0.0))), 0.0, 0.0];
        let coefficients = std::array::from_fn(|index| {
            let common = if index == 0 { offset } else { 0.0 };
            fit.coefficients[index] * own + common + noise[index]
        });
        ChannelFit { coefficients, ..fit.clone() }
    })
}
