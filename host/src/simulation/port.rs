//! A real pseudo-terminal for the simulated controller, linked at a name a person chooses.

use std::{
    fs, io,
    os::{fd::OwnedFd, unix::fs::symlink},
    path::{Path, PathBuf},
};

use rustix::{
    fs::{Mode, OFlags, fcntl_setfl, inotify, open},
    pty::{OpenptFlags, grantpt, openpt, ptsname, unlockpt},
    termios::{OptionalActions, ioctl_tiocnxcl, tcgetattr, tcsetattr},
};
use thiserror::Error;

/// Why there is no pseudo-terminal.
#[derive(Debug, Error)]
pub enum PortError {
    /// The name is taken by something that is no link to a pseudo-terminal.
    #[error("{path} exists and is no link to a pseudo-terminal: give another --link-path, or move that file away")]
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
    host_end: OwnedFd,
    /// Tells when a host has closed its end; `None` where the system does not.
    watch: Option<OwnedFd>,
    link: PathBuf,
    name: String,
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
        clear_way(link)?;
        symlink(&name, link).map_err(|e| system(e.to_string()))?;
        let watch = watch_closing(&name);
        Ok(Self { controller, host_end, watch, link: link.to_owned(), name })
    }

    /// Bytes from the host, as many as are there.
    ///
    /// # Errors
    /// What the system says.
    pub fn read(&self, buffer: &mut [u8]) -> io::Result<usize> {
        self.release_after_closing();
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

impl Port {
    /// A host that takes the port for itself alone and then goes (or is killed) would leave it taken, because this end
    /// keeps it open; a real port forgets that when it is closed. So it is made to forget here.
    fn release_after_closing(&self) {
        let Some(watch) = &self.watch else { return };
        let mut events = [0; 512];
        if rustix::io::read(watch, &mut events).is_ok_and(|count| count > 0) {
            // Where it fails the next host is told that the port is taken, which is no harm done.
            let _ = ioctl_tiocnxcl(&self.host_end);
        }
    }
}

fn watch_closing(name: &str) -> Option<OwnedFd> {
    let watch = inotify::init(inotify::CreateFlags::NONBLOCK | inotify::CreateFlags::CLOEXEC).ok()?;
    inotify::add_watch(&watch, name, inotify::WatchFlags::CLOSE_WRITE).ok()?;
    Some(watch)
}

/// Takes away what an earlier bench left at `link`, and nothing else: a link to a pseudo-terminal.
fn clear_way(link: &Path) -> Result<(), PortError> {
    let path = || link.display().to_string();
    let Ok(there) = fs::symlink_metadata(link) else { return Ok(()) };
    let is_ours = there.file_type().is_symlink() && fs::read_link(link).is_ok_and(|to| to.starts_with("/dev/pts"));
    if !is_ours {
        return Err(PortError::Taken { path: path() });
    }
    fs::remove_file(link).map_err(|error| PortError::System { path: path(), why: error.to_string() })
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
        // Another bench may have put its own link there meanwhile. One that is gone already is as good.
        if fs::read_link(&self.link).is_ok_and(|to| to == Path::new(&self.name)) {
            let _ = fs::remove_file(&self.link);
        }
    }
}

#[cfg(test)]
mod tests {
    use std::{io::Read, io::Write, time::Duration};

    use super::*;

    /// Opens the link as a host does, and says how that went.
    fn host(link: &Path) -> Result<Box<dyn serialport::SerialPort>, serialport::Error> {
        serialport::new(link.display().to_string(), 115_200).timeout(Duration::from_millis(500)).open()
    }

    #[test]
    fn bytes_go_both_ways_and_a_host_may_come_back() {
        let folder = tempfile::tempdir().unwrap();
        let link = folder.path().join("controller");
        let port = Port::open(&link).unwrap();
        for round in 0..3_u8 {
            let mut host = host(&link).unwrap();
            // Every byte value: nothing is translated.
            let sent: Vec<u8> = (0..=255).map(|byte: u8| byte.wrapping_add(round)).collect();
            host.write_all(&sent).unwrap();
            let (mut got, mut buffer) = (Vec::new(), [0; 100]);
            for _ in 0..1_000 {
                let count = port.read(&mut buffer).unwrap();
                got.extend_from_slice(&buffer[..count]);
                if got.len() >= sent.len() {
                    break;
                }
                std::thread::sleep(Duration::from_millis(1));
            }
            assert_eq!(got, sent);
            assert_eq!(port.write(&sent).unwrap(), sent.len());
            let mut back = vec![0; sent.len()];
            host.read_exact(&mut back).unwrap();
            assert_eq!(back, sent);
            drop(host);
            // The port forgets that it was taken as soon as it is looked after.
            port.read(&mut buffer).unwrap();
        }
        drop(port);
        assert!(fs::symlink_metadata(&link).is_err());
    }

    #[test]
    fn nobody_reading_does_not_block() {
        let folder = tempfile::tempdir().unwrap();
        let port = Port::open(&folder.path().join("controller")).unwrap();
        let total: usize = (0..1_000).map(|_| port.write(&[0; 1_000]).unwrap()).sum();
        assert!(total < 1_000_000);
    }

    #[test]
    fn only_its_own_kind_of_link_is_replaced() {
        let folder = tempfile::tempdir().unwrap();
        let link = folder.path().join("controller");
        symlink("/dev/pts/987654", &link).unwrap();
        let port = Port::open(&link).unwrap();
        // A second bench takes the name over; the first must not take it away again.
        let second = Port::open(&link).unwrap();
        drop(port);
        assert!(fs::symlink_metadata(&link).is_ok());
        drop(second);
        for taken in ["file", "other"] {
            let path = folder.path().join(taken);
            if taken == "file" {
                fs::write(&path, "x").unwrap()
            } else {
                symlink("file", &path).unwrap()
            }
            let message = Port::open(&path).unwrap_err().to_string();
            assert!(message.contains(taken) && message.contains("--link-path"), "{message}");
            assert!(fs::symlink_metadata(&path).is_ok());
        }
    }
}
