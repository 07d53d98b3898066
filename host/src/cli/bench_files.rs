//! The files that describe a bench, read together: profile and certificate.

use std::path::Path;

use super::Failure;
use crate::{calibration::Certificate, profile::Profile};

/// A bench as its files tell it.
pub struct Bench {
    /// The profile.
    pub profile: Profile,
    /// Its text, for the run file.
    pub profile_text: String,
    /// The certificate, where there is one.
    pub certificate: Option<Certificate>,
    /// Its text.
    pub certificate_text: Option<String>,
}

/// Reads a profile and the certificate it names. A certificate that is not there is no error, since a bench must be
/// able to run in order to be calibrated: every frame is then refused as uncalibrated. One that is damaged is an error.
pub fn load(path: &Path) -> Result<Bench, Failure> {
    let profile_text = crate::text::read(path, crate::profile::MAX_PROFILE_BYTES).map_err(Failure::usage)?;
    let profile = Profile::parse(&profile_text, &path.display().to_string()).map_err(Failure::usage)?;
    let file = &profile.calibration.certificate;
    if !file.exists() {
        return Ok(Bench { profile, profile_text, certificate: None, certificate_text: None });
    }
    let certificate = Certificate::load(file).map_err(Failure::usage)?;
    let certificate_text = Some(certificate.to_toml());
    Ok(Bench { profile, profile_text, certificate: Some(certificate), certificate_text })
}
