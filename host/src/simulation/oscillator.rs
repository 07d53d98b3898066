//! The controller's crystal: what its microsecond clock shows at a true time.

use super::draws::{Part, stream, within};

/// A crystal is off by up to this when new, ppm (usual grade of a board's crystal, common practice).
const SKEW_PPM: f64 = 30.0;
/// And by so much per kelvin near room temperature, ppm (common practice, no source).
const PPM_PER_KELVIN: f64 = 0.4;

/// A clock that runs at its own rate, in stretches of constant rate.
#[derive(Clone, Debug)]
pub struct DeviceClock {
    anchor_ns: i64,
    anchor_us: f64,
    us_per_ns: f64,
    skew_ppm: f64,
}

impl DeviceClock {
    /// The crystal that this seed gives; it starts at zero at `boot_ns`.
    pub(super) fn new(seed: u64, boot_ns: i64) -> Self {
        let skew_ppm = within(&mut stream(seed, Part::Oscillator), SKEW_PPM);
        Self { anchor_ns: boot_ns, anchor_us: 0.0, us_per_ns: rate(skew_ppm), skew_ppm }
    }

    /// The same crystal, started anew at `boot_ns`.
    pub(super) fn restart(&mut self, boot_ns: i64) {
        self.anchor_ns = boot_ns;
        self.anchor_us = 0.0;
    }

    /// Follows the temperature, given as kelvin above the calibration's; from now on only.
    pub(super) fn retune(&mut self, now_ns: i64, kelvin: f64) {
        self.anchor_us = self.exact_us(now_ns);
        self.anchor_ns = now_ns;
        self.us_per_ns = rate(self.skew_ppm + PPM_PER_KELVIN * kelvin);
    }

    fn exact_us(&self, true_ns: i64) -> f64 {
        self.anchor_us + (true_ns - self.anchor_ns) as f64 * self.us_per_ns
    }

    /// Whole microseconds since power-up at a true time, nanoseconds.
    pub fn device_us(&self, true_ns: i64) -> u64 {
        self.exact_us(true_ns).max(0.0) as u64
    }

    /// The first true nanosecond at which the clock shows `device_us`, at the present rate.
    pub fn true_ns(&self, device_us: u64) -> i64 {
        let mut true_ns = self.anchor_ns + libm::ceil((device_us as f64 - self.anchor_us) / self.us_per_ns) as i64;
        // Rounding may leave it a nanosecond short, and a poll that comes too early would come again and again.
        while self.device_us(true_ns) < device_us {
            true_ns += 1;
        }
        true_ns
    }

    /// How fast it runs against true time, ppm.
    #[cfg(test)]
    fn rate_ppm(&self) -> f64 {
        (self.us_per_ns * 1e3 - 1.0) * 1e6
    }
}

fn rate(ppm: f64) -> f64 {
    1e-3 * (1.0 + 1e-6 * ppm)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_clock_is_off_by_its_skew_and_never_steps() {
        let mut clock = DeviceClock::new(7, 0);
        let ppm = clock.rate_ppm();
        assert!(ppm.abs() <= SKEW_PPM && ppm != 0.0);
        let hour_ns = 3_600_000_000_000;
        assert!((clock.device_us(hour_ns) as f64 - 3.6e9 * (1.0 + ppm * 1e-6)).abs() < 2.0);
        let before = clock.device_us(hour_ns);
        clock.retune(hour_ns, 5.0);
        assert!(clock.device_us(hour_ns) - before <= 1);
        assert!((clock.rate_ppm() - ppm - 5.0 * PPM_PER_KELVIN).abs() < 1e-6);
    }

    #[test]
    fn a_device_time_is_reached_when_it_says() {
        let clock = DeviceClock::new(8, 123);
        for us in [0, 1, 499, 500, 12_345_678_901] {
            let at = clock.true_ns(us);
            assert!(clock.device_us(at) == us && (us == 0 || clock.device_us(at - 1) == us - 1), "{us}");
        }
    }
}
