//! What the points of a calibration say about it: hysteresis, outliers, and whether it may be issued.

use super::{
    Channel, Direction, FitError, FitReport, Point,
    fit::{self, levels},
    suspect,
};

/// Accepted hysteresis, fraction of the voltage (proposed in this project; no standard fixes it).
const HYSTERESIS_ACCEPTED: f64 = 3e-4;

/// Accepted residual: this fraction of the reading plus this many volts (proposed in this project).
const RESIDUAL_ACCEPTED: (f64, f64) = (5e-4, 0.5);

/// How much something weighs.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub enum Severity {
    /// As it should be.
    Pass,
    /// Worth knowing; it stands in the certificate.
    Doubt,
    /// Stands in the way of a certificate until someone accepts it with a reason, or repairs it.
    Fail,
}

/// One thing that was looked at.
#[derive(Clone, Debug, PartialEq)]
pub struct Finding {
    /// How much it weighs.
    pub severity: Severity,
    /// A stable word for it.
    pub topic: &'static str,
    /// What was found and, where it is no pass, what to do.
    pub sentence: String,
}

/// Difference between upward and downward points.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Hysteresis {
    /// Largest difference as a fraction of the voltage, over the levels above a quarter of the highest.
    pub fraction: f64,
    /// Its standard uncertainty.
    pub u_fraction: f64,
    /// Where, volts.
    pub at_volts: f64,
    /// At how many levels it could be judged.
    pub levels: usize,
}

/// A calibration, fitted and judged.
#[derive(Clone, Debug)]
pub struct Assessment {
    /// The main sense.
    pub sense: FitReport,
    /// The cross-sense.
    pub cross: FitReport,
    /// Hysteresis of the main sense.
    pub sense_hysteresis: Hysteresis,
    /// Hysteresis of the cross-sense.
    pub cross_hysteresis: Hysteresis,
    /// Everything that was looked at, the worst first.
    pub findings: Vec<Finding>,
}

impl Assessment {
    /// The worst there is.
    pub fn worst(&self) -> Severity {
        self.findings.iter().map(|finding| finding.severity).max().unwrap_or(Severity::Pass)
    }

    /// Points that either sense calls an outlier.
    pub fn outliers(&self) -> Vec<usize> {
        let mut all: Vec<usize> = self.sense.outliers.iter().chain(&self.cross.outliers).copied().collect();
        all.sort_unstable();
        all.dedup();
        all
    }
}

/// Fits and judges points. `given` is the temperature coefficient and its standard uncertainty (ppm per kelvin) where
/// there was one ambient only.
///
/// # Errors
/// When the points cannot carry a fit.
pub fn assess(points: &[Point], given: (f64, f64)) -> Result<Assessment, FitError> {
    let mut sense = fit::fit(points, Channel::Sense, given)?;
    let mut cross = fit::fit(points, Channel::Cross, given)?;
    let sense_hysteresis = hysteresis(points, &sense);
    let cross_hysteresis = hysteresis(points, &cross);
    sense.fit.hysteresis_fraction = sense_hysteresis.fraction.min(0.1);
    cross.fit.hysteresis_fraction = cross_hysteresis.fraction.min(0.1);
    let mut found = Assessment { sense, cross, sense_hysteresis, cross_hysteresis, findings: Vec::new() };
    let mut findings = suspect::outliers(points, &found);
    findings.extend(suspect::order(points));
    findings.extend(coverage(points));
    findings.extend(channel_findings("main sense", &found.sense, &sense_hysteresis, points));
    findings.extend(channel_findings("cross-sense", &found.cross, &cross_hysteresis, points));
    findings.push(temperature(&found));
    findings.sort_by_key(|finding| std::cmp::Reverse(finding.severity));
    found.findings = findings;
    Ok(found)
}

/// Per level, the mean residual of upward less that of downward points.
fn hysteresis(points: &[Point], report: &FitReport) -> Hysteresis {
    let (level, count) = levels(points);
    let highest = points.iter().fold(0.0, |most: f64, point| most.max(point.reference_volts.abs()));
    let group = |at: usize, direction: Direction| -> Vec<f64> {
        let member = |index: &usize| {
            level[*index] == at && report.residuals[*index].used && points[*index].direction == direction.word()
        };
        (0..points.len()).filter(member).map(|index| report.residuals[index].volts).collect()
    };
    let mut scatter = Scatter::default();
    let mut found: Vec<(f64, f64, f64)> = Vec::new();
    for at in 0..count {
        let (up, down) = (group(at, Direction::Up), group(at, Direction::Down));
        scatter.add(&up);
        scatter.add(&down);
        let members = (0..points.len()).filter(|index| level[*index] == at);
        let volts = members.clone().map(|index| points[index].reference_volts).sum::<f64>() / members.count() as f64;
        if !up.is_empty() && !down.is_empty() && volts.abs() > 0.25 * highest {
            let weight = libm::sqrt(1.0 / up.len() as f64 + 1.0 / down.len() as f64);
            found.push((mean(&up) - mean(&down), weight, volts));
        }
    }
    let sigma = scatter.sigma().unwrap_or(report.fit.residual_volts);
    let fraction = |entry: &(f64, f64, f64)| (entry.0 / entry.2).abs();
    let largest = found.iter().max_by(|a, b| fraction(a).total_cmp(&fraction(b)));
    largest.map_or_else(Hysteresis::default, |entry| Hysteresis {
        fraction: fraction(entry),
        u_fraction: sigma * entry.1 / entry.2.abs(),
        at_volts: entry.2,
        levels: found.len(),
    })
}

fn mean(values: &[f64]) -> f64 {
    values.iter().sum::<f64>() / values.len() as f64
}

/// Scatter within groups, pooled.
#[derive(Default)]
struct Scatter {
    square: f64,
    freedom: usize,
}

impl Scatter {
    fn add(&mut self, group: &[f64]) {
        if group.len() > 1 {
            let centre = mean(group);
            self.square += group.iter().map(|value| (value - centre) * (value - centre)).sum::<f64>();
            self.freedom += group.len() - 1;
        }
    }

    fn sigma(&self) -> Option<f64> {
        (self.freedom >= 3).then(|| libm::sqrt(self.square / self.freedom as f64))
    }
}

pub(super) fn finding(severity: Severity, topic: &'static str, sentence: String) -> Finding {
    Finding { severity, topic, sentence }
}

/// Whether the points are where points are needed.
fn coverage(points: &[Point]) -> Vec<Finding> {
    let used = || points.iter().filter(|point| point.left_out.is_none());
    let has = |direction: Direction| used().any(|point| point.direction == direction.word());
    let mut findings = Vec::new();
    if !has(Direction::Zero) {
        let sentence = "There is no zero point; the offset comes from the line alone. Take one with high voltage off.";
        findings.push(finding(Severity::Doubt, "zero", sentence.to_owned()));
    }
    if !has(Direction::Up) || !has(Direction::Down) {
        let sentence = "Points were taken in one direction only, so hysteresis is not known; take them both ways.";
        findings.push(finding(Severity::Doubt, "hysteresis", sentence.to_owned()));
    }
    let (level, count) = levels(points);
    let repeated = (0..count).filter(|at| level.iter().filter(|level| *level == at).count() >= 3).count();
    if repeated < 4 {
        let sentence = "Few voltages were repeated, so the scatter is poorly known; three cycles are usual.";
        findings.push(finding(Severity::Doubt, "cycles", sentence.to_owned()));
    }
    findings
}

fn channel_findings(name: &str, report: &FitReport, hysteresis: &Hysteresis, points: &[Point]) -> Vec<Finding> {
    vec![residual(name, report, points), shape(name, report), self_heating(name, report), up_down(name, hysteresis)]
}

fn residual(name: &str, report: &FitReport, points: &[Point]) -> Finding {
    let permitted = |index: usize| RESIDUAL_ACCEPTED.1 + RESIDUAL_ACCEPTED.0 * points[index].reference_volts.abs();
    let share = |index: usize| (report.residuals[index].volts / permitted(index)).abs();
    let used = report.residuals.iter().filter(|residual| residual.used);
    let Some(worst) = used.max_by(|a, b| share(a.index).total_cmp(&share(b.index))) else {
        return finding(Severity::Fail, "residual", format!("No point of the {name} is used."));
    };
    let (volts, limit) = (worst.volts.abs(), permitted(worst.index));
    let place = points[worst.index].reference_volts;
    let text = format!("Largest residual of the {name}: {volts:.2} V at {place:.0} V (accepted: {limit:.2} V)");
    if volts <= limit {
        finding(Severity::Pass, "residual", format!("{text}."))
    } else {
        finding(Severity::Fail, "residual", format!("{text}; look at the plot, and repeat what does not fit."))
    }
}

fn shape(name: &str, report: &FitReport) -> Finding {
    let chance = report.bend.probability;
    let sentence = if report.bent {
        let [_, slope, bend] = report.fit.coefficients;
        // Change of the ratio per kilovolt: V = c N + a2 N^2, so a2/c^2 per volt.
        let ppm = 1e9 * bend / (slope * slope);
        format!(
            "The {name} bends by {ppm:.1} ppm per kilovolt (chance of so large an F by noise: {chance:.1e}); the bend is kept."
        )
    } else {
        format!("The {name} is straight (chance of so large an F by noise: {chance:.2}).")
    };
    finding(Severity::Pass, "bend", sentence)
}

fn self_heating(name: &str, report: &FitReport) -> Finding {
    let chance = report.cubic.probability;
    if chance >= 1e-3 {
        return finding(Severity::Pass, "self-heating", format!("No cubic term in the {name} ({chance:.2})."));
    }
    let sentence = format!(
        "A cubic term remains in the {name} (chance by noise: {chance:.1e}), the sign of a string that heats itself or of \
         points taken before it had settled; wait longer at each point."
    );
    finding(Severity::Doubt, "self-heating", sentence)
}

fn up_down(name: &str, found: &Hysteresis) -> Finding {
    if found.levels == 0 {
        return finding(Severity::Doubt, "hysteresis", format!("Hysteresis of the {name} was not evaluated."));
    }
    let (percent, u) = (100.0 * found.fraction, 100.0 * found.u_fraction);
    let text = format!("Hysteresis of the {name}: {percent:.3} % (u {u:.3} %) at {:.0} V", found.at_volts);
    // The largest of several levels is a few u by chance alone, so it must stand out of its noise as well.
    if found.fraction > HYSTERESIS_ACCEPTED && found.fraction > 3.5 * found.u_fraction {
        let advice = "more than 0.03 %: wait longer at each point (five thermal time constants), or look for leakage";
        return finding(Severity::Fail, "hysteresis", format!("{text}; {advice}."));
    }
    finding(Severity::Pass, "hysteresis", format!("{text} (accepted: 0.03 %)."))
}

fn temperature(found: &Assessment) -> Finding {
    let (sense, cross) = (&found.sense.temperature, &found.cross.temperature);
    let value = format!("{:.1} ppm/K (u {:.1})", sense.ppm_per_kelvin, sense.u_ppm_per_kelvin);
    if !sense.measured {
        let sentence = format!(
            "The temperature coefficient was not measured; {value} was given. Repeat the points at a second ambient, \
             say 18 and 28 degrees Celsius."
        );
        return finding(Severity::Doubt, "temperature", sentence);
    }
    let apart = (sense.ppm_per_kelvin - cross.ppm_per_kelvin).abs();
    let u = libm::hypot(sense.u_ppm_per_kelvin, cross.u_ppm_per_kelvin);
    if apart > 20.0 + 2.0 * u {
        let sentence =
            format!("The senses change by {apart:.0} ppm/K against each other: one string is worse than it should be.");
        return finding(Severity::Doubt, "temperature", sentence);
    }
    finding(Severity::Pass, "temperature", format!("Temperature coefficient of the main sense: {value}."))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::calibration::example;

    fn found(points: &[Point], topic: &str) -> Vec<Finding> {
        let all = assess(points, (5.0, 3.0)).unwrap().findings;
        all.into_iter().filter(|finding| finding.topic == topic && finding.severity != Severity::Pass).collect()
    }

    #[test]
    fn the_examples_points_are_accepted() {
        let assessment = assess(&example().points, (5.0, 3.0)).unwrap();
        assert!(assessment.worst() <= Severity::Doubt, "{:#?}", assessment.findings);
        // Only the temperature coefficient was not measured.
        let doubts: Vec<_> = assessment.findings.iter().filter(|finding| finding.severity == Severity::Doubt).collect();
        assert_eq!(doubts.len(), 1, "{doubts:#?}");
    }

    #[test]
    fn a_hysteresis_of_three_parts_in_a_thousand_is_called_out() {
        let mut points = example().points;
        for point in points.iter_mut().filter(|point| point.direction == "down") {
            point.sense_code *= 1.003;
        }
        let hysteresis = found(&points, "hysteresis");
        assert!(
            hysteresis
                .iter()
                .any(|finding| finding.severity == Severity::Fail && finding.sentence.contains("main sense")),
            "{hysteresis:?}"
        );
        let assessment = assess(&points, (5.0, 3.0)).unwrap();
        let fraction = assessment.sense_hysteresis.fraction;
        assert!((fraction - 0.003).abs() < 2e-4, "{fraction}");
        assert!(assessment.cross_hysteresis.fraction < 3e-4);
    }

    #[test]
    fn missing_zero_and_one_way_points_are_doubted() {
        let up: Vec<Point> = example().points.into_iter().filter(|point| point.direction == "up").collect();
        assert_eq!(found(&up, "zero").len(), 1);
        assert!(!found(&up, "hysteresis").is_empty());
    }
}
