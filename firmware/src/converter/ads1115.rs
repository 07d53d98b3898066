//! ADS1115-class converters: 16 bits, I2C, ready pin.
//!
//! Registers and bits are those of the data sheets of the ADS111x family. The converter runs continuously at its nominal
//! 860 conversions a second; its ready pin pulses at each. The register pointer is left at the result, so that reading
//! one takes two bytes and no write.

use embedded_hal::i2c::I2c;

use super::{Care, Converter};
use crate::io::Channel;

/// Registers.
pub mod register {
    /// Result of the last conversion.
    pub const RESULT: u8 = 0;
    /// Configuration.
    pub const CONFIGURATION: u8 = 1;
    /// Lower threshold; with the upper one as below, the comparator pin tells that a conversion is ready.
    pub const LOW: u8 = 2;
    /// Upper threshold.
    pub const HIGH: u8 = 3;
}

/// The bit that starts a conversion when written, and reads as "idle".
pub const START: u16 = 0x8000;
/// Input 0 against input 1, full scale 2.048 V, continuous, 860 a second, one-conversion comparator (ready pin).
pub const SETTING: u16 = START | (0b010 << 9) | (0b111 << 5);
/// Thresholds whose order (low above high, as signed numbers) turns the comparator pin into a ready pin.
pub const READY_LOW: [u8; 2] = [0x00, 0x00];
/// The upper one of them.
pub const READY_HIGH: [u8; 2] = [0x80, 0x00];

/// One converter on an I2C bus.
pub struct Ads1115<B> {
    bus: B,
    address: u8,
    channel: Channel,
}

impl<B: I2c> Ads1115<B> {
    /// The converter at this address (0x48 to 0x4b) on this bus.
    pub const fn new(bus: B, address: u8, channel: Channel) -> Self {
        Self { bus, address, channel }
    }

    /// The bus back.
    pub fn release(self) -> B {
        self.bus
    }

    fn point_at_result(&mut self) -> Result<(), B::Error> {
        self.bus.write(self.address, &[register::RESULT])
    }
}

impl<B: I2c> Converter for Ads1115<B> {
    type Error = B::Error;

    fn channel(&self) -> Channel {
        self.channel
    }

    fn set_up(&mut self) -> Result<(), B::Error> {
        let [high, low] = SETTING.to_be_bytes();
        self.bus.write(self.address, &[register::LOW, READY_LOW[0], READY_LOW[1]])?;
        self.bus.write(self.address, &[register::HIGH, READY_HIGH[0], READY_HIGH[1]])?;
        self.bus.write(self.address, &[register::CONFIGURATION, high, low])?;
        self.point_at_result()
    }

    fn read(&mut self) -> Result<i16, B::Error> {
        let mut code = [0; 2];
        self.bus.read(self.address, &mut code)?;
        Ok(i16::from_be_bytes(code))
    }

    fn look_after(&mut self) -> Result<Care, B::Error> {
        let mut setting = [0; 2];
        self.bus.write_read(self.address, &[register::CONFIGURATION], &mut setting)?;
        // The top bit tells whether a conversion is under way, not what was set.
        if u16::from_be_bytes(setting) | START == SETTING {
            self.point_at_result()?;
            return Ok(Care::Healthy);
        }
        self.set_up()?;
        Ok(Care::Repaired)
    }
}

#[cfg(test)]
mod tests {
    extern crate std;
    use std::{vec, vec::Vec};

    use embedded_hal::i2c::{ErrorKind, NoAcknowledgeSource};
    use embedded_hal_mock::eh1::i2c::{Mock, Transaction};

    use super::*;

    const ADDRESS: u8 = 0x48;

    fn set_up() -> Vec<Transaction> {
        vec![
            Transaction::write(ADDRESS, vec![2, 0x00, 0x00]),
            Transaction::write(ADDRESS, vec![3, 0x80, 0x00]),
            Transaction::write(ADDRESS, vec![1, 0x84, 0xe0]),
            Transaction::write(ADDRESS, vec![0]),
        ]
    }

    fn with(transactions: &[Transaction], work: impl FnOnce(&mut Ads1115<Mock>)) {
        let mut converter = Ads1115::new(Mock::new(transactions), ADDRESS, Channel::Sense);
        work(&mut converter);
        converter.release().done();
    }

    #[test]
    fn it_is_set_up_for_continuous_conversions_with_a_ready_pin() {
        with(&set_up(), |converter| converter.set_up().unwrap());
    }

    #[test]
    fn a_result_is_two_bytes_read_without_a_write() {
        for (bytes, code) in [([0x7f, 0xff], 32_767), ([0x80, 0x00], -32_768), ([0xff, 0xff], -1)] {
            with(&[Transaction::read(ADDRESS, bytes.to_vec())], |converter| assert_eq!(converter.read(), Ok(code)));
        }
    }

    #[test]
    fn a_right_configuration_is_left_alone_whether_or_not_it_is_converting() {
        for high in [0x04, 0x84] {
            let expected =
                [Transaction::write_read(ADDRESS, vec![1], vec![high, 0xe0]), Transaction::write(ADDRESS, vec![0])];
            with(&expected, |converter| assert_eq!(converter.look_after(), Ok(Care::Healthy)));
        }
    }

    #[test]
    fn a_lost_configuration_is_written_again_and_told() {
        // The state after power-up: single-shot, 128 a second, which would pass for a plausible voltage for ever.
        let mut expected = vec![Transaction::write_read(ADDRESS, vec![1], vec![0x85, 0x83])];
        expected.extend(set_up());
        with(&expected, |converter| assert_eq!(converter.look_after(), Ok(Care::Repaired)));
    }

    #[test]
    fn a_chip_that_does_not_answer_is_an_error_and_not_a_voltage() {
        let refused = ErrorKind::NoAcknowledge(NoAcknowledgeSource::Address);
        let expected = [Transaction::read(ADDRESS, vec![0, 0]).with_error(refused)];
        with(&expected, |converter| assert_eq!(converter.read(), Err(refused)));
    }
}
