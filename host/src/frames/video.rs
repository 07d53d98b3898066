//! Video through Y4M, so that any converter can feed it: the brightness of a patch in every frame.

use std::{
    cell::Cell,
    io::{self, Read},
};

use thiserror::Error;

/// A part of the picture, pixels from the left upper corner.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Patch {
    /// Left edge.
    pub x: usize,
    /// Upper edge.
    pub y: usize,
    /// Width.
    pub width: usize,
    /// Height.
    pub height: usize,
}

impl Patch {
    /// How much later than the patch the middle row of a picture of this height is exposed by a rolling shutter that takes
    /// `row_seconds` from row to row, seconds. Rings lie about the middle.
    pub fn rows_to_middle_seconds(&self, height: usize, row_seconds: f64) -> f64 {
        let patch_row = self.y as f64 + 0.5 * self.height as f64;
        (0.5 * height as f64 - patch_row) * row_seconds
    }
}

impl std::str::FromStr for Patch {
    type Err = String;

    /// `X,Y,WIDTH,HEIGHT`.
    fn from_str(text: &str) -> Result<Self, String> {
        let numbers: Vec<usize> = text.split(',').map_while(|number| number.trim().parse().ok()).collect();
        match numbers[..] {
            [x, y, width, height] if width > 0 && height > 0 && text.split(',').count() == 4 => {
                Ok(Self { x, y, width, height })
            }
            _ => Err(format!("`{text}` is no patch: give X,Y,WIDTH,HEIGHT in pixels, such as 20,30,16,16")),
        }
    }
}

/// Why a video cannot be used.
#[derive(Debug, Error)]
pub enum VideoError {
    /// It is no Y4M stream, or breaks off within one.
    #[error("the video is no whole Y4M stream ({0}): convert it again")]
    Damaged(String),
    /// The patch lies outside the picture.
    #[error("the patch does not lie within the picture of {width} x {height} pixels")]
    Outside {
        /// Width.
        width: usize,
        /// Height.
        height: usize,
    },
}

/// The brightness of a patch over a clip.
#[derive(Clone, Debug, PartialEq)]
pub struct PatchClip {
    /// Nominal frame period, seconds.
    pub frame_seconds: f64,
    /// Height of the picture, pixels.
    pub height: usize,
    /// Mean luma of the patch in every frame, 0 to 255.
    pub brightness: Vec<f64>,
}

/// Frames of a clip that are read at most: a day at 60 a second.
const MOST_FRAMES: usize = 86_400 * 60;
/// Memory one frame may take, bytes.
const MOST_BYTES: usize = 256 << 20;

/// Reads a whole Y4M stream of 8-bit luma.
///
/// # Errors
/// [`VideoError`]; a stream that breaks off within a frame is damaged.
pub fn patch_brightness(video: impl Read, patch: Patch) -> Result<PatchClip, VideoError> {
    let damaged = |error: y4m::Error| VideoError::Damaged(error.to_string());
    let limits = y4m::Limits { bytes: MOST_BYTES };
    let taken = Cell::new(0u64);
    let video = Counted { video, taken: &taken };
    let mut decoder = y4m::Decoder::new_with_limits(video, limits).map_err(damaged)?;
    let (width, height) = (decoder.get_width(), decoder.get_height());
    if patch.x.saturating_add(patch.width) > width || patch.y.saturating_add(patch.height) > height {
        return Err(VideoError::Outside { width, height });
    }
    if decoder.get_bit_depth() != 8 {
        return Err(VideoError::Damaged(format!("{} bits a sample, 8 are read", decoder.get_bit_depth())));
    }
    let rate = decoder.get_framerate();
    if rate.num == 0 || rate.den == 0 {
        return Err(VideoError::Damaged("it states no frame rate".to_owned()));
    }
    let mut brightness = Vec::new();
    let mut whole = taken.get();
    loop {
        match decoder.read_frame() {
            Ok(frame) => brightness.push(mean_luma(frame.get_y_plane(), width, patch)),
            // The library calls it an end, too, when the stream breaks off within a frame.
            Err(y4m::Error::EOF) if taken.get() == whole => break,
            Err(y4m::Error::EOF) => return Err(VideoError::Damaged("it breaks off within a frame".to_owned())),
            Err(error) => return Err(damaged(error)),
        }
        whole = taken.get();
        if brightness.len() > MOST_FRAMES {
            return Err(VideoError::Damaged(format!("it has more than {MOST_FRAMES} frames")));
        }
    }
    Ok(PatchClip { frame_seconds: rate.den as f64 / rate.num as f64, height, brightness })
}

/// Counts the bytes that are taken from a stream.
struct Counted<'a, R> {
    video: R,
    taken: &'a Cell<u64>,
}

impl<R: Read> Read for Counted<'_, R> {
    fn read(&mut self, buffer: &mut [u8]) -> io::Result<usize> {
        let count = self.video.read(buffer)?;
        self.taken.set(self.taken.get() + count as u64);
        Ok(count)
    }
}

fn mean_luma(plane: &[u8], width: usize, patch: Patch) -> f64 {
    let rows = plane.chunks_exact(width).skip(patch.y).take(patch.height);
    let sum: u64 = rows.flat_map(|row| &row[patch.x..patch.x + patch.width]).map(|luma| u64::from(*luma)).sum();
    sum as f64 / (patch.width * patch.height) as f64
}

/// Mean grey value of a patch of a picture; `None` where it lies outside.
pub fn patch_of_picture(picture: &super::Picture, patch: Patch) -> Option<f64> {
    if patch.x.checked_add(patch.width)? > picture.width || patch.y.checked_add(patch.height)? > picture.height {
        return None;
    }
    let rows = picture.grey.chunks_exact(picture.width).skip(patch.y).take(patch.height);
    let sum: f64 = rows.flat_map(|row| &row[patch.x..patch.x + patch.width]).map(|grey| f64::from(*grey)).sum();
    Some(sum / (patch.width * patch.height) as f64)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn clip(frames: &[u8]) -> Vec<u8> {
        let mut bytes = b"YUV4MPEG2 W8 H4 F25:1 Ip A1:1 Cmono\n".to_vec();
        for luma in frames {
            bytes.extend(b"FRAME\n");
            let mut plane = [10u8; 32];
            plane[8 + 2] = *luma;
            plane[8 + 3] = *luma;
            bytes.extend(plane);
        }
        bytes
    }

    const PATCH: Patch = Patch { x: 2, y: 1, width: 2, height: 1 };

    #[test]
    fn the_patch_of_every_frame_is_read() {
        let read = patch_brightness(&clip(&[50, 200, 7])[..], PATCH).unwrap();
        assert_eq!(read, PatchClip { frame_seconds: 0.04, height: 4, brightness: vec![50.0, 200.0, 7.0] });
    }

    #[test]
    fn what_is_no_video_is_told() {
        let whole = clip(&[50, 200]);
        for bytes in [&b""[..], b"RIFF....AVI ", &whole[..whole.len() - 5]] {
            assert!(patch_brightness(bytes, PATCH).is_err());
        }
        let outside = Patch { x: 7, ..PATCH };
        assert!(matches!(patch_brightness(&whole[..], outside), Err(VideoError::Outside { width: 8, height: 4 })));
    }

    #[test]
    fn a_rolling_shutter_reaches_the_middle_later_than_a_patch_above_it() {
        let patch = Patch { x: 0, y: 10, width: 4, height: 20 };
        // From row 20 to row 240 at 20 us a row.
        assert!((patch.rows_to_middle_seconds(480, 20e-6) - 4.4e-3).abs() < 1e-12);
        assert_eq!(patch.rows_to_middle_seconds(480, 0.0), 0.0);
    }

    #[test]
    fn patches_are_read_from_text() {
        assert_eq!("2,1,2,1".parse(), Ok(PATCH));
        for bad in ["", "1,2,3", "1,2,0,4", "a,b,c,d", "1,2,3,4,5"] {
            assert!(bad.parse::<Patch>().is_err(), "{bad}");
        }
    }
}
