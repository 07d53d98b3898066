//! Constants of nature.

/// Planck constant, J s. Exact (SI, 2019).
pub const PLANCK: f64 = 6.626_070_15e-34;
/// Elementary charge, C. Exact (SI, 2019).
pub const ELEMENTARY_CHARGE: f64 = 1.602_176_634e-19;
/// Speed of light in vacuum, m/s. Exact (SI).
pub const SPEED_OF_LIGHT: f64 = 299_792_458.0;
/// Mass of the electron, kg. CODATA 2022: 9.109 383 7139(28)e-31.
pub const ELECTRON_MASS: f64 = 9.109_383_713_9e-31;

/// e / (2 m c^2), 1/V: the relativistic correction per volt.
pub const RELATIVITY_PER_VOLT: f64 = ELEMENTARY_CHARGE / (2.0 * ELECTRON_MASS * SPEED_OF_LIGHT * SPEED_OF_LIGHT);
