//! Weighted linear least squares with covariance, and the one distribution that tests of significance need.

/// A solved system.
#[derive(Clone, Debug)]
pub struct Solution {
    /// The coefficients.
    pub coefficients: Vec<f64>,
    /// Inverse of the weighted normal matrix: times the variance of unit weight it is the covariance.
    pub cofactors: Vec<Vec<f64>>,
    /// Residuals divided by their sigmas.
    pub scaled_residuals: Vec<f64>,
    /// How much each point pulls its own fitted value, 0 to 1.
    pub leverages: Vec<f64>,
}

impl Solution {
    /// Sum of squares of the scaled residuals.
    pub fn square(&self) -> f64 {
        self.scaled_residuals.iter().map(|residual| residual * residual).sum()
    }

    /// Points less coefficients.
    pub fn freedom(&self) -> f64 {
        self.scaled_residuals.len() as f64 - self.coefficients.len() as f64
    }

    /// Variance of unit weight from the scatter.
    pub fn unit_variance(&self) -> f64 {
        self.square() / self.freedom()
    }
}

fn dot(a: &[f64], b: &[f64]) -> f64 {
    a.iter().zip(b).map(|(a, b)| a * b).sum()
}

/// Fits `values = columns * coefficients` with the given standard deviations, by orthogonalising the columns
/// (modified Gram-Schmidt, each done twice, which is as good as Householder's for systems this small).
///
/// `None` where there are fewer points than coefficients and one more, or the columns do not differ.
pub fn solve(columns: &[Vec<f64>], values: &[f64], sigmas: &[f64]) -> Option<Solution> {
    let (count, terms) = (values.len(), columns.len());
    if count <= terms {
        return None;
    }
    let weighed =
        |column: &[f64]| -> Vec<f64> { column.iter().zip(sigmas).map(|(value, sigma)| value / sigma).collect() };
    let mut base: Vec<Vec<f64>> = columns.iter().map(|column| weighed(column)).collect();
    let mut upper = vec![vec![0.0; terms]; terms];
    for j in 0..terms {
        let size = libm::sqrt(dot(&base[j], &base[j]));
        let (before, rest) = base.split_at_mut(j);
        let column = &mut rest[0];
        for _ in 0..2 {
            for (i, unit) in before.iter().enumerate() {
                let share = dot(unit, column);
                upper[i][j] += share;
                column.iter_mut().zip(unit).for_each(|(value, unit)| *value -= share * unit);
            }
        }
        let left = libm::sqrt(dot(column, column));
        if left.is_nan() || left <= 1e-10 * size {
            return None;
        }
        upper[j][j] = left;
        column.iter_mut().for_each(|value| *value /= left);
    }
    let mut residuals = weighed(values);
    let shares: Vec<f64> = base
        .iter()
        .map(|unit| {
            let share = dot(unit, &residuals);
            residuals.iter_mut().zip(unit).for_each(|(value, unit)| *value -= share * unit);
            share
        })
        .collect();
    let inverse = invert_upper(&upper);
    let coefficients = inverse.iter().map(|row| dot(row, &shares)).collect();
    let cofactors = inverse.iter().map(|a| inverse.iter().map(|b| dot(a, b)).collect()).collect();
    let leverages = (0..count).map(|at| base.iter().map(|unit| unit[at] * unit[at]).sum()).collect();
    Some(Solution { coefficients, cofactors, scaled_residuals: residuals, leverages })
}

fn invert_upper(upper: &[Vec<f64>]) -> Vec<Vec<f64>> {
    let terms = upper.len();
    let mut inverse = vec![vec![0.0; terms]; terms];
    for j in 0..terms {
        inverse[j][j] = 1.0 / upper[j][j];
        for i in (0..j).rev() {
            let sum: f64 = (i + 1..=j).map(|k| upper[i][k] * inverse[k][j]).sum();
            inverse[i][j] = -sum / upper[i][i];
        }
    }
    inverse
}

/// Probability that Student's t with `freedom` degrees of freedom is at least as large in size as `t`. With
/// `t = sqrt(F)` it is the probability of an F of one and `freedom` degrees.
pub fn student_two_sided(t: f64, freedom: f64) -> f64 {
    if !t.is_finite() || freedom < 1.0 {
        return if t.is_infinite() { 0.0 } else { 1.0 };
    }
    incomplete_beta(0.5 * freedom, 0.5, freedom / (freedom + t * t))
}

/// The regularised incomplete beta function by its continued fraction (NIST DLMF 8.17.22, evaluated by Lentz's
/// method), with the reflection 8.17.4 where that converges faster.
fn incomplete_beta(a: f64, b: f64, x: f64) -> f64 {
    if x <= 0.0 || x >= 1.0 {
        return if x >= 1.0 { 1.0 } else { 0.0 };
    }
    if x > (a + 1.0) / (a + b + 2.0) {
        return 1.0 - incomplete_beta(b, a, 1.0 - x);
    }
    let log_beta = libm::lgamma(a) + libm::lgamma(b) - libm::lgamma(a + b);
    let front = libm::exp(a * libm::log(x) + b * libm::log(1.0 - x) - log_beta) / a;
    let term = |index: i32| {
        let m = f64::from(index / 2);
        match index {
            0 => 1.0,
            even if even % 2 == 0 => m * (b - m) * x / ((a + 2.0 * m - 1.0) * (a + 2.0 * m)),
            _ => -(a + m) * (a + b + m) * x / ((a + 2.0 * m) * (a + 2.0 * m + 1.0)),
        }
    };
    let tiny = |value: f64| if value.abs() < 1e-300 { 1e-300 } else { value };
    let (mut fraction, mut c, mut d) = (1.0, 1.0, 0.0);
    for index in 0..400 {
        d = 1.0 / tiny(1.0 + term(index) * d);
        c = tiny(1.0 + term(index) / c);
        let step = c * d;
        fraction *= step;
        if index > 0 && (step - 1.0_f64).abs() < 1e-15 {
            break;
        }
    }
    front * (fraction - 1.0).max(0.0)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn student_agrees_with_the_published_table() {
        // NIST/SEMATECH e-Handbook of Statistical Methods, 1.3.6.7.2, critical values of Student's t: (value, degrees, upper tail).
        let table = [
            (12.706, 1.0, 0.025),
            (4.303, 2.0, 0.025),
            (2.228, 10.0, 0.025),
            (2.000, 60.0, 0.025),
            (2.660, 60.0, 0.005),
            (3.232, 60.0, 0.001),
            (1.296, 60.0, 0.10),
        ];
        for (t, freedom, tail) in table {
            let found = student_two_sided(t, freedom);
            assert!((found - 2.0 * tail).abs() < 4e-4 * 2.0 * tail + 2e-5, "t {t}, {freedom}: {found}");
        }
        assert_eq!(student_two_sided(0.0, 10.0), 1.0);
        assert_eq!(student_two_sided(f64::INFINITY, 10.0), 0.0);
    }

    /// NIST StRD, data set Pontius: load cell calibration, quadratic, average difficulty; certified values.
    #[test]
    fn nist_pontius_is_reproduced_to_nine_digits() {
        let deflections = [
            0.11019, 0.21956, 0.32949, 0.43899, 0.54803, 0.65694, 0.76562, 0.87487, 0.98292, 1.09146, 1.20001, 1.30822,
            1.41599, 1.52399, 1.63194, 1.73947, 1.84646, 1.95392, 2.06128, 2.16844, 0.11052, 0.22018, 0.32939, 0.43886,
            0.54798, 0.65739, 0.76596, 0.87474, 0.98300, 1.09150, 1.20004, 1.30818, 1.41613, 1.52408, 1.63159, 1.73965,
            1.84696, 1.95445, 2.06177, 2.16829,
        ];
        let loads: Vec<f64> = (0..40).map(|index| 150_000.0 * f64::from(index % 20 + 1)).collect();
        let columns = [vec![1.0; 40], loads.clone(), loads.iter().map(|load| load * load).collect()];
        let solution = solve(&columns, &deflections, &[1.0; 40]).unwrap();
        let certified = [
            (0.673565789473684E-03, 0.107938612033077E-03),
            (0.732059160401003E-06, 0.157817399981659E-09),
            (-0.316081871345029E-14, 0.486652849992036E-16),
        ];
        for (index, (value, deviation)) in certified.into_iter().enumerate() {
            let found = solution.coefficients[index];
            assert!((found / value - 1.0).abs() < 1e-9, "{found} {value}");
            let found = libm::sqrt(solution.cofactors[index][index] * solution.unit_variance());
            assert!((found / deviation - 1.0).abs() < 1e-9, "{found} {deviation}");
        }
        assert!((libm::sqrt(solution.unit_variance()) / 0.205177424076185E-03 - 1.0).abs() < 1e-9);
        assert!((solution.leverages.iter().sum::<f64>() - 3.0).abs() < 1e-12);
    }

    /// NIST StRD, data set Norris: an ozone monitor against NIST's, straight line; certified values.
    #[test]
    fn nist_norris_is_reproduced_to_nine_digits() {
        let x = [
            0.2, 337.4, 118.2, 884.6, 10.1, 226.5, 666.3, 996.3, 448.6, 777.0, 558.2, 0.4, 0.6, 775.5, 666.9, 338.0,
            447.5, 11.6, 556.0, 228.1, 995.8, 887.6, 120.2, 0.3, 0.3, 556.8, 339.1, 887.2, 999.0, 779.0, 11.1, 118.3,
            229.2, 669.1, 448.9, 0.5,
        ];
        let y = [
            0.1, 338.8, 118.1, 888.0, 9.2, 228.1, 668.5, 998.5, 449.1, 778.9, 559.2, 0.3, 0.1, 778.1, 668.8, 339.3,
            448.9, 10.8, 557.7, 228.3, 998.0, 888.8, 119.6, 0.3, 0.6, 557.6, 339.3, 888.0, 998.5, 778.9, 10.2, 117.6,
            228.9, 668.4, 449.2, 0.2,
        ];
        let solution = solve(&[vec![1.0; 36], x.to_vec()], &y, &[1.0; 36]).unwrap();
        let certified = [(-0.262323073774029, 0.232818234301152), (1.00211681802045, 0.429796848199937E-03)];
        for (index, (value, deviation)) in certified.into_iter().enumerate() {
            let found = solution.coefficients[index];
            assert!((found / value - 1.0).abs() < 1e-9, "{found} {value}");
            let found = libm::sqrt(solution.cofactors[index][index] * solution.unit_variance());
            assert!((found / deviation - 1.0).abs() < 1e-9, "{found} {deviation}");
        }
        assert!((libm::sqrt(solution.unit_variance()) / 0.884796396144373 - 1.0).abs() < 1e-9);
    }

    /// JCGM 100:2008, example H.3: calibration of a thermometer; its published results.
    #[test]
    fn gum_thermometer_example_comes_out() {
        let t = [21.521, 22.012, 22.512, 23.003, 23.507, 23.999, 24.513, 25.002, 25.503, 26.010, 26.511];
        let b = [-0.171, -0.169, -0.166, -0.159, -0.164, -0.165, -0.156, -0.157, -0.159, -0.161, -0.160];
        let solution = solve(&[vec![1.0; 11], t.map(|t: f64| t - 20.0).to_vec()], &b, &[1.0; 11]).unwrap();
        let [y1, y2] = solution.coefficients[..] else { panic!("two coefficients") };
        let s = libm::sqrt(solution.unit_variance());
        let covariance = |i: usize, j: usize| solution.cofactors[i][j] * s * s;
        let (s1, s2) = (libm::sqrt(covariance(0, 0)), libm::sqrt(covariance(1, 1)));
        assert!((y1 + 0.1712).abs() < 5e-5 && (s1 - 0.0029).abs() < 5e-5, "{y1} {s1}");
        assert!((y2 - 0.00218).abs() < 5e-6 && (s2 - 0.00067).abs() < 5e-6, "{y2} {s2}");
        assert!((covariance(0, 1) / (s1 * s2) + 0.930).abs() < 5e-4);
        assert!((s - 0.0035).abs() < 5e-5);
        let at_30 = y1 + y2 * 10.0;
        let u = libm::sqrt(covariance(0, 0) + 100.0 * covariance(1, 1) + 20.0 * covariance(0, 1));
        assert!((at_30 + 0.1494).abs() < 5e-5 && (u - 0.0041).abs() < 5e-5, "{at_30} {u}");
    }

    #[test]
    fn systems_without_an_answer_have_none() {
        let same = vec![1.0; 5];
        assert!(solve(&[same.clone(), same.clone()], &same, &same).is_none());
        assert!(solve(&[same.clone(), vec![1.0, 2.0, 3.0, 4.0, f64::NAN]], &same, &same).is_none());
        assert!(solve(&[vec![1.0], vec![2.0]], &[1.0], &[1.0]).is_none());
    }
}
