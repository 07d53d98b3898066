//! What moves bytes to and from a controller.

use std::{fmt, str::FromStr, time::Duration};

use thiserror::Error;

use super::{serial::SerialEndpoint, tcp::TcpEndpoint};

/// A byte stream to a controller.
///
/// Neither call waits longer than it was told. Every error means that the link is gone and must be opened anew.
pub trait Endpoint: Send {
    /// Waits at most `patience` for bytes and returns how many came; 0 is a quiet line, not a lost one.
    ///
    /// # Errors
    /// [`LinkError::Lost`] when the other end or the port is gone.
    fn read(&mut self, buffer: &mut [u8], patience: Duration) -> Result<usize, LinkError>;

    /// Hands over as many bytes as go without waiting for the peer and returns how many; 0 when its buffers are full.
    ///
    /// # Errors
    /// [`LinkError::Lost`] when the other end or the port is gone.
    fn write(&mut self, bytes: &[u8]) -> Result<usize, LinkError>;
}

/// Why there is no link.
#[derive(Debug, Error)]
pub enum LinkError {
    /// The text is no address.
    #[error(
        "`{text}` is not a link: give a serial port such as /dev/ttyACM0, or tcp:HOST:PORT with a port from 1 to 65535"
    )]
    BadAddress {
        /// As it was given.
        text: String,
    },
    /// There is nothing at that path.
    #[error("there is no port {path}: plug the controller in, and look for its name in /dev/serial/by-id")]
    Missing {
        /// The path.
        path: String,
    },
    /// The path is something else.
    #[error("{path} is not a serial port: give the controller's port, for example /dev/ttyACM0")]
    NotAPort {
        /// The path.
        path: String,
    },
    /// Another program has it.
    #[error("{path} is in use by another program: close that one, or wait until it ends")]
    InUse {
        /// The path.
        path: String,
    },
    /// The system does not let us.
    #[error(
        "{path} may not be opened by this user: install the udev rule of the README, or join the group that owns the port"
    )]
    Forbidden {
        /// The path.
        path: String,
    },
    /// Opening failed in another way.
    #[error("{what} could not be opened ({why}): check the cable and try again")]
    Failed {
        /// The address.
        what: String,
        /// What the system said.
        why: String,
    },
    /// The link was there and is gone.
    #[error("the link {what} was lost ({why})")]
    Lost {
        /// The address.
        what: String,
        /// What the system said.
        why: String,
    },
}

/// Where a controller is to be found.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum Address {
    /// A serial port, by its path.
    Serial(String),
    /// A TCP server that passes the byte stream on.
    Tcp {
        /// Name or number.
        host: String,
        /// Port.
        port: u16,
    },
}

impl FromStr for Address {
    type Err = LinkError;

    fn from_str(text: &str) -> Result<Self, LinkError> {
        let bad = || LinkError::BadAddress { text: text.to_owned() };
        let Some(rest) = text.strip_prefix("tcp:") else {
            return if text.is_empty() { Err(bad()) } else { Ok(Self::Serial(text.to_owned())) };
        };
        let (host, port) = rest.rsplit_once(':').ok_or_else(bad)?;
        let host = host.trim_start_matches('[').trim_end_matches(']');
        let port = port.parse().ok().filter(|port| *port != 0).ok_or_else(bad)?;
        if host.is_empty() {
            return Err(bad());
        }
        Ok(Self::Tcp { host: host.to_owned(), port })
    }
}

impl fmt::Display for Address {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::Serial(path) => f.write_str(path),
            Self::Tcp { host, port } => write!(f, "tcp:{host}:{port}"),
        }
    }
}

/// Opens a link.
///
/// # Errors
/// Any [`LinkError`] but `Lost`.
pub fn open(address: &Address) -> Result<Box<dyn Endpoint>, LinkError> {
    Ok(match address {
        Address::Serial(path) => Box::new(SerialEndpoint::open(path)?),
        Address::Tcp { host, port } => Box::new(TcpEndpoint::open(host, *port)?),
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn addresses_are_read_and_written_back() {
        for text in ["/dev/ttyACM0", "tcp:localhost:7000", "tcp:127.0.0.1:1"] {
            assert_eq!(text.parse::<Address>().unwrap().to_string(), text);
        }
        assert_eq!("tcp:[::1]:7000".parse::<Address>().unwrap(), Address::Tcp { host: "::1".to_owned(), port: 7000 });
    }

    #[test]
    fn half_addresses_are_refused() {
        for text in ["", "tcp:", "tcp:host", "tcp:host:", "tcp::7000", "tcp:host:0", "tcp:host:65536"] {
            assert!(text.parse::<Address>().is_err(), "{text}");
        }
    }

    #[test]
    fn what_is_no_port_is_told_apart() {
        let kind = |path: &str| match open(&Address::Serial(path.to_owned())) {
            Ok(_) => "open",
            Err(LinkError::NotAPort { .. }) => "not a port",
            Err(LinkError::Missing { .. }) => "missing",
            Err(_) => "other",
        };
        assert_eq!(kind("/dev/null"), "not a port");
        assert_eq!(kind("/dev/there-is-no-such-port"), "missing");
    }
}
