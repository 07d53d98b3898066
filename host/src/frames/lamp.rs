//! The sync lamp: from the brightness of its patch in each frame to the frames' exposures on the controller's clock.
//!
//! The controller lights a lamp in the field of view with a pseudo-random sequence of chips a little over two frame
//! periods long. The patch's brightness in one frame is the lamp's integral over that exposure, so the frames that an
//! edge of the sequence cuts tell where the edge fell, to a small part of the exposure.
//!
//! 1. [`acquire`](acquire::acquire) finds which frame saw which part of the sequence: the most likely path through all
//!    possible offsets, in which a frame may follow its predecessor by one frame period, by none (repeated) or by
//!    several (dropped).
//! 2. [`fit`](fit::fit) then finds offset, rate, exposure, brightness and background by least squares, and their
//!    uncertainty from the residuals.
//!
//! 3. [`slots`](slots::slots) weighs, with that fit, every other assignment of frames to frame periods: a frame lost while the
//!    lamp did not change leaves its neighbours a whole period uncertain, and they say so.
//!
//! It refuses where the path is not clearly better than any other, or the lamp too weak.

mod acquire;
mod fit;
mod slots;
#[cfg(test)]
mod tests;

use thiserror::Error;

/// The lamp, as the controller drives it.
#[derive(Clone, Debug)]
pub struct LampCode {
    /// When chip 0 began, seconds of the controller's clock.
    pub start_seconds: f64,
    /// Length of a chip, seconds.
    pub chip_seconds: f64,
    /// Lit or dark, for the whole sequence, which repeats.
    pub chips: Vec<bool>,
    /// Seconds of light from the beginning of the sequence to that of each chip, and to its end.
    lit_before: Vec<f64>,
}

impl LampCode {
    /// A lamp whose sequence begins at `start_seconds`.
    pub fn new(start_seconds: f64, chip_seconds: f64, chips: Vec<bool>) -> Self {
        let mut lit_before = vec![0.0];
        let mut lit = 0.0;
        for chip in &chips {
            lit += if *chip { chip_seconds } else { 0.0 };
            lit_before.push(lit);
        }
        Self { start_seconds, chip_seconds, chips, lit_before }
    }

    /// Length of the whole sequence, seconds.
    pub fn period_seconds(&self) -> f64 {
        self.chip_seconds * self.chips.len() as f64
    }

    /// Seconds of light from the start of the sequence until `time`.
    fn lit_until(&self, time: f64) -> f64 {
        let chips = (time - self.start_seconds) / self.chip_seconds;
        let whole = chips.floor();
        let index = (whole as i64).rem_euclid(self.chips.len() as i64) as usize;
        let round = (whole / self.chips.len() as f64).floor();
        let part = if self.chips[index] { (chips - whole) * self.chip_seconds } else { 0.0 };
        round * self.lit_before[self.chips.len()] + self.lit_before[index] + part
    }

    /// Share of `start..start + exposure` in which the lamp was lit, 0 to 1.
    pub fn share(&self, start: f64, exposure: f64) -> f64 {
        (self.lit_until(start + exposure) - self.lit_until(start)) / exposure
    }
}

/// One frame of a clip.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct LampFrame {
    /// Nominal time within the clip, seconds: from the frame-time list, or index times frame period.
    pub clip_seconds: f64,
    /// Mean brightness of the lamp's patch, any unit.
    pub brightness: f64,
}

/// What is known beforehand.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct LampSearch {
    /// Nominal frame period, seconds.
    pub frame_seconds: f64,
    /// Where the clip's zero lies on the controller's clock, seconds.
    pub start_guess: f64,
    /// How far it may be off either way, seconds; less than half the sequence.
    pub start_within: f64,
    /// Exposure as far as known, seconds.
    pub exposure_guess: f64,
    /// Whether frames may be missing or doubled without the clip's times showing it.
    pub times_may_slip: bool,
}

/// Why no frame was timed.
#[derive(Clone, Copy, Debug, PartialEq, Error)]
pub enum LampRefusal {
    /// Fewer frames than any decision can rest on.
    #[error("the clip has only {frames} frames with a lamp patch: at least {needed} are needed")]
    TooFewFrames {
        /// How many there are.
        frames: usize,
        /// How many there must be.
        needed: usize,
    },
    /// The patch hardly changes.
    #[error(
        "the lamp's patch changes by only {contrast:.1} times its noise: place the lamp nearer, or shade the room light"
    )]
    TooWeak {
        /// Range of brightness over noise.
        contrast: f64,
    },
    /// Two places in the sequence fit nearly as well.
    #[error(
        "the lamp's sequence fits at two places (better by only {margin:.1}): film longer, or state the clip's start more closely"
    )]
    Ambiguous {
        /// Difference of the log-likelihoods of the best two.
        margin: f64,
    },
    /// No place fits.
    #[error(
        "the lamp's sequence fits nowhere (residual {residual:.2} of the lamp's range): check the patch and the chip length"
    )]
    NoFit {
        /// Root mean square residual over the range of brightness.
        residual: f64,
    },
    /// The search window holds the same part of the sequence twice.
    #[error(
        "the clip's start is known only to {within:.0} s, but the sequence repeats after {period:.0} s: state it more closely"
    )]
    WindowTooWide {
        /// Half-width of the window, seconds.
        within: f64,
        /// Length of the sequence, seconds.
        period: f64,
    },
}

/// One frame's exposure on the controller's clock.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct TimedFrame {
    /// Centre of the exposure, seconds of the controller's clock.
    pub centre_seconds: f64,
    /// Standard uncertainty of the centre with this frame's own jitter, seconds.
    pub centre_u_seconds: f64,
    /// Standard uncertainty of the frame clock alone at this frame, seconds.
    pub clock_u_seconds: f64,
    /// Whether this frame shows the same exposure as the one before.
    pub repeated: bool,
    /// Frames missing between the one before and this.
    pub missing_before: u32,
}

/// A timed clip.
#[derive(Clone, Debug, PartialEq)]
pub struct LampTiming {
    /// The frames, in order.
    pub frames: Vec<TimedFrame>,
    /// Exposure, seconds.
    pub exposure_seconds: f64,
    /// Its standard uncertainty, seconds.
    pub exposure_u_seconds: f64,
    /// Seconds of the controller per second of the clip.
    pub rate: f64,
    /// Scatter of single frames about the frame clock, seconds (standard deviation).
    pub jitter_seconds: f64,
    /// Root mean square residual over the lamp's range of brightness.
    pub residual: f64,
    /// By how much the best place in the sequence beats the next, in log-likelihood.
    pub margin: f64,
}

/// Fewest frames a decision may rest on: two dozen chips of a sequence in which any nine differ from all others.
const FEWEST_FRAMES: usize = 40;

/// Times the frames of one clip.
///
/// # Errors
/// [`LampRefusal`]: nothing is guessed.
pub fn time_frames(code: &LampCode, frames: &[LampFrame], search: &LampSearch) -> Result<LampTiming, LampRefusal> {
    if frames.len() < FEWEST_FRAMES {
        return Err(LampRefusal::TooFewFrames { frames: frames.len(), needed: FEWEST_FRAMES });
    }
    if 2.0 * search.start_within + frames[frames.len() - 1].clip_seconds - frames[0].clip_seconds
        > 2.0 * code.period_seconds()
        || 2.0 * search.start_within >= code.period_seconds()
    {
        return Err(LampRefusal::WindowTooWide { within: search.start_within, period: code.period_seconds() });
    }
    let levels = acquire::levels(frames)?;
    let path = acquire::acquire(code, frames, search, &levels)?;
    let mut slips = path.slips;
    let mut fitted = fit::fit(code, frames, search, &slips, path.start)?;
    for _ in 0..3 {
        let decoded = slots::slots(code, frames, search, &fitted, &slips);
        if decoded.slips == slips {
            break;
        }
        slips = decoded.slips;
        fitted = fit::fit(code, frames, search, &slips, path.start)?;
    }
    let slots = slots::slots(code, frames, search, &fitted, &slips);
    Ok(describe(&fitted, &slots, search, path.margin))
}

fn describe(fitted: &fit::Fitted, slots: &slots::Slots, search: &LampSearch, margin: f64) -> LampTiming {
    let frame = |index: usize| {
        let slip = if index == 0 { 0 } else { slots.slips[index] - slots.slips[index - 1] };
        let slot_u = slots.spread[index] * search.frame_seconds;
        TimedFrame {
            centre_seconds: fitted.centre_of(index, slots.slips[index]),
            centre_u_seconds: libm::hypot(libm::hypot(fitted.clock_u(index), fitted.jitter_seconds), slot_u),
            clock_u_seconds: fitted.clock_u(index),
            repeated: slip < 0,
            missing_before: u32::try_from(slip).unwrap_or(0),
        }
    };
    LampTiming {
        frames: (0..slots.slips.len()).map(frame).collect(),
        exposure_seconds: fitted.model.exposure,
        exposure_u_seconds: fitted.exposure_u_seconds,
        rate: 1.0 + fitted.model.rate,
        jitter_seconds: fitted.jitter_seconds,
        residual: fitted.residual,
        margin,
    }
}
