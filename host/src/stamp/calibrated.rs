//! A certificate as one frame sees it.

use super::series::Calibration;
use crate::calibration::{Certificate, Channel, combined_volts};

/// A certificate with the polarity of the bench and the temperature and day of one frame.
#[derive(Clone, Copy, Debug)]
pub struct CertificateAt<'a> {
    /// The certificate.
    pub certificate: &'a Certificate,
    /// +1, or -1 where negative high voltage accelerates.
    pub polarity: f64,
    /// Enclosure temperature, degrees Celsius, where it is measured.
    pub enclosure_celsius: Option<f64>,
    /// Days since 1970-01-01.
    pub day: i64,
}

impl Calibration for CertificateAt<'_> {
    fn sense_volts(&self, code: f64) -> f64 {
        self.polarity * self.certificate.volts(Channel::Sense, code, self.enclosure_celsius)
    }

    fn cross_volts(&self, code: f64) -> f64 {
        self.polarity * self.certificate.volts(Channel::Cross, code, self.enclosure_celsius)
    }

    fn common_u_volts(&self, volts: f64, code: f64) -> f64 {
        combined_volts(&self.certificate.common_u(volts, code, self.enclosure_celsius, self.day))
    }

    fn difference_u_volts(&self, volts: f64) -> f64 {
        self.certificate.difference_u_volts(self.polarity * volts, self.enclosure_celsius, self.day)
    }

    fn covers(&self, volts: f64, code: f64) -> bool {
        let conditions = &self.certificate.conditions;
        // The certificate counts volts as the divider sees them, with their sign.
        let inside = (conditions.volts_min..=conditions.volts_max).contains(&(self.polarity * volts));
        inside && !self.certificate.outside(Channel::Sense, code, self.enclosure_celsius).code
    }

    fn hash(&self) -> [u8; 8] {
        self.certificate.hash8().0
    }
}
