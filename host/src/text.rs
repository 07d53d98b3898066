//! Small text files written by people: reading them within bounds, and finding lines in them for error messages.

use std::{
    fs::File,
    io::{self, Read},
    path::{Path, PathBuf},
};

use toml::{Spanned, de::DeValue};

/// Why a text file could not be read.
#[derive(Debug, thiserror::Error)]
pub enum TextError {
    /// It could not be opened or read.
    #[error("cannot read {}: {source}", path.display())]
    Read {
        /// Which file.
        path: PathBuf,
        /// What the system said.
        source: io::Error,
    },
    /// It is too long to be what it should be.
    #[error("{} is longer than {limit} bytes, so it is not the file meant here; check the path", path.display())]
    TooLong {
        /// Which file.
        path: PathBuf,
        /// The limit, bytes.
        limit: u64,
    },
    /// It is not UTF-8 text.
    #[error("{} is not UTF-8 text (first bad byte on line {line}); save it as UTF-8", path.display())]
    NotText {
        /// Which file.
        path: PathBuf,
        /// Where the first bad byte is, counted from 1.
        line: usize,
    },
}

/// Reads a UTF-8 file of at most `limit` bytes.
///
/// # Errors
/// When it cannot be read, is longer, or is not UTF-8.
pub fn read(path: &Path, limit: u64) -> Result<String, TextError> {
    let failed = |source| TextError::Read { path: path.to_owned(), source };
    let mut bytes = Vec::new();
    File::open(path).and_then(|file| file.take(limit + 1).read_to_end(&mut bytes)).map_err(failed)?;
    if bytes.len() as u64 > limit {
        return Err(TextError::TooLong { path: path.to_owned(), limit });
    }
    String::from_utf8(bytes).map_err(|error| {
        let good = error.utf8_error().valid_up_to();
        let line = 1 + error.as_bytes()[..good].iter().filter(|byte| **byte == b'\n').count();
        TextError::NotText { path: path.to_owned(), line }
    })
}

/// The line, counted from 1, that holds the byte at `offset`.
pub fn line_at(text: &str, offset: usize) -> usize {
    1 + text.bytes().take(offset).filter(|byte| *byte == b'\n').count()
}

/// The line of the value at a dotted path of a TOML text, where it exists.
pub fn line_of(text: &str, path: &str) -> Option<usize> {
    let root = toml::de::DeTable::parse(text).ok()?;
    let mut parts = path.split('.');
    let mut value: &Spanned<DeValue<'_>> = root.get_ref().get(parts.next()?)?;
    for part in parts {
        value = value.get_ref().get(part)?;
    }
    Some(line_at(text, value.span().start))
}

/// Bytes as lower-case hexadecimal, two digits each: how identities and hashes are written everywhere.
pub fn hex(bytes: &[u8]) -> String {
    bytes.iter().map(|byte| format!("{byte:02x}")).collect()
}

/// A time as RFC 3339 in UTC with nine decimals and `Z`; the nearest representable one where it lies beyond the calendar.
pub fn utc(utc_ns: i64) -> String {
    // 64 bits of nanoseconds reach from 1677 to 2262, which the calendar holds.
    let time = jiff::Timestamp::from_nanosecond(i128::from(utc_ns)).unwrap_or_default();
    format!("{time:.9}")
}

#[cfg(test)]
mod time_tests {
    #[test]
    fn bytes_are_two_lower_case_digits_each() {
        assert_eq!(super::hex(&[0x00, 0x5e, 0xff]), "005eff");
        assert_eq!(super::hex(&[]), "");
    }

    #[test]
    fn times_have_nine_decimals_and_a_z() {
        assert_eq!(super::utc(0), "1970-01-01T00:00:00.000000000Z");
        assert_eq!(super::utc(1_796_113_445_123_456_789), "2026-12-01T08:24:05.123456789Z");
        assert!(super::utc(i64::MIN).ends_with('Z'));
    }
}
