use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;

use super::*;

const UTC_LESS_MONO: i64 = 1_700_000_000_000_000_000;

/// The true way from device to host time: rate error and a drift of the rate with temperature.
struct Truth {
    rate: f64,
    rate_change: f64,
    swing_seconds: f64,
}

impl Truth {
    fn mono_ns(&self, device_s: f64) -> i64 {
        let phase = std::f64::consts::TAU * device_s / self.swing_seconds;
        let wander = self.rate_change * self.swing_seconds / std::f64::consts::TAU * (1.0 - phase.cos());
        ((device_s + self.rate * device_s + wander) * 1e9) as i64 + 77_000_000_000
    }
}

/// USB-like one-way delay, seconds: the polling interval, and now and then a burst.
fn delay(rng: &mut ChaCha8Rng, least: f64) -> f64 {
    let polling = rng.random_range(0.0..1e-3);
    let burst = if rng.random_bool(0.05) { rng.random_range(0.0..50e-3) } else { 0.0 };
    least + polling + burst
}

fn exchanges(truth: &Truth, seconds: f64, rng: &mut ChaCha8Rng) -> Vec<Exchange> {
    let (least_out, least_back) = (0.1e-3 + rng.random_range(0.0..0.4e-3), 0.1e-3 + rng.random_range(0.0..0.4e-3));
    let mut device_s = 0.3;
    let mut out = Vec::new();
    while device_s < seconds {
        let received = device_s;
        let sent = received + 20e-6;
        out.push(Exchange {
            asked_mono_ns: truth.mono_ns(received) - (delay(rng, least_out) * 1e9) as i64,
            answered_mono_ns: truth.mono_ns(sent) + (delay(rng, least_back) * 1e9) as i64,
            // The controller rounds down to its microsecond.
            received_us: (received * 1e6) as u64,
            sent_us: (sent * 1e6) as u64,
            utc_less_mono_ns: UTC_LESS_MONO,
        });
        device_s += 0.25 + rng.random_range(0.0..0.01);
    }
    out
}

/// Issue figures: error below 0.3 ms RMS and 1 ms at worst after 30 s, and the bound never broken, with delays polled at
/// 1 ms, bursts to 50 ms, least delays that differ by up to 0.4 ms, 50 ppm and 10 ppm of temperature swing.
#[test]
fn error_and_bound_hold_over_a_thousand_benches() {
    let mut rng = ChaCha8Rng::seed_from_u64(20);
    let (mut sum, mut count, mut worst) = (0.0, 0u32, 0i64);
    for _ in 0..1_000 {
        let truth = Truth {
            rate: rng.random_range(-50e-6..50e-6),
            rate_change: rng.random_range(-10e-6..10e-6),
            swing_seconds: rng.random_range(3_600.0..20_000.0),
        };
        let map = ClockMap::new(&exchanges(&truth, 120.0, &mut rng), MapLimits::default()).unwrap();
        for _ in 0..20 {
            let device_us = rng.random_range(0u64..125_000_000);
            let instant = map.utc(device_us).unwrap();
            let error = instant.utc_ns - UTC_LESS_MONO - truth.mono_ns(device_us as f64 * 1e-6);
            assert!(error.abs() <= instant.bound_ns, "{error} ns against a bound of {} ns", instant.bound_ns);
            if (30_000_000..115_000_000).contains(&device_us) {
                sum += (error as f64).powi(2);
                count += 1;
                worst = worst.max(error.abs());
            }
        }
    }
    let rms_ms = (sum / f64::from(count)).sqrt() * 1e-6;
    println!("clock map: {rms_ms:.3} ms RMS, {:.3} ms at worst over {count} instants", worst as f64 * 1e-6);
    assert!(rms_ms < 0.3);
    assert!(worst < 1_000_000);
}

#[test]
fn the_way_back_meets_the_way_there() {
    let mut rng = ChaCha8Rng::seed_from_u64(3);
    let truth = Truth { rate: 40e-6, rate_change: 5e-6, swing_seconds: 5_000.0 };
    let map = ClockMap::new(&exchanges(&truth, 300.0, &mut rng), MapLimits::default()).unwrap();
    for device_us in [0, 10_000_000, 150_000_001, 290_000_000] {
        let utc = map.utc(device_us).unwrap().utc_ns;
        assert!(map.device_us(utc).unwrap().abs_diff(device_us) <= 2);
    }
}

#[test]
fn one_exchange_is_enough_for_an_honest_bound_nearby() {
    let exchange = Exchange {
        asked_mono_ns: 1_000_000,
        answered_mono_ns: 5_000_000,
        received_us: 500,
        sent_us: 510,
        utc_less_mono_ns: 0,
    };
    let map = ClockMap::new(&[exchange], MapLimits::default()).unwrap();
    let near = map.utc(505).unwrap();
    assert!(near.bound_ns >= 1_990_000 && near.bound_ns < 2_100_000, "{near:?}");
    // A hundred seconds on, the crystals may have parted by 20 ms.
    let far = map.utc(100_000_505).unwrap();
    assert!(far.bound_ns > 20_000_000);
    assert_eq!(map.utc(10_000_000_000), None);
}

#[test]
fn a_step_of_the_hosts_utc_is_followed_at_the_exchange() {
    let mut rng = ChaCha8Rng::seed_from_u64(4);
    let truth = Truth { rate: 0.0, rate_change: 0.0, swing_seconds: 1e4 };
    let mut exchanges = exchanges(&truth, 100.0, &mut rng);
    for exchange in exchanges.iter_mut().filter(|exchange| exchange.received_us > 50_000_000) {
        exchange.utc_less_mono_ns += 2_000_000_000;
    }
    let map = ClockMap::new(&exchanges, MapLimits::default()).unwrap();
    let step = |us| map.utc(us).unwrap().utc_ns - UTC_LESS_MONO - truth.mono_ns(us as f64 * 1e-6);
    assert!(step(20_000_000).abs() < 1_000_000);
    assert!((step(80_000_000) - 2_000_000_000).abs() < 1_000_000);
}

#[test]
fn impossible_exchanges_are_left_out() {
    let backwards =
        Exchange { asked_mono_ns: 10, answered_mono_ns: 5, received_us: 9, sent_us: 3, utc_less_mono_ns: 0 };
    assert!(ClockMap::new(&[backwards], MapLimits::default()).is_none());
    assert!(ClockMap::new(&[], MapLimits::default()).is_none());
    let absurd = Exchange { received_us: u64::MAX - 1, sent_us: u64::MAX, answered_mono_ns: 20, ..backwards };
    assert!(ClockMap::new(&[absurd], MapLimits::default()).is_none());
}
