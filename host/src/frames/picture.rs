//! A camera image as grey values.

use std::{io::Cursor, path::Path};

use image::{DynamicImage, ImageReader};
use thiserror::Error;

/// Files larger than this are no camera images.
pub(super) const LARGEST_FILE: u64 = 512 << 20;
/// Pictures of more pixels than this would take the memory of the machine.
const LARGEST_SIDE: u32 = 30_000;
const LARGEST_DECODED: u64 = 2 << 30;

/// A picture as grey values from 0 (dark) to `saturation`.
#[derive(Clone, Debug, PartialEq)]
pub struct Picture {
    /// Width, pixels.
    pub width: usize,
    /// Height, pixels.
    pub height: usize,
    /// Grey values, row by row from the top.
    pub grey: Vec<f32>,
    /// The value at which the sensor or the file format saturates.
    pub saturation: f32,
}

/// Why a file gave no picture.
#[derive(Debug, Error)]
pub enum PictureError {
    /// The file could not be read.
    #[error("{path} could not be read ({why}): check that the disk is there and the file may be read")]
    File {
        /// The file.
        path: String,
        /// What the system said.
        why: String,
    },
    /// The file is no whole picture.
    #[error("{path} is not a whole PNG or JPEG picture ({why}): copy it from the camera again")]
    Damaged {
        /// The file.
        path: String,
        /// What the decoder said.
        why: String,
    },
}

/// Reads and decodes a picture, and turns it as its EXIF orientation tells.
///
/// # Errors
/// [`PictureError`] with the file's name.
pub fn read_picture(path: &Path) -> Result<Picture, PictureError> {
    decode(&read_file(path)?, &path.display().to_string())
}

pub(super) fn read_file(path: &Path) -> Result<Vec<u8>, PictureError> {
    let file = |why: String| PictureError::File { path: path.display().to_string(), why };
    let size = std::fs::metadata(path).map_err(|error| file(error.to_string()))?.len();
    if size > LARGEST_FILE {
        return Err(file(format!("{size} bytes are more than the {LARGEST_FILE} a frame may have")));
    }
    std::fs::read(path).map_err(|error| file(error.to_string()))
}

pub(super) fn decode(bytes: &[u8], origin: &str) -> Result<Picture, PictureError> {
    let damaged = |why: String| PictureError::Damaged { path: origin.to_owned(), why };
    let mut reader =
        ImageReader::new(Cursor::new(bytes)).with_guessed_format().map_err(|error| damaged(error.to_string()))?;
    let mut limits = image::Limits::default();
    limits.max_image_width = Some(LARGEST_SIDE);
    limits.max_image_height = Some(LARGEST_SIDE);
    limits.max_alloc = Some(LARGEST_DECODED);
    reader.limits(limits);
    let mut image = reader.decode().map_err(|error| damaged(error.to_string()))?;
    if let Some(orientation) = super::exif::orientation(bytes).and_then(image::metadata::Orientation::from_exif) {
        image.apply_orientation(orientation);
    }
    Ok(to_grey(&image))
}

fn to_grey(image: &DynamicImage) -> Picture {
    let (width, height) = (image.width() as usize, image.height() as usize);
    let deep = image.color().bytes_per_pixel() / image.color().channel_count() > 1;
    let (grey, saturation) = if deep {
        (image.to_luma16().into_raw().into_iter().map(f32::from).collect(), f32::from(u16::MAX))
    } else {
        (image.to_luma8().into_raw().into_iter().map(f32::from).collect(), f32::from(u8::MAX))
    };
    Picture { width, height, grey, saturation }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn png(image: &DynamicImage) -> Vec<u8> {
        let mut bytes = Vec::new();
        image.write_to(&mut Cursor::new(&mut bytes), image::ImageFormat::Png).unwrap();
        bytes
    }

    #[test]
    fn eight_and_sixteen_bits_keep_their_scale() {
        let eight = png(&DynamicImage::ImageLuma8(image::GrayImage::from_pixel(3, 2, image::Luma([200]))));
        let picture = decode(&eight, "a").unwrap();
        assert_eq!((picture.width, picture.height, picture.grey[5], picture.saturation), (3, 2, 200.0, 255.0));
        let sixteen = png(&DynamicImage::ImageLuma16(image::ImageBuffer::from_pixel(3, 2, image::Luma([40_000]))));
        let picture = decode(&sixteen, "a").unwrap();
        assert_eq!((picture.grey[0], picture.saturation), (40_000.0, 65_535.0));
    }

    #[test]
    fn half_a_picture_is_damaged() {
        let whole =
            png(&DynamicImage::ImageLuma8(image::GrayImage::from_fn(64, 64, |x, y| image::Luma([(x * y) as u8]))));
        let error = decode(&whole[..whole.len() / 2], "half.png").unwrap_err();
        assert!(error.to_string().contains("half.png"), "{error}");
        assert!(decode(b"not a picture at all", "text.png").is_err());
        assert!(decode(b"", "empty.png").is_err());
    }
}
