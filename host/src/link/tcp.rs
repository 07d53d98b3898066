//! A controller behind TCP: a serial server, or an emulated board.

use std::{
    io::{ErrorKind, Read, Write},
    net::{TcpStream, ToSocketAddrs},
    time::Duration,
};

use super::endpoint::{Endpoint, LinkError};

const CONNECT_PATIENCE: Duration = Duration::from_secs(3);

/// The shortest time-out the system takes.
const LEAST_PATIENCE: Duration = Duration::from_millis(1);

pub(super) struct TcpEndpoint {
    stream: TcpStream,
    name: String,
}

impl TcpEndpoint {
    pub(super) fn open(host: &str, port: u16) -> Result<Self, LinkError> {
        let name = format!("tcp:{host}:{port}");
        let failed = |why: String| LinkError::Failed { what: name.clone(), why };
        let addresses = (host, port).to_socket_addrs().map_err(|error| failed(error.to_string()))?;
        let mut why = "the name has no address".to_owned();
        for address in addresses {
            match TcpStream::connect_timeout(&address, CONNECT_PATIENCE) {
                Ok(stream) => {
                    // Questions for the clock must not wait for company.
                    stream.set_nodelay(true).map_err(|error| failed(error.to_string()))?;
                    stream.set_write_timeout(Some(LEAST_PATIENCE * 2)).map_err(|error| failed(error.to_string()))?;
                    return Ok(Self { stream, name });
                }
                Err(error) => why = error.to_string(),
            }
        }
        Err(failed(why))
    }

    fn lost(&self, why: impl ToString) -> LinkError {
        LinkError::Lost { what: self.name.clone(), why: why.to_string() }
    }
}

impl Endpoint for TcpEndpoint {
    fn read(&mut self, buffer: &mut [u8], patience: Duration) -> Result<usize, LinkError> {
        self.stream.set_read_timeout(Some(patience.max(LEAST_PATIENCE))).map_err(|error| self.lost(error))?;
        match self.stream.read(buffer) {
            Ok(0) => Err(self.lost("the other end closed it")),
            Ok(count) => Ok(count),
            Err(error) if is_quiet(&error) => Ok(0),
            Err(error) => Err(self.lost(error)),
        }
    }

    fn write(&mut self, bytes: &[u8]) -> Result<usize, LinkError> {
        match self.stream.write(bytes) {
            Ok(count) => Ok(count),
            Err(error) if is_quiet(&error) => Ok(0),
            Err(error) => Err(self.lost(error)),
        }
    }
}

fn is_quiet(error: &std::io::Error) -> bool {
    matches!(error.kind(), ErrorKind::TimedOut | ErrorKind::Interrupted | ErrorKind::WouldBlock)
}
