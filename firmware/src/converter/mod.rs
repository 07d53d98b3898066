//! Converter drivers on embedded-hal traits: the seam where another part takes the place of the default one.

pub mod ads1115;

use crate::io::Channel;

/// What a driver found when it looked after its converter.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Care {
    /// All is as it should be.
    Healthy,
    /// The configuration read back wrong and was written again: what is in flight is not to be trusted.
    Repaired,
}

/// A converter that runs by itself and tells by a pin when a conversion is complete.
pub trait Converter {
    /// What goes wrong on its bus.
    type Error;

    /// Which sense it belongs to.
    fn channel(&self) -> Channel;

    /// Puts it into its running state.
    ///
    /// # Errors
    /// When the bus or the chip does not answer as it should.
    fn set_up(&mut self) -> Result<(), Self::Error>;

    /// Reads the conversion that the ready pin announced.
    ///
    /// # Errors
    /// When the bus or the chip does not answer as it should.
    fn read(&mut self) -> Result<i16, Self::Error>;

    /// Reads the configuration back, and writes it again where it is wrong. About once a second.
    ///
    /// # Errors
    /// When the bus or the chip does not answer as it should.
    fn look_after(&mut self) -> Result<Care, Self::Error>;
}
