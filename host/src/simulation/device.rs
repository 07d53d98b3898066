//! The simulated controller: the real firmware library, its flash, its crystal, and a byte pipe to the host.

use ringvolt_firmware::{
    Controller, Journal,
    io::{Boot, Conversion, Edge, Inputs, OptionalInputs, Outputs, StoreOutcome, StoreRequest},
};
use ringvolt_protocol::{CertificateRecord, Contacts, DeviceId, DeviceKind, ResetCause, SettingsRecord};

use super::oscillator::DeviceClock;

/// From power or reset to the first poll, nanoseconds.
const START_NS: i64 = 30_000_000;
/// Erasing and writing a page of flash stops the processor for so long, nanoseconds.
const STORE_NS: i64 = 45_000_000;

/// What survives a restart.
#[derive(Clone, Debug)]
pub(super) struct Flash {
    pub device: DeviceId,
    pub certificate: Option<CertificateRecord>,
    pub settings: Option<SettingsRecord>,
    pub epoch: u32,
}

/// What has come in since the last poll, in the crystal's time.
#[derive(Clone, Debug, Default)]
pub(super) struct Inbox {
    pub edges: Vec<Edge>,
    pub conversions: Vec<Conversion>,
}

impl Inbox {
    fn clear(&mut self) {
        self.edges.clear();
        self.conversions.clear();
    }
}

/// The controller and what belongs to its board.
pub(super) struct Device {
    controller: Controller<Box<Journal>>,
    flash: Flash,
    pub clock: DeviceClock,
    next_poll_ns: i64,
    stored: Option<StoreOutcome>,
    /// Whether the processor was busy with its flash, so that ready edges went by unseen.
    away: bool,
    from_host: Vec<u8>,
    plugged: bool,
}

impl Device {
    /// Powers up at `now_ns`.
    pub fn new(seed: u64, flash: Flash, now_ns: i64) -> Self {
        let controller = boot(&flash, ResetCause::PowerOn);
        Self {
            controller,
            flash,
            clock: DeviceClock::new(seed, now_ns),
            next_poll_ns: now_ns + START_NS,
            stored: None,
            away: false,
            from_host: Vec::new(),
            plugged: true,
        }
    }

    /// Stops and starts again: a new epoch, a clock from zero, an empty journal; the flash stays.
    pub fn restart(&mut self, now_ns: i64, cause: ResetCause) {
        self.flash.epoch += 1;
        self.controller = boot(&self.flash, cause);
        self.clock.restart(now_ns);
        self.next_poll_ns = now_ns + START_NS;
        self.stored = None;
        self.away = false;
        self.from_host.clear();
    }

    pub const fn next_poll_ns(&self) -> i64 {
        self.next_poll_ns
    }

    pub const fn controller(&self) -> &Controller<Box<Journal>> {
        &self.controller
    }

    /// One poll at its time.
    pub fn poll(&mut self, contacts: Contacts, inbox: &mut Inbox, optional: OptionalInputs) -> Outputs {
        if std::mem::take(&mut self.away) {
            inbox.conversions.clear();
        }
        let inputs = Inputs {
            edges: &inbox.edges,
            conversions: &inbox.conversions,
            optional,
            received: &self.from_host,
            stored: self.stored.take(),
            ..Inputs::quiet(contacts)
        };
        let outputs = self.controller.poll(self.clock.device_us(self.next_poll_ns), &inputs);
        inbox.clear();
        self.from_host.clear();
        self.next_poll_ns = self.clock.true_ns(self.controller.poll_at());
        if let Some(request) = &outputs.store {
            self.store(request);
        }
        outputs
    }

    /// The simulated store is a flash that never fails.
    fn store(&mut self, request: &StoreRequest) {
        match request {
            StoreRequest::Certificate(record) => self.flash.certificate = Some(*record),
            StoreRequest::Settings(record) => self.flash.settings = Some(*record),
        }
        self.stored = Some(StoreOutcome::Stored);
        self.next_poll_ns += STORE_NS;
        self.away = true;
    }

    /// Bytes from the host; they reach the controller at its next poll.
    pub fn receive(&mut self, bytes: &[u8]) {
        if self.plugged {
            self.from_host.extend_from_slice(bytes);
        }
    }

    /// Bytes for the host, oldest first; none while unplugged.
    pub fn outgoing(&self) -> &[u8] {
        if self.plugged { self.controller.outgoing() } else { &[] }
    }

    /// The host took the first `count` of them.
    pub fn sent(&mut self, count: usize) {
        self.controller.sent(count);
    }

    /// Pulls the plug or puts it back: what was on its way in is lost.
    pub fn plug(&mut self, plugged: bool) {
        self.plugged = plugged;
        self.from_host.clear();
    }
}

fn boot(flash: &Flash, reset_cause: ResetCause) -> Controller<Box<Journal>> {
    let boot = Boot {
        device: flash.device,
        kind: DeviceKind::Simulated,
        epoch: flash.epoch,
        reset_cause,
        certificate: flash.certificate,
        settings: Ok(flash.settings),
    };
    Controller::new(boot, Box::new(Journal::new()))
}
