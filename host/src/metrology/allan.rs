//! Allan deviation of values taken at even distances: what averaging gains, and from where on drift takes it back.
//!
//! Definitions as in NIST Special Publication 1065 (Riley, 2008), for frequency-like values (each the mean over one basic
//! interval).

/// How neighbouring averages are taken.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Averaging {
    /// Averages that do not overlap.
    Plain,
    /// Averages at every possible start: the same quantity with more confidence.
    Overlapping,
    /// Overlapping, and averaged once more: tells white from flicker phase noise.
    Modified,
}

/// Deviation of averages over `factor` values. `None` where there are too few, or `factor` is 0.
pub fn deviation(values: &[f64], factor: usize, averaging: Averaging) -> Option<f64> {
    let m = factor;
    let count = values.len();
    if m == 0 {
        return None;
    }
    // Running sums about the mean, so that long series keep their digits.
    let mean = values.iter().sum::<f64>() / count.max(1) as f64;
    let mut sums = vec![0.0];
    let mut sum = 0.0;
    for value in values {
        sum += value - mean;
        sums.push(sum);
    }
    let second = |i: usize| sums[i + 2 * m] - 2.0 * sums[i + m] + sums[i];
    let squares: Vec<f64> = match averaging {
        Averaging::Plain => {
            (0..).map(|k| k * m).take_while(|i| i + 2 * m <= count).map(|i| second(i).powi(2)).collect()
        }
        Averaging::Overlapping => (0..(count + 1).checked_sub(2 * m)?).map(|i| second(i).powi(2)).collect(),
        Averaging::Modified => {
            let terms = (count + 2).checked_sub(3 * m)?;
            (0..terms).map(|j| ((j..j + m).map(second).sum::<f64>() / m as f64).powi(2)).collect()
        }
    };
    if squares.is_empty() {
        return None;
    }
    let mean_square = squares.iter().sum::<f64>() / squares.len() as f64;
    Some(libm::sqrt(0.5 * mean_square) / m as f64)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn agrees(values: &[f64], factor: usize, averaging: Averaging, published: f64) {
        let found = deviation(values, factor, averaging).unwrap();
        assert!((found / published - 1.0).abs() < 2e-7, "{averaging:?} {factor}: {found} against {published}");
    }

    /// NIST SP 1065 (Riley 2008), the nine-point data set.
    #[test]
    fn the_nine_point_test_set_comes_out() {
        let values = [892.0, 809.0, 823.0, 798.0, 671.0, 644.0, 883.0, 903.0, 677.0];
        agrees(&values, 1, Averaging::Plain, 91.22945);
        agrees(&values, 2, Averaging::Plain, 115.8082);
        agrees(&values, 2, Averaging::Overlapping, 85.95287);
        agrees(&values, 2, Averaging::Modified, 74.78849);
    }

    /// NIST SP 1065 (Riley 2008), the thousand-point data set from its generator.
    #[test]
    fn the_thousand_point_test_set_comes_out() {
        let mut n: u64 = 1_234_567_890;
        let values: Vec<f64> = (0..1_000)
            .map(|_| {
                let value = n as f64 / 2_147_483_647.0;
                n = 16_807 * n % 2_147_483_647;
                value
            })
            .collect();
        let published = [
            (1, 2.922319e-1, 2.922319e-1, 2.922319e-1),
            (10, 9.965736e-2, 9.159953e-2, 6.172376e-2),
            (100, 3.897804e-2, 3.241343e-2, 2.170921e-2),
        ];
        for (factor, plain, overlapping, modified) in published {
            agrees(&values, factor, Averaging::Plain, plain);
            agrees(&values, factor, Averaging::Overlapping, overlapping);
            agrees(&values, factor, Averaging::Modified, modified);
        }
    }

    #[test]
    fn too_few_values_have_none() {
        for averaging in [Averaging::Plain, Averaging::Overlapping, Averaging::Modified] {
            assert_eq!(deviation(&[1.0, 2.0], 2, averaging), None);
            assert_eq!(deviation(&[1.0, 2.0, 3.0], 0, averaging), None);
            assert_eq!(deviation(&[], 1, averaging), None);
        }
    }
}
