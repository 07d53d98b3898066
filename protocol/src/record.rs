//! The two records a controller keeps in its flash: certificate and settings.

use postcard::experimental::max_size::MaxSize;
use serde::{Deserialize, Serialize};

use crate::DeviceId;

/// The first eight bytes of the SHA-256 of a certificate's canonical text. All zero means none.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Hash, Serialize, Deserialize, MaxSize)]
pub struct CertificateHash(pub [u8; 8]);

impl CertificateHash {
    /// No certificate.
    pub const NONE: Self = Self([0; 8]);
}

/// Code to volts for one sense: `a0 + a1 N + a2 N^2`, N being the mean code, in integers.
///
/// The result is the signed voltage at the divider's input; the controller multiplies it by the polarity.
/// The units keep the rounding of each coefficient below 1/1000 of a code's worth at full scale for slopes of
/// 1 mV to 10 V a code: a1 in picovolts is exact to 1e-9 of 1 mV.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
pub struct CodeToVolts {
    /// a0, nanovolts.
    pub offset_nv: i64,
    /// a1, picovolts per code.
    pub slope_pv: i64,
    /// a2, attovolts per code squared.
    pub bend_av: i64,
    /// Smallest code that was calibrated.
    pub code_min: i16,
    /// Largest code that was calibrated.
    pub code_max: i16,
}

/// What the controller needs of a certificate. The host keeps the whole one.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
pub struct CertificateRecord {
    /// Hash of the whole certificate.
    pub hash: CertificateHash,
    /// The board it was made with. A record for another board is as good as none.
    pub device: DeviceId,
    /// The main sense.
    pub sense: CodeToVolts,
    /// The cross-sense.
    pub cross: CodeToVolts,
    /// Standard uncertainty (k = 1) of the *difference* of the two senses: part in proportion to the voltage, ppm.
    pub difference_ppm: u32,
    /// Its part that does not depend on the voltage, millivolts.
    pub difference_mv: u32,
    /// Last day of validity, days since 1970-01-01. The controller has no date; the host judges.
    pub expires_day: u32,
}

/// The sign of the voltage at the divider that accelerates electrons.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
pub enum Polarity {
    /// Screen side at positive high voltage, cathode near earth.
    #[default]
    Positive,
    /// Cathode at negative high voltage, screen side near earth.
    Negative,
}

impl Polarity {
    /// +1 or -1.
    pub const fn sign(self) -> i64 {
        match self {
            Self::Positive => 1,
            Self::Negative => -1,
        }
    }
}

/// The sync lamp's sequence.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
pub struct LampSettings {
    /// Whether the lamp runs.
    pub on: bool,
    /// Length of one chip of the 511-chip sequence, microseconds; 1000 to 10 000 000.
    pub chip_us: u32,
}

/// How one controller is set up for its bench.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
pub struct SettingsRecord {
    /// Length of a reading's window, nanoseconds, so that a mains cycle of 60 Hz divides evenly: 5 000 000 to 50 000 000.
    pub window_ns: u32,
    /// Mains frequency, hertz: 50 or 60.
    pub mains_hz: u8,
    /// Which sign accelerates.
    pub polarity: Polarity,
    /// Highest approved accelerating voltage, millivolts.
    pub limit_mv: i32,
    /// The same limit as a raw code of the main sense, in force also without a certificate.
    pub limit_code: i16,
    /// Highest beam current, nanoamperes; 0 means not evaluated.
    pub beam_limit_na: u32,
    /// How long the two loops may differ, milliseconds: 50 to 2000.
    pub discrepancy_ms: u16,
    /// How long the contactors may take to follow the permit, milliseconds: 20 to 2000.
    pub contactor_ms: u16,
    /// How long the host may be silent, milliseconds: 1000 to 60 000.
    pub grace_ms: u16,
    /// Time constant of the bleed after switching off, milliseconds; 0 means not evaluated.
    pub bleed_ms: u16,
    /// Smallest noise a working converter shows over a second, thousandths of a code (standard deviation).
    pub noise_floor_millicodes: u16,
    /// The sync lamp.
    pub lamp: LampSettings,
}

impl Default for SettingsRecord {
    fn default() -> Self {
        Self {
            window_ns: 10_000_000,
            mains_hz: 50,
            polarity: Polarity::Positive,
            limit_mv: 5_000_000,
            limit_code: 16_000,
            beam_limit_na: 0,
            discrepancy_ms: 500,
            contactor_ms: 100,
            grace_ms: 5_000,
            bleed_ms: 0,
            noise_floor_millicodes: 50,
            lamp: LampSettings { on: false, chip_us: 73_000 },
        }
    }
}

impl SettingsRecord {
    /// The first field outside its range, if any, by the name it has here.
    pub fn fault(&self) -> Option<&'static str> {
        let checks = [
            ("window_ns", (5_000_000..=50_000_000).contains(&self.window_ns)),
            ("mains_hz", self.mains_hz == 50 || self.mains_hz == 60),
            ("limit_mv", self.limit_mv > 0),
            ("limit_code", self.limit_code > 0),
            ("discrepancy_ms", (50..=2_000).contains(&self.discrepancy_ms)),
            ("contactor_ms", (20..=2_000).contains(&self.contactor_ms)),
            ("grace_ms", (1_000..=60_000).contains(&self.grace_ms)),
            ("lamp.chip_us", (1_000..=10_000_000).contains(&self.lamp.chip_us)),
        ];
        checks.into_iter().find(|(_, good)| !good).map(|(name, _)| name)
    }
}
