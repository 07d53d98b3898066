//! What of a profile the controller is told.

use ringvolt_protocol::{LampSettings, Polarity, SettingsRecord};

use super::{Profile, TimeSource};
use crate::calibration::{Certificate, Channel};

/// Why a profile gives no settings.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum SettingsError {
    /// The limit lies beyond what the converter can show, so it could not be enforced.
    #[error(
        "controller.limit_volts is {limit_volts} V, which is code {code:.0} of the main sense and beyond its last, 32767; \
         lower the limit or change the divider"
    )]
    LimitBeyondConverter {
        /// The limit, volts.
        limit_volts: f64,
        /// The code it would be.
        code: f64,
    },
    /// The limit comes out as no positive code.
    #[error(
        "controller.limit_volts is {limit_volts} V, which the certificate puts at code {code:.0}; check polarity and certificate"
    )]
    LimitBelowZero {
        /// The limit, volts.
        limit_volts: f64,
        /// The code it would be.
        code: f64,
    },
    /// A value is outside what the controller accepts.
    #[error("the controller would not accept {0}; check [controller] in the profile")]
    Field(&'static str),
}

impl Profile {
    /// +1 or -1: what the signed voltage at the divider is multiplied by to give the accelerating voltage.
    pub fn polarity(&self) -> Polarity {
        if self.controller.polarity_negative { Polarity::Negative } else { Polarity::Positive }
    }

    /// Window of a reading, nanoseconds: half a mains cycle.
    pub fn window_ns(&self) -> u32 {
        // 25000/3 us at 60 Hz, cut to whole nanoseconds: the error is 40 parts in a thousand million.
        1_000_000_000 / (2 * u32::from(self.controller.mains_hz.max(1)))
    }

    /// What the controller is to store. The limit as a raw code comes from the certificate, or from the nominal volts
    /// per code where there is none yet.
    ///
    /// # Errors
    /// When the limit cannot be enforced with this divider, or a value is outside what the controller accepts.
    pub fn settings_record(&self, certificate: Option<&Certificate>) -> Result<SettingsRecord, SettingsError> {
        let set = &self.controller;
        let record = SettingsRecord {
            window_ns: self.window_ns(),
            mains_hz: set.mains_hz,
            polarity: self.polarity(),
            limit_mv: libm::round(1e3 * set.limit_volts) as i32,
            limit_code: self.limit_code(certificate)?,
            beam_limit_na: libm::round(1e3 * set.beam_limit_microamperes) as u32,
            discrepancy_ms: milliseconds(set.discrepancy_seconds),
            contactor_ms: milliseconds(set.contactor_seconds),
            grace_ms: milliseconds(set.grace_seconds),
            bleed_ms: milliseconds(set.bleed_seconds),
            noise_floor_millicodes: milliseconds(set.noise_floor_codes),
            lamp: LampSettings {
                on: self.camera.time_source == TimeSource::Lamp,
                chip_us: libm::round(1e6 * self.camera.lamp_chip_seconds) as u32,
            },
        };
        record.fault().map_or(Ok(record), |field| Err(SettingsError::Field(field)))
    }

    /// The size of the code at the limit. A front end may invert, so its sign is not the voltage's.
    fn limit_code(&self, certificate: Option<&Certificate>) -> Result<i16, SettingsError> {
        let limit_volts = self.controller.limit_volts;
        let signed = self.polarity().sign() as f64 * limit_volts;
        let code = certificate.map_or(limit_volts / self.divider.nominal_volts_per_code, |certificate| {
            certificate.fit(Channel::Sense).code(signed).abs()
        });
        // Rounded down: the raw limit must not allow more than the limit in volts.
        match libm::floor(code) {
            whole if whole > 32_767.0 => Err(SettingsError::LimitBeyondConverter { limit_volts, code }),
            whole if whole >= 1.0 => Ok(whole as i16),
            _ => Err(SettingsError::LimitBelowZero { limit_volts, code }),
        }
    }
}

/// Thousandths, in the width the record has for them.
fn milliseconds(seconds: f64) -> u16 {
    libm::round(1e3 * seconds).clamp(0.0, f64::from(u16::MAX)) as u16
}
