//! The EXIF tags a camera writes about an exposure (CIPA DC-008, Exif 2.31 and later: offset tags).

use std::io::Cursor;

use exif::{DateTime, Exif, In, Rational, Reader, Tag, Value};

/// When and how long, as the tags tell.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Stated {
    /// Start of the exposure, nanoseconds since 1970 UTC, in the middle of what the tags resolve.
    pub start_utc_ns: i64,
    /// Smallest step of the stated time, nanoseconds: 1 s without the sub-second tag.
    pub resolution_ns: i64,
    /// Exposure time, seconds, where stated.
    pub exposure_seconds: Option<f64>,
}

/// Why the tags do not tell the time.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Silent {
    /// No EXIF at all, or no time in it.
    NoTime,
    /// A time without its zone.
    NoZone,
    /// A time that does not exist.
    Impossible,
}

fn parse(bytes: &[u8]) -> Option<Exif> {
    Reader::new()
        .continue_on_error(true)
        .read_from_container(&mut Cursor::new(bytes))
        .or_else(|error| error.distill_partial_result(|_| ()))
        .ok()
}

/// Orientation tag, 1 to 8.
pub(super) fn orientation(bytes: &[u8]) -> Option<u8> {
    let exif = parse(bytes)?;
    u8::try_from(exif.get_field(Tag::Orientation, In::PRIMARY)?.value.get_uint(0)?).ok()
}

/// Reads the time of the original and its exposure. `zone_minutes` stands in for a missing offset tag.
pub(super) fn stated(bytes: &[u8], zone_minutes: Option<i32>) -> Result<Stated, Silent> {
    let exif = parse(bytes).ok_or(Silent::NoTime)?;
    let time = ascii(&exif, Tag::DateTimeOriginal).ok_or(Silent::NoTime)?;
    let time = DateTime::from_ascii(time).map_err(|_| Silent::NoTime)?;
    let (subsecond_ns, resolution_ns) = subsecond(ascii(&exif, Tag::SubSecTimeOriginal));
    let minutes =
        ascii(&exif, Tag::OffsetTimeOriginal).and_then(offset_minutes).or(zone_minutes).ok_or(Silent::NoZone)?;
    let start_utc_ns = utc_ns(&time, minutes).ok_or(Silent::Impossible)? + subsecond_ns + resolution_ns / 2;
    Ok(Stated { start_utc_ns, resolution_ns, exposure_seconds: exposure(&exif) })
}

fn ascii(exif: &Exif, tag: Tag) -> Option<&[u8]> {
    match &exif.get_field(tag, In::PRIMARY)?.value {
        Value::Ascii(lines) => lines.first().map(Vec::as_slice),
        _ => None,
    }
}

/// Digits behind the decimal point, as nanoseconds, and what the last digit is worth.
fn subsecond(digits: Option<&[u8]>) -> (i64, i64) {
    let (mut value, mut worth) = (0, 1_000_000_000);
    let digits = digits.unwrap_or_default();
    for digit in digits.iter().copied().take_while(u8::is_ascii_digit).take(9) {
        worth /= 10;
        value += i64::from(digit - b'0') * worth;
    }
    (value, worth)
}

/// `+HH:MM` or `-HH:MM`.
fn offset_minutes(text: &[u8]) -> Option<i32> {
    let text = std::str::from_utf8(text).ok()?.trim();
    let sign = match text.as_bytes().first()? {
        b'+' => 1,
        b'-' => -1,
        _ => return None,
    };
    let (hours, minutes) = text.get(1..)?.split_once(':')?;
    let (hours, minutes): (i32, i32) = (hours.parse().ok()?, minutes.parse().ok()?);
    (hours <= 14 && minutes < 60).then_some(sign * (60 * hours + minutes))
}

fn utc_ns(time: &DateTime, zone_minutes: i32) -> Option<i64> {
    let narrow = |value: u8| i8::try_from(value).ok();
    let civil = jiff::civil::DateTime::new(
        i16::try_from(time.year).ok()?,
        narrow(time.month)?,
        narrow(time.day)?,
        narrow(time.hour)?,
        narrow(time.minute)?,
        narrow(time.second.min(59))?,
        0,
    )
    .ok()?;
    let offset = jiff::tz::Offset::from_seconds(zone_minutes.checked_mul(60)?).ok()?;
    i64::try_from(offset.to_timestamp(civil).ok()?.as_nanosecond()).ok()
}

fn exposure(exif: &Exif) -> Option<f64> {
    match &exif.get_field(Tag::ExposureTime, In::PRIMARY)?.value {
        Value::Rational(values) => {
            values.first().map(Rational::to_f64).filter(|seconds| *seconds > 0.0 && *seconds < 86_400.0)
        }
        _ => None,
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn subseconds_keep_what_they_resolve() {
        assert_eq!(subsecond(None), (0, 1_000_000_000));
        assert_eq!(subsecond(Some(b"5")), (500_000_000, 100_000_000));
        assert_eq!(subsecond(Some(b"042 ")), (42_000_000, 1_000_000));
        assert_eq!(subsecond(Some(b"1234567899")), (123_456_789, 1));
    }

    #[test]
    fn offsets_are_read_both_ways() {
        assert_eq!(offset_minutes(b"+02:00"), Some(120));
        assert_eq!(offset_minutes(b"-09:30"), Some(-570));
        for bad in [&b"   :  "[..], b"0200", b"+25:00", b"+02:99", b""] {
            assert_eq!(offset_minutes(bad), None);
        }
    }

    #[test]
    fn bytes_that_are_no_picture_tell_no_time() {
        assert_eq!(stated(b"nothing", None), Err(Silent::NoTime));
        assert_eq!(stated(&[0xff, 0xd8, 0xff, 0xe1, 0, 8, b'E', b'x', b'i', b'f', 0, 0], None), Err(Silent::NoTime));
    }
}
