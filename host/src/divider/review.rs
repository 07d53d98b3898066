//! Findings: each with a number, a limit, and where the limit comes from.

use serde::Serialize;

use super::{
    figures::{Figures, bleed_seconds, figures},
    network::{Network, Supply},
};

/// What a finding amounts to.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Serialize)]
#[serde(rename_all = "lowercase")]
pub enum Verdict {
    /// Within the limit.
    Pass,
    /// Works, but costs accuracy or margin.
    Doubt,
    /// Can hurt someone or destroy something.
    Danger,
}

/// One thing that was looked at.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Finding {
    /// What it amounts to.
    pub verdict: Verdict,
    /// Which string or part: `sense`, `cross`, `supply`.
    pub part: &'static str,
    /// What was looked at.
    pub topic: &'static str,
    /// The number; absent where it has none or is infinite.
    pub value: Option<f64>,
    /// Unit of number and limit.
    pub unit: &'static str,
    /// The limit; absent where there is none.
    pub limit: Option<f64>,
    /// Where the limit comes from.
    pub source: &'static str,
    /// What it means.
    pub sentence: String,
}

/// One line of the accuracy budget at the highest voltage.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Term {
    /// Which string.
    pub part: &'static str,
    /// What it comes from.
    pub name: &'static str,
    /// Its size, ppm of the voltage.
    pub ppm: f64,
    /// Whether a calibration takes it out.
    pub calibrated_out: bool,
}

/// What the divider lives in.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Surroundings {
    /// Highest approved voltage, volts.
    pub volts: f64,
    /// How far the temperature may be from the calibration's, kelvin.
    pub kelvin: f64,
    /// Mains frequency, hertz.
    pub mains_hz: f64,
    /// Window of one reading, seconds.
    pub window_seconds: f64,
}

/// Everything about a divider.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Review {
    /// Findings, the worst first.
    pub findings: Vec<Finding>,
    /// Budget at the highest voltage.
    pub budget: Vec<Term>,
}

impl Review {
    /// The worst verdict.
    pub fn worst(&self) -> Verdict {
        self.findings.iter().map(|finding| finding.verdict).max().unwrap_or(Verdict::Pass)
    }

    /// Root sum of squares of what a calibration does not take out of one string, ppm (each as a standard uncertainty).
    pub fn left_ppm(&self, part: &str) -> f64 {
        let terms = self.budget.iter().filter(|term| term.part == part && !term.calibrated_out);
        libm::sqrt(terms.map(|term| term.ppm * term.ppm).sum())
    }
}

const PRACTICE: &str = "common practice, no source";
const TOUCH: &str =
    "60 V dc: attributed to EN 61010-1 clause 6.3.1 by a 2000 mailing-list post; the current edition decides";
const CHARGE: &str =
    "45 uC up to 15 kV: attributed to EN 61010-1 clause 6.3.1 by a 2000 mailing-list post; the current edition decides";
const ENERGY: &str = "350 mJ: as quoted from an appliance standard; the edition in force decides";
const DESIGN: &str = "design aim of this instrument";

const TOUCH_VOLTS: f64 = 60.0;

/// Looks at both strings and the supply. Absent parts are not judged.
pub fn review(
    sense: Option<&Network>,
    cross: Option<&Network>,
    supply: Option<&Supply>,
    around: &Surroundings,
) -> Review {
    let mut findings = Vec::new();
    let mut budget = Vec::new();
    for (part, network) in [("sense", sense), ("cross", cross)] {
        if let Some(network) = network {
            let found = figures(network, around.volts);
            let string = StringView { part, network, found: &found, around };
            findings.extend(string.findings());
            budget.extend(string.budget());
        }
    }
    if let Some(supply) = supply {
        let strings = [sense, cross].into_iter().flatten().map(|network| network.string_ohms() + network.loaded_ohms());
        findings.extend(stored(supply, &strings.collect::<Vec<_>>(), around.volts));
    }
    findings.sort_by_key(|finding| std::cmp::Reverse(finding.verdict));
    Review { findings, budget }
}

fn verdict(value: f64, pass: f64, doubt: f64) -> Verdict {
    if value <= pass {
        Verdict::Pass
    } else if value <= doubt {
        Verdict::Doubt
    } else {
        // NaN ends here too.
        Verdict::Danger
    }
}

struct StringView<'a> {
    part: &'static str,
    network: &'a Network,
    found: &'a Figures,
    around: &'a Surroundings,
}

impl StringView<'_> {
    fn finding(
        &self,
        verdict: Verdict,
        topic: &'static str,
        number: (f64, &'static str, Option<f64>),
        source: &'static str,
        sentence: String,
    ) -> Finding {
        let value = number.0.is_finite().then_some(number.0);
        Finding { verdict, part: self.part, topic, value, unit: number.1, limit: number.2, source, sentence }
    }

    fn findings(&self) -> Vec<Finding> {
        vec![
            self.ratio(),
            self.element_voltage(),
            self.element_power(),
            self.converter(),
            self.low_side(),
            self.settling(),
            self.bandwidth(),
            self.mains(),
            self.leakage(),
        ]
    }

    fn ratio(&self) -> Finding {
        let n = f64::from(self.network.elements);
        let (high, low) = (self.network.element_tolerance, self.network.low_tolerance);
        // Equal elements, each rectangular within its tolerance; resistors of the low side may share a batch, so no gain.
        let u = (1.0 - 1.0 / self.found.ratio) * libm::sqrt((high * high / n + low * low) / 3.0);
        let sentence =
            format!("ratio {:.2}, known to {:.2} % (k = 1) before it is calibrated", self.found.ratio, 100.0 * u);
        self.finding(Verdict::Pass, "ratio", (self.found.ratio, "", None), DESIGN, sentence)
    }

    fn element_voltage(&self) -> Finding {
        let limit = 0.5 * self.network.element_rated_volts / 1.2;
        let volts = self.found.element_volts;
        let sentence =
            format!("{volts:.0} V across each element; half its rating with 20 % over-voltage allows {limit:.0} V");
        self.finding(
            verdict(volts, limit, self.network.element_rated_volts),
            "element voltage",
            (volts, "V", Some(limit)),
            PRACTICE,
            sentence,
        )
    }

    fn element_power(&self) -> Finding {
        let limit = 0.25 * self.network.element_rated_watts;
        let watts = self.found.element_watts;
        let sentence =
            format!("{:.1} mW in each element; a quarter of its rating is {:.1} mW", 1e3 * watts, 1e3 * limit);
        self.finding(
            verdict(watts, limit, self.network.element_rated_watts),
            "element power",
            (watts, "W", Some(limit)),
            PRACTICE,
            sentence,
        )
    }

    fn converter(&self) -> Finding {
        let code = self.found.code;
        let sentence =
            format!("code {code:.0} of 32767 at {:.0} V, {:.3} V a code", self.around.volts, self.found.volts_per_code);
        // Too little of the range is only coarse; too much is blind.
        let verdict = if code < 8192.0 { Verdict::Doubt } else { verdict(code, 29_490.0, 32_767.0) };
        self.finding(verdict, "converter range", (code, "codes", Some(29_490.0)), DESIGN, sentence)
    }

    fn low_side(&self) -> Finding {
        let tap = self.found.tap_one_open_volts;
        if tap.is_infinite() {
            let sentence =
                "the low side is one resistor: if it opens, the tap rises to the high voltage; solder two in parallel"
                    .to_owned();
            return self.finding(Verdict::Danger, "low side", (tap, "V", None), PRACTICE, sentence);
        }
        let sentence = format!(
            "with one low-side resistor open the tap stands at {tap:.2} V; clamps must carry what more there may be"
        );
        self.finding(verdict(tap, 60.0, 60.0), "low side", (tap, "V", Some(60.0)), TOUCH, sentence)
    }

    fn settling(&self) -> Finding {
        let seconds = self.found.settle_100ppm_seconds;
        let sentence = format!(
            "within 100 ppm of a step after {:.2} ms (time constant {:.3} ms)",
            1e3 * seconds,
            1e3 * self.found.filter_seconds
        );
        self.finding(verdict(seconds, 0.05, f64::INFINITY), "settling", (seconds, "s", Some(0.05)), DESIGN, sentence)
    }

    fn bandwidth(&self) -> Finding {
        let hertz = self.found.bandwidth_hz;
        // Four times the mains frequency: its second harmonic, the ripple of a full-wave supply, passes with nine tenths.
        let limit = 4.0 * self.around.mains_hz;
        let good = hertz >= limit;
        let sentence = if good {
            format!("{hertz:.0} Hz: ripple is seen and can be reported")
        } else {
            format!("{hertz:.0} Hz: the filter hides ripple that short exposures integrate")
        };
        let verdict = if good { Verdict::Pass } else { Verdict::Doubt };
        self.finding(verdict, "bandwidth", (hertz, "Hz", Some(limit)), DESIGN, sentence)
    }

    /// How much of a mains ripple is left in a single reading; whole cycles take it out.
    fn mains(&self) -> Finding {
        let turns = std::f64::consts::PI * self.around.mains_hz * self.around.window_seconds;
        let boxcar = |harmonic: f64| (libm::sin(harmonic * turns) / (harmonic * turns)).abs();
        let filter = |harmonic: f64| 1.0 / libm::hypot(1.0, harmonic * self.around.mains_hz / self.found.bandwidth_hz);
        let left = [1.0, 2.0].map(|harmonic| boxcar(harmonic) * filter(harmonic));
        let sentence = format!(
            "one reading of {:.2} ms keeps {:.0} % of a {:.0} Hz ripple and {:.1} % of its second harmonic; means over whole cycles keep none",
            1e3 * self.around.window_seconds,
            100.0 * left[0],
            self.around.mains_hz,
            100.0 * left[1]
        );
        let verdict = if left[1] < 0.01 { Verdict::Pass } else { Verdict::Doubt };
        self.finding(verdict, "mains rejection", (left[1], "", Some(0.01)), DESIGN, sentence)
    }

    fn leakage(&self) -> Finding {
        let volts = self.leakage_volts();
        let sentence = format!(
            "{:.1} pA of leakage and bias move the reading by {volts:.4} V",
            1e12 * self.network.leakage_amperes
        );
        self.finding(verdict(volts, 0.2, f64::INFINITY), "leakage", (volts, "V", Some(0.2)), DESIGN, sentence)
    }

    fn leakage_volts(&self) -> f64 {
        self.network.leakage_amperes * (self.network.string_ohms() + self.found.ratio * self.network.series_ohms)
    }

    fn budget(&self) -> Vec<Term> {
        let (network, found, volts) = (self.network, self.found, self.around.volts);
        let n = f64::from(network.elements);
        let (high, low) = (network.element_tolerance, network.low_tolerance);
        let third = 1.0 / libm::sqrt(3.0);
        let unloaded = 1.0 + network.string_ohms() / network.low_side_ohms();
        let term = |name, ppm: f64, calibrated_out| Term { part: self.part, name, ppm: ppm.abs(), calibrated_out };
        let temperature =
            (network.element_ppm_per_kelvin.abs() + network.low_ppm_per_kelvin.abs()) * self.around.kelvin;
        vec![
            term("tolerance", 1e6 * libm::sqrt((high * high / n + low * low) / 3.0), true),
            term("loading", 1e6 * (found.ratio / unloaded - 1.0), true),
            // Signs of the two coefficients are not known, so they are taken to add.
            term("temperature", temperature * third, false),
            term("voltage coefficient", network.element_ppm_per_volt * volts / n, true),
            term(
                "self-heating",
                network.element_ppm_per_kelvin * network.element_kelvin_per_watt * found.element_watts,
                true,
            ),
            term("leakage at the tap", 1e6 * self.leakage_volts() / volts * third, false),
            term("leakage across the string", 1e6 * network.string_ohms() / network.string_leak_ohms * third, false),
            term("converter step", 1e6 * found.volts_per_code / libm::sqrt(12.0) / volts, false),
        ]
    }
}

fn supply_finding(
    verdict: Verdict,
    topic: &'static str,
    number: (f64, &'static str, f64),
    source: &'static str,
    sentence: String,
) -> Finding {
    let value = number.0.is_finite().then_some(number.0);
    Finding { verdict, part: "supply", topic, value, unit: number.1, limit: Some(number.2), source, sentence }
}

/// Stored charge and energy, and how long it stays.
fn stored(supply: &Supply, strings: &[f64], volts: f64) -> Vec<Finding> {
    let (charge, energy) = (supply.farads * volts, 0.5 * supply.farads * volts * volts);
    let over = |value: f64, limit: f64| if value > limit { Verdict::Danger } else { Verdict::Pass };
    let mut findings = vec![
        supply_finding(
            over(charge, 45e-6),
            "stored charge",
            (charge, "C", 45e-6),
            CHARGE,
            format!("{:.1} uC at {volts:.0} V: treat as live until bled, earthed and tested", 1e6 * charge),
        ),
        supply_finding(
            over(energy, 0.35),
            "stored energy",
            (energy, "J", 0.35),
            ENERGY,
            format!("{:.0} mJ at {volts:.0} V", 1e3 * energy),
        ),
    ];
    let all: Vec<f64> = strings.iter().chain(&supply.bleeder_ohms).copied().collect();
    let seconds = bleed_seconds(supply.farads, all.iter().copied(), volts, TOUCH_VOLTS);
    findings.push(bleeding("bleeding", seconds, "with everything in order"));
    let worst = (0..all.len())
        .map(|open| {
            let left = all.iter().enumerate().filter(|(index, _)| *index != open).map(|(_, ohms)| *ohms);
            bleed_seconds(supply.farads, left, volts, TOUCH_VOLTS)
        })
        .fold(seconds, f64::max);
    findings.push(bleeding("bleeding, one path open", worst, "with the worst one of the bleeders and strings open"));
    let strings_only = bleed_seconds(supply.farads, strings.iter().copied(), volts, TOUCH_VOLTS);
    findings.push(bleeding("bleeding, no bleeder", strings_only, "through the strings alone"));
    findings
}

fn bleeding(topic: &'static str, seconds: f64, how: &str) -> Finding {
    let sentence = if seconds.is_finite() {
        format!("{seconds:.1} s to 60 V {how}; wait twice as long, then earth and test")
    } else {
        format!("never down to 60 V {how}: there is nothing to bleed through")
    };
    supply_finding(verdict(seconds, 10.0, 60.0), topic, (seconds, "s", 10.0), TOUCH, sentence)
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Worked once by hand: 10 x 20 Mohm over 40 kohm, 1 % and 0.1 %, 25 and 15 ppm/K, 2 ppm/V, 100 K/W.
    fn example() -> Network {
        Network {
            elements: 10,
            element_ohms: 20e6,
            element_tolerance: 0.01,
            element_ppm_per_kelvin: 25.0,
            element_ppm_per_volt: 2.0,
            element_kelvin_per_watt: 100.0,
            element_rated_volts: 3500.0,
            element_rated_watts: 1.0,
            low_ohms: vec![80e3, 80e3],
            low_tolerance: 0.001,
            low_ppm_per_kelvin: 15.0,
            input_ohms: 1e9,
            series_ohms: 10e3,
            leakage_amperes: 1e-9,
            string_leak_ohms: 1e12,
            filter_farads: 10e-9,
            full_scale_volts: 2.048,
        }
    }

    const AROUND: Surroundings = Surroundings { volts: 10_000.0, kelvin: 5.0, mains_hz: 50.0, window_seconds: 0.010 };

    fn one<'a>(review: &'a Review, topic: &str) -> &'a Finding {
        review.findings.iter().find(|finding| finding.topic == topic).unwrap()
    }

    fn ppm(review: &Review, name: &str) -> f64 {
        review.budget.iter().find(|term| term.name == name).unwrap().ppm
    }

    #[test]
    fn the_budget_is_as_worked_by_hand() {
        let found = review(Some(&example()), None, None, &AROUND);
        let close = |name: &str, wanted: f64, relative: f64| {
            let found = ppm(&found, name);
            assert!((found / wanted - 1.0).abs() < relative, "{name}: {found} against {wanted}");
        };
        // 40 kohm of 1 Gohm: 40.0 ppm; 1 % / sqrt(10) and 0.1 %, over sqrt(3): 0.19 %.
        close("loading", 40.0, 2e-3);
        close("tolerance", 1914.9, 1e-3);
        close("voltage coefficient", 2000.0, 1e-9);
        // 1 kV in 20 Mohm is 50 mW: 5 K, 125 ppm.
        close("self-heating", 125.0, 1e-3);
        // 1 nA through 200 Mohm and 5001 times 10 kohm: 0.25 V.
        close("leakage at the tap", 0.25 / 10_000.0 * 1e6 / libm::sqrt(3.0), 1e-3);
        // 200 Mohm of 1 Tohm: 200 ppm.
        close("leakage across the string", 200.0 / libm::sqrt(3.0), 1e-9);
        close("temperature", 200.0 / libm::sqrt(3.0), 1e-9);
        assert!(found.left_ppm("sense") > 160.0 && found.left_ppm("sense") < 170.0, "{}", found.left_ppm("sense"));
    }

    #[test]
    fn a_sound_string_passes_except_where_leakage_costs_accuracy() {
        let found = review(Some(&example()), None, None, &AROUND);
        assert_eq!(one(&found, "element voltage").verdict, Verdict::Pass);
        assert_eq!(one(&found, "converter range").verdict, Verdict::Doubt, "31993 of 32767 leaves little");
        assert_eq!(one(&found, "leakage").verdict, Verdict::Doubt);
        assert_eq!(found.worst(), Verdict::Doubt);
    }

    #[test]
    fn what_can_hurt_is_danger() {
        let lone = Network { low_ohms: vec![40e3], ..example() };
        assert_eq!(one(&review(Some(&lone), None, None, &AROUND), "low side").verdict, Verdict::Danger);
        let few = Network { elements: 2, ..example() };
        assert_eq!(one(&review(Some(&few), None, None, &AROUND), "element voltage").verdict, Verdict::Danger);
        let weak = Network { element_rated_watts: 0.04, ..example() };
        assert_eq!(one(&review(Some(&weak), None, None, &AROUND), "element power").verdict, Verdict::Danger);
        let coarse = Network { low_ohms: vec![200e3, 200e3], ..example() };
        assert_eq!(one(&review(Some(&coarse), None, None, &AROUND), "converter range").verdict, Verdict::Danger);
        let supply = Supply { farads: 10e-9, bleeder_ohms: vec![] };
        let bare = review(None, None, Some(&supply), &AROUND);
        assert_eq!(one(&bare, "bleeding").verdict, Verdict::Danger);
        assert!(one(&bare, "bleeding").value.is_none() && one(&bare, "bleeding").sentence.contains("never"));
    }

    #[test]
    fn stored_charge_and_bleeding_are_as_worked_by_hand() {
        let around = Surroundings { volts: 5000.0, ..AROUND };
        let supply = Supply { farads: 10e-9, bleeder_ohms: vec![100e6] };
        let found = review(Some(&example()), None, Some(&supply), &around);
        // 10 nF at 5 kV: 50 uC, 0.125 J; string alone 200 Mohm: 8.85 s.
        assert!((one(&found, "stored charge").value.unwrap() - 50e-6).abs() < 1e-9);
        assert_eq!(one(&found, "stored charge").verdict, Verdict::Danger);
        assert!((one(&found, "stored energy").value.unwrap() - 0.125).abs() < 1e-9);
        let open = one(&found, "bleeding, one path open").value.unwrap();
        assert!((open - 8.85).abs() < 0.01, "{open}");
    }

    #[test]
    fn half_a_mains_cycle_takes_out_the_second_harmonic() {
        let found = review(Some(&example()), None, None, &AROUND);
        assert!(one(&found, "mains rejection").value.unwrap() < 1e-12);
        let odd = Surroundings { window_seconds: 0.012, ..AROUND };
        assert_eq!(one(&review(Some(&example()), None, None, &odd), "mains rejection").verdict, Verdict::Doubt);
    }
}
