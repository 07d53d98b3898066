//! Time led by an emulated board: a line-based exchange over TCP, written down in `tests/emulator/README.md`.
//!
//! Virtual time stands still while this program works. It tells how long it can wait and how many bytes it has sent;
//! the harness answers with the new time and how many bytes there are to read. Sockets are thus never read by chance of
//! timing, and a run is repeatable at any speed of emulation.

use std::{
    io::{BufRead, BufReader, Write},
    net::TcpStream,
    time::Duration,
};

use serde::{Deserialize, Serialize};

use super::pace::Pace;
use crate::link::{Endpoint, LinkError};

/// A harness that does not answer for so long (in wall time) is dead: emulation is slow, but not that slow.
const PATIENCE: Duration = Duration::from_secs(120);

#[derive(Debug, Deserialize)]
struct Now {
    mono_ns: i64,
    utc_ns: i64,
    #[serde(default)]
    link_bytes: u64,
    #[serde(default)]
    gone: bool,
    #[serde(default)]
    end: bool,
    #[serde(default)]
    error: Option<String>,
}

#[derive(Debug, Serialize)]
struct Idle {
    idle_until_ns: i64,
    links: u32,
    sent: u64,
}

/// Time from a harness.
#[derive(Debug)]
pub struct LockstepPace {
    clock: BufReader<TcpStream>,
    now: Now,
    links: u32,
    sent: u64,
    read: u64,
    ended: Option<Result<(), String>>,
}

impl LockstepPace {
    /// Connects to the harness's clock at `HOST:PORT` and reads its first time.
    ///
    /// # Errors
    /// One sentence.
    pub fn connect(address: &str) -> Result<Self, String> {
        let failed =
            |why: String| format!("the clock tcp:{address} could not be reached ({why}): start the emulator first");
        let stream = TcpStream::connect(address).map_err(|error| failed(error.to_string()))?;
        stream.set_nodelay(true).map_err(|error| failed(error.to_string()))?;
        stream.set_read_timeout(Some(PATIENCE)).map_err(|error| failed(error.to_string()))?;
        let mut clock = BufReader::new(stream);
        let now = read_now(&mut clock).map_err(failed)?;
        Ok(Self { clock, now, links: 0, sent: 0, read: 0, ended: None })
    }

    fn exchange(&mut self, until_ns: i64) -> Result<Now, String> {
        let idle = Idle { idle_until_ns: until_ns, links: self.links, sent: self.sent };
        let mut line = serde_json::to_string(&idle).map_err(|error| error.to_string())?;
        line.push('\n');
        self.clock.get_mut().write_all(line.as_bytes()).map_err(|error| error.to_string())?;
        read_now(&mut self.clock)
    }
}

fn read_now(clock: &mut BufReader<TcpStream>) -> Result<Now, String> {
    let mut line = String::new();
    clock.read_line(&mut line).map_err(|error| error.to_string())?;
    let now: Now = serde_json::from_str(&line).map_err(|error| format!("its answer `{}`: {error}", line.trim()))?;
    match now.error {
        Some(error) => Err(error),
        None => Ok(now),
    }
}

impl Pace for LockstepPace {
    fn mono_ns(&self) -> i64 {
        self.now.mono_ns
    }

    fn utc_ns(&self) -> i64 {
        self.now.utc_ns
    }

    fn wait(
        &mut self,
        link: Option<&mut dyn Endpoint>,
        until_ns: i64,
        received: &mut Vec<u8>,
    ) -> Result<(), LinkError> {
        match self.exchange(until_ns) {
            Ok(now) => self.now = now,
            Err(why) => {
                self.ended = Some(Err(format!("the emulator's clock stopped ({why})")));
                return Ok(());
            }
        }
        if self.now.end {
            self.ended = Some(Ok(()));
        }
        let Some(link) = link else { return Ok(()) };
        let mut buffer = [0; 4096];
        while self.read < self.now.link_bytes {
            let count = link.read(&mut buffer, PATIENCE)?;
            received.extend_from_slice(&buffer[..count]);
            self.read += count as u64;
        }
        if self.now.gone {
            return Err(LinkError::Lost {
                what: "to the emulated board".to_owned(),
                why: "it was unplugged".to_owned(),
            });
        }
        Ok(())
    }

    fn opened(&mut self) {
        self.links += 1;
        self.sent = 0;
        self.read = 0;
    }

    fn wrote(&mut self, count: usize) {
        self.sent += count as u64;
    }

    fn ended(&self) -> Option<Result<(), String>> {
        self.ended.clone()
    }

    fn is_simulated(&self) -> bool {
        true
    }
}
