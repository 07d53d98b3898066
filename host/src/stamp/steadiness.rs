//! How far the voltage moved, rippled and scattered around an exposure.
//!
//! Motion is judged on means over mains cycles, so that ripple does not count as motion; ripple is judged on the
//! extremes of conversions; scatter comes from second differences of the cycle means, which a ramp does not touch and,
//! through a median, a single step neither.

use super::series::Sample;

/// Measures of steadiness.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Steadiness {
    /// Change of mains-cycle means within the exposure, volts.
    pub span_volts: f64,
    /// Largest difference of a mains-cycle mean within the settle time before from the mean over the exposure, volts.
    pub before_volts: f64,
    /// Peak-to-peak spread of conversions within a mains cycle, median over the exposure, volts.
    pub ripple_volts: f64,
    /// Standard deviation of one mains-cycle mean from its neighbours, volts; `None` with too few cycles to tell.
    pub cycle_scatter_volts: Option<f64>,
    /// Length of the blocks that stand for a mains cycle, seconds.
    pub cycle_seconds: f64,
}

/// Second differences below this number say little about scatter.
const LEAST_DIFFERENCES: usize = 8;

/// Measures around `start_ns..end_ns`, of mean `volts`; `samples` should reach a second or so to either side. The interval
/// should be widened by what its time is uncertain by, since a change beside an exposure may as well lie within it.
pub fn steadiness(
    samples: &[Sample],
    start_ns: i64,
    end_ns: i64,
    settle_ns: i64,
    volts: f64,
    mains_hz: u8,
) -> Steadiness {
    let block = samples_per_cycle(samples, mains_hz);
    let means = cycle_means(samples, block);
    let during = extremes(&means, start_ns, end_ns);
    let before = extremes(&means, start_ns - settle_ns, start_ns);
    let deviation = |(lowest, highest): (f64, f64)| (lowest - volts).abs().max((highest - volts).abs());
    Steadiness {
        span_volts: during.map_or(0.0, |(lowest, highest)| highest - lowest),
        before_volts: before.map_or(0.0, deviation),
        ripple_volts: ripple(samples, block, start_ns, end_ns),
        cycle_scatter_volts: scatter(&means, block),
        cycle_seconds: samples.first().map_or(0.0, |s| (s.end_ns - s.start_ns) as f64 * 1e-9 * block as f64),
    }
}

fn samples_per_cycle(samples: &[Sample], mains_hz: u8) -> usize {
    let window_ns = samples.first().map_or(10_000_000, |sample| sample.end_ns - sample.start_ns).max(1);
    let cycle_ns = 1_000_000_000 / i64::from(mains_hz.max(1));
    usize::try_from((cycle_ns + window_ns / 2) / window_ns).unwrap_or(1).max(1)
}

/// A mean over one mains cycle.
#[derive(Clone, Copy)]
struct CycleMean {
    start_ns: i64,
    end_ns: i64,
    volts: f64,
}

/// Means over every run of `block` samples that follow each other, beginning at each sample.
fn cycle_means(samples: &[Sample], block: usize) -> Vec<CycleMean> {
    let whole = |run: &[Sample]| {
        let (first, last) = (run.first()?, run.last()?);
        let length = (first.end_ns - first.start_ns) * block as i64;
        let follows = (last.end_ns - first.start_ns - length).abs() < length / 4;
        let count: u32 = run.iter().map(|sample| u32::from(sample.count)).sum();
        let sum: f64 = run.iter().map(|sample| sample.volts * f64::from(sample.count)).sum();
        (follows && count > 0 && run.iter().all(|sample| sample.count > 0)).then(|| CycleMean {
            start_ns: first.start_ns,
            end_ns: last.end_ns,
            volts: sum / f64::from(count),
        })
    };
    samples.windows(block).filter_map(whole).collect()
}

/// Lowest and highest cycle mean that touches the interval: a change in the last millisecond of an exposure shows only in
/// the cycle that begins there.
fn extremes(means: &[CycleMean], start_ns: i64, end_ns: i64) -> Option<(f64, f64)> {
    let touching = means.iter().filter(|mean| mean.start_ns < end_ns && mean.end_ns > start_ns);
    touching.fold(None, |range, mean| match range {
        None => Some((mean.volts, mean.volts)),
        Some((lowest, highest)) => Some((lowest.min(mean.volts), highest.max(mean.volts))),
    })
}

fn ripple(samples: &[Sample], block: usize, start_ns: i64, end_ns: i64) -> f64 {
    let during: Vec<Sample> =
        samples.iter().filter(|sample| sample.count > 0 && sample.overlap_ns(start_ns, end_ns) > 0).copied().collect();
    let spread = |cycle: &[Sample]| {
        let lowest = cycle.iter().fold(f64::INFINITY, |lowest, sample| lowest.min(sample.lowest));
        let highest = cycle.iter().fold(f64::NEG_INFINITY, |highest, sample| highest.max(sample.highest));
        highest - lowest
    };
    let mut spreads: Vec<f64> = during.windows(block.min(during.len()).max(1)).map(spread).collect();
    median(&mut spreads).unwrap_or(0.0)
}

fn scatter(means: &[CycleMean], block: usize) -> Option<f64> {
    // Cycle means overlap; every `block`-th one does not.
    let apart: Vec<f64> = means.iter().step_by(block).map(|mean| mean.volts).collect();
    let mut differences: Vec<f64> =
        apart.windows(3).map(|three| (three[0] - 2.0 * three[1] + three[2]).abs()).collect();
    if differences.len() < LEAST_DIFFERENCES {
        return None;
    }
    // A normal distribution's standard deviation is 1.4826 times its median absolute value; the variance of a second
    // difference is six times that of one mean.
    median(&mut differences).map(|median| 1.4826 * median / libm::sqrt(6.0))
}

fn median(values: &mut [f64]) -> Option<f64> {
    values.sort_by(f64::total_cmp);
    values.get(values.len() / 2).copied()
}

#[cfg(test)]
mod tests {
    use rand::SeedableRng;
    use rand_chacha::ChaCha8Rng;
    use rand_distr::{Distribution, Normal};

    use super::{super::mean::tests::windows, *};

    #[test]
    fn a_ramp_is_motion_and_not_scatter() {
        let samples = windows(|t| 3_500.0 * t + 0.5 * 14.0 * t * t, 4.0, 0);
        let measured = steadiness(&samples, 1_000_000_000, 1_500_000_000, 300_000_000, 3_517.5, 50);
        // 14 V/s over half a second, and most of a cycle to either side.
        assert!((7.0..7.6).contains(&measured.span_volts), "{measured:?}");
        assert!((7.4..8.1).contains(&measured.before_volts), "{measured:?}");
        assert!(measured.cycle_scatter_volts.unwrap() < 1e-6);
    }

    #[test]
    fn scatter_is_that_of_cycle_means_even_beside_a_step() {
        let mut rng = ChaCha8Rng::seed_from_u64(9);
        let noise = Normal::new(0.0, 0.2).unwrap();
        let mut samples = windows(|t| 2_500.0 * t, 10.0, 0);
        for (index, sample) in samples.iter_mut().enumerate() {
            sample.volts += noise.sample(&mut rng) + if index > 500 { 200.0 } else { 0.0 };
        }
        let measured = steadiness(&samples, 1_000_000_000, 1_200_000_000, 0, 2_500.0, 50);
        let expected = 0.2 / 2f64.sqrt();
        assert!((measured.cycle_scatter_volts.unwrap() / expected - 1.0).abs() < 0.15, "{measured:?}");
    }

    #[test]
    fn too_few_cycles_tell_nothing_about_scatter() {
        let samples = windows(|t| 2_500.0 * t, 0.1, 0);
        assert_eq!(steadiness(&samples, 0, 50_000_000, 0, 2_500.0, 50).cycle_scatter_volts, None);
        assert_eq!(steadiness(&[], 0, 1, 0, 0.0, 50).cycle_scatter_volts, None);
    }
}
