//! Beam current and enclosure temperature on the processor's own converter.
//!
//! That converter is good for about 9 bits (an independent measurement of it; its non-linearity is 0.2 % of full scale), so
//! nothing that is stamped on a frame is measured with it: these two only warn, and explain.

use ringvolt_firmware::io::OptionalInputs;
use rp2040_hal::adc::{Adc, AdcPin};
use rp2040_hal::gpio::{
    FunctionNull, Pin, PullNone,
    bank0::{Gpio26, Gpio27},
};

use crate::pins::Fitted;

type Analog<I> = AdcPin<Pin<I, FunctionNull, PullNone>>;

/// How often the two are measured, microseconds.
const INTERVAL_US: u64 = 10_000;

/// The converter's reference, millivolts, and its number of codes.
const REFERENCE_MV: i64 = 3_300;
const CODES: i64 = 4_096;

/// Beam current is the drop across this shunt in the earthed lead, ohms: 330 uA at full scale.
const SHUNT_OHMS: i64 = 10_000;

/// The temperature sensor gives 10 mV a degree and 750 mV at 25 degrees Celsius (a common three-pin part).
const SENSOR_MV_AT_25: i64 = 750;

/// The optional inputs.
pub struct Slow {
    adc: Adc,
    beam: Analog<Gpio26>,
    temperature: Analog<Gpio27>,
    fitted: Fitted,
    next_us: u64,
    latest: OptionalInputs,
}

impl Slow {
    /// Takes the converter and its two pins.
    pub fn new(adc: Adc, beam: Analog<Gpio26>, temperature: Analog<Gpio27>, fitted: Fitted) -> Self {
        Self { adc, beam, temperature, fitted, next_us: 0, latest: OptionalInputs::default() }
    }

    /// The inputs as they are; the two analog ones a hundred times a second, the comparator's level as given.
    pub fn inputs(&mut self, now_us: u64, comparator: bool) -> OptionalInputs {
        if now_us >= self.next_us {
            self.next_us = now_us + INTERVAL_US;
            if self.fitted.beam {
                self.latest.beam_na = self.adc.read(&mut self.beam).ok().map(beam_na);
            }
            if self.fitted.temperature {
                self.latest.enclosure_centicelsius =
                    self.adc.read(&mut self.temperature).ok().and_then(enclosure_centicelsius);
            }
        }
        self.latest.comparator = self.fitted.comparator.then_some(comparator);
        self.latest
    }
}

fn beam_na(code: u16) -> i32 {
    // 1 mV over an ohm is a million nanoamperes; the result stays below 330 000.
    (i64::from(code) * REFERENCE_MV * 1_000_000 / (CODES * SHUNT_OHMS)) as i32
}

/// `None` where the sensor's line is at either end: not connected.
fn enclosure_centicelsius(code: u16) -> Option<i16> {
    let millivolts = i64::from(code) * REFERENCE_MV / CODES;
    let centicelsius = (millivolts - SENSOR_MV_AT_25) * 10 + 2_500;
    i16::try_from(centicelsius).ok().filter(|value| (-4_000..=12_500).contains(value))
}
