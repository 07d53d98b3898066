//! The exposure under way: what the camera's sensor and the bench's judge gather of it.

use std::collections::{BTreeMap, VecDeque};

use super::camera::{CameraSetup, Exposed, Light, Shot, ShotTruth};

/// Share of the light that the screen gives off later.
const AFTERGLOW_SHARE: f64 = 0.04;
/// Its time constant, seconds.
const AFTERGLOW_SECONDS: f64 = 0.07;
/// How far back light is remembered, nanoseconds.
const REMEMBERED_NS: i64 = 500_000_000;
/// An exposure longer than this is drawn from its end only, nanoseconds.
const LONGEST_NS: i64 = 60_000_000_000;
/// Voltages closer than this are one, relative.
const SAME_VOLTS: f64 = 5e-5;
/// Below this a beam leaves no light worth drawing, volts.
const DARK_VOLTS: f64 = 300.0;

/// Gathers.
#[derive(Clone, Debug, Default)]
pub(super) struct Exposing {
    opened_ns: i64,
    integral: f64,
    samples: VecDeque<(i64, f64)>,
    lamp_lit: bool,
    lamp_since_ns: i64,
    lamp_ns: i64,
    lamp_at_open_ns: i64,
}

impl Exposing {
    /// The voltage at a time, at even distances.
    pub fn sample(&mut self, now_ns: i64, volts: f64) {
        self.samples.push_back((now_ns, volts));
        let kept_from_ns = self.opened_ns.max(now_ns - LONGEST_NS) - REMEMBERED_NS;
        while self.samples.front().is_some_and(|(at_ns, _)| *at_ns < kept_from_ns) {
            self.samples.pop_front();
        }
    }

    /// The sync lamp's level from now on.
    pub fn set_lamp(&mut self, now_ns: i64, lit: bool) {
        self.lamp_ns = self.lamp_until(now_ns);
        self.lamp_since_ns = now_ns;
        self.lamp_lit = lit;
    }

    fn lamp_until(&self, now_ns: i64) -> i64 {
        self.lamp_ns + if self.lamp_lit { now_ns - self.lamp_since_ns } else { 0 }
    }

    /// The shutter opens; `integral` is that of the voltage up to now, volt seconds.
    pub fn open(&mut self, now_ns: i64, integral: f64) {
        self.opened_ns = now_ns;
        self.integral = integral;
        self.lamp_at_open_ns = self.lamp_until(now_ns);
    }

    /// The shutter has closed.
    pub fn close(&self, exposed: &Exposed, integral: f64, setup: &CameraSetup, last_disturbed_ns: i64) -> Shot {
        let length_ns = exposed.end_ns - exposed.start_ns;
        // The stated start may lie a little before the true one, and so what the frame is judged by.
        let judged_from_ns = exposed.start_ns.min(exposed.stated_start_ns) - (setup.settle_seconds * 1e9) as i64;
        Shot {
            name: format!("frame{:05}", exposed.number),
            number: exposed.number,
            stated_start_ns: exposed.stated_start_ns,
            stated_exposure_seconds: setup.exposure_seconds,
            light: self.light(exposed.start_ns, exposed.end_ns),
            lamp: (self.lamp_until(exposed.end_ns) - self.lamp_at_open_ns) as f64 / length_ns as f64,
            truth: ShotTruth {
                start_ns: exposed.start_ns,
                end_ns: exposed.end_ns,
                volts: (integral - self.integral) / (length_ns as f64 * 1e-9),
                disturbed: last_disturbed_ns >= judged_from_ns,
            },
        }
    }

    /// Direct light of the exposure, and the afterglow of what was before and in it.
    fn light(&self, start_ns: i64, end_ns: i64) -> Vec<Light> {
        let mut sums: BTreeMap<i64, (f64, f64)> = BTreeMap::new();
        let spacing = self.spacing_seconds();
        let seconds = (end_ns - start_ns) as f64 * 1e-9;
        for (at_ns, volts) in self.samples.iter().filter(|(at_ns, volts)| *at_ns <= end_ns && *volts > DARK_VOLTS) {
            let direct = if *at_ns > start_ns { 1.0 - AFTERGLOW_SHARE } else { 0.0 };
            let since = |from_ns: i64| ((from_ns - at_ns) as f64 * 1e-9 / AFTERGLOW_SECONDS).max(0.0);
            let later = AFTERGLOW_SHARE * (libm::exp(-since(start_ns)) - libm::exp(-since(end_ns)));
            let share = (direct + later) * spacing / seconds;
            let sum = sums.entry((libm::log(*volts) / SAME_VOLTS) as i64).or_default();
            sum.0 += share;
            sum.1 += share * volts;
        }
        sums.into_values()
            .filter(|(share, _)| *share > 1e-5)
            .map(|(share, product)| Light { volts: product / share, share })
            .collect()
    }

    fn spacing_seconds(&self) -> f64 {
        match (self.samples.front(), self.samples.back()) {
            (Some((first, _)), Some((last, _))) if last > first => {
                (last - first) as f64 * 1e-9 / (self.samples.len() - 1) as f64
            }
            _ => 0.0,
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    const SECOND: i64 = 1_000_000_000;

    fn exposed(start_ns: i64, end_ns: i64) -> Exposed {
        Exposed { number: 1, start_ns, end_ns, stated_start_ns: start_ns }
    }

    /// Samples every 2 ms for two seconds.
    fn gather(volts: impl Fn(f64) -> f64) -> Exposing {
        let mut exposing = Exposing::default();
        for index in 0..1_000 {
            if index == 500 {
                exposing.open(SECOND, 0.0);
            }
            exposing.sample(index * 2_000_000, volts(index as f64 * 0.002));
        }
        exposing
    }

    #[test]
    fn steady_light_is_one_line_of_full_share() {
        let light = gather(|_| 3_000.0).light(SECOND, SECOND + 200_000_000);
        assert_eq!(light.len(), 1);
        assert!((light[0].share - 1.0).abs() < 0.01 && (light[0].volts - 3_000.0).abs() < 1e-6, "{light:?}");
    }

    #[test]
    fn a_step_before_the_exposure_leaves_an_afterglow() {
        let light = gather(|t| if t < 0.95 { 4_000.0 } else { 3_000.0 }).light(SECOND, SECOND + 200_000_000);
        assert_eq!(light.len(), 2);
        let old = light[1];
        // All that was before: share times tau / exposure, less what faded in 50 ms.
        let expected = AFTERGLOW_SHARE * AFTERGLOW_SECONDS / 0.2
            * ((-0.05f64 / AFTERGLOW_SECONDS).exp() - (-0.25f64 / AFTERGLOW_SECONDS).exp());
        assert!((old.share / expected - 1.0).abs() < 0.05, "{old:?} {expected}");
    }

    #[test]
    fn the_lamp_counts_only_within_the_exposure() {
        let mut exposing = Exposing::default();
        exposing.set_lamp(0, true);
        exposing.open(SECOND, 0.0);
        exposing.set_lamp(SECOND + 50_000_000, false);
        exposing.set_lamp(SECOND + 150_000_000, true);
        let shot = exposing.close(&exposed(SECOND, SECOND + 200_000_000), 500.0, &CameraSetup::default(), 0);
        assert!((shot.lamp - 0.5).abs() < 1e-9);
        assert!((shot.truth.volts - 2_500.0).abs() < 1e-9);
        assert!(!shot.truth.disturbed);
    }

    #[test]
    fn a_disturbance_within_the_settle_time_marks_the_frame() {
        let exposing = gather(|_| 3_000.0);
        let shot = |at_ns: i64| {
            exposing.close(&exposed(SECOND, SECOND + 200_000_000), 0.0, &CameraSetup::default(), at_ns).truth.disturbed
        };
        assert!(!shot(SECOND - 300_000_001));
        assert!(shot(SECOND - 300_000_000));
        assert!(shot(SECOND + 1));
    }
}
