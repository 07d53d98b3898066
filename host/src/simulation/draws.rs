//! Random numbers: one stream for each part, so that what one part draws never shifts another's world.

use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};

/// Who draws. The number names a ChaCha stream; only ever append.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Part {
    Supply = 1,
    MainString = 2,
    CrossString = 3,
    MainConverter = 4,
    CrossConverter = 5,
    Contacts = 6,
    Contactors = 7,
    Oscillator = 8,
    Camera = 9,
    Tube = 10,
    Enclosure = 11,
    Calibration = 12,
    Bench = 13,
    SupplyTraits = 14,
    /// Frame `n` draws from stream `Frames + n`.
    Frames = 1 << 16,
}

/// A part's own generator.
pub(super) fn stream(seed: u64, part: Part) -> ChaCha8Rng {
    substream(seed, part, 0)
}

/// A generator of the `number`th thing of its kind.
pub(super) fn substream(seed: u64, part: Part, number: u64) -> ChaCha8Rng {
    let mut rng = ChaCha8Rng::seed_from_u64(seed);
    rng.set_stream(part as u64 + number);
    rng
}

/// A standard normal deviate.
pub(super) fn normal(rng: &mut ChaCha8Rng) -> f64 {
    StandardNormal.sample(rng)
}

/// A uniform number in `-size..size`.
pub(super) fn within(rng: &mut ChaCha8Rng, size: f64) -> f64 {
    size * rng.random_range(-1.0..1.0)
}

/// A uniform number in `low..high`.
pub(super) fn between(rng: &mut ChaCha8Rng, low: f64, high: f64) -> f64 {
    rng.random_range(low..high)
}
