//! The straight line through points that are uncertain in both directions.
//!
//! York, Evensen, Lopez and Delgado, Am. J. Phys. 72, 367 (2004), unified equations, with the standard errors at the
//! adjusted points. The errors of one point may be correlated.

/// A point with its standard uncertainties.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Point {
    /// Abscissa.
    pub x: f64,
    /// Its standard uncertainty, above 0.
    pub u_x: f64,
    /// Ordinate.
    pub y: f64,
    /// Its standard uncertainty, above 0.
    pub u_y: f64,
    /// Correlation of the two errors, -1 to 1.
    pub correlation: f64,
}

/// A line `y = intercept + slope x`.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Line {
    /// Intercept.
    pub intercept: f64,
    /// Its standard uncertainty.
    pub u_intercept: f64,
    /// Slope.
    pub slope: f64,
    /// Its standard uncertainty.
    pub u_slope: f64,
    /// Covariance of the two.
    pub covariance: f64,
    /// Weighted sum of squared distances: about the number of points less two where the uncertainties are right.
    pub chi_square: f64,
}

/// What one round of the iteration has.
struct Round {
    weights: Vec<f64>,
    mean_x: f64,
    mean_y: f64,
    betas: Vec<f64>,
    slope: f64,
}

/// Most rounds; it usually takes fewer than ten.
const ROUNDS: usize = 500;

/// The line, or `None` for fewer than three points, an uncertainty that is not above 0, or points that leave the slope open.
pub fn errors_in_both(points: &[Point]) -> Option<Line> {
    let usable =
        |p: &Point| p.u_x > 0.0 && p.u_y > 0.0 && p.correlation.abs() <= 1.0 && p.x.is_finite() && p.y.is_finite();
    if points.len() < 3 || !points.iter().all(usable) {
        return None;
    }
    let mut slope = ordinary_slope(points)?;
    for _ in 0..ROUNDS {
        let round = round(points, slope);
        let done = (round.slope - slope).abs() <= 1e-15 * round.slope.abs();
        slope = round.slope;
        if done {
            break;
        }
    }
    slope.is_finite().then(|| describe(points, &round(points, slope)))
}

fn ordinary_slope(points: &[Point]) -> Option<f64> {
    let count = points.len() as f64;
    let (x, y) = (points.iter().map(|p| p.x).sum::<f64>() / count, points.iter().map(|p| p.y).sum::<f64>() / count);
    let below: f64 = points.iter().map(|p| (p.x - x) * (p.x - x)).sum();
    (below > 0.0).then(|| points.iter().map(|p| (p.x - x) * (p.y - y)).sum::<f64>() / below)
}

fn round(points: &[Point], slope: f64) -> Round {
    let weight = |p: &Point| {
        let (w_x, w_y) = (1.0 / (p.u_x * p.u_x), 1.0 / (p.u_y * p.u_y));
        let alpha = libm::sqrt(w_x * w_y);
        w_x * w_y / (w_x + slope * slope * w_y - 2.0 * slope * p.correlation * alpha)
    };
    let weights: Vec<f64> = points.iter().map(weight).collect();
    let total: f64 = weights.iter().sum();
    let mean = |of: fn(&Point) -> f64| points.iter().zip(&weights).map(|(p, w)| w * of(p)).sum::<f64>() / total;
    let (mean_x, mean_y) = (mean(|p| p.x), mean(|p| p.y));
    let beta = |(p, w): (&Point, &f64)| {
        let (u, v) = (p.x - mean_x, p.y - mean_y);
        // 1 / alpha is the product of the uncertainties.
        w * (u * p.u_y * p.u_y + slope * v * p.u_x * p.u_x - (slope * u + v) * p.correlation * p.u_x * p.u_y)
    };
    let betas: Vec<f64> = points.iter().zip(&weights).map(beta).collect();
    let sum = |of: fn(&Point) -> f64, mean: f64| -> f64 {
        points.iter().zip(&weights).zip(&betas).map(|((p, w), b)| w * b * (of(p) - mean)).sum()
    };
    let slope = sum(|p| p.y, mean_y) / sum(|p| p.x, mean_x);
    Round { weights, mean_x, mean_y, betas, slope }
}

fn describe(points: &[Point], round: &Round) -> Line {
    let slope = round.slope;
    let intercept = round.mean_y - slope * round.mean_x;
    let total: f64 = round.weights.iter().sum();
    let adjusted = |beta: &f64| round.mean_x + beta;
    let mean = round.betas.iter().zip(&round.weights).map(|(b, w)| w * adjusted(b)).sum::<f64>() / total;
    let spread: f64 =
        round.betas.iter().zip(&round.weights).map(|(b, w)| w * (adjusted(b) - mean) * (adjusted(b) - mean)).sum();
    let variance = 1.0 / spread;
    let off = |p: &Point| p.y - intercept - slope * p.x;
    Line {
        intercept,
        u_intercept: libm::sqrt(1.0 / total + mean * mean * variance),
        slope,
        u_slope: libm::sqrt(variance),
        covariance: -mean * variance,
        chi_square: points.iter().zip(&round.weights).map(|(p, w)| w * off(p) * off(p)).sum(),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Pearson's data with York's weights; results as published by York (1966) and York et al. (2004), Am. J. Phys. 72,
    /// 367: slope -0.4805334074, intercept 5.479910224, standard errors 0.057985 and 0.294971, chi squared 11.866353.
    #[test]
    fn pearsons_data_with_yorks_weights_come_out() {
        let x = [0.0, 0.9, 1.8, 2.6, 3.3, 4.4, 5.2, 6.1, 6.5, 7.4];
        let w_x = [1000.0, 1000.0, 500.0, 800.0, 200.0, 80.0, 60.0, 20.0, 1.8, 1.0];
        let y = [5.9, 5.4, 4.4, 4.6, 3.5, 3.7, 2.8, 2.8, 2.4, 1.5];
        let w_y = [1.0, 1.8, 4.0, 8.0, 20.0, 20.0, 70.0, 70.0, 100.0, 500.0];
        let points: Vec<Point> = (0..10)
            .map(|i| Point {
                x: x[i],
                u_x: f64::sqrt(1.0 / w_x[i]),
                y: y[i],
                u_y: f64::sqrt(1.0 / w_y[i]),
                correlation: 0.0,
            })
            .collect();
        let line = errors_in_both(&points).unwrap();
        assert!((line.slope + 0.480_533_407_4).abs() < 5e-10, "{line:?}");
        assert!((line.intercept - 5.479_910_224).abs() < 5e-9, "{line:?}");
        assert!((line.u_slope - 0.057_985).abs() < 5e-7 && (line.u_intercept - 0.294_971).abs() < 5e-7, "{line:?}");
        assert!((line.chi_square - 11.866_353).abs() < 5e-7, "{line:?}");
    }

    #[test]
    fn what_leaves_the_line_open_has_none() {
        let point = |x: f64, u_x: f64| Point { x, u_x, y: x, u_y: 1.0, correlation: 0.0 };
        assert_eq!(errors_in_both(&[point(1.0, 1.0), point(2.0, 1.0)]), None);
        assert_eq!(errors_in_both(&[point(1.0, 1.0); 5]), None);
        assert_eq!(errors_in_both(&[point(1.0, 0.0), point(2.0, 1.0), point(3.0, 1.0)]), None);
    }
}
