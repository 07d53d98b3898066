//! One window of conversions: what the controller measures, in codes.

use postcard::experimental::max_size::MaxSize;
use serde::{Deserialize, Serialize};

/// The conversions of one converter within one window.
///
/// Codes are the converter's own signed integers, before polarity and calibration.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
pub struct WindowCodes {
    /// Sum of the codes, so that the mean loses nothing to rounding.
    pub sum: i32,
    /// Smallest code; 0 where `count` is 0.
    pub min: i16,
    /// Largest code; 0 where `count` is 0.
    pub max: i16,
    /// Number of conversions that ended within the window; 0 means the converter gave nothing.
    pub count: u8,
}

impl WindowCodes {
    /// Mean code, or `None` where there was no conversion.
    pub fn mean(&self) -> Option<f64> {
        (self.count > 0).then(|| f64::from(self.sum) / f64::from(self.count))
    }
}

/// One reading: both senses over one short window of time.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
pub struct Reading {
    /// Counts readings within one epoch, from 0, without a hole.
    pub seq: u32,
    /// Start of the window, microseconds since the controller's power-up.
    pub time_us: u64,
    /// Length of the window, microseconds.
    pub duration_us: u16,
    /// The main sense.
    pub sense: WindowCodes,
    /// The cross-sense.
    pub cross: WindowCodes,
    /// What was true of this window.
    pub flags: ReadingFlags,
    /// The certificate the controller held while this window was measured; zero where it held none.
    pub certificate: crate::CertificateHash,
}

/// What was true of a window, as a set of bits.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
pub struct ReadingFlags(pub u16);

impl ReadingFlags {
    /// A conversion of the main sense stood at the end of its scale.
    pub const SENSE_OVER_RANGE: Self = Self(1 << 0);
    /// A conversion of the cross-sense stood at the end of its scale.
    pub const CROSS_OVER_RANGE: Self = Self(1 << 1);
    /// The main sense missed conversions (three or more in a row).
    pub const SENSE_SILENT: Self = Self(1 << 2);
    /// The cross-sense missed conversions (three or more in a row).
    pub const CROSS_SILENT: Self = Self(1 << 3);
    /// The main sense is judged frozen.
    pub const SENSE_FROZEN: Self = Self(1 << 4);
    /// The cross-sense is judged frozen.
    pub const CROSS_FROZEN: Self = Self(1 << 5);
    /// The two senses disagree by more than their limit.
    pub const SENSES_DISAGREE: Self = Self(1 << 6);
    /// A loop was open, at least for part of the window.
    pub const LOOP_OPEN: Self = Self(1 << 7);
    /// The permit was given throughout the window.
    pub const PERMIT: Self = Self(1 << 8);
    /// The controller holds no readable certificate, or was started uncalibrated by a person.
    pub const UNCALIBRATED: Self = Self(1 << 9);
    /// The voltage limit was passed within the window.
    pub const OVER_VOLTAGE: Self = Self(1 << 10);
    /// The main loop was late, so that conversions may have been missed.
    pub const LATE: Self = Self(1 << 11);
    /// A converter's configuration had to be written again: conversions of this window are suspect.
    pub const CONFIGURATION_REPAIRED: Self = Self(1 << 12);

    /// The set with nothing in it.
    pub const fn empty() -> Self {
        Self(0)
    }

    /// Whether every bit of `other` is in `self`.
    pub const fn contains(self, other: Self) -> bool {
        self.0 & other.0 == other.0
    }

    /// Whether any bit of `other` is in `self`.
    pub const fn intersects(self, other: Self) -> bool {
        self.0 & other.0 != 0
    }

    /// `self` and `other` together.
    #[must_use]
    pub const fn with(self, other: Self) -> Self {
        Self(self.0 | other.0)
    }

    /// Adds `other` to the set where `yes`.
    pub fn set(&mut self, other: Self, yes: bool) {
        if yes {
            self.0 |= other.0;
        } else {
            self.0 &= !other.0;
        }
    }
}
