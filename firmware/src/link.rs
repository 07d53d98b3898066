//! Framed messages in and out. Whole frames only, and never more than the buffer holds: a host that does not read is
//! not waited for.

use heapless::{Deque, Vec};
use ringvolt_protocol::{Decoder, EchoReply, HostHello, MAX_FRAME, PROTOCOL_VERSION, Status, ToDevice, ToHost, encode};

use crate::journal::Journal;

/// Room for frames on their way out, bytes.
const OUTBOX: usize = 1_024;
/// Answers that may wait at a time; a host that asks faster than it reads loses answers.
const ANSWERS: usize = 8;
/// State is sent this often, microseconds.
const STATUS_EVERY_US: u64 = 100_000;

/// The controller's side of the link.
pub struct Link {
    decoder: Decoder,
    outbox: Vec<u8, OUTBOX>,
    /// Bytes of the outbox that are on their way already.
    taken: usize,
    answers: Deque<ToHost, ANSWERS>,
    /// Whether a host of our version has said hello and not goodbye.
    open: bool,
    heard_us: Option<u64>,
    status_due_us: u64,
}

impl Link {
    /// Nobody has spoken yet.
    pub const fn new() -> Self {
        Self {
            decoder: Decoder::new(),
            outbox: Vec::new(),
            taken: 0,
            answers: Deque::new(),
            open: false,
            heard_us: None,
            status_due_us: 0,
        }
    }

    /// Damaged frames since power-up.
    pub const fn damaged(&self) -> u32 {
        self.decoder.counts().damaged
    }

    /// Takes bytes from the host; gives the messages in them one by one through `take`.
    pub fn receive(&mut self, bytes: &[u8], now_us: u64, mut take: impl FnMut(&mut Self, ToDevice)) {
        for byte in bytes {
            let Some(message) = self.decoder.push::<ToDevice>(*byte) else { continue };
            if let ToDevice::Hello(hello) = message {
                self.greet(hello);
            } else if !self.open {
                // Nobody of our version has said hello: nothing is answered, nothing is done.
                continue;
            }
            self.heard_us = self.open.then_some(now_us);
            match message {
                ToDevice::Echo { token } => {
                    self.answer(ToHost::EchoReply(EchoReply { token, received_us: now_us, sent_us: now_us }))
                }
                ToDevice::Goodbye => {
                    self.open = false;
                    self.heard_us = None;
                }
                _ => {}
            }
            take(self, message);
        }
    }

    fn greet(&mut self, hello: HostHello) {
        self.open = hello.protocol == PROTOCOL_VERSION;
        self.answers.clear();
        // What lies in the outbox is for whoever was there before. A frame may be half on its way: a zero ends it.
        self.outbox.clear();
        self.taken = 0;
        let _ = self.outbox.push(0);
        self.status_due_us = 0;
    }

    /// Whether a host of our version is there.
    pub const fn is_open(&self) -> bool {
        self.open
    }

    /// Whether the host has been heard within the grace time.
    pub fn is_heard(&self, now_us: u64, grace_us: u64) -> bool {
        self.open && self.heard_us.is_some_and(|heard_us| now_us.saturating_sub(heard_us) <= grace_us)
    }

    /// Puts an answer on its way; one too many is dropped, and the host asks again.
    pub fn answer(&mut self, answer: ToHost) {
        let _ = self.answers.push_back(answer);
    }

    /// Fills the outbox: answers first, then the state when it is due, then the journal with what is rare first, so that
    /// a backlog of readings holds up nothing.
    pub fn fill(&mut self, now_us: u64, journal: &mut Journal, status: impl FnOnce() -> Status) {
        while self.has_room() {
            let Some(mut answer) = self.answers.pop_front() else { break };
            if let ToHost::EchoReply(reply) = &mut answer {
                reply.sent_us = now_us;
            }
            self.put(&answer);
        }
        if !self.open {
            return;
        }
        if now_us >= self.status_due_us && self.has_room() {
            self.status_due_us = now_us + STATUS_EVERY_US;
            self.put(&ToHost::Status(status()));
        }
        while self.has_room() {
            let Some(message) = next_entry(journal, now_us) else { break };
            self.put(&message);
        }
    }

    fn has_room(&self) -> bool {
        OUTBOX - self.outbox.len() >= MAX_FRAME
    }

    fn put(&mut self, message: &ToHost) {
        let mut frame = [0; MAX_FRAME];
        // Every message fits MAX_FRAME, and `has_room` was asked.
        if let Ok(length) = encode(message, &mut frame) {
            let _ = self.outbox.extend_from_slice(&frame[..length]);
        }
    }

    /// Bytes that wait to be sent.
    pub fn outgoing(&self) -> &[u8] {
        &self.outbox[self.taken..]
    }

    /// The first `count` of them are on their way.
    pub fn sent(&mut self, count: usize) {
        self.taken = (self.taken + count).min(self.outbox.len());
        if self.taken == self.outbox.len() {
            self.outbox.clear();
            self.taken = 0;
        } else if self.taken > OUTBOX / 2 {
            self.outbox.rotate_left(self.taken);
            self.outbox.truncate(self.outbox.len() - self.taken);
            self.taken = 0;
        }
    }
}

impl Default for Link {
    fn default() -> Self {
        Self::new()
    }
}

fn next_entry(journal: &mut Journal, now_us: u64) -> Option<ToHost> {
    if let Some(gap) = journal.take_gap() {
        return Some(ToHost::Gap(gap));
    }
    if let Some(event) = journal.take_event() {
        return Some(ToHost::Event(event));
    }
    if let Some(strobe) = journal.take_strobe() {
        return Some(ToHost::Strobe(strobe));
    }
    if let Some(slow) = journal.take_slow() {
        return Some(ToHost::Slow(slow));
    }
    journal.take_reading(now_us).map(ToHost::Reading)
}
