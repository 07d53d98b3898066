//! Where a meter is connected: TCP or a serial line.

use std::{
    fmt,
    io::{self, Read, Write},
    net::{TcpStream, ToSocketAddrs},
    str::FromStr,
    time::Duration,
};

use serialport::SerialPort;

use super::MeterError;

/// Where a meter is.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum Address {
    /// A raw socket, `HOST:PORT`.
    Tcp(String),
    /// A serial line, eight data bits, no parity, one stop bit.
    Serial {
        /// The device.
        path: String,
        /// Bits per second.
        baud: u32,
    },
}

impl FromStr for Address {
    type Err = MeterError;

    fn from_str(text: &str) -> Result<Self, MeterError> {
        let wrong = || MeterError::Address(text.chars().filter(|char| !char.is_control()).take(80).collect());
        if let Some(socket) = text.strip_prefix("tcp:") {
            let port =
                socket.rsplit_once(':').filter(|(host, _)| !host.is_empty()).map(|(_, port)| port.parse::<u16>());
            return if matches!(port, Some(Ok(1..))) { Ok(Self::Tcp(socket.to_owned())) } else { Err(wrong()) };
        }
        let line = text.strip_prefix("serial:").filter(|line| !line.is_empty()).ok_or_else(wrong)?;
        let Some((path, baud)) = line.rsplit_once('@') else {
            return Ok(Self::Serial { path: line.to_owned(), baud: 9600 });
        };
        let baud = baud.parse().ok().filter(|baud| (300..=4_000_000).contains(baud)).ok_or_else(wrong)?;
        Ok(Self::Serial { path: path.to_owned(), baud })
    }
}

impl fmt::Display for Address {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::Tcp(socket) => write!(f, "tcp:{socket}"),
            Self::Serial { path, baud } => write!(f, "serial:{path}@{baud}"),
        }
    }
}

/// A byte stream whose reads can be bounded.
pub(super) trait Port: Write + Send {
    /// Reads at least a byte, or fails with a timeout (see [`is_timeout`]).
    fn read_within(&mut self, bytes: &mut [u8], limit: Duration) -> io::Result<usize>;
}

/// Whether an error only says that nothing came.
pub(super) fn is_timeout(error: &io::Error) -> bool {
    matches!(error.kind(), io::ErrorKind::TimedOut | io::ErrorKind::WouldBlock | io::ErrorKind::Interrupted)
}

impl Port for TcpStream {
    fn read_within(&mut self, bytes: &mut [u8], limit: Duration) -> io::Result<usize> {
        // Zero would mean no limit.
        self.set_read_timeout(Some(limit.max(Duration::from_millis(1))))?;
        self.read(bytes)
    }
}

struct Serial(Box<dyn SerialPort>);

impl Write for Serial {
    fn write(&mut self, bytes: &[u8]) -> io::Result<usize> {
        self.0.write(bytes)
    }

    fn flush(&mut self) -> io::Result<()> {
        // Draining a serial line may wait without bound; the kernel sends what it was given.
        Ok(())
    }
}

impl Port for Serial {
    fn read_within(&mut self, bytes: &mut [u8], limit: Duration) -> io::Result<usize> {
        self.0.set_timeout(limit.max(Duration::from_millis(1))).map_err(io::Error::from)?;
        self.0.read(bytes)
    }
}

pub(super) fn open(address: &Address, timeout: Duration) -> io::Result<Box<dyn Port>> {
    match address {
        Address::Tcp(socket) => Ok(Box::new(connect(socket, timeout)?)),
        Address::Serial { path, baud } => {
            let port = serialport::new(path, *baud).timeout(timeout).open().map_err(io::Error::from)?;
            Ok(Box::new(Serial(port)))
        }
    }
}

fn connect(socket: &str, timeout: Duration) -> io::Result<TcpStream> {
    let mut last = io::Error::new(io::ErrorKind::NotFound, "the name has no address");
    for address in socket.to_socket_addrs()? {
        match TcpStream::connect_timeout(&address, timeout) {
            Ok(stream) => {
                stream.set_nodelay(true)?;
                stream.set_write_timeout(Some(timeout))?;
                return Ok(stream);
            }
            Err(error) => last = error,
        }
    }
    Err(last)
}
