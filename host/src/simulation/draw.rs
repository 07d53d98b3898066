//! Random draws of the simulated world: one seed, one stream per subject, so that a change in one part leaves the others
//! as they were.

use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};

/// A stream of draws for one subject.
pub(super) fn stream(seed: u64, subject: u64) -> ChaCha8Rng {
    let mut rng = ChaCha8Rng::seed_from_u64(seed);
    rng.set_stream(subject);
    rng
}

/// A draw from the normal distribution with this standard deviation.
pub(super) fn normal(rng: &mut ChaCha8Rng, deviation: f64) -> f64 {
    let draw: f64 = StandardNormal.sample(rng);
    draw * deviation
}
