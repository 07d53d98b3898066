//! From points to code-to-volts: straight line or bent, decided by F-test; outliers named, never dropped in silence.

use super::{Channel, ChannelFit, Point};
use crate::metrology::{Solution, solve, student_two_sided};

/// What a single point is taken to scatter before the points themselves have told it: 0.1 V and 50 ppm of the voltage.
/// Only the ratio matters, as relative weight of low and high points (a judgement, no source).
const POINT_SIGMA: (f64, f64) = (0.1, 50e-6);

/// Least scatter a point is granted, volts, so that points without any do not get all the weight.
const LEAST_SIGMA_VOLTS: f64 = 0.01;

/// A bend is believed when noise alone would feign it less often than this.
const BEND_PROBABILITY: f64 = 0.01;

/// A point is called an outlier when noise alone would put any of the points so far off less often than this.
const OUTLIER_PROBABILITY: f64 = 0.001;

/// Two ambients are told apart when enclosure temperatures spread by at least this, kelvin.
const TWO_AMBIENTS_KELVIN: f64 = 4.0;

/// Why points give no fit.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
pub enum FitError {
    /// Too few, or at too few levels.
    #[error("{points} points at {levels} different voltages are too few; take at least 8 points at 4 voltages")]
    TooFew {
        /// Points that may be used.
        points: usize,
        /// Different voltages among them.
        levels: usize,
    },
    /// The codes do not follow the voltage.
    #[error("the codes of the {0} do not follow the reference; check wiring, and that columns were not swapped")]
    NoSlope(&'static str),
}

/// A temperature coefficient, ppm per kelvin, with its standard uncertainty.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct TemperatureTerm {
    /// Temperature the fit refers to, degrees Celsius.
    pub reference_celsius: f64,
    /// The coefficient.
    pub ppm_per_kelvin: f64,
    /// Its standard uncertainty.
    pub u_ppm_per_kelvin: f64,
    /// Whether the points themselves gave it, or a person.
    pub measured: bool,
}

/// One point against the fit.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Residual {
    /// Index among the points.
    pub index: usize,
    /// Reference less fit, volts.
    pub volts: f64,
    /// The same in standard deviations of what a point of this weight may be off, judged by all others.
    pub deviations: f64,
    /// Whether the point was used.
    pub used: bool,
}

/// The fit of one sense.
#[derive(Clone, Debug)]
pub struct FitReport {
    /// Coefficients, covariance, residual and code range, as they go into the certificate. The hysteresis is still 0.
    pub fit: ChannelFit,
    /// Its temperature term.
    pub temperature: TemperatureTerm,
    /// All points in their order.
    pub residuals: Vec<Residual>,
    /// F of the bend against the straight line, its degrees of freedom, and the probability of so large an F without one.
    pub bend: FTest,
    /// The same of a cubic term (self-heating) against the bend.
    pub cubic: FTest,
    /// Whether the bend was kept.
    pub bent: bool,
    /// Points that do not belong to the others.
    pub outliers: Vec<usize>,
}

/// One term against none.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct FTest {
    /// Ratio of the explained to the remaining variance, one degree of freedom in the numerator.
    pub f: f64,
    /// Degrees of freedom of the denominator.
    pub freedom: f64,
    /// Probability of such an F by chance.
    pub probability: f64,
}

pub(super) fn code(point: &Point, channel: Channel) -> f64 {
    match channel {
        Channel::Sense => point.sense_code,
        Channel::Cross => point.cross_code,
    }
}

/// Distinct voltages: neighbours closer than 3 % of the span count as one level. Gives the level of every point.
pub(super) fn levels(points: &[Point]) -> (Vec<usize>, usize) {
    let mut order: Vec<usize> = (0..points.len()).collect();
    order.sort_by(|a, b| points[*a].reference_volts.total_cmp(&points[*b].reference_volts));
    let volts = |at: usize| points[order[at]].reference_volts;
    let span = if order.is_empty() { 0.0 } else { volts(order.len() - 1) - volts(0) };
    let mut level = 0;
    let mut found = vec![0; points.len()];
    for at in 1..order.len() {
        if volts(at) - volts(at - 1) > 0.03 * span {
            level += 1;
        }
        found[order[at]] = level;
    }
    (found, if points.is_empty() { 0 } else { level + 1 })
}

/// Fits one sense. Points with `left_out` are shown but not used. `given` is the temperature coefficient where the
/// points were taken at one ambient only.
///
/// # Errors
/// When the points cannot carry a fit.
pub fn fit(points: &[Point], channel: Channel, given: (f64, f64)) -> Result<FitReport, FitError> {
    let usable: Vec<usize> = (0..points.len()).filter(|index| points[*index].left_out.is_none()).collect();
    let chosen: Vec<Point> = usable.iter().map(|index| points[*index].clone()).collect();
    let (_, count) = levels(&chosen);
    if usable.len() < 8 || count < 4 {
        return Err(FitError::TooFew { points: usable.len(), levels: count });
    }
    let mut data = Data::new(points, channel, given);
    let outliers = data.outliers(&usable);
    let used: Vec<usize> = usable.into_iter().filter(|index| !outliers.contains(index)).collect();
    data.report(&used, outliers).ok_or(FitError::NoSlope(data.name()))
}

/// The bend and its standard uncertainty whether it was kept or not, volts per code squared: for tests of the procedure.
#[cfg(test)]
pub(super) fn bend_of(points: &[Point], channel: Channel) -> Option<(f64, f64)> {
    let mut data = Data::new(points, channel, (0.0, 0.0));
    let all: Vec<usize> = (0..points.len()).collect();
    let outliers = data.outliers(&all);
    let used: Vec<usize> = all.into_iter().filter(|index| !outliers.contains(index)).collect();
    let solution = data.solve(&used, 2)?;
    let unit = data.scale * data.scale;
    Some((solution.coefficients[2] / unit, libm::sqrt(solution.cofactors[2][2] * solution.unit_variance()) / unit))
}

struct Data<'a> {
    points: &'a [Point],
    channel: Channel,
    /// Codes in units of the largest, so that the columns are of one size.
    scaled: Vec<f64>,
    scale: f64,
    sigmas: Vec<f64>,
    /// Degrees from the reference temperature; 0 where not measured.
    kelvin: Vec<f64>,
    reference_celsius: f64,
    two_ambients: bool,
    given: (f64, f64),
}

impl<'a> Data<'a> {
    fn new(points: &'a [Point], channel: Channel, given: (f64, f64)) -> Self {
        let codes: Vec<f64> = points.iter().map(|point| code(point, channel)).collect();
        let scale = codes.iter().fold(1.0, |largest: f64, code| largest.max(code.abs()));
        let celsius: Vec<f64> = points.iter().filter_map(|point| point.enclosure_celsius).collect();
        let reference_celsius =
            if celsius.is_empty() { 23.0 } else { celsius.iter().sum::<f64>() / celsius.len() as f64 };
        let spread = celsius.iter().fold(0.0, |most: f64, value| most.max((value - reference_celsius).abs()));
        let kelvin = |point: &Point| point.enclosure_celsius.map_or(0.0, |celsius| celsius - reference_celsius);
        let sigma = |point: &Point| libm::hypot(POINT_SIGMA.0, POINT_SIGMA.1 * point.reference_volts);
        Self {
            scaled: codes.iter().map(|code| code / scale).collect(),
            scale,
            sigmas: points.iter().map(sigma).collect(),
            kelvin: points.iter().map(kelvin).collect(),
            two_ambients: celsius.len() == points.len() && 2.0 * spread >= TWO_AMBIENTS_KELVIN,
            reference_celsius,
            points,
            channel,
            given,
        }
    }

    fn name(&self) -> &'static str {
        match self.channel {
            Channel::Sense => "main sense",
            Channel::Cross => "cross-sense",
        }
    }

    /// Reference volts, brought to the reference temperature where the coefficient is given and not fitted.
    fn volts(&self, index: usize) -> f64 {
        let ppm = if self.two_ambients { 0.0 } else { self.given.0 };
        self.points[index].reference_volts / (1.0 + 1e-6 * ppm * self.kelvin[index])
    }

    /// Powers of the code up to `degree`, then the temperature column where there are two ambients.
    fn solve(&self, used: &[usize], degree: i32) -> Option<Solution> {
        let power = |degree: i32| used.iter().map(|index| libm::pow(self.scaled[*index], f64::from(degree))).collect();
        let mut columns: Vec<Vec<f64>> = (0..=degree).map(power).collect();
        if self.two_ambients {
            columns.push(
                used.iter().map(|index| 1e-6 * self.kelvin[*index] * self.points[*index].reference_volts).collect(),
            );
        }
        let volts: Vec<f64> = used.iter().map(|index| self.volts(*index)).collect();
        let sigmas: Vec<f64> = used.iter().map(|index| self.sigmas[*index]).collect();
        solve(&columns, &volts, &sigmas)
    }

    /// Finds how points scatter: a fixed part and one in proportion to the voltage, from the low and the high points
    /// apart. By medians, so that a mistyped point has no say.
    fn weigh(&mut self, usable: &[usize]) {
        let volts = |index: usize| self.points[index].reference_volts;
        let highest = usable.iter().fold(0.0, |most: f64, index| most.max(volts(*index).abs()));
        for _ in 0..3 {
            let Some(solution) = self.solve(usable, 2) else { return };
            let square = |low: bool| {
                let mut sizes: Vec<(f64, f64)> = Vec::new();
                for (at, index) in usable.iter().enumerate() {
                    if (volts(*index).abs() < 0.4 * highest) == low {
                        sizes.push((
                            (solution.scaled_residuals[at] * self.sigmas[*index]).abs(),
                            volts(*index) * volts(*index),
                        ));
                    }
                }
                sizes.sort_by(|a, b| a.0.total_cmp(&b.0));
                // 1.4826 makes the median of a bell curve's sizes its standard deviation.
                let sigma = 1.4826 * sizes.get(sizes.len() / 2)?.0;
                let mean_volts_square = sizes.iter().map(|size| size.1).sum::<f64>() / sizes.len() as f64;
                (sizes.len() >= 8).then_some((sigma * sigma, mean_volts_square))
            };
            let (Some(low), Some(high)) = (square(true), square(false)) else { return };
            let share = ((high.0 - low.0) / (high.1 - low.1)).max(0.0);
            let fixed = (low.0 - share * low.1).max(LEAST_SIGMA_VOLTS * LEAST_SIGMA_VOLTS).max(0.04 * low.0);
            self.sigmas =
                self.points.iter().map(|p| libm::sqrt(fixed + share * p.reference_volts * p.reference_volts)).collect();
        }
    }

    /// Whether a point lies so far off that it matters: a fifth of what a calibration is accepted with.
    fn matters(&self, index: usize, scaled_residual: f64) -> bool {
        (scaled_residual * self.sigmas[index]).abs() > 0.1 + 1e-4 * self.points[index].reference_volts.abs()
    }

    /// Takes away the point that is farthest from what all others say, as long as chance cannot explain it. A tenth of
    /// the points at most: more are no outliers but another story.
    fn outliers(&mut self, usable: &[usize]) -> Vec<usize> {
        let mut left = usable.to_vec();
        let mut found = Vec::new();
        while found.len() < (usable.len() / 10).max(1) {
            // A gross outlier bends the fit and so all residuals: weights are found anew after each.
            self.weigh(&left);
            let Some(solution) = self.solve(&left, 2) else { break };
            let off = deviations(&solution);
            let worst = (0..left.len()).max_by(|a, b| off[*a].abs().total_cmp(&off[*b].abs()));
            let Some(at) = worst else { break };
            let chance = student_two_sided(off[at], solution.freedom() - 1.0) * left.len() as f64;
            if chance > OUTLIER_PROBABILITY || !self.matters(left[at], solution.scaled_residuals[at]) {
                break;
            }
            found.push(left.remove(at));
        }
        self.weigh(&left);
        found.sort_unstable();
        found
    }

    fn report(&self, used: &[usize], outliers: Vec<usize>) -> Option<FitReport> {
        let (line, bend) = (self.solve(used, 1)?, self.solve(used, 2)?);
        let bend_test = f_test(&line, &bend);
        let cubic_test =
            self.solve(used, 3).map_or(FTest { f: 0.0, freedom: 0.0, probability: 1.0 }, |cubic| f_test(&bend, &cubic));
        let bent = bend_test.probability < BEND_PROBABILITY;
        let (solution, terms) = if bent { (bend, 3) } else { (line, 2) };
        let fit = self.channel_fit(&solution, terms, used)?;
        let temperature = self.temperature(&solution, terms);
        let residuals = self.residuals(&fit, &temperature, &solution, used);
        Some(FitReport { fit, temperature, residuals, bend: bend_test, cubic: cubic_test, bent, outliers })
    }

    fn channel_fit(&self, solution: &Solution, terms: usize, used: &[usize]) -> Option<ChannelFit> {
        let variance = solution.unit_variance();
        let unit = [1.0, 1.0 / self.scale, 1.0 / (self.scale * self.scale)];
        let mut fit = ChannelFit {
            coefficients: [0.0; 3],
            covariance: [[0.0; 3]; 3],
            residual_volts: 0.0,
            hysteresis_fraction: 0.0,
            code_min: 0,
            code_max: 0,
        };
        for i in 0..terms {
            fit.coefficients[i] = solution.coefficients[i] * unit[i];
            for j in 0..terms {
                // In this order the matrix is symmetric to the last bit.
                let cofactor = 0.5 * (solution.cofactors[i][j] + solution.cofactors[j][i]);
                fit.covariance[i][j] = cofactor * variance * (unit[i] * unit[j]);
            }
        }
        let sigma = |at: usize| self.sigmas[used[at]];
        let square: f64 =
            solution.scaled_residuals.iter().enumerate().map(|(at, off)| off * off * sigma(at) * sigma(at)).sum();
        fit.residual_volts = libm::sqrt(square / solution.freedom());
        let codes = used.iter().map(|index| code(&self.points[*index], self.channel));
        fit.code_min = libm::floor(codes.clone().fold(f64::INFINITY, f64::min)) as i16;
        fit.code_max = libm::ceil(codes.fold(f64::NEG_INFINITY, f64::max)) as i16;
        (fit.coefficients[1].abs() >= 1e-3).then_some(fit)
    }

    fn temperature(&self, solution: &Solution, terms: usize) -> TemperatureTerm {
        let (ppm_per_kelvin, u_ppm_per_kelvin) = if self.two_ambients {
            (solution.coefficients[terms], libm::sqrt(solution.cofactors[terms][terms] * solution.unit_variance()))
        } else {
            self.given
        };
        let reference_celsius = self.reference_celsius;
        TemperatureTerm { reference_celsius, ppm_per_kelvin, u_ppm_per_kelvin, measured: self.two_ambients }
    }

    fn residuals(
        &self,
        fit: &ChannelFit,
        term: &TemperatureTerm,
        solution: &Solution,
        used: &[usize],
    ) -> Vec<Residual> {
        let own = deviations(solution);
        let unit = libm::sqrt(solution.unit_variance());
        let residual = |index: usize| {
            let factor = 1.0 + 1e-6 * term.ppm_per_kelvin * self.kelvin[index];
            let volts =
                self.points[index].reference_volts - factor * fit.volts(code(&self.points[index], self.channel));
            let at = used.iter().position(|used| *used == index);
            let deviations = at.map_or(volts / (unit * self.sigmas[index]), |at| own[at]);
            Residual { index, volts, deviations, used: at.is_some() }
        };
        (0..self.points.len()).map(residual).collect()
    }
}

/// Externally studentised residuals: each against the scatter of all others.
fn deviations(solution: &Solution) -> Vec<f64> {
    let freedom = solution.freedom() - 1.0;
    let deviation = |(residual, leverage): (&f64, &f64)| {
        let room = (1.0 - leverage).max(1e-12);
        let others = (solution.square() - residual * residual / room).max(1e-300) / freedom;
        residual / libm::sqrt(others * room)
    };
    solution.scaled_residuals.iter().zip(&solution.leverages).map(deviation).collect()
}

fn f_test(without: &Solution, with: &Solution) -> FTest {
    let freedom = with.freedom();
    let f = ((without.square() - with.square()) / with.unit_variance()).max(0.0);
    // Points without any scatter explain themselves; 0/0 must not pass for a bend.
    let f = if f.is_finite() { f } else { 0.0 };
    FTest { f, freedom, probability: student_two_sided(libm::sqrt(f), freedom) }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::calibration::example;

    fn bent(ppm_per_kilovolt: f64) -> Vec<Point> {
        let bend = |point: Point| {
            let kilovolts = point.reference_volts / 1e3;
            Point { reference_volts: point.reference_volts * (1.0 + 1e-6 * ppm_per_kilovolt * kilovolts), ..point }
        };
        example().points.into_iter().map(bend).collect()
    }

    #[test]
    fn a_straight_divider_is_fitted_by_a_straight_line() {
        let report = fit(&example().points, Channel::Sense, (0.0, 10.0)).unwrap();
        assert!(!report.bent && report.fit.coefficients[2] == 0.0 && report.outliers.is_empty());
        assert!(report.bend.probability > 0.01 && !report.temperature.measured);
        // The weights differ from the example's own, so only to within a few standard uncertainties.
        let certificate = example();
        for code in [0.0, 8000.0, 17_600.0] {
            let off = report.fit.volts(code) - certificate.sense.volts(code);
            assert!(off.abs() < 3.0 * report.fit.fit_u_volts(code), "{off}");
        }
    }

    #[test]
    fn a_voltage_coefficient_is_found() {
        let report = fit(&bent(40.0), Channel::Sense, (0.0, 10.0)).unwrap();
        assert!(report.bent, "{:?}", report.bend);
        // V = c N (1 + k c N): a2 = k c^2, k = 40e-9 per volt.
        let (found, wanted) = (report.fit.coefficients[2], 40e-9 * 0.312_562_5 * 0.312_562_5);
        let u = libm::sqrt(report.fit.covariance[2][2]);
        assert!((found - wanted).abs() < 3.0 * u && u < 0.2 * wanted, "{found} {wanted} {u}");
    }

    #[test]
    fn one_mistyped_reference_is_named_and_not_used() {
        let mut points = example().points;
        let clean = fit(&points, Channel::Sense, (0.0, 10.0)).unwrap();
        // Two digits swapped.
        points[7].reference_volts = 3580.1;
        let report = fit(&points, Channel::Sense, (0.0, 10.0)).unwrap();
        assert_eq!(report.outliers, [7]);
        assert!(!report.residuals[7].used && report.residuals[7].deviations.abs() > 20.0);
        assert!((report.fit.coefficients[1] - clean.fit.coefficients[1]).abs() < 1e-5);
    }

    #[test]
    fn clean_points_seldom_have_an_outlier() {
        use rand::{RngExt, SeedableRng};
        let mut rng = rand_chacha::ChaCha8Rng::seed_from_u64(3);
        let normal = rand_distr::StandardNormal;
        let called = (0..1000).filter(|_| {
            let mut points = example().points;
            points.iter_mut().for_each(|point| {
                let noise: f64 = rng.sample(normal);
                point.sense_code = (point.reference_volts + 0.1 * noise) / 0.3125;
            });
            !fit(&points, Channel::Sense, (0.0, 10.0)).unwrap().outliers.is_empty()
        });
        // Nominally one in a thousand; the weights are themselves estimated from few points.
        let count = called.count();
        assert!(count <= 10, "{count} of 1000");
    }

    #[test]
    fn a_point_left_out_is_shown_but_not_used() {
        let mut points = example().points;
        points[9].left_out = Some("door was opened".to_owned());
        points[9].reference_volts += 100.0;
        let report = fit(&points, Channel::Sense, (0.0, 10.0)).unwrap();
        assert!(report.outliers.is_empty() && !report.residuals[9].used);
        assert!((report.residuals[9].volts - 100.0).abs() < 1.0);
    }

    #[test]
    fn two_ambients_give_the_temperature_term() {
        let mut points = example().points;
        for (index, point) in points.iter_mut().enumerate() {
            let celsius = if index < 31 { 18.0 } else { 28.0 };
            point.enclosure_celsius = Some(celsius);
            point.reference_volts *= 1.0 + 12e-6 * (celsius - 23.0);
        }
        let report = fit(&points, Channel::Sense, (0.0, 10.0)).unwrap();
        let term = report.temperature;
        assert!(term.measured && (term.reference_celsius - 23.0).abs() < 0.2, "{term:?}");
        assert!(
            (term.ppm_per_kelvin - 12.0).abs() < 3.0 * term.u_ppm_per_kelvin && term.u_ppm_per_kelvin < 3.0,
            "{term:?}"
        );
    }

    #[test]
    fn too_few_points_and_swapped_columns_are_refused() {
        assert!(matches!(fit(&example().points[..5], Channel::Sense, (0.0, 10.0)), Err(FitError::TooFew { .. })));
        let mut points = example().points;
        points.iter_mut().for_each(|point| point.sense_code = 12.0);
        assert_eq!(fit(&points, Channel::Sense, (0.0, 10.0)).unwrap_err(), FitError::NoSlope("main sense"));
    }
}
