//! Certificates as files: canonical text, hash, and reading back what someone may have edited.

use std::path::Path;

use ringvolt_protocol::CertificateHash;
use sha2::{Digest, Sha256};

use super::{Certificate, check};
use crate::text::{self, TextError};

/// Longest certificate file that is read, bytes. One with 5000 points has under a million.
pub const MAX_CERTIFICATE_BYTES: u64 = 2 << 20;

/// Why a certificate cannot be used.
#[derive(Debug, thiserror::Error)]
pub enum CertificateError {
    /// The file could not be read.
    #[error(transparent)]
    Text(#[from] TextError),
    /// It is not TOML, or a field is missing, unknown or of the wrong type.
    #[error("{origin}{}: {problem}; a certificate is written by `ringvolt calibrate`, not by hand", at(*line))]
    Form {
        /// Which file.
        origin: String,
        /// Which line, where known.
        line: Option<usize>,
        /// What is wrong.
        problem: String,
    },
    /// A value is outside what it can be.
    #[error("{origin}{}: {field} {problem}", at(*line))]
    Value {
        /// Which file.
        origin: String,
        /// Which line, where known.
        line: Option<usize>,
        /// Which field.
        field: String,
        /// What is wrong, and what is permitted.
        problem: String,
    },
    /// The content does not belong to the hash.
    #[error(
        "{origin} was changed after it was sealed: it states hash {stated} but its content has {found}; \
         use the file as it was issued, or calibrate again"
    )]
    Edited {
        /// Which file.
        origin: String,
        /// First digits of the hash in the file.
        stated: String,
        /// First digits of the hash of the content.
        found: String,
    },
    /// It has no hash.
    #[error("{origin} is not sealed (its hash is empty); finish the calibration with `ringvolt calibrate`")]
    NotSealed {
        /// Which file.
        origin: String,
    },
}

fn at(line: Option<usize>) -> String {
    line.map_or_else(String::new, |line| format!(", line {line}"))
}

impl Certificate {
    /// Reads a certificate file and checks every value and the hash.
    ///
    /// # Errors
    /// When the file is unreadable, not a certificate, holds a value that cannot be, or was changed after sealing.
    pub fn load(path: &Path) -> Result<Self, CertificateError> {
        let text = text::read(path, MAX_CERTIFICATE_BYTES)?;
        Self::parse(&text, &path.display().to_string())
    }

    /// As [`Self::load`], from text; `origin` names it in errors.
    ///
    /// # Errors
    /// As [`Self::load`].
    pub fn parse(text: &str, origin: &str) -> Result<Self, CertificateError> {
        let certificate: Self = toml::from_str(text).map_err(|error| CertificateError::Form {
            origin: origin.to_owned(),
            line: error.span().map(|span| text::line_at(text, span.start)),
            problem: error.message().replace('\n', ", "),
        })?;
        check::check(&certificate).map_err(|fault| CertificateError::Value {
            origin: origin.to_owned(),
            line: text::line_of(text, &fault.field),
            field: fault.field,
            problem: fault.problem,
        })?;
        certificate.check_seal(origin)?;
        Ok(certificate)
    }

    fn check_seal(&self, origin: &str) -> Result<(), CertificateError> {
        if self.hash.is_empty() {
            return Err(CertificateError::NotSealed { origin: origin.to_owned() });
        }
        let found = self.content_hash();
        if found == self.hash {
            return Ok(());
        }
        let short = |hash: &str| hash.chars().take(16).collect();
        Err(CertificateError::Edited { origin: origin.to_owned(), stated: short(&self.hash), found: short(&found) })
    }

    /// The canonical text, with the hash as it stands.
    pub fn to_toml(&self) -> String {
        // The struct holds nothing TOML cannot express (no maps with odd keys, values before tables), so this cannot
        // fail; an empty text would fail every check that follows.
        toml::to_string(self).unwrap_or_default()
    }

    /// SHA-256 of the canonical text with an empty hash, lower-case hexadecimal. The same comes from
    /// `sed 's/^hash = .*/hash = ""/' certificate.toml | sha256sum`.
    pub fn content_hash(&self) -> String {
        let unsealed = Self { hash: String::new(), ..self.clone() };
        text::hex(&Sha256::digest(unsealed.to_toml().as_bytes()))
    }

    /// Sets the hash to that of the content.
    pub fn seal(&mut self) {
        self.hash = self.content_hash();
    }

    /// The first eight bytes of the hash, as the controller and the run file carry it; `NONE` when not sealed.
    pub fn hash8(&self) -> CertificateHash {
        parse_hex8(self.hash.get(..16).unwrap_or_default()).map_or(CertificateHash::NONE, CertificateHash)
    }
}

/// Eight bytes from sixteen hexadecimal digits.
pub(crate) fn parse_hex8(digits: &str) -> Option<[u8; 8]> {
    let bytes = digits.as_bytes();
    if bytes.len() != 16 || !bytes.iter().all(u8::is_ascii_hexdigit) {
        return None;
    }
    u64::from_str_radix(digits, 16).ok().map(u64::to_be_bytes)
}
