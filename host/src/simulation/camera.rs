//! The camera: when it exposes, what it claims, and what the tube showed meanwhile.

use std::collections::VecDeque;

use rand_chacha::ChaCha8Rng;

use super::draw::{normal, stream};

/// How the camera behaves.
#[derive(Clone, Debug, PartialEq)]
pub struct CameraSetup {
    /// Time from frame to frame, seconds.
    pub period_seconds: f64,
    /// Exposure, seconds.
    pub exposure_seconds: f64,
    /// Scatter of the true start about the stated one, seconds (standard deviation).
    pub start_scatter_seconds: f64,
    /// After a change the screen still shows the old picture for so long, seconds.
    pub settle_seconds: f64,
}

impl Default for CameraSetup {
    fn default() -> Self {
        Self { period_seconds: 0.4, exposure_seconds: 0.2, start_scatter_seconds: 1e-3, settle_seconds: 0.3 }
    }
}

/// What is really true of one frame.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct ShotTruth {
    /// Start of the exposure, nanoseconds of true time.
    pub start_ns: i64,
    /// Its end.
    pub end_ns: i64,
    /// Mean true accelerating voltage over it, volts.
    pub volts: f64,
    /// Whether a disturbance was planted in it or shortly before.
    pub disturbed: bool,
}

/// One frame, ready to be drawn.
#[derive(Clone, Debug, PartialEq)]
pub struct Shot {
    /// Its name: the file's stem.
    pub name: String,
    /// Number, from 1.
    pub number: u64,
    /// Start the camera claims, nanoseconds of true time.
    pub stated_start_ns: i64,
    /// Exposure the camera claims, seconds.
    pub stated_exposure_seconds: f64,
    /// Voltages over the exposure, evenly spread, volts: a picture is the mean of theirs.
    pub voltages: Vec<f64>,
    /// What is really true.
    pub truth: ShotTruth,
}

/// An exposure under way or ahead.
#[derive(Clone, Debug)]
struct Exposing {
    number: u64,
    stated_start_ns: i64,
    start_ns: i64,
    end_ns: i64,
    volt_ns: f64,
    voltages: Vec<f64>,
    next_voltage_ns: i64,
}

/// Voltages kept of one exposure.
const VOLTAGES: i64 = 25;

/// The camera.
#[derive(Clone, Debug)]
pub(super) struct Camera {
    setup: CameraSetup,
    next_ns: Option<i64>,
    number: u64,
    exposing: VecDeque<Exposing>,
    last_disturbed_ns: i64,
    rng: ChaCha8Rng,
}

impl Camera {
    pub(super) fn new(setup: CameraSetup, seed: u64) -> Self {
        let rng = stream(seed, 6);
        Self { setup, next_ns: None, number: 0, exposing: VecDeque::new(), last_disturbed_ns: i64::MIN / 2, rng }
    }

    pub(super) fn start(&mut self, now_ns: i64) {
        self.next_ns = Some(now_ns + 10_000_000);
    }

    pub(super) fn stop(&mut self) {
        self.next_ns = None;
    }

    /// Something was planted at this time.
    pub(super) fn disturb(&mut self, now_ns: i64) {
        self.last_disturbed_ns = now_ns;
    }

    /// Lets a step pass in which the tube had this mean voltage; gives the frame that was completed in it.
    pub(super) fn pass(&mut self, from_ns: i64, to_ns: i64, volts: f64) -> Option<Shot> {
        self.plan(to_ns);
        for exposing in &mut self.exposing {
            let overlap = to_ns.min(exposing.end_ns) - from_ns.max(exposing.start_ns);
            if overlap > 0 {
                exposing.volt_ns += volts * overlap as f64;
                if to_ns >= exposing.next_voltage_ns {
                    exposing.voltages.push(volts);
                    exposing.next_voltage_ns += (exposing.end_ns - exposing.start_ns) / VOLTAGES;
                }
            }
        }
        let done = self.exposing.front().is_some_and(|exposing| exposing.end_ns <= to_ns);
        done.then(|| self.exposing.pop_front()).flatten().map(|exposing| self.finish(exposing))
    }

    fn plan(&mut self, now_ns: i64) {
        let Some(stated_start_ns) = self.next_ns.filter(|next| *next <= now_ns + 50_000_000) else { return };
        self.next_ns = Some(stated_start_ns + (self.setup.period_seconds * 1e9) as i64);
        self.number += 1;
        // Beyond four standard deviations a camera would not be called that good.
        let scatter = normal(&mut self.rng, self.setup.start_scatter_seconds)
            .clamp(-4.0 * self.setup.start_scatter_seconds, 4.0 * self.setup.start_scatter_seconds);
        let start_ns = stated_start_ns + (scatter * 1e9) as i64;
        self.exposing.push_back(Exposing {
            number: self.number,
            stated_start_ns,
            start_ns,
            end_ns: start_ns + (self.setup.exposure_seconds * 1e9) as i64,
            volt_ns: 0.0,
            voltages: Vec::new(),
            next_voltage_ns: start_ns,
        });
    }

    fn finish(&self, exposing: Exposing) -> Shot {
        let length_ns = (exposing.end_ns - exposing.start_ns) as f64;
        let settle_ns = (self.setup.settle_seconds * 1e9) as i64;
        // The stated start may lie a little before the true one, and so what it is judged by.
        let judged_from = exposing.start_ns.min(exposing.stated_start_ns) - settle_ns;
        Shot {
            name: format!("frame{:05}", exposing.number),
            number: exposing.number,
            stated_start_ns: exposing.stated_start_ns,
            stated_exposure_seconds: self.setup.exposure_seconds,
            truth: ShotTruth {
                start_ns: exposing.start_ns,
                end_ns: exposing.end_ns,
                volts: exposing.volt_ns / length_ns,
                disturbed: self.last_disturbed_ns >= judged_from,
            },
            voltages: exposing.voltages,
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn shots(volts: impl Fn(f64) -> f64) -> Vec<Shot> {
        let mut camera = Camera::new(CameraSetup::default(), 3);
        camera.start(0);
        let step = 250_000;
        (0..12_000)
            .filter_map(|index: i64| {
                camera.pass(index * step, (index + 1) * step, volts((index as f64 + 0.5) * 250e-6))
            })
            .collect()
    }

    #[test]
    fn the_truth_of_a_ramp_is_its_middle() {
        let shots = shots(|t| 2_500.0 + 100.0 * t);
        assert!(shots.len() >= 6);
        for shot in shots {
            let middle = (shot.truth.start_ns + shot.truth.end_ns) as f64 * 0.5e-9;
            assert!((shot.truth.volts - (2_500.0 + 100.0 * middle)).abs() < 1e-3, "{shot:?}");
            assert!(!shot.truth.disturbed);
        }
    }
}
