//! What tells one run from another, whatever its file is called and however it is reduced.

use sha2::{Digest, Sha256};

use super::{RunError, RunReader};

impl RunReader {
    /// SHA-256 of what was fixed when the run began: profile, certificate, and the first hello with its time. Notes,
    /// reductions and later recording do not change it. Lower-case hexadecimal.
    ///
    /// # Errors
    /// When the file cannot be read.
    pub fn fingerprint(&self) -> Result<String, RunError> {
        let header = self.header()?;
        let first: Vec<(String, i64)> =
            self.rows("SELECT hello, heard_utc_ns FROM epoch ORDER BY epoch_key LIMIT 1", [], |row| {
                Ok((row.get(0)?, row.get(1)?))
            })?;
        let mut hasher = Sha256::new();
        let mut add = |text: &str| {
            hasher.update((text.len() as u64).to_le_bytes());
            hasher.update(text.as_bytes());
        };
        add(&header.profile_text);
        add(header.certificate_text.as_deref().unwrap_or_default());
        for (hello, heard_utc_ns) in &first {
            add(hello);
            add(&heard_utc_ns.to_string());
        }
        Ok(crate::text::hex(&hasher.finalize()))
    }
}
