//! From what a camera says to the interval over which its sensor collected light.

use crate::{
    profile::{Camera, TimeSource},
    run::rows::Exposure,
};

use super::exif::{self, Silent};

const NS: f64 = 1e9;

/// The exposure of one frame from its file: its bytes and the time of its last change.
///
/// # Errors
/// The sentence why nothing is known.
pub fn exposure_of(bytes: &[u8], modified_utc_ns: i64, camera: &Camera) -> Result<Exposure, String> {
    match camera.time_source {
        TimeSource::Exif => from_exif(bytes, camera),
        TimeSource::FileTime => Ok(from_file_time(modified_utc_ns, camera)),
        TimeSource::Strobe | TimeSource::Lamp | TimeSource::Table => {
            Err("its exposure is not in its file: it is found when the run is aligned".to_owned())
        }
    }
}

fn from_exif(bytes: &[u8], camera: &Camera) -> Result<Exposure, String> {
    let stated = exif::stated(bytes, None).map_err(|silent| {
        match silent {
            Silent::NoTime => "its EXIF tags tell no time of exposure: set camera.time_source to another source",
            Silent::NoZone => "its EXIF time has no zone: set the camera's time zone so that it writes the offset tag",
            Silent::Impossible => "its EXIF time does not exist: set the camera's clock",
        }
        .to_owned()
    })?;
    let seconds = stated.exposure_seconds.unwrap_or(camera.exposure_seconds);
    if seconds <= 0.0 {
        return Err("its exposure time is in neither EXIF tags nor profile: set camera.exposure_seconds".to_owned());
    }
    let resolution_u = stated.resolution_ns as f64 / libm::sqrt(12.0);
    let start_u = libm::hypot(camera.start_u_seconds * NS, resolution_u);
    Ok(interval(stated.start_utc_ns, seconds, start_u, camera, "exif"))
}

fn from_file_time(modified_utc_ns: i64, camera: &Camera) -> Exposure {
    let start = modified_utc_ns - nanoseconds(shutter_seconds(camera.exposure_seconds, camera.power_of_two_shutter));
    interval(start, camera.exposure_seconds, camera.start_u_seconds * NS, camera, "file-time")
}

fn interval(start_utc_ns: i64, marked_seconds: f64, start_u_ns: f64, camera: &Camera, source: &str) -> Exposure {
    let start_utc_ns = start_utc_ns + nanoseconds(camera.start_offset_seconds);
    let seconds = shutter_seconds(marked_seconds, camera.power_of_two_shutter);
    Exposure {
        start_utc_ns,
        end_utc_ns: start_utc_ns + nanoseconds(seconds),
        start_u_ns: start_u_ns.round() as i64,
        length_u_ns: nanoseconds(camera.exposure_u_seconds),
        source: source.to_owned(),
    }
}

fn nanoseconds(seconds: f64) -> i64 {
    (seconds * NS).round() as i64
}

/// The time a shutter really stays open for a marked time: cameras round powers of two (in thirds) to friendly numbers,
/// so 1/30 is 1/32 s and 15 s is 16 s (common practice, no source).
pub fn shutter_seconds(marked: f64, power_of_two: bool) -> f64 {
    if !power_of_two || marked <= 0.0 {
        return marked;
    }
    libm::exp2((3.0 * libm::log2(marked)).round() / 3.0)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn marked_times_are_powers_of_two() {
        for (marked, real) in [(1.0 / 30.0, 1.0 / 32.0), (15.0, 16.0), (1.0 / 125.0, 1.0 / 128.0), (1.0, 1.0)] {
            assert!((shutter_seconds(marked, true) / real - 1.0).abs() < 1e-12, "{marked}");
            assert_eq!(shutter_seconds(marked, false), marked);
        }
        // A third of a step: marked 1/40 is 2^(-16/3).
        assert!((shutter_seconds(1.0 / 40.0, true) - 2f64.powf(-16.0 / 3.0)).abs() < 1e-12);
    }
}
