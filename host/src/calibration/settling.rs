//! Whether a voltage has settled, so that a point may be taken.

use std::collections::VecDeque;

/// When a point counts as settled.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct SettlingRules {
    /// Shortest wait after a change, seconds: 30 s, or five thermal time constants of the divider if that is longer.
    pub dwell_seconds: f64,
    /// Length of the window that is judged and then averaged, seconds.
    pub window_seconds: f64,
    /// Drift across the window that is let pass, as a fraction of the voltage.
    pub drift_fraction: f64,
    /// Drift across the window that is let pass at zero, volts.
    pub drift_volts: f64,
    /// After this long a supply counts as never settling, seconds.
    pub patience_seconds: f64,
}

impl Default for SettlingRules {
    /// 30 s and a drift of 20 ppm or 0.1 V: common practice, a tenth of the uncertainty aimed at.
    fn default() -> Self {
        Self {
            dwell_seconds: 30.0,
            window_seconds: 20.0,
            drift_fraction: 20e-6,
            drift_volts: 0.1,
            patience_seconds: 600.0,
        }
    }
}

/// What is known so far.
#[derive(Clone, Debug, PartialEq)]
pub enum Settling {
    /// Not yet long enough since the beginning.
    Waiting {
        /// Seconds still to wait at least.
        seconds_left: f64,
    },
    /// Long enough, but it still moves.
    Moving {
        /// Drift across the window, volts.
        drift_volts: f64,
        /// Drift that would be let pass, volts.
        limit_volts: f64,
    },
    /// It stands.
    Settled {
        /// Drift across the window, volts.
        drift_volts: f64,
    },
    /// It moved for longer than anyone should wait.
    Never {
        /// Drift across the window, volts.
        drift_volts: f64,
        /// How far the values of single seconds scatter about the drift (standard deviation), volts.
        scatter_volts: f64,
    },
}

/// Means over a second: (second, sum, count).
#[derive(Clone, Copy, Debug)]
struct Block {
    second: i64,
    sum: f64,
    count: u32,
}

/// Judges a stream of voltages, at any rate above about one a second.
#[derive(Clone, Debug)]
pub struct SettlingWatch {
    rules: SettlingRules,
    begun: Option<f64>,
    latest: f64,
    blocks: VecDeque<Block>,
}

impl SettlingWatch {
    /// Begins a wait.
    pub fn new(rules: SettlingRules) -> Self {
        Self { rules, begun: None, latest: 0.0, blocks: VecDeque::new() }
    }

    /// Takes a value. `time_seconds` is monotonic from any origin; a step back or a gap of over three seconds begins
    /// the wait anew, since nobody knows what happened meanwhile. Values that are no numbers are left out.
    pub fn push(&mut self, time_seconds: f64, volts: f64) {
        if !time_seconds.is_finite() || !volts.is_finite() {
            return;
        }
        let step = time_seconds - self.latest;
        if self.begun.is_none() || !(0.0..=3.0).contains(&step) {
            self.blocks.clear();
            self.begun = Some(time_seconds);
        }
        self.latest = time_seconds;
        let second = libm::floor(time_seconds) as i64;
        match self.blocks.back_mut() {
            Some(block) if block.second == second => {
                block.sum += volts;
                block.count += 1;
            }
            _ => self.blocks.push_back(Block { second, sum: volts, count: 1 }),
        }
        let oldest = time_seconds - self.rules.window_seconds - 1.0;
        while self.blocks.front().is_some_and(|block| (block.second as f64) < oldest) {
            self.blocks.pop_front();
        }
    }

    /// What is known so far.
    pub fn state(&self) -> Settling {
        let waited = self.begun.map_or(0.0, |begun| self.latest - begun);
        let least = self.rules.dwell_seconds.max(self.rules.window_seconds);
        if waited < least {
            return Settling::Waiting { seconds_left: least - waited };
        }
        let line = self.line();
        let limit_volts = self.rules.drift_volts.max(self.rules.drift_fraction * line.mean_volts.abs());
        // The drift's own uncertainty counts against it: noise that hides a drift is no proof of rest.
        let worst = line.drift_volts.abs() + line.drift_u_volts;
        if worst <= limit_volts {
            return Settling::Settled { drift_volts: line.drift_volts };
        }
        if waited >= self.rules.patience_seconds {
            return Settling::Never { drift_volts: line.drift_volts, scatter_volts: line.scatter_volts };
        }
        Settling::Moving { drift_volts: line.drift_volts, limit_volts }
    }

    /// A straight line through the means of whole seconds.
    fn line(&self) -> Line {
        let points: Vec<(f64, f64)> =
            self.blocks.iter().map(|block| (block.second as f64, block.sum / f64::from(block.count))).collect();
        let count = points.len() as f64;
        let mean = |part: fn(&(f64, f64)) -> f64| points.iter().map(part).sum::<f64>() / count;
        let (mid, mean_volts) = (mean(|point| point.0), mean(|point| point.1));
        let square: f64 = points.iter().map(|(at, _)| (at - mid) * (at - mid)).sum();
        let product: f64 = points.iter().map(|(at, volts)| (at - mid) * (volts - mean_volts)).sum();
        if points.len() < 4 || square <= 0.0 {
            return Line { mean_volts, drift_volts: f64::INFINITY, drift_u_volts: 0.0, scatter_volts: 0.0 };
        }
        let slope = product / square;
        let left = |(at, volts): &(f64, f64)| volts - mean_volts - slope * (at - mid);
        let variance = points.iter().map(|point| left(point) * left(point)).sum::<f64>() / (count - 2.0);
        Line {
            mean_volts,
            drift_volts: slope * self.rules.window_seconds,
            drift_u_volts: libm::sqrt(variance / square) * self.rules.window_seconds,
            scatter_volts: libm::sqrt(variance),
        }
    }
}

struct Line {
    mean_volts: f64,
    drift_volts: f64,
    drift_u_volts: f64,
    scatter_volts: f64,
}

#[cfg(test)]
mod tests {
    use rand::{RngExt, SeedableRng};
    use rand_chacha::ChaCha8Rng;

    use super::*;

    /// Ten values a second with 0.1 V of noise on `volts(t)`; the time at which it first counts as settled.
    fn settled_after(seconds: f64, volts: impl Fn(f64) -> f64) -> Result<f64, Settling> {
        let mut watch = SettlingWatch::new(SettlingRules::default());
        let mut rng = ChaCha8Rng::seed_from_u64(7);
        for index in 0..(10.0 * seconds) as u32 {
            let time = f64::from(index) / 10.0;
            watch.push(time, volts(time) + rng.random_range(-0.17..0.17));
            match watch.state() {
                Settling::Settled { .. } => return Ok(time),
                state @ Settling::Never { .. } => return Err(state),
                _ => {}
            }
        }
        Err(watch.state())
    }

    #[test]
    fn a_steady_voltage_settles_after_the_dwell() {
        let after = settled_after(100.0, |_| 3000.0).unwrap();
        assert!((30.0..33.0).contains(&after), "{after}");
    }

    #[test]
    fn a_thermal_lag_is_waited_for() {
        // 0.1 % of lag with 20 s: 3 V e^(-t/20) moves by less than 0.1 V in 20 s only after ln(3 (e - 1)/0.1) * 20 = 79 s.
        let after = settled_after(300.0, |time| 3000.0 * (1.0 + 1e-3 * libm::exp(-time / 20.0))).unwrap();
        assert!((70.0..110.0).contains(&after), "{after}");
    }

    #[test]
    fn a_supply_that_never_settles_is_told() {
        // Hunting by a volt with a period of 37 s.
        let hunting =
            |time: f64| 3000.0 + libm::sin(time * 2.0 * std::f64::consts::PI / 37.0) + 0.4 * libm::sin(time * 3.1);
        assert!(matches!(settled_after(700.0, hunting), Err(Settling::Never { .. })));
        // A ramp of a volt a minute.
        let Err(Settling::Never { drift_volts, .. }) = settled_after(700.0, |time| 3000.0 + time / 60.0) else {
            panic!()
        };
        assert!((drift_volts - 20.0 / 60.0).abs() < 0.1, "{drift_volts}");
    }

    #[test]
    fn a_step_a_gap_and_a_clock_going_back_begin_anew() {
        let mut watch = SettlingWatch::new(SettlingRules::default());
        (0..600).for_each(|index| watch.push(f64::from(index) / 10.0, 2000.0));
        assert!(matches!(watch.state(), Settling::Settled { .. }));
        watch.push(70.0, 2000.0);
        assert!(matches!(watch.state(), Settling::Waiting { .. }));
        (700..1200).for_each(|index| watch.push(f64::from(index) / 10.0, 2000.0));
        watch.push(5.0, 2000.0);
        assert!(matches!(watch.state(), Settling::Waiting { .. }));
        (50..550).for_each(|index| watch.push(f64::from(index) / 10.0, 2000.0));
        assert!(matches!(watch.state(), Settling::Settled { .. }));
        (550..600).for_each(|index| watch.push(f64::from(index) / 10.0, 2005.0));
        assert!(matches!(watch.state(), Settling::Moving { .. }), "a step of 5 V is not rest");
        watch.push(f64::NAN, 1.0);
        watch.push(61.0, f64::INFINITY);
    }

    #[test]
    fn noise_that_could_hide_a_drift_is_no_rest() {
        let mut watch = SettlingWatch::new(SettlingRules::default());
        let mut rng = ChaCha8Rng::seed_from_u64(1);
        (0..400).for_each(|index| watch.push(f64::from(index) / 10.0, 1000.0 + rng.random_range(-20.0..20.0)));
        assert!(!matches!(watch.state(), Settling::Settled { .. }));
    }
}
