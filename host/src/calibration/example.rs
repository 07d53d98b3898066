//! The simulated bench's certificate: `host/examples/certificate.toml` is its text.

use jiff::{SignedDuration, Timestamp};
use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;

use super::{Certificate, IssueDetails, Point, Reference, assess, issue};

/// Volts per code and volts at code 0 of the invented divider: 10 x 20 megohm over 40 kilohm (K = 5001) before a
/// converter of 62.5 uV a code, and a second string of another ratio.
const SENSE: (f64, f64) = (5001.0 * 62.5e-6, 0.21);
const CROSS: (f64, f64) = (0.33, -0.34);

const STEPS: u32 = 10;
const STEP_VOLTS: f64 = 550.0;
const CYCLES: usize = 3;

/// Temperature coefficient and its standard uncertainty, ppm per kelvin.
const TEMPERATURE: (f64, f64) = (5.0, 3.0);

/// To 2031-12-31.
const VALID_DAYS: i64 = 2039;

/// The sealed certificate of the simulated bench, the same on every machine: what the procedure issues for its points.
pub fn example() -> Certificate {
    let points = points();
    let details = IssueDetails {
        bench: "Simulated bench".to_owned(),
        device: "5eed000000000001".to_owned(),
        simulated: true,
        operator: "Nobody: SIMULATED".to_owned(),
        reference: Reference {
            identity: "Invented reference divider and voltmeter, SIMULATED".to_owned(),
            certificate: "none, SIMULATED".to_owned(),
            u_ppm: 150.0,
            u_volts: 0.2,
        },
        issued: "2026-06-01".to_owned(),
        // Long, so that the demonstration does not expire under someone's hands; a real one has a year.
        valid_days: VALID_DAYS,
        drift_u_ppm_per_year: 60.0,
        accepted: None,
    };
    let issued = assess(&points, TEMPERATURE).map(|found| issue(&found, &points, &details));
    // Nothing here comes from outside: the points and details are fixed above, and a test reads the result back.
    issued.expect("the example's points carry a fit").expect("the example's points are accepted")
}

/// Three cycles of zero, ten steps up, nine down and zero.
fn points() -> Vec<Point> {
    let mut rng = ChaCha8Rng::seed_from_u64(0x5eed);
    let up = (1..=STEPS).map(|step| ("up", step));
    let down = (1..STEPS).rev().map(|step| ("down", step));
    let cycle: Vec<_> = [("zero", 0)].into_iter().chain(up).chain(down).chain([("zero", 0)]).collect();
    // 2026-06-01T08:00:00Z.
    let start = Timestamp::UNIX_EPOCH + SignedDuration::from_secs(1780300800);
    let plan = cycle.iter().cycle().take(CYCLES * cycle.len()).zip(0_i64..);
    plan.map(|(&(direction, step), index)| {
        point(&mut rng, start + SignedDuration::from_mins(2 * index), direction, step)
    })
    .collect()
}

fn point(rng: &mut ChaCha8Rng, time: Timestamp, direction: &str, step: u32) -> Point {
    // A supply set by hand does not stand on round numbers, except when it is off.
    let hand = if step == 0 { 0.0 } else { rng.random_range(-4.0..4.0) };
    let volts = libm::round(10.0 * (STEP_VOLTS * f64::from(step) + hand)) / 10.0;
    let code = |rng: &mut ChaCha8Rng, (slope, offset): (f64, f64)| {
        // Three uniform numbers: near enough to a bell of 0.12 V, and no transcendental function in it.
        let scatter: f64 = (0..3).map(|_| rng.random_range(-0.12..0.12)).sum();
        libm::round(1e3 * (volts + scatter - offset) / slope) / 1e3
    };
    Point {
        time_utc: time.to_string(),
        direction: direction.to_owned(),
        reference_volts: volts,
        sense_code: code(rng, SENSE),
        cross_code: code(rng, CROSS),
        enclosure_celsius: Some(23.0),
        left_out: None,
    }
}
