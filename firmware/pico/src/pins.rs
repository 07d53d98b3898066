//! What the controller drives, and how the optional inputs are fitted.
//!
//! | pin | signal | level meaning |
//! | --- | --- | --- |
//! | GP16 | permit | only its changing means permit: the charge pump behind it needs about 1 kHz |
//! | GP17 | sync lamp | high: lit |
//! | GP18 | HV PRESENT lamp | high: dark. Low, floating or a dead board light it |
//! | GP20, GP21, GP22 | beam current, temperature, comparator fitted | jumper to ground: fitted. No jumper: not evaluated |
//! | GP25 | status LED | high: lit |
//!
//! The inputs are in [`crate::edges`]; the two buses are GP4, GP5 (sense) and GP6, GP7 (cross-sense); the UART is GP0, GP1.

use embedded_hal::digital::{InputPin, OutputPin};
use ringvolt_firmware::io::Outputs;
use rp2040_hal::gpio::{
    FunctionSioInput, FunctionSioOutput, Pin, PullDown, PullUp,
    bank0::{Gpio16, Gpio17, Gpio18, Gpio20, Gpio21, Gpio22, Gpio25},
};

type Output<I> = Pin<I, FunctionSioOutput, PullDown>;
type Strap<I> = Pin<I, FunctionSioInput, PullUp>;

/// The pins the controller drives.
pub struct Driven {
    /// GP16.
    pub permit: Output<Gpio16>,
    /// GP17.
    pub lamp: Output<Gpio17>,
    /// GP18.
    pub hv_lamp_dark: Output<Gpio18>,
    /// GP25.
    pub led: Output<Gpio25>,
}

impl Driven {
    /// Puts a completed poll's outputs on the pins. The only place that writes the permit.
    pub fn apply(&mut self, outputs: &Outputs) {
        // The HAL's pins cannot fail.
        let _ = self.permit.set_state(outputs.permit.into());
        let _ = self.hv_lamp_dark.set_state(outputs.hv_lamp_dark.into());
        let _ = self.lamp.set_state(outputs.lamp.into());
        let _ = self.led.set_state(outputs.led.into());
    }
}

/// Which optional inputs the jumpers say are fitted.
#[derive(Clone, Copy, Debug)]
pub struct Fitted {
    /// Beam current on GP26.
    pub beam: bool,
    /// Enclosure temperature on GP27.
    pub temperature: bool,
    /// Over-voltage comparator on GP15.
    pub comparator: bool,
}

impl Fitted {
    /// Reads the jumpers.
    pub fn read(mut beam: Strap<Gpio20>, mut temperature: Strap<Gpio21>, mut comparator: Strap<Gpio22>) -> Self {
        // A few microseconds for the pull-ups against the jumper wires' capacitance.
        cortex_m::asm::delay(12_500);
        Self {
            beam: beam.is_low().unwrap_or(false),
            temperature: temperature.is_low().unwrap_or(false),
            comparator: comparator.is_low().unwrap_or(false),
        }
    }
}
