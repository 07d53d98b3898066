//! The simulated bench's certificate: `host/examples/certificate.toml` is its text.

use jiff::{SignedDuration, Timestamp};
use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;

use super::{Certificate, ChannelFit, Conditions, Point, Reference, Stability};

/// Volts per code and volts at code 0 of the invented divider: 10 x 20 megohm over 40 kilohm (K = 5001) before a
/// converter of 62.5 uV a code, and a second string of another ratio.
const SENSE: (f64, f64) = (5001.0 * 62.5e-6, 0.21);
const CROSS: (f64, f64) = (0.33, -0.34);

const STEPS: u32 = 10;
const STEP_VOLTS: f64 = 550.0;
const CYCLES: usize = 3;

/// The sealed certificate of the simulated bench, the same on every machine.
pub fn example() -> Certificate {
    let points = points();
    let mut certificate = Certificate {
        schema: 1,
        hash: String::new(),
        simulated: true,
        bench: "Simulated bench".to_owned(),
        device: "5eed000000000001".to_owned(),
        issued: "2026-06-01".to_owned(),
        // Long, so that the demonstration does not expire under someone's hands; a real one has a year.
        valid_until: "2031-12-31".to_owned(),
        operator: "Nobody: SIMULATED".to_owned(),
        remarks: Vec::new(),
        reference: Reference {
            identity: "Invented reference divider and voltmeter, SIMULATED".to_owned(),
            certificate: "none, SIMULATED".to_owned(),
            u_ppm: 150.0,
            u_volts: 0.2,
        },
        conditions: Conditions {
            ambient_celsius: 23.0,
            ambient_min_celsius: 18.0,
            ambient_max_celsius: 28.0,
            volts_min: 0.0,
            volts_max: STEP_VOLTS * f64::from(STEPS),
        },
        stability: Stability {
            temperature_ppm_per_kelvin: 5.0,
            temperature_u_ppm_per_kelvin: 3.0,
            drift_u_ppm_per_year: 60.0,
        },
        sense: straight_line(points.iter().map(|point| (point.sense_code, point.reference_volts)).collect()),
        cross: straight_line(points.iter().map(|point| (point.cross_code, point.reference_volts)).collect()),
        points,
    };
    certificate.seal();
    certificate
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

/// Ordinary least squares of volts on code. The procedure's own fit gives the same, which a test checks.
fn straight_line(points: Vec<(f64, f64)>) -> ChannelFit {
    let count = points.len() as f64;
    let mean = |part: fn(&(f64, f64)) -> f64| points.iter().map(part).sum::<f64>() / count;
    let (mean_code, mean_volts) = (mean(|point| point.0), mean(|point| point.1));
    let square: f64 = points.iter().map(|(code, _)| (code - mean_code) * (code - mean_code)).sum();
    let product: f64 = points.iter().map(|(code, volts)| (code - mean_code) * (volts - mean_volts)).sum();
    let slope = product / square;
    let offset = mean_volts - slope * mean_code;
    let residual = |(code, volts): &(f64, f64)| volts - offset - slope * code;
    let variance = points.iter().map(|point| residual(point) * residual(point)).sum::<f64>() / (count - 2.0);
    let slope_variance = variance / square;
    let (cross, offset_variance) =
        (-mean_code * slope_variance, variance / count + mean_code * mean_code * slope_variance);
    let codes = points.iter().map(|(code, _)| *code);
    ChannelFit {
        coefficients: [offset, slope, 0.0],
        covariance: [[offset_variance, cross, 0.0], [cross, slope_variance, 0.0], [0.0; 3]],
        residual_volts: libm::sqrt(variance),
        hysteresis_fraction: 0.0,
        code_min: libm::floor(codes.clone().fold(f64::INFINITY, f64::min)) as i16,
        code_max: libm::ceil(codes.fold(f64::NEG_INFINITY, f64::max)) as i16,
    }
}
