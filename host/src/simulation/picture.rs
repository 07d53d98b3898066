//! Frames as files: PNG with the EXIF tags a camera would write, under a temporary name until it is whole.

use std::{fs, io::Cursor, path::Path};

use exif::{Field, In, Rational, Tag, Value, experimental::Writer};
use image::{ExtendedColorType, ImageEncoder, codecs::png::PngEncoder};
use thiserror::Error;

/// Why a frame could not be written.
#[derive(Debug, Error)]
#[error("the frame {path} could not be written ({why}): check the disk")]
pub struct PictureFault {
    path: String,
    why: String,
}

/// What the camera writes into a frame beside the picture.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Tags {
    /// Start of the exposure as the camera states it, UTC nanoseconds.
    pub start_utc_ns: i64,
    /// Exposure, seconds.
    pub exposure_seconds: f64,
}

/// Writes one 8-bit grey picture as `folder/name.png`.
///
/// # Errors
/// With the file and what the system said.
pub fn write_picture(
    folder: &Path,
    name: &str,
    size: (u32, u32),
    grey: &[u8],
    tags: &Tags,
) -> Result<(), PictureFault> {
    let path = folder.join(format!("{name}.png"));
    let fault = |why: String| PictureFault { path: path.display().to_string(), why };
    let mut bytes = Vec::new();
    let mut encoder = PngEncoder::new(&mut bytes);
    if let Some(block) = exif_block(tags) {
        encoder.set_exif_metadata(block).map_err(|error| fault(error.to_string()))?;
    }
    encoder.write_image(grey, size.0, size.1, ExtendedColorType::L8).map_err(|error| fault(error.to_string()))?;
    let unfinished = folder.join(format!(".{name}.part"));
    fs::write(&unfinished, &bytes).map_err(|error| fault(error.to_string()))?;
    fs::rename(&unfinished, &path).map_err(|error| fault(error.to_string()))
}

fn exif_block(tags: &Tags) -> Option<Vec<u8>> {
    let time = jiff::Timestamp::from_nanosecond(i128::from(tags.start_utc_ns)).ok()?;
    let civil = jiff::tz::Offset::UTC.to_datetime(time);
    let ascii =
        |tag: Tag, text: String| Field { tag, ifd_num: In::PRIMARY, value: Value::Ascii(vec![text.into_bytes()]) };
    let date = format!(
        "{:04}:{:02}:{:02} {:02}:{:02}:{:02}",
        civil.year(),
        civil.month(),
        civil.day(),
        civil.hour(),
        civil.minute(),
        civil.second()
    );
    let microseconds = (tags.exposure_seconds * 1e6).round().clamp(1.0, 4e9) as u32;
    let fields = [
        ascii(Tag::ImageDescription, "SIMULATED".to_owned()),
        ascii(Tag::DateTimeOriginal, date),
        ascii(Tag::SubSecTimeOriginal, format!("{:06}", civil.subsec_nanosecond() / 1_000)),
        ascii(Tag::OffsetTimeOriginal, "+00:00".to_owned()),
        Field {
            tag: Tag::ExposureTime,
            ifd_num: In::PRIMARY,
            value: Value::Rational(vec![Rational { num: microseconds, denom: 1_000_000 }]),
        },
    ];
    let mut writer = Writer::new();
    fields.iter().for_each(|field| writer.push_field(field));
    let mut block = Cursor::new(Vec::new());
    writer.write(&mut block, false).ok()?;
    Some(block.into_inner())
}
