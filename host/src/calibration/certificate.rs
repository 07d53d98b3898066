//! One calibration of one bench: what was found, under what conditions, and for how long it holds.

use serde::{Deserialize, Serialize};

/// A certificate. Its canonical text is the TOML this struct serialises to; `hash` is the SHA-256 of that text with
/// the hash itself left empty.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Certificate {
    /// Version of this file format.
    pub schema: u32,
    /// SHA-256 of the canonical text, lower-case hexadecimal.
    pub hash: String,
    /// Whether it came from the simulated bench.
    pub simulated: bool,
    /// Which bench, by the profile's name.
    pub bench: String,
    /// The board it was made with, sixteen hexadecimal digits.
    pub device: String,
    /// Day of issue, `YYYY-MM-DD`.
    pub issued: String,
    /// Last day of validity, `YYYY-MM-DD`.
    pub valid_until: String,
    /// Who made it.
    pub operator: String,
    /// What a reader must know: doubts that were accepted and why.
    #[serde(skip_serializing_if = "Vec::is_empty", default)]
    pub remarks: Vec<String>,
    /// What it was compared with.
    pub reference: Reference,
    /// Surroundings.
    pub conditions: Conditions,
    /// How it changes with time and temperature.
    pub stability: Stability,
    /// The main sense.
    pub sense: ChannelFit,
    /// The cross-sense.
    pub cross: ChannelFit,
    /// What was measured.
    #[serde(default)]
    pub points: Vec<Point>,
}

/// The reference meter.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Reference {
    /// Make-independent description and serial number as the person wrote it.
    pub identity: String,
    /// The reference's own certificate.
    pub certificate: String,
    /// Standard uncertainty (k = 1) in proportion to the voltage, ppm.
    pub u_ppm: f64,
    /// Standard uncertainty (k = 1) that does not depend on the voltage, volts.
    pub u_volts: f64,
}

/// Surroundings of a calibration, and where it may be used.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Conditions {
    /// Enclosure temperature the coefficients refer to, degrees Celsius.
    pub ambient_celsius: f64,
    /// Lowest temperature of use without a mark, degrees Celsius.
    pub ambient_min_celsius: f64,
    /// Highest temperature of use without a mark, degrees Celsius.
    pub ambient_max_celsius: f64,
    /// Lowest calibrated voltage, volts.
    pub volts_min: f64,
    /// Highest calibrated voltage, volts.
    pub volts_max: f64,
}

/// Change with time and temperature. Applies to both senses.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Stability {
    /// Temperature coefficient of the ratio, ppm per kelvin; the host corrects by it where the temperature is measured.
    pub temperature_ppm_per_kelvin: f64,
    /// Its standard uncertainty, ppm per kelvin.
    pub temperature_u_ppm_per_kelvin: f64,
    /// Standard uncertainty from drift, ppm per year since the day of issue.
    pub drift_u_ppm_per_year: f64,
}

/// `volts = a0 + a1 N + a2 N^2` at the divider's input, signed, for mean code N.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct ChannelFit {
    /// a0 (V), a1 (V per code), a2 (V per code squared; 0 for a straight line).
    pub coefficients: [f64; 3],
    /// Covariance of the coefficients (row by row), from the scatter of the points alone.
    pub covariance: [[f64; 3]; 3],
    /// Residual standard deviation of the fit, volts.
    pub residual_volts: f64,
    /// Largest difference between points taken upwards and downwards, as a fraction of the voltage.
    pub hysteresis_fraction: f64,
    /// Smallest calibrated code.
    pub code_min: i16,
    /// Largest calibrated code.
    pub code_max: i16,
}

/// One point of a calibration.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Point {
    /// When, RFC 3339.
    pub time_utc: String,
    /// `zero`, `up` or `down`.
    pub direction: String,
    /// Reference, volts at the divider's input, signed.
    pub reference_volts: f64,
    /// Mean code of the main sense.
    pub sense_code: f64,
    /// Mean code of the cross-sense.
    pub cross_code: f64,
    /// Enclosure temperature, degrees Celsius, where measured.
    #[serde(skip_serializing_if = "Option::is_none", default)]
    pub enclosure_celsius: Option<f64>,
    /// Why the point was left out of the fit; it stays in the table.
    #[serde(skip_serializing_if = "Option::is_none", default)]
    pub left_out: Option<String>,
}
