//! An I2C bus on which no wait is without bound, and which can free itself.
//!
//! The HAL's own driver waits for the hardware without limit, so a converter that holds a line would stop the main
//! loop. Here every transfer has a deadline; past it the I2C block is reset and the caller is told. Register use
//! follows the RP2040 datasheet, chapter 4.3; the timing figures are those of the I2C specification's fast mode.

use core::ops::Deref;

use embedded_hal::{
    digital::{InputPin, OutputPin},
    i2c::{self, ErrorKind, I2c, NoAcknowledgeSource, Operation},
};
use rp2040_hal::{
    gpio::{FunctionI2C, FunctionSioOutput, InOutPin, Pin, PinId, PullUp, ValidFunction},
    pac::{self, i2c0::RegisterBlock},
};

use crate::clock::now_us;

/// 400 kHz at a 125 MHz core: 312 cycles a bit, 60 % of them low, as fast mode wants (1.3 us low, 0.6 us high).
const LOW_CYCLES: u16 = 187;
const HIGH_CYCLES: u16 = 125;
/// 300 ns of data hold and 50 ns of spike filter at 125 MHz.
const HOLD_CYCLES: u16 = 38;
const SPIKE_CYCLES: u8 = 7;

/// One transfer may take this long, microseconds. The longest of the converter driver, five bytes with two starts, takes
/// 115; no converter here stretches the clock.
const TRANSFER_LIMIT_US: u64 = 250;

/// Half a period of the recovery clock, microseconds (100 kHz: every device keeps up with it).
const RECOVERY_HALF_US: u64 = 5;

/// Why a transfer failed.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum BusError {
    /// The device did not answer to its address, or refused a byte.
    NotAcknowledged,
    /// Another driver was on the bus, or a line did not follow.
    ArbitrationLost,
    /// The transfer did not end in time: a line is held.
    TimedOut,
}

impl i2c::Error for BusError {
    fn kind(&self) -> ErrorKind {
        match self {
            Self::NotAcknowledged => ErrorKind::NoAcknowledge(NoAcknowledgeSource::Unknown),
            Self::ArbitrationLost => ErrorKind::ArbitrationLoss,
            Self::TimedOut => ErrorKind::Other,
        }
    }
}

/// A bus that can free itself, and that can read without anybody waiting.
pub trait PatientBus: I2c<Error = BusError> {
    /// Asks a device for two bytes and returns at once; no other transfer may begin before [`Self::answer`] has come.
    fn ask(&mut self, address: u8);

    /// The two bytes; `None` while the transfer is under way and in time.
    fn answer(&mut self) -> Option<Result<[u8; 2], BusError>>;

    /// Frees a held bus: nine clocks let any device finish the byte it believes it is sending, then a stop. Tells
    /// whether both lines are high afterwards. Takes up to 110 us.
    fn recover(&mut self) -> bool;
}

type BusPin<I> = Pin<I, FunctionI2C, PullUp>;

/// One I2C block with its two pins.
pub struct Bus<B, D: PinId, C: PinId> {
    block: B,
    /// Bit of this block in the register RESETS.
    reset_bit: u32,
    /// Always there except within `recover`.
    pins: Option<(BusPin<D>, BusPin<C>)>,
    /// When the transfer under way must be over.
    limit_us: u64,
}

impl<B, D, C> Bus<B, D, C>
where
    B: Deref<Target = RegisterBlock>,
    D: PinId + ValidFunction<FunctionI2C> + ValidFunction<FunctionSioOutput>,
    C: PinId + ValidFunction<FunctionI2C> + ValidFunction<FunctionSioOutput>,
{
    /// Takes a block and its data and clock pins; `reset_bit` is the block's bit in RESETS.
    pub fn new(block: B, reset_bit: u32, data: BusPin<D>, clock: BusPin<C>) -> Self {
        let bus = Self { block, reset_bit, pins: Some((data, clock)), limit_us: 0 };
        bus.restart();
        bus
    }

    /// Resets the block and sets it up: the only sure way out of a transfer that does not end.
    fn restart(&self) {
        // SAFETY: after start-up nobody but the two buses touches RESETS, and both belong to the main loop. The
        // block is owned by `self`.
        #[allow(unsafe_code)]
        unsafe {
            let resets = &*pac::RESETS::ptr();
            resets.reset().modify(|r, w| w.bits(r.bits() | self.reset_bit));
            resets.reset().modify(|r, w| w.bits(r.bits() & !self.reset_bit));
            // It takes a few cycles of the block's clock, which is the core's.
            let limit = now_us() + 10;
            while resets.reset_done().read().bits() & self.reset_bit == 0 && now_us() < limit {}
        }
        let block = &self.block;
        block.ic_enable().write(|w| w.enable().disabled());
        block.ic_con().write(|w| {
            w.speed().fast().master_mode().enabled().ic_slave_disable().slave_disabled();
            w.ic_restart_en().enabled().tx_empty_ctrl().enabled().rx_fifo_full_hld_ctrl().enabled()
        });
        // SAFETY: counts within the fields' ranges.
        #[allow(unsafe_code)]
        unsafe {
            block.ic_fs_scl_lcnt().write(|w| w.ic_fs_scl_lcnt().bits(LOW_CYCLES));
            block.ic_fs_scl_hcnt().write(|w| w.ic_fs_scl_hcnt().bits(HIGH_CYCLES));
            block.ic_fs_spklen().write(|w| w.ic_fs_spklen().bits(SPIKE_CYCLES));
            block.ic_sda_hold().modify(|_, w| w.ic_sda_tx_hold().bits(HOLD_CYCLES));
            block.ic_rx_tl().write(|w| w.rx_tl().bits(0));
            block.ic_tx_tl().write(|w| w.tx_tl().bits(0));
        }
        block.ic_enable().write(|w| w.enable().enabled());
    }

    fn address(&self, address: u8) {
        self.block.ic_enable().write(|w| w.enable().disabled());
        // SAFETY: seven bits into a field of ten.
        #[allow(unsafe_code)]
        self.block.ic_tar().write(|w| unsafe { w.ic_tar().bits(u16::from(address)) });
        self.block.ic_enable().write(|w| w.enable().enabled());
        // Reading clears what the last transfer left.
        let _ = self.block.ic_clr_intr().read();
    }

    /// Queues one byte to write, or a request for one to read.
    fn queue(&self, byte: Option<u8>, last: bool, limit_us: u64) -> Result<(), BusError> {
        while self.block.ic_status().read().tfnf().bit_is_clear() {
            self.check(limit_us)?;
        }
        // SAFETY: any eight bits are data.
        #[allow(unsafe_code)]
        self.block
            .ic_data_cmd()
            .write(|w| unsafe { w.cmd().bit(byte.is_none()).stop().bit(last).dat().bits(byte.unwrap_or(0)) });
        Ok(())
    }

    fn fetch(&self, limit_us: u64) -> Result<u8, BusError> {
        while self.block.ic_rxflr().read().bits() == 0 {
            self.check(limit_us)?;
        }
        Ok(self.block.ic_data_cmd().read().dat().bits())
    }

    fn wait_for_stop(&self, limit_us: u64) -> Result<(), BusError> {
        while self.block.ic_raw_intr_stat().read().stop_det().bit_is_clear() {
            self.check(limit_us)?;
        }
        // An abort and the stop that follows it can come between two looks.
        self.check(u64::MAX)
    }

    /// An error if the block gave up or the time is over.
    fn check(&self, limit_us: u64) -> Result<(), BusError> {
        if self.block.ic_raw_intr_stat().read().tx_abrt().bit_is_set() {
            let lost = self.block.ic_tx_abrt_source().read().arb_lost().bit_is_set();
            let _ = self.block.ic_clr_tx_abrt().read();
            return Err(if lost { BusError::ArbitrationLost } else { BusError::NotAcknowledged });
        }
        if now_us() > limit_us { Err(BusError::TimedOut) } else { Ok(()) }
    }

    /// Leaves the block ready for the next transfer after one that ended as `outcome`.
    fn tidy<R>(&self, outcome: Result<R, BusError>) -> Result<R, BusError> {
        match outcome {
            Ok(_) => {}
            // The block closes a refused transfer with a stop of its own; resetting it meanwhile would hold the bus.
            Err(BusError::NotAcknowledged) => {
                let _ = self.wait_for_stop(now_us() + TRANSFER_LIMIT_US);
            }
            Err(_) => self.restart(),
        }
        outcome
    }

    fn run(&self, address: u8, operations: &mut [Operation<'_>], limit_us: u64) -> Result<(), BusError> {
        self.address(address);
        let last_operation = operations.len().saturating_sub(1);
        for (index, operation) in operations.iter_mut().enumerate() {
            let closes = |byte: usize, length: usize| index == last_operation && byte + 1 == length;
            match operation {
                Operation::Write(bytes) => {
                    for (at, byte) in bytes.iter().enumerate() {
                        self.queue(Some(*byte), closes(at, bytes.len()), limit_us)?;
                    }
                }
                Operation::Read(buffer) => {
                    let length = buffer.len();
                    for (at, byte) in buffer.iter_mut().enumerate() {
                        self.queue(None, closes(at, length), limit_us)?;
                        *byte = self.fetch(limit_us)?;
                    }
                }
            }
        }
        self.wait_for_stop(limit_us)
    }
}

fn pause(us: u64) {
    let end = now_us() + us;
    while now_us() < end {}
}

impl<B, D: PinId, C: PinId> i2c::ErrorType for Bus<B, D, C> {
    type Error = BusError;
}

impl<B, D, C> I2c for Bus<B, D, C>
where
    B: Deref<Target = RegisterBlock>,
    D: PinId + ValidFunction<FunctionI2C> + ValidFunction<FunctionSioOutput>,
    C: PinId + ValidFunction<FunctionI2C> + ValidFunction<FunctionSioOutput>,
{
    fn transaction(&mut self, address: u8, operations: &mut [Operation<'_>]) -> Result<(), BusError> {
        let limit_us = now_us() + TRANSFER_LIMIT_US;
        self.limit_us = limit_us;
        let outcome = self.run(address, operations, limit_us);
        self.tidy(outcome)
    }
}

impl<B, D, C> PatientBus for Bus<B, D, C>
where
    B: Deref<Target = RegisterBlock>,
    D: PinId + ValidFunction<FunctionI2C> + ValidFunction<FunctionSioOutput>,
    C: PinId + ValidFunction<FunctionI2C> + ValidFunction<FunctionSioOutput>,
{
    fn ask(&mut self, address: u8) {
        self.limit_us = now_us() + TRANSFER_LIMIT_US;
        self.address(address);
        // The FIFO is empty, so both requests fit; an error here shows in the answer.
        let _ = self.queue(None, false, self.limit_us);
        let _ = self.queue(None, true, self.limit_us);
    }

    fn answer(&mut self) -> Option<Result<[u8; 2], BusError>> {
        let stopped = self.block.ic_raw_intr_stat().read().stop_det().bit_is_set();
        // A transfer that has ended was in time, however late this look is.
        let outcome = match self.check(if stopped { u64::MAX } else { self.limit_us }) {
            Ok(()) if !stopped => return None,
            Ok(()) => self.fetch(0).and_then(|high| Ok([high, self.fetch(0)?])),
            Err(error) => Err(error),
        };
        Some(self.tidy(outcome))
    }

    fn recover(&mut self) -> bool {
        let Some((data, clock)) = self.pins.take() else { return false };
        let mut data = InOutPin::new(data);
        let mut clock = InOutPin::new(clock);
        // The pins' methods cannot fail; their error type only says so in a roundabout way.
        for _ in 0..9 {
            let _ = clock.set_low();
            pause(RECOVERY_HALF_US);
            let _ = clock.set_high();
            pause(RECOVERY_HALF_US);
        }
        let _ = data.set_low();
        pause(RECOVERY_HALF_US);
        let _ = data.set_high();
        pause(RECOVERY_HALF_US);
        let freed = matches!((data.is_high(), clock.is_high()), (Ok(true), Ok(true)));
        self.pins = Some((data.release(), clock.release()));
        self.restart();
        freed
    }
}
