//! A serial port: USB or UART.

use std::{
    io::{ErrorKind, Read, Write},
    path::Path,
    time::Duration,
};

use serialport::{SerialPort, TTYPort};

use super::endpoint::{Endpoint, LinkError};

/// The UART's speed; a USB serial port ignores it.
const BAUD: u32 = 921_600;

/// How long a write may wait for room. Short: a controller that does not read is not waited for.
const WRITE_PATIENCE: Duration = Duration::from_millis(2);

pub(super) struct SerialEndpoint {
    port: TTYPort,
    path: String,
}

impl SerialEndpoint {
    pub(super) fn open(path: &str) -> Result<Self, LinkError> {
        // The library's own words do not tell these two apart.
        if !Path::new(path).exists() {
            return Err(LinkError::Missing { path: path.to_owned() });
        }
        let port =
            serialport::new(path, BAUD).timeout(WRITE_PATIENCE).open_native().map_err(|error| explain(path, &error))?;
        Ok(Self { port, path: path.to_owned() })
    }

    fn lost(&self, why: impl ToString) -> LinkError {
        LinkError::Lost { what: self.path.clone(), why: why.to_string() }
    }
}

impl Endpoint for SerialEndpoint {
    fn read(&mut self, buffer: &mut [u8], patience: Duration) -> Result<usize, LinkError> {
        self.port.set_timeout(patience).map_err(|error| self.lost(error))?;
        match self.port.read(buffer) {
            // A port that is ready and gives nothing has been hung up.
            Ok(0) => Err(self.lost("the port was closed at its other end")),
            Ok(count) => Ok(count),
            Err(error) if is_quiet(&error) => Ok(0),
            Err(error) => Err(self.lost(error)),
        }
    }

    fn write(&mut self, bytes: &[u8]) -> Result<usize, LinkError> {
        self.port.set_timeout(WRITE_PATIENCE).map_err(|error| self.lost(error))?;
        match self.port.write(bytes) {
            Ok(count) => Ok(count),
            Err(error) if is_quiet(&error) => Ok(0),
            Err(error) => Err(self.lost(error)),
        }
    }
}

fn is_quiet(error: &std::io::Error) -> bool {
    matches!(error.kind(), ErrorKind::TimedOut | ErrorKind::Interrupted | ErrorKind::WouldBlock)
}

fn explain(path: &str, error: &serialport::Error) -> LinkError {
    let path = path.to_owned();
    let text = error.to_string();
    match error.kind() {
        serialport::ErrorKind::Io(ErrorKind::PermissionDenied) => LinkError::Forbidden { path },
        // serialport reports a port that is open elsewhere as a missing device.
        serialport::ErrorKind::NoDevice => LinkError::InUse { path },
        _ if text.contains("Not a typewriter") || text.contains("Inappropriate ioctl") => LinkError::NotAPort { path },
        _ => LinkError::Failed { what: path, why: text },
    }
}
