//! A folder of frames: read as it is, or watched while a camera fills it.

use std::{
    collections::HashMap,
    ffi::OsString,
    fs, io,
    path::{Path, PathBuf},
    sync::{
        Arc,
        atomic::{AtomicBool, Ordering},
        mpsc::{self, Receiver, Sender},
    },
    thread::JoinHandle,
    time::{Duration, UNIX_EPOCH},
};

use notify::Watcher;
use sha2::{Digest, Sha256};
use thiserror::Error;

use super::{exposure_of, picture};
use crate::{clock::Clock, profile::Camera, run::rows::FrameRow, text::hex};

/// A file that is still damaged after so long without a change is damaged for good.
const WRITING_NS: i64 = 1_500_000_000;

/// The folder is looked through at least this often, for file systems that announce nothing.
const LOOK_EVERY: Duration = Duration::from_millis(250);

/// Why the folder cannot be used.
#[derive(Debug, Error)]
pub enum FolderError {
    /// It is not there.
    #[error("the frames folder {path} cannot be read ({why}): create it, or give the folder the camera writes to")]
    Unreadable {
        /// The folder.
        path: String,
        /// What the system said.
        why: String,
    },
}

/// The frames of one folder, each handed on once.
pub struct FrameFolder {
    folder: PathBuf,
    camera: Camera,
    seen: HashMap<OsString, Seen>,
    names: HashMap<String, String>,
}

#[derive(Clone, Copy, PartialEq)]
enum Seen {
    /// Seen damaged, with this size, since this time: perhaps still being written.
    Growing { size: u64, since_utc_ns: i64 },
    /// Handed on.
    Taken,
}

impl FrameFolder {
    /// A folder that is there.
    ///
    /// # Errors
    /// [`FolderError::Unreadable`].
    pub fn open(folder: &Path, camera: &Camera) -> Result<Self, FolderError> {
        let folder_of =
            |error: io::Error| FolderError::Unreadable { path: folder.display().to_string(), why: error.to_string() };
        fs::read_dir(folder).map_err(folder_of)?;
        Ok(Self { folder: folder.to_owned(), camera: camera.clone(), seen: HashMap::new(), names: HashMap::new() })
    }

    /// Passes over every file that is there now: frames of an earlier session.
    pub fn skip_present(&mut self) {
        for name in self.list() {
            self.seen.insert(name, Seen::Taken);
        }
    }

    /// The frames that have been completed since the last look, by name. With `last`, files that are still damaged are
    /// handed on too.
    pub fn look(&mut self, utc_ns: i64, last: bool) -> Vec<FrameRow> {
        let mut names: Vec<OsString> =
            self.list().into_iter().filter(|name| self.seen.get(name) != Some(&Seen::Taken)).collect();
        names.sort();
        names.into_iter().filter_map(|name| self.take(name, utc_ns, last)).collect()
    }

    fn list(&self) -> Vec<OsString> {
        let Ok(entries) = fs::read_dir(&self.folder) else { return Vec::new() };
        entries.flatten().map(|entry| entry.file_name()).filter(|name| self.is_frame(name)).collect()
    }

    fn is_frame(&self, name: &OsString) -> bool {
        let extension = Path::new(name).extension().and_then(|extension| extension.to_str()).map(str::to_lowercase);
        let hidden = name.to_string_lossy().starts_with('.');
        !hidden && extension.is_some_and(|extension| self.camera.extensions.contains(&extension))
    }

    fn take(&mut self, name: OsString, utc_ns: i64, last: bool) -> Option<FrameRow> {
        let path = self.folder.join(&name);
        let file = name.to_string_lossy().into_owned();
        // A file that vanished again is passed over until it comes back.
        let bytes = match picture::read_file(&path) {
            Ok(bytes) => bytes,
            Err(_) if !last => return None,
            Err(_) => Vec::new(),
        };
        let exposure = match picture::decode(&bytes, &file) {
            Ok(_) => exposure_of(&bytes, modified_utc_ns(&path).unwrap_or(utc_ns), &self.camera),
            // Perhaps it is still being written.
            Err(_) if !last && !self.is_settled(&name, bytes.len() as u64, utc_ns) => return None,
            Err(error) => Err(error.to_string()),
        };
        self.seen.insert(name, Seen::Taken);
        let sha256 = hex(&Sha256::digest(&bytes));
        Some(FrameRow { frame: self.name(&file), file, noticed_utc_ns: utc_ns, sha256, exposure })
    }

    /// Whether a damaged file has stopped growing.
    fn is_settled(&mut self, name: &OsString, size: u64, utc_ns: i64) -> bool {
        match self.seen.get(name) {
            Some(Seen::Growing { size: before, since_utc_ns }) if *before == size => utc_ns - since_utc_ns > WRITING_NS,
            _ => {
                self.seen.insert(name.clone(), Seen::Growing { size, since_utc_ns: utc_ns });
                false
            }
        }
    }

    /// The file's stem, or its whole name where another file already has that stem.
    fn name(&mut self, file: &str) -> String {
        let stem = Path::new(file).file_stem().map_or(file.to_owned(), |stem| stem.to_string_lossy().into_owned());
        let owner = self.names.entry(stem.clone()).or_insert_with(|| file.to_owned());
        if owner == file { stem } else { file.to_owned() }
    }
}

/// When a file was last changed, UTC nanoseconds; `None` where the system does not tell.
pub fn modified_utc_ns(path: &Path) -> Option<i64> {
    let modified = fs::metadata(path).ok()?.modified().ok()?;
    i64::try_from(modified.duration_since(UNIX_EPOCH).ok()?.as_nanos()).ok()
}

/// Watches the folder from a thread of its own, so that decoding a large picture never holds up the recording. Ends
/// when `stop` is set, after a last look; dropping the receiver ends it as well.
pub fn watch(
    mut folder: FrameFolder,
    clock: Arc<dyn Clock>,
    stop: Arc<AtomicBool>,
) -> (Receiver<FrameRow>, JoinHandle<()>) {
    let (rows, receiver) = mpsc::channel();
    let thread = std::thread::spawn(move || {
        let (wake, woken) = mpsc::channel();
        let _watcher = announce(&folder.folder, wake);
        loop {
            let last = stop.load(Ordering::Relaxed);
            for row in folder.look(clock.utc_ns(), last) {
                if rows.send(row).is_err() {
                    return;
                }
            }
            if last {
                return;
            }
            match woken.recv_timeout(LOOK_EVERY) {
                // A file that was announced is usually one of several writes: let the camera finish.
                Ok(()) => std::thread::sleep(Duration::from_millis(20)),
                Err(mpsc::RecvTimeoutError::Timeout) => {}
                // No announcements on this file system: the regular look is enough.
                Err(mpsc::RecvTimeoutError::Disconnected) => std::thread::sleep(LOOK_EVERY),
            }
            while woken.try_recv().is_ok() {}
        }
    });
    (receiver, thread)
}

/// Wakes the watcher when the file system says that something changed; `None` where it cannot say so.
fn announce(folder: &Path, wake: Sender<()>) -> Option<notify::RecommendedWatcher> {
    let mut watcher = notify::recommended_watcher(move |_| {
        // The receiver outlives the watcher but for the moment of stopping.
        let _ = wake.send(());
    })
    .ok()?;
    watcher.watch(folder, notify::RecursiveMode::NonRecursive).ok()?;
    Some(watcher)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::profile::TimeSource;

    fn camera() -> Camera {
        Camera {
            time_source: TimeSource::FileTime,
            extensions: vec!["png".to_owned()],
            exposure_seconds: 0.2,
            exposure_u_seconds: 1e-4,
            start_offset_seconds: 0.0,
            start_u_seconds: 0.01,
            power_of_two_shutter: false,
            afterglow_seconds: 0.3,
            pixels_per_mm: 8.0,
            pixels_per_mm_u_relative: 0.002,
            distance_mm: 0.0,
            lamp_chip_seconds: 0.073,
        }
    }

    fn png() -> Vec<u8> {
        let mut bytes = Vec::new();
        let image =
            image::DynamicImage::ImageLuma8(image::GrayImage::from_fn(32, 32, |x, y| image::Luma([(x * y) as u8])));
        image.write_to(&mut io::Cursor::new(&mut bytes), image::ImageFormat::Png).unwrap();
        bytes
    }

    #[test]
    fn a_frame_is_handed_on_once_and_a_growing_one_when_it_is_whole() {
        let folder = tempfile::tempdir().unwrap();
        let mut frames = FrameFolder::open(folder.path(), &camera()).unwrap();
        let whole = png();
        fs::write(folder.path().join("f1.png"), &whole).unwrap();
        fs::write(folder.path().join("f2.PNG"), &whole[..40]).unwrap();
        fs::write(folder.path().join("notes.txt"), "no frame").unwrap();
        let rows = frames.look(0, false);
        assert_eq!(rows.iter().map(|row| row.frame.as_str()).collect::<Vec<_>>(), ["f1"]);
        assert_eq!(rows[0].exposure.as_ref().unwrap().source, "file-time");
        fs::write(folder.path().join("f2.PNG"), &whole).unwrap();
        assert_eq!(frames.look(100_000_000, false).len(), 1);
        assert_eq!(frames.look(200_000_000, false), []);
    }

    #[test]
    fn a_damaged_frame_is_handed_on_with_its_reason() {
        let folder = tempfile::tempdir().unwrap();
        let mut frames = FrameFolder::open(folder.path(), &camera()).unwrap();
        fs::write(folder.path().join("bad.png"), &png()[..50]).unwrap();
        assert_eq!(frames.look(0, false), []);
        assert_eq!(frames.look(WRITING_NS, false), []);
        let rows = frames.look(WRITING_NS + 1, false);
        assert!(rows[0].exposure.as_ref().unwrap_err().contains("bad.png"));
    }

    #[test]
    fn the_second_file_of_a_stem_keeps_its_whole_name() {
        let folder = tempfile::tempdir().unwrap();
        let both = Camera { extensions: vec!["png".to_owned(), "jpg".to_owned()], ..camera() };
        let mut frames = FrameFolder::open(folder.path(), &both).unwrap();
        fs::write(folder.path().join("a.jpg"), png()).unwrap();
        fs::write(folder.path().join("a.png"), png()).unwrap();
        let names: Vec<String> = frames.look(0, false).into_iter().map(|row| row.frame).collect();
        assert_eq!(names, ["a", "a.png"]);
    }

    #[test]
    fn a_missing_folder_is_named() {
        let error = FrameFolder::open(Path::new("no/such/folder"), &camera()).err().unwrap().to_string();
        assert!(error.contains("no/such/folder"), "{error}");
    }
}
