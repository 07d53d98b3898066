//! Where frames come from, and what is known of their exposures.

mod exif;
mod exposure;
mod folder;
pub mod lamp;
mod picture;
pub mod strobe;
pub mod table;
pub mod video;

pub use exposure::{exposure_of, shutter_seconds};
pub use folder::{FolderError, FrameFolder, modified_utc_ns, watch};
pub use picture::{Picture, PictureError, read_picture};
