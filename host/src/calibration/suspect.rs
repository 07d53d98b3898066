//! What probably went wrong with a point: words for the person who has to look at it again.

use super::{
    Assessment, Finding, Point, Severity,
    assess::finding,
    fit::{Residual, code},
};
use crate::calibration::Channel;

/// Findings about points that do not belong to the others.
pub(super) fn outliers(points: &[Point], found: &Assessment) -> Vec<Finding> {
    let sentence = |index: usize| {
        let point = &points[index];
        let both = found.sense.outliers.contains(&index) && found.cross.outliers.contains(&index);
        let number = index + 1;
        let head = format!("Point {number} ({}, {})", point.time_utc, point.direction);
        let expected = expected_volts(points, found, index);
        let text = if both {
            format!(
                "{head}: the reference was noted as {} V, but both senses say {expected:.1} V{}",
                point.reference_volts,
                ended(guess(point.reference_volts, expected))
            )
        } else {
            let name = if found.sense.outliers.contains(&index) { "main sense" } else { "cross-sense" };
            format!(
                "{head}: the code of the {name} does not fit the reference of {} V, while the other sense does.",
                point.reference_volts
            )
        };
        let advice =
            format!(" Correct it if you know what it was, or leave it out with --leave-out {number} and a reason");
        finding(Severity::Fail, "outlier", format!("{text}{advice}."))
    };
    found.outliers().into_iter().map(sentence).collect()
}

/// What the main sense makes of a point's code.
fn expected_volts(points: &[Point], found: &Assessment, index: usize) -> f64 {
    let residual: &Residual = &found.sense.residuals[index];
    let volts = points[index].reference_volts - residual.volts;
    if volts.is_finite() { volts } else { found.sense.fit.volts(code(&points[index], Channel::Sense)) }
}

/// How a typed number may have come about, as words to append; empty where nothing usual fits.
pub fn guess(typed: f64, expected: f64) -> &'static str {
    let near = |value: f64| (value - expected).abs() <= 2.0 + 0.002 * expected.abs();
    if near(1e3 * typed) {
        ": typed in kilovolts?"
    } else if near(-typed) {
        ": a sign forgotten?"
    } else if near(10.0 * typed) || near(0.1 * typed) || near(100.0 * typed) || near(0.01 * typed) {
        ": a decimal point out of place?"
    } else if swaps(typed).into_iter().any(near) {
        ": two digits swapped?"
    } else {
        ""
    }
}

/// A guess as the end of a sentence.
pub(crate) fn ended(guess: &'static str) -> &'static str {
    if guess.is_empty() { "." } else { guess }
}

/// The number with every pair of neighbouring digits swapped in turn.
fn swaps(typed: f64) -> Vec<f64> {
    let digits: Vec<char> = format!("{:.1}", typed.abs()).chars().collect();
    let swap = |at: usize| {
        let mut digits = digits.clone();
        digits.swap(at, at + 1);
        digits.iter().collect::<String>().parse::<f64>().ok().map(|value| value.copysign(typed))
    };
    (0..digits.len().saturating_sub(1)).filter_map(swap).collect()
}

/// Points whose direction does not agree with the ones around them.
pub(super) fn order(points: &[Point]) -> Vec<Finding> {
    let mut order: Vec<usize> = (0..points.len()).collect();
    // RFC 3339 in one zone sorts as text only with equal fractions, so by value.
    order.sort_by_key(|index| points[*index].time_utc.parse::<jiff::Timestamp>().ok());
    let span = points.iter().fold(0.0, |most: f64, point| most.max(point.reference_volts.abs()));
    let mut findings = Vec::new();
    if order.windows(2).any(|pair| pair[1] < pair[0]) {
        let sentence = "The points are not in the order of their times; they are judged by their times.";
        findings.push(finding(Severity::Doubt, "order", sentence.to_owned()));
    }
    for pair in order.windows(2) {
        let (before, point) = (&points[pair[0]], &points[pair[1]]);
        let rise = point.reference_volts.abs() - before.reference_volts.abs();
        let wrong = match point.direction.as_str() {
            "up" => rise < -0.01 * span,
            "down" => rise > 0.01 * span,
            _ => point.reference_volts.abs() > 0.02 * span,
        };
        if wrong && point.left_out.is_none() {
            let sentence = format!(
                "Point {} is marked {}, but went from {:.0} V to {:.0} V; check the direction or the values.",
                pair[1] + 1,
                point.direction,
                before.reference_volts,
                point.reference_volts
            );
            findings.push(finding(Severity::Doubt, "order", sentence));
        }
    }
    findings
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::calibration::{assess, example};

    #[test]
    fn usual_slips_are_guessed() {
        assert!(guess(2.2, 2200.4).contains("kilovolts"));
        assert!(guess(-2200.0, 2200.4).contains("sign"));
        assert!(guess(220.0, 2200.4).contains("decimal"));
        assert!(guess(2020.4, 2200.4).contains("swapped"));
        assert_eq!(guess(1234.0, 2200.4), "");
        assert_eq!(guess(f64::NAN, 2200.4), "");
    }

    #[test]
    fn a_mistyped_reference_is_told_with_what_it_may_have_been() {
        let mut points = example().points;
        let right = points[4].reference_volts;
        points[4].reference_volts = (right * 10.0).trunc() / 10_000.0;
        let findings = outliers(&points, &assess(&points, (5.0, 3.0)).unwrap());
        assert_eq!(findings.len(), 1, "{findings:?}");
        let sentence = &findings[0].sentence;
        assert!(
            sentence.contains("Point 5") && sentence.contains("both senses") && sentence.contains("kilovolts?"),
            "{sentence}"
        );
    }

    #[test]
    fn a_wrong_code_of_one_sense_is_told_apart() {
        let mut points = example().points;
        points[4].cross_code += 300.0;
        let findings = outliers(&points, &assess(&points, (5.0, 3.0)).unwrap());
        assert_eq!(findings.len(), 1, "{findings:?}");
        assert!(findings[0].sentence.contains("code of the cross-sense"), "{findings:?}");
    }

    #[test]
    fn points_out_of_order_are_told() {
        assert!(order(&example().points).is_empty());
        let mut points = example().points;
        points.swap(3, 9);
        let findings = order(&points);
        assert!(findings[0].sentence.contains("not in the order of their times"), "{findings:?}");
        let mut points = example().points;
        points[5].direction = "down".to_owned();
        assert!(order(&points)[0].sentence.starts_with("Point 6 is marked down"));
    }
}
