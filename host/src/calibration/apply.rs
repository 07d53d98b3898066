//! What a certificate says about codes: volts, their common uncertainty, and where it does not hold.

use ringvolt_protocol::{CertificateRecord, CodeToVolts};

use super::{Certificate, ChannelFit, check, seal::parse_hex8};

/// Which of the two senses.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
pub enum Channel {
    /// The main sense.
    Sense,
    /// The cross-sense.
    Cross,
}

/// One named part of an uncertainty, volts (k = 1). All parts of a certificate are common to the frames of a run.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct UncertaintyPart {
    /// What it comes from.
    pub name: &'static str,
    /// Standard uncertainty, volts.
    pub volts: f64,
}

/// Root of the sum of squares of independent parts, volts.
pub fn combined_volts(parts: &[UncertaintyPart]) -> f64 {
    libm::sqrt(parts.iter().map(|part| part.volts * part.volts).sum())
}

/// Whether a certificate may be used on a day.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Validity {
    /// Within its days.
    Valid,
    /// Before the day of issue.
    NotYet,
    /// After the last day.
    Expired,
}

/// Where a value lies outside what was calibrated.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Outside {
    /// The code is below or above every calibrated one.
    pub code: bool,
    /// The enclosure is colder or warmer than the certificate allows.
    pub temperature: bool,
}

/// Why no record for the controller can be made.
#[derive(Debug, thiserror::Error, PartialEq, Eq)]
pub enum RecordError {
    /// Without a hash the host could not tell later which certificate is stored.
    #[error("the certificate is not sealed, so the controller cannot be told which one it holds; seal it first")]
    NotSealed,
    /// The certificate's own numbers are not possible.
    #[error("the certificate cannot be stored: {0}")]
    Value(String),
}

/// Days since 1970-01-01 UTC of a time in nanoseconds since then.
pub fn day_of_utc_ns(utc_ns: i64) -> i64 {
    utc_ns.div_euclid(86_400 * 1_000_000_000)
}

const DAYS_PER_YEAR: f64 = 365.25;

impl ChannelFit {
    /// Signed volts at the divider's input for a mean code, at the calibration's temperature.
    pub fn volts(&self, mean_code: f64) -> f64 {
        let [offset, slope, bend] = self.coefficients;
        offset + mean_code * (slope + mean_code * bend)
    }

    /// Volts per code at a mean code.
    pub fn volts_per_code(&self, mean_code: f64) -> f64 {
        self.coefficients[1] + 2.0 * self.coefficients[2] * mean_code
    }

    /// Standard uncertainty of the fitted curve at a mean code, volts: from the scatter of the points alone.
    pub fn fit_u_volts(&self, mean_code: f64) -> f64 {
        let gradient = [1.0, mean_code, mean_code * mean_code];
        let rows = self.covariance.iter().zip(gradient);
        let variance: f64 = rows.map(|(row, g)| g * row.iter().zip(gradient).map(|(c, h)| c * h).sum::<f64>()).sum();
        libm::sqrt(variance.max(0.0))
    }

    /// The mean code that gives these signed volts, at the calibration's temperature.
    pub fn code(&self, volts: f64) -> f64 {
        let slope = self.coefficients[1];
        // The bend is a small correction within the calibrated codes, so a few Newton steps end far below a code.
        (0..8).fold((volts - self.coefficients[0]) / slope, |code, _| {
            let step = (self.volts(code) - volts) / self.volts_per_code(code);
            if step.is_finite() { code - step } else { code }
        })
    }

    /// Volts at the two ends of the calibrated codes, the lower first.
    pub(super) fn volts_at_ends(&self) -> (f64, f64) {
        let ends = [self.code_min, self.code_max].map(|code| self.volts(f64::from(code)));
        (ends[0].min(ends[1]), ends[0].max(ends[1]))
    }

    /// The largest fit uncertainty within the calibrated codes, volts.
    fn largest_fit_u_volts(&self) -> f64 {
        let (low, high) = (f64::from(self.code_min), f64::from(self.code_max));
        (0..=8).map(|step| self.fit_u_volts(low + (high - low) * f64::from(step) / 8.0)).fold(0.0, f64::max)
    }

    /// Up to where hysteresis may carry the truth from the fitted mean of both directions, as a standard
    /// uncertainty: half the largest difference, as a rectangular distribution.
    fn hysteresis_u_fraction(&self) -> f64 {
        0.5 * self.hysteresis_fraction / libm::sqrt(3.0)
    }

    fn record(&self) -> CodeToVolts {
        let [offset, slope, bend] = self.coefficients;
        CodeToVolts {
            offset_nv: libm::round(offset * 1e9) as i64,
            slope_pv: libm::round(slope * 1e12) as i64,
            bend_av: libm::round(bend * 1e18) as i64,
            code_min: self.code_min,
            code_max: self.code_max,
        }
    }
}

impl Certificate {
    /// The fit of one sense.
    pub fn fit(&self, channel: Channel) -> &ChannelFit {
        match channel {
            Channel::Sense => &self.sense,
            Channel::Cross => &self.cross,
        }
    }

    /// 1 + relative change of the ratio at an enclosure temperature; 1 where it is not measured.
    fn temperature_factor(&self, enclosure_celsius: Option<f64>) -> f64 {
        let kelvin = enclosure_celsius.map_or(0.0, |celsius| celsius - self.conditions.ambient_celsius);
        1.0 + 1e-6 * self.stability.temperature_ppm_per_kelvin * kelvin
    }

    /// Signed volts at the divider's input (polarity is the caller's) for a mean code, corrected for the enclosure
    /// temperature where it is measured.
    pub fn volts(&self, channel: Channel, mean_code: f64, enclosure_celsius: Option<f64>) -> f64 {
        self.fit(channel).volts(mean_code) * self.temperature_factor(enclosure_celsius)
    }

    /// Signed volts per code at a mean code: what turns noise and ripple in codes into volts.
    pub fn volts_per_code(&self, channel: Channel, mean_code: f64, enclosure_celsius: Option<f64>) -> f64 {
        self.fit(channel).volts_per_code(mean_code) * self.temperature_factor(enclosure_celsius)
    }

    /// The parts of the uncertainty of the *main sense* that all frames of a run share, on `day` (days since
    /// 1970-01-01). `volts` may have either sign.
    pub fn common_u(
        &self,
        volts: f64,
        mean_code: f64,
        enclosure_celsius: Option<f64>,
        day: i64,
    ) -> Vec<UncertaintyPart> {
        let reference = [
            UncertaintyPart { name: "reference, proportional", volts: 1e-6 * self.reference.u_ppm * volts.abs() },
            UncertaintyPart { name: "reference, fixed", volts: self.reference.u_volts },
        ];
        reference.into_iter().chain(self.own_u(Channel::Sense, volts, mean_code, enclosure_celsius, day)).collect()
    }

    /// The parts that are a sense's own: the reference, common to both senses, is left out.
    fn own_u(&self, channel: Channel, volts: f64, code: f64, celsius: Option<f64>, day: i64) -> [UncertaintyPart; 4] {
        let (fit, size) = (self.fit(channel), volts.abs());
        [
            UncertaintyPart { name: "fit", volts: fit.fit_u_volts(code) },
            UncertaintyPart { name: "hysteresis", volts: fit.hysteresis_u_fraction() * size },
            UncertaintyPart { name: "drift since issue", volts: 1e-6 * self.drift_u_ppm(day) * size },
            UncertaintyPart { name: "temperature", volts: 1e-6 * self.temperature_u_ppm(celsius) * size },
        ]
    }

    /// Standard uncertainty of the difference of the two senses at a voltage, volts.
    pub fn difference_u_volts(&self, volts: f64, enclosure_celsius: Option<f64>, day: i64) -> f64 {
        let parts = [Channel::Sense, Channel::Cross].map(|channel| {
            combined_volts(&self.own_u(channel, volts, self.fit(channel).code(volts), enclosure_celsius, day))
        });
        libm::hypot(parts[0], parts[1])
    }

    fn drift_u_ppm(&self, day: i64) -> f64 {
        let days = (day - self.issued_day()).max(0) as f64;
        self.stability.drift_u_ppm_per_year * days / DAYS_PER_YEAR
    }

    /// Residual of the temperature correction; where the temperature is not measured, the whole effect of a
    /// temperature that may lie anywhere in the range of use.
    fn temperature_u_ppm(&self, enclosure_celsius: Option<f64>) -> f64 {
        let (stability, conditions) = (&self.stability, &self.conditions);
        if let Some(celsius) = enclosure_celsius {
            return stability.temperature_u_ppm_per_kelvin * (celsius - conditions.ambient_celsius).abs();
        }
        let (below, above) = (
            conditions.ambient_celsius - conditions.ambient_min_celsius,
            conditions.ambient_max_celsius - conditions.ambient_celsius,
        );
        let cubes = below * below * below + above * above * above;
        let mean_square = if below + above > 0.0 { cubes / (3.0 * (below + above)) } else { 0.0 };
        let slope = libm::hypot(stability.temperature_ppm_per_kelvin, stability.temperature_u_ppm_per_kelvin);
        slope * libm::sqrt(mean_square)
    }

    /// Where a code and temperature lie outside what was calibrated. An absent temperature counts as inside: its
    /// uncertainty then covers the range of use.
    pub fn outside(&self, channel: Channel, mean_code: f64, enclosure_celsius: Option<f64>) -> Outside {
        let (fit, conditions) = (self.fit(channel), &self.conditions);
        let codes = f64::from(fit.code_min)..=f64::from(fit.code_max);
        let celsius = conditions.ambient_min_celsius..=conditions.ambient_max_celsius;
        Outside {
            code: !codes.contains(&mean_code),
            temperature: enclosure_celsius.is_some_and(|value| !celsius.contains(&value)),
        }
    }

    /// Day of issue, days since 1970-01-01; 0 where the text is no day (which [`Self::load`] refuses).
    pub fn issued_day(&self) -> i64 {
        check::day(&self.issued).unwrap_or(0)
    }

    /// Last day of validity, days since 1970-01-01; 0 where the text is no day (which [`Self::load`] refuses).
    pub fn expires_day(&self) -> i64 {
        check::day(&self.valid_until).unwrap_or(0)
    }

    /// Whether it may be used on `day` (days since 1970-01-01).
    pub fn validity(&self, day: i64) -> Validity {
        if day < self.issued_day() {
            Validity::NotYet
        } else if day > self.expires_day() {
            Validity::Expired
        } else {
            Validity::Valid
        }
    }

    /// The board it was made with; all zero where the text is no identity (which [`Self::load`] refuses).
    pub fn device_id(&self) -> ringvolt_protocol::DeviceId {
        parse_hex8(&self.device).unwrap_or_default()
    }

    /// What the controller stores. The uncertainty of the senses' difference is taken at the last day of validity,
    /// with a temperature anywhere in the range of use, since the controller knows neither.
    ///
    /// # Errors
    /// When the certificate is not sealed, or holds a value that cannot be.
    pub fn record(&self) -> Result<CertificateRecord, RecordError> {
        check::check(self).map_err(|fault| RecordError::Value(format!("{} {}", fault.field, fault.problem)))?;
        let hash = self.hash8();
        if hash == ringvolt_protocol::CertificateHash::NONE {
            return Err(RecordError::NotSealed);
        }
        let (proportional, fixed) = self.difference_at_worst();
        Ok(CertificateRecord {
            hash,
            device: self.device_id(),
            sense: self.sense.record(),
            cross: self.cross.record(),
            difference_ppm: libm::ceil(1e6 * proportional) as u32,
            difference_mv: libm::ceil(1e3 * fixed) as u32,
            expires_day: u32::try_from(self.expires_day()).unwrap_or(0),
        })
    }

    /// Standard uncertainty of the difference of the senses: its fraction of the voltage, and its fixed part, volts.
    fn difference_at_worst(&self) -> (f64, f64) {
        let both = 2.0 * (square(self.drift_u_ppm(self.expires_day())) + square(self.temperature_u_ppm(None)));
        let hysteresis = square(self.sense.hysteresis_u_fraction()) + square(self.cross.hysteresis_u_fraction());
        let fixed = libm::hypot(self.sense.largest_fit_u_volts(), self.cross.largest_fit_u_volts());
        (libm::sqrt(1e-12 * both + hysteresis), fixed)
    }
}

fn square(value: f64) -> f64 {
    value * value
}
