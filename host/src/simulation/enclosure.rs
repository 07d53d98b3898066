//! The divider's enclosure: its temperature, and the slow inputs that tell it and the beam current.

use rand_chacha::ChaCha8Rng;

use super::draws::{Part, normal, stream, within};

/// Beam current per volt, amperes: about 50 uA at 4 kV.
const BEAM_PER_VOLT: f64 = 12.5e-9;
/// Correlation time of the wander, seconds.
const WANDER_S: f64 = 1_200.0;
/// Standard deviation of the wander, kelvin.
const WANDER_K: f64 = 0.25;
/// A new temperature is approached with this time constant, seconds.
const THERMAL_S: f64 = 300.0;

/// Temperature and slow inputs.
#[derive(Clone, Debug)]
pub struct Enclosure {
    rng: ChaCha8Rng,
    room_celsius: f64,
    body_celsius: f64,
    wander_kelvin: f64,
    sensor_off_kelvin: f64,
    beam_scale: f64,
}

impl Enclosure {
    /// In a room of this temperature, degrees Celsius.
    pub(super) fn new(seed: u64, room_celsius: f64) -> Self {
        let mut rng = stream(seed, Part::Enclosure);
        let sensor_off_kelvin = within(&mut rng, 0.1);
        let body_celsius = room_celsius + within(&mut rng, 0.5);
        let wander_kelvin = WANDER_K * normal(&mut rng);
        let beam_scale = 1.0 + within(&mut rng, 0.1);
        Self { rng, room_celsius: body_celsius, body_celsius, wander_kelvin, sensor_off_kelvin, beam_scale }
    }

    /// A new room temperature, which the body follows slowly.
    pub(super) fn set_room(&mut self, celsius: f64) {
        self.room_celsius = celsius;
    }

    /// One second passes.
    pub(super) fn second(&mut self) {
        self.body_celsius += (self.room_celsius - self.body_celsius) / THERMAL_S;
        let kick = WANDER_K * libm::sqrt(2.0 / WANDER_S) * normal(&mut self.rng);
        self.wander_kelvin += kick - self.wander_kelvin / WANDER_S;
    }

    /// True temperature of the strings, degrees Celsius.
    pub fn celsius(&self) -> f64 {
        self.body_celsius + self.wander_kelvin
    }

    /// What the sensor tells, hundredths of a degree.
    pub(super) fn sensor_centicelsius(&self) -> i16 {
        libm::rint(100.0 * (self.celsius() + self.sensor_off_kelvin)) as i16
    }

    /// Beam current at a voltage, amperes.
    pub fn beam_amperes(&self, volts: f64) -> f64 {
        BEAM_PER_VOLT * self.beam_scale * volts.max(0.0)
    }

    /// What the beam meter tells, nanoamperes; its noise is half a per cent.
    pub(super) fn beam_na(&mut self, volts: f64) -> i32 {
        let noise = 1.0 + 0.005 * normal(&mut self.rng);
        libm::rint(self.beam_amperes(volts) * noise * 1e9) as i32
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn temperature_stays_near_the_room_and_follows_it_slowly() {
        let mut enclosure = Enclosure::new(4, 23.0);
        for _ in 0..3_600 {
            enclosure.second();
            assert!((enclosure.celsius() - 23.0).abs() < 1.8);
        }
        enclosure.set_room(30.0);
        enclosure.second();
        assert!(enclosure.celsius() < 26.0);
        for _ in 0..3_000 {
            enclosure.second();
        }
        assert!((enclosure.celsius() - 30.0).abs() < 1.5);
        assert!((f64::from(enclosure.sensor_centicelsius()) / 100.0 - enclosure.celsius()).abs() < 0.11);
    }

    #[test]
    fn the_beam_follows_the_voltage() {
        let mut enclosure = Enclosure::new(4, 23.0);
        assert_eq!(enclosure.beam_na(0.0), 0);
        assert!((44_000..56_000).contains(&enclosure.beam_na(4_000.0)));
    }
}
