//! The high-voltage node: supply and both strings on one grid, with exact integrals over any time.

use super::{
    divider::DividerString,
    supply::{STEP_NS, Supply},
};

/// Supply and strings, up to the end of the present grid step.
#[derive(Clone, Debug)]
pub(super) struct HighVoltage {
    pub supply: Supply,
    pub strings: [DividerString; 2],
    end_ns: i64,
    /// Voltage at the beginning and end of the present step.
    from: f64,
    to: f64,
    /// Integral of the voltage up to the beginning of the present step, volt seconds.
    integral: f64,
}

impl HighVoltage {
    pub fn new(supply: Supply, strings: [DividerString; 2]) -> Self {
        Self { supply, strings, end_ns: 0, from: 0.0, to: 0.0, integral: 0.0 }
    }

    /// End of the present step, true nanoseconds.
    pub const fn end_ns(&self) -> i64 {
        self.end_ns
    }

    /// Voltage at the end of the present step, volts.
    pub const fn volts(&self) -> f64 {
        self.to
    }

    /// One grid step.
    pub fn step(&mut self, energised: bool) {
        self.integral += 0.5 * (self.from + self.to) * STEP_NS as f64 * 1e-9;
        self.end_ns += STEP_NS;
        self.from = self.to;
        self.to = self.supply.step(self.end_ns, energised);
        for string in &mut self.strings {
            string.step(self.from, self.to);
        }
    }

    fn share(&self, at_ns: i64) -> f64 {
        1.0 - (self.end_ns - at_ns) as f64 / STEP_NS as f64
    }

    /// Integral of the voltage from the beginning to a time within the present step, volt seconds.
    pub fn integral_at(&self, at_ns: i64) -> f64 {
        let share = self.share(at_ns);
        self.integral + share * (self.from + 0.5 * share * (self.to - self.from)) * STEP_NS as f64 * 1e-9
    }

    /// The same behind a string's filter: tau dy/dt = x - y, so that the integral of y is that of x less tau y.
    pub fn filtered_integral_at(&self, string: usize, at_ns: i64) -> f64 {
        let string = &self.strings[string];
        let filtered = string.within_step(self.from, self.to, self.share(at_ns));
        self.integral_at(at_ns) - string.filter_seconds() * filtered
    }
}

#[cfg(test)]
mod tests {
    use super::{
        super::{
            divider::{DividerString, StringTraits},
            supply::SupplySetup,
        },
        *,
    };

    fn node(filter_seconds: f64) -> HighVoltage {
        let traits = StringTraits { ratio: 5_001.0, per_volt: 0.0, ppm_per_kelvin: 0.0, filter_seconds };
        let quiet = SupplySetup {
            ripple_fraction: 0.0,
            hum_fraction: 0.0,
            wander_fraction: 0.0,
            warm_up_fraction: 0.0,
            ..SupplySetup::default()
        };
        HighVoltage::new(Supply::new(quiet, 1), [DividerString::new(traits), DividerString::new(traits)])
    }

    /// A ramp of 100 V/s followed by a regulator of 2 ms: mean over any stretch is the ramp at its middle less the lag.
    #[test]
    fn means_over_a_ramp_agree_with_the_closed_form() {
        let mut node = node(0.4e-3);
        node.supply.set(1_000.0);
        while node.end_ns() < 2_000_000_000 {
            node.step(true);
        }
        let start_ns = node.end_ns();
        node.supply.ramp(1_500.0, start_ns, 100.0);
        let mut marks = [0.0; 2];
        let (a_ns, b_ns) = (start_ns + 500_033_000, start_ns + 700_077_000);
        while node.end_ns() < b_ns {
            node.step(true);
            for (mark, at_ns) in marks.iter_mut().zip([a_ns, b_ns]) {
                if (node.end_ns() - STEP_NS..node.end_ns()).contains(&at_ns) {
                    *mark = node.integral_at(at_ns);
                }
            }
        }
        let mean = (marks[1] - marks[0]) / ((b_ns - a_ns) as f64 * 1e-9);
        let middle = ((a_ns + b_ns) / 2 - start_ns) as f64 * 1e-9;
        // The explicit regulator lags by its time constant less one step.
        let expected = 1_000.0 + 100.0 * (middle - 1.9e-3);
        assert!((mean / expected - 1.0).abs() < 1e-6, "{mean} {expected}");
    }

    /// Behind the filter a ramp comes tau later.
    #[test]
    fn the_filter_delays_a_ramp_by_its_time_constant() {
        let mut node = node(0.4e-3);
        node.supply.set(10_000.0);
        while node.end_ns() < 500_000_000 {
            node.step(true);
        }
        let at = |node: &HighVoltage| {
            let at_ns = node.end_ns() - 40_000;
            (at_ns, node.integral_at(at_ns), node.filtered_integral_at(0, at_ns))
        };
        let first = at(&node);
        for _ in 0..50 {
            node.step(true);
        }
        let last = at(&node);
        let seconds = (last.0 - first.0) as f64 * 1e-9;
        let behind = ((last.1 - first.1) - (last.2 - first.2)) / seconds;
        assert!((behind / (2_000.0 * 0.4e-3) - 1.0).abs() < 1e-3, "{behind}");
    }
}
