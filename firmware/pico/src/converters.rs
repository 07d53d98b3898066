//! The two converters on their buses: set up, read when their ready pin says so, checked, freed when they hold a bus.
//!
//! Results are read without waiting: [`Converter::start`] asks when the ready pin has told, and the next round's
//! [`Converter::finish`] collects. Only setting up and checking, once a second, wait for the bus.

use heapless::Vec;
use ringvolt_firmware::{
    converter::{Care, Converter as _, ads1115::Ads1115},
    io::{Channel, Conversion, ConverterNotice},
};

use crate::{
    bus::{BusError, PatientBus},
    clock::now_us,
};

/// A converter that could not be set up is tried again after this long, microseconds.
const RETRY_US: u64 = 50_000;
/// The configuration is read back this often, microseconds.
const CHECK_US: u64 = 1_000_000;

/// Most results that one round can bring.
pub const ROUND_CONVERSIONS: usize = 4;
/// Most notices that one round can bring.
pub const ROUND_NOTICES: usize = 4;

enum State {
    /// To be set up, not before this time.
    Waiting { until_us: u64 },
    /// Converting; its configuration is to be checked at this time.
    Running { check_us: u64 },
    /// As `Running`, and the result that was complete at `ready_us` is on its way over the bus.
    Reading { check_us: u64, ready_us: u64 },
}

/// One converter.
pub struct Converter<B> {
    channel: Channel,
    address: u8,
    bus: B,
    state: State,
    /// When the result that waits in the converter was complete.
    ready_us: Option<u64>,
}

/// What a round has brought.
#[derive(Default)]
pub struct Round {
    /// Results.
    pub conversions: Vec<Conversion, ROUND_CONVERSIONS>,
    /// What went wrong, and what was done about it.
    pub notices: Vec<ConverterNotice, ROUND_NOTICES>,
}

impl Round {
    /// Forgets it all: the next round begins.
    pub fn clear(&mut self) {
        self.conversions.clear();
        self.notices.clear();
    }
}

impl<B: PatientBus> Converter<B> {
    /// A converter that is still to be set up.
    pub fn new(channel: Channel, address: u8, bus: B) -> Self {
        Self { channel, address, bus, state: State::Waiting { until_us: 0 }, ready_us: None }
    }

    /// The ready pin may have told that a result is complete: starts to read it if the bus is free.
    pub fn start(&mut self, ready_us: Option<u64>) {
        self.ready_us = ready_us.or(self.ready_us);
        if let (State::Running { check_us }, Some(ready_us)) = (&self.state, self.ready_us) {
            self.state = State::Reading { check_us: *check_us, ready_us };
            self.ready_us = None;
            self.bus.ask(self.address);
        }
    }

    /// Collects the result that was asked for, if it has come.
    pub fn finish(&mut self, round: &mut Round) {
        let State::Reading { check_us, ready_us } = self.state else { return };
        match self.bus.answer() {
            None => {}
            Some(Ok(bytes)) => {
                let code = i16::from_be_bytes(bytes);
                let _ = round.conversions.push(Conversion { channel: self.channel, time_us: ready_us, code });
                self.state = State::Running { check_us };
            }
            Some(Err(error)) => self.failed(error, round),
        }
    }

    /// Sets up or checks the converter if that is due and its bus is free; `true` where that took time.
    pub fn attend(&mut self, now_us: u64, round: &mut Round) -> bool {
        let outcome = match self.state {
            State::Waiting { until_us } if now_us >= until_us => self.set_up(now_us),
            State::Running { check_us } if now_us >= check_us => self.check(now_us, round),
            _ => return false,
        };
        if let Err(error) = outcome {
            self.failed(error, round);
        }
        true
    }

    fn driver(&mut self) -> Ads1115<&mut B> {
        Ads1115::new(&mut self.bus, self.address, self.channel)
    }

    fn set_up(&mut self, now_us: u64) -> Result<(), BusError> {
        self.driver().set_up()?;
        self.state = State::Running { check_us: now_us + CHECK_US };
        Ok(())
    }

    fn check(&mut self, now_us: u64, round: &mut Round) -> Result<(), BusError> {
        if self.driver().look_after()? == Care::Repaired {
            let _ = round.notices.push(ConverterNotice::ConfigurationRepaired(self.channel));
        }
        self.state = State::Running { check_us: now_us + CHECK_US };
        Ok(())
    }

    fn failed(&mut self, error: BusError, round: &mut Round) {
        self.state = State::Waiting { until_us: now_us() + RETRY_US };
        self.ready_us = None;
        if error != BusError::NotAcknowledged {
            let freed = self.bus.recover();
            let _ = round.notices.push(ConverterNotice::BusRecovered { channel: self.channel, freed });
        }
    }
}
