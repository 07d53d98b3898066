//! The guide's voice at a terminal, or in a pipe.

use std::io::{self, BufRead, IsTerminal, Write};

use crate::calibration::{Dialogue, GuideError};

/// Speaks on standard output, listens on standard input.
pub(super) struct Terminal {
    replaceable: bool,
    open: bool,
}

impl Terminal {
    pub(super) fn new() -> Self {
        Self { replaceable: io::stdout().is_terminal(), open: false }
    }

    /// A closed output must not stop a calibration: the journal is what counts.
    fn put(&mut self, text: &str) {
        let mut out = io::stdout().lock();
        let clear = if self.open { "\r\x1b[K" } else { "" };
        let _ = write!(out, "{clear}{text}").and_then(|()| out.flush());
        self.open = false;
    }
}

impl Dialogue for Terminal {
    fn say(&mut self, line: &str) {
        self.put(&format!("{line}\n"));
    }

    fn progress(&mut self, line: &str) {
        if self.replaceable {
            self.put(&format!("  {line}"));
            self.open = true;
        }
    }

    fn ask(&mut self, question: &str) -> Result<String, GuideError> {
        self.put(question);
        let mut line = Vec::new();
        // Bytes, so that a stray key that is no UTF-8 is nonsense to be asked again and not the end.
        match io::stdin().lock().read_until(b'\n', &mut line) {
            Ok(0) | Err(_) => Err(GuideError::Silent),
            Ok(_) => Ok(String::from_utf8_lossy(&line).trim().to_owned()),
        }
    }
}
