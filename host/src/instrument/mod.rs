//! Reference meters: instruments that answer SCPI commands over TCP or a serial line.
//!
//! SCPI and the common commands of IEEE 488.2 are open standards; one newline ends a command, one newline ends a reply.

mod port;
mod reply;
#[cfg(test)]
mod tests;

use std::{
    fmt, io,
    time::{Duration, Instant},
};

pub use port::Address;
use port::Port;
pub use reply::parse_volts;

/// Longest reply that is read, bytes.
const MAX_REPLY: usize = 256;

/// How long the line must be quiet after a failed exchange before the next question.
const QUIET: Duration = Duration::from_millis(150);

/// Why a meter gave no value.
#[derive(Debug, thiserror::Error)]
pub enum MeterError {
    /// The address cannot be understood.
    #[error("\"{0}\" is no meter's address; give tcp:HOST:PORT, or serial:PATH or serial:PATH@BAUD")]
    Address(String),
    /// It could not be opened.
    #[error("cannot reach a meter at {address}: {source}")]
    Open {
        /// Where.
        address: Address,
        /// What the system said.
        source: io::Error,
    },
    /// The connection failed.
    #[error("the meter at {address} is gone ({source}); check its cable, then try again")]
    Lost {
        /// Where.
        address: Address,
        /// What the system said.
        source: io::Error,
    },
    /// It did not answer in time.
    #[error(
        "the meter at {address} did not answer {query} within {seconds} s; check that it is on remote control, that \
         newline ends its messages, and the speed of a serial line"
    )]
    Silent {
        /// Where.
        address: Address,
        /// What was asked.
        query: &'static str,
        /// How long it was waited, seconds.
        seconds: f64,
    },
    /// It answered something that is no reading.
    #[error("the meter at {address} answered {query} with \"{reply}\": {problem}")]
    Reply {
        /// Where.
        address: Address,
        /// What was asked.
        query: &'static str,
        /// What it said, cut to a line.
        reply: String,
        /// Why that is no use.
        problem: &'static str,
    },
}

/// How a reading is asked for.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub enum Question {
    /// `MEAS:VOLT:DC?`: sets the meter up for direct voltage with its own choice of range, and reads.
    #[default]
    Measure,
    /// `READ?`: reads with the settings the person made at the meter.
    Read,
}

impl Question {
    const fn query(self) -> &'static str {
        match self {
            Self::Measure => "MEAS:VOLT:DC?",
            Self::Read => "READ?",
        }
    }
}

/// A connected meter.
pub struct Meter {
    address: Address,
    port: Box<dyn Port>,
    timeout: Duration,
    /// A reply may still be under way that belongs to no question any more.
    out_of_step: bool,
}

impl fmt::Debug for Meter {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.debug_struct("Meter").field("address", &self.address).finish_non_exhaustive()
    }
}

impl Meter {
    /// Connects. `timeout` bounds the connection and every exchange; slow meters integrate for seconds.
    ///
    /// # Errors
    /// When the meter cannot be reached.
    pub fn open(address: &Address, timeout: Duration) -> Result<Self, MeterError> {
        let opened = port::open(address, timeout);
        let port = opened.map_err(|source| MeterError::Open { address: address.clone(), source })?;
        // Whatever a serial line still holds is from before.
        Ok(Self { address: address.clone(), port, timeout, out_of_step: true })
    }

    /// What the meter says it is (`*IDN?`).
    ///
    /// # Errors
    /// When it does not answer, or with nothing.
    pub fn identity(&mut self) -> Result<String, MeterError> {
        let query = "*IDN?";
        let reply = self.ask(query)?;
        let name: String = reply.chars().filter(|char| !char.is_control()).collect();
        if name.trim().is_empty() {
            return Err(self.bad_reply(query, &reply, "an identity was expected"));
        }
        Ok(name.trim().to_owned())
    }

    /// One reading, volts at the meter's terminals.
    ///
    /// # Errors
    /// When it does not answer, or answers overload or something that is no number.
    pub fn read_volts(&mut self, question: Question) -> Result<f64, MeterError> {
        let query = question.query();
        let reply = self.ask(query)?;
        reply::parse_volts(&reply).map_err(|problem| self.bad_reply(query, &reply, problem))
    }

    fn ask(&mut self, query: &'static str) -> Result<String, MeterError> {
        let result = self.exchange(query);
        self.out_of_step = result.is_err();
        result
    }

    fn exchange(&mut self, query: &'static str) -> Result<String, MeterError> {
        if self.out_of_step {
            self.drain()?;
        }
        let sent = self.port.write_all(format!("{query}\n").as_bytes()).and_then(|()| self.port.flush());
        sent.map_err(|source| self.lost(source))?;
        let deadline = Instant::now() + self.timeout;
        let mut reply = Vec::new();
        loop {
            let silent =
                MeterError::Silent { address: self.address.clone(), query, seconds: self.timeout.as_secs_f64() };
            match self.byte(deadline)? {
                None => return Err(silent),
                Some(b'\n') => break,
                Some(byte) => reply.push(byte),
            }
            if reply.len() > MAX_REPLY {
                return Err(self.bad_reply(query, &String::from_utf8_lossy(&reply), "it does not end"));
            }
        }
        Ok(String::from_utf8_lossy(&reply).trim().to_owned())
    }

    /// Reads and forgets until the line is quiet, for at most the timeout.
    fn drain(&mut self) -> Result<(), MeterError> {
        let end = Instant::now() + self.timeout;
        while Instant::now() < end {
            if self.byte(Instant::now() + QUIET)?.is_none() {
                break;
            }
        }
        Ok(())
    }

    /// The next byte, or `None` at the deadline.
    fn byte(&mut self, deadline: Instant) -> Result<Option<u8>, MeterError> {
        loop {
            let left = deadline.saturating_duration_since(Instant::now());
            if left.is_zero() {
                return Ok(None);
            }
            let mut byte = [0];
            match self.port.read_within(&mut byte, left) {
                Ok(0) => return Err(self.lost(io::ErrorKind::UnexpectedEof.into())),
                Ok(_) => return Ok(Some(byte[0])),
                Err(error) if port::is_timeout(&error) => {}
                Err(error) => return Err(self.lost(error)),
            }
        }
    }

    fn lost(&self, source: io::Error) -> MeterError {
        MeterError::Lost { address: self.address.clone(), source }
    }

    fn bad_reply(&self, query: &'static str, reply: &str, problem: &'static str) -> MeterError {
        let reply = reply.chars().filter(|char| !char.is_control()).take(60).collect();
        MeterError::Reply { address: self.address.clone(), query, reply, problem }
    }
}
