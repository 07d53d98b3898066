//! A real pseudo-terminal for the simulated controller, linked at a name a person chooses.

use std::{
    fs, io,
    os::{fd::OwnedFd, unix::fs::symlink},
    path::{Path, PathBuf},
};

use rustix::{
    fs::{Mode, OFlags, fcntl_setfl, open},
    pty::{OpenptFlags, grantpt, openpt, ptsname, unlockpt},
    termios::{OptionalActions, tcgetattr, tcsetattr},
};
use thiserror::Error;

/// Why there is no pseudo-terminal.
#[derive(Debug, Error)]
pub enum PortError {
    /// The name is taken by something that is no link.
    #[error("{path} exists and is not a link: give another --link-path, or move that file away")]
    Taken {
        /// The name.
        path: String,
    },
    /// The system refused.
    #[error("a pseudo-terminal linked at {path} could not be made ({why}): check the folder and /dev/pts")]
    System {
        /// The name.
        path: String,
        /// What the system said.
        why: String,
    },
}

/// The controller's end of a pseudo-terminal. The link goes when this is dropped.
#[derive(Debug)]
pub struct Port {
    controller: OwnedFd,
    /// Held open, so that a host may close its end and open it again.
    _host_end: OwnedFd,
    link: PathBuf,
}

impl Port {
    /// Makes a pseudo-terminal and links it at `link`; an old link there is replaced.
    ///
    /// # Errors
    /// [`PortError`].
    pub fn open(link: &Path) -> Result<Self, PortError> {
        let path = || link.display().to_string();
        let system = |why: String| PortError::System { path: path(), why };
        let controller = openpt(OpenptFlags::RDWR | OpenptFlags::NOCTTY).map_err(|e| system(e.to_string()))?;
        grantpt(&controller).and_then(|()| unlockpt(&controller)).map_err(|e| system(e.to_string()))?;
        let name = ptsname(&controller, Vec::new()).map_err(|e| system(e.to_string()))?;
        let name = name.to_string_lossy().into_owned();
        let host_end =
            open(name.as_str(), OFlags::RDWR | OFlags::NOCTTY, Mode::empty()).map_err(|e| system(e.to_string()))?;
        let mut attributes = tcgetattr(&host_end).map_err(|e| system(e.to_string()))?;
        attributes.make_raw();
        tcsetattr(&host_end, OptionalActions::Now, &attributes).map_err(|e| system(e.to_string()))?;
        fcntl_setfl(&controller, OFlags::NONBLOCK).map_err(|e| system(e.to_string()))?;
        match fs::symlink_metadata(link) {
            Ok(there) if there.file_type().is_symlink() => fs::remove_file(link).map_err(|e| system(e.to_string()))?,
            Ok(_) => return Err(PortError::Taken { path: path() }),
            Err(_) => {}
        }
        symlink(&name, link).map_err(|e| system(e.to_string()))?;
        Ok(Self { controller, _host_end: host_end, link: link.to_owned() })
    }

    /// Bytes from the host, as many as are there.
    ///
    /// # Errors
    /// What the system says.
    pub fn read(&self, buffer: &mut [u8]) -> io::Result<usize> {
        quiet(rustix::io::read(&self.controller, buffer))
    }

    /// Hands bytes to the host, as many as go.
    ///
    /// # Errors
    /// What the system says.
    pub fn write(&self, bytes: &[u8]) -> io::Result<usize> {
        quiet(rustix::io::write(&self.controller, bytes))
    }
}

/// A full or empty line is no error.
fn quiet(outcome: Result<usize, rustix::io::Errno>) -> io::Result<usize> {
    use rustix::io::Errno;
    match outcome {
        Err(Errno::AGAIN | Errno::INTR | Errno::IO) => Ok(0),
        outcome => outcome.map_err(io::Error::from),
    }
}

impl Drop for Port {
    fn drop(&mut self) {
        // Nothing depends on it any more; a link that is gone already is as good.
        let _ = fs::remove_file(&self.link);
    }
}
