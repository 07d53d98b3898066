//! The parts of a divider.

/// One string with its low side, as in `[divider.sense]` and `[divider.cross]`.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Network {
    /// Equal elements of the string.
    pub elements: u32,
    /// Resistance of one, ohms.
    pub element_ohms: f64,
    /// Tolerance of one, as a fraction.
    pub element_tolerance: f64,
    /// Temperature coefficient, ppm per kelvin.
    pub element_ppm_per_kelvin: f64,
    /// Voltage coefficient, ppm per volt across one element.
    pub element_ppm_per_volt: f64,
    /// Rise above the surroundings, kelvin per watt in one element.
    pub element_kelvin_per_watt: f64,
    /// Rated voltage of one, volts.
    pub element_rated_volts: f64,
    /// Rated power of one, watts.
    pub element_rated_watts: f64,
    /// Low-side resistors in parallel, ohms.
    pub low_ohms: Vec<f64>,
    /// Their tolerance, as a fraction.
    pub low_tolerance: f64,
    /// Their temperature coefficient, ppm per kelvin.
    pub low_ppm_per_kelvin: f64,
    /// What loads the tap, ohms.
    pub input_ohms: f64,
    /// Between tap and clamp, ohms: a leaking clamp moves the reading by its drop as well.
    pub series_ohms: f64,
    /// Leakage of clamp and bias current of the buffer together, amperes.
    pub leakage_amperes: f64,
    /// Leakage resistance across the whole string, ohms.
    pub string_leak_ohms: f64,
    /// Filter capacitor across the low side, farads.
    pub filter_farads: f64,
    /// Positive full scale of the converter, volts.
    pub full_scale_volts: f64,
}

/// What the divider hangs on, as in `[divider.supply]`.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Supply {
    /// Output capacitance of the supply with everything on it, farads.
    pub farads: f64,
    /// Bleeders across it, ohms each; none where there is none.
    pub bleeder_ohms: Vec<f64>,
}

/// Resistors in parallel, ohms; infinite for none.
pub(super) fn parallel(ohms: impl IntoIterator<Item = f64>) -> f64 {
    // `sum` of nothing is -0, whose inverse would be minus infinity.
    1.0 / ohms.into_iter().fold(0.0, |siemens, ohms| siemens + 1.0 / ohms)
}

impl Network {
    /// The whole string, ohms.
    pub fn string_ohms(&self) -> f64 {
        f64::from(self.elements) * self.element_ohms
    }

    /// The low side without its load, ohms.
    pub fn low_side_ohms(&self) -> f64 {
        parallel(self.low_ohms.iter().copied())
    }

    /// The low side with its load, ohms.
    pub fn loaded_ohms(&self) -> f64 {
        parallel(self.low_ohms.iter().copied().chain([self.input_ohms]))
    }

    /// K: volts at the top for a volt at the tap, loading included.
    pub fn ratio(&self) -> f64 {
        1.0 + self.string_ohms() / self.loaded_ohms()
    }

    /// Volts at the top for one code of a 16-bit converter.
    pub fn volts_per_code(&self) -> f64 {
        self.ratio() * self.full_scale_volts / 32_768.0
    }
}
