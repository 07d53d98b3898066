//! The host's side of the conversation, without any I/O: bytes and time in, messages and bytes out.
//!
//! Journaled entries are handed on in their order and without a hole: an entry with a higher number than the next
//! expected one means that something was damaged on the way, so everything unacknowledged is asked for again, and what
//! was already taken is passed over when it comes a second time. Only an announced gap moves the expected number on.

use std::collections::VecDeque;

use ringvolt_protocol::{
    Ack, Decoder, DecoderCounts, DeviceId, Gap, Hello, HostHello, MAX_FRAME, PROTOCOL_VERSION, Reading, Slow, Status,
    Stream, Strobe, ToDevice, ToHost, encode,
};
use ringvolt_protocol::{Event, Request};

const MS: i64 = 1_000_000;

/// A hello is repeated at this distance until it is answered.
const HELLO_EVERY_NS: i64 = 500 * MS;
/// One clock exchange every so often. It is the heartbeat as well.
const ECHO_EVERY_NS: i64 = 250 * MS;
/// An answer later than this tells nothing about the clock.
const ECHO_PATIENCE_NS: i64 = 2_000 * MS;
/// Entries asked for again are given this long to arrive before they are asked for once more.
const REWIND_EVERY_NS: i64 = 300 * MS;
/// A controller sends its state ten times a second; after so long without a valid message it is gone.
const SILENCE_NS: i64 = 2_000 * MS;
/// Clock exchanges under way at the same time.
const MOST_ECHOES: usize = 16;

/// What a conversation heard.
#[derive(Clone, Debug, PartialEq)]
pub enum Heard {
    /// A controller answered the hello. `resumed` tells that its epoch was known and goes on.
    Hello {
        /// Its words.
        hello: Hello,
        /// Whether this epoch was being talked to before.
        resumed: bool,
    },
    /// The next reading.
    Reading(Reading),
    /// The next event.
    Event(Event),
    /// The next slow inputs.
    Slow(Slow),
    /// The next strobe edge.
    Strobe(Strobe),
    /// Entries the journal lost; `first` is the first one that is missing here.
    Gap(Gap),
    /// The state now.
    Status(Status),
    /// A clock exchange.
    Echo(Echo),
    /// Any other answer: to requests, or that the controller is busy with another host.
    Answer(ToHost),
}

/// One clock exchange.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Echo {
    /// When the question was handed to the link, host's monotonic nanoseconds.
    pub asked_mono_ns: i64,
    /// When the answer had been read.
    pub answered_mono_ns: i64,
    /// When the controller took the question from the wire.
    pub received_us: u64,
    /// When the controller made the answer.
    pub sent_us: u64,
}

/// Where a conversation stands.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Phase {
    /// No answer to the hello yet.
    Greeting,
    /// Talking.
    Talking,
    /// The controller speaks another version.
    WrongVersion(u16),
}

/// The host's side of one link.
#[derive(Debug)]
pub struct Conversation {
    host: u32,
    phase: Phase,
    decoder: Decoder,
    outgoing: VecDeque<u8>,
    peer: Option<(DeviceId, u32)>,
    expected: Ack,
    opened_ns: i64,
    hello_due_ns: i64,
    echo_due_ns: i64,
    rewind_due_ns: i64,
    heard_ns: i64,
    echoes: VecDeque<(u32, i64)>,
    next_token: u32,
    bytes_in: u64,
}

impl Conversation {
    /// A conversation that begins now. `host` names this process.
    pub fn new(host: u32, mono_ns: i64) -> Self {
        let mut conversation = Self {
            host,
            phase: Phase::Greeting,
            decoder: Decoder::new(),
            outgoing: VecDeque::new(),
            peer: None,
            expected: Ack::default(),
            opened_ns: mono_ns,
            hello_due_ns: mono_ns,
            echo_due_ns: mono_ns,
            rewind_due_ns: mono_ns,
            heard_ns: mono_ns,
            echoes: VecDeque::new(),
            next_token: 0,
            bytes_in: 0,
        };
        conversation.reopened(mono_ns);
        conversation
    }

    /// Starts with what an earlier process already has on disk of this epoch.
    pub fn continue_from(&mut self, device: DeviceId, epoch: u32, expected: Ack) {
        self.peer = Some((device, epoch));
        self.expected = expected;
    }

    /// The link was opened anew: greet again, and forget half a frame.
    pub fn reopened(&mut self, mono_ns: i64) {
        if !matches!(self.phase, Phase::WrongVersion(_)) {
            self.phase = Phase::Greeting;
        }
        self.decoder.restart();
        self.echoes.clear();
        self.outgoing.clear();
        self.opened_ns = mono_ns;
        self.heard_ns = mono_ns;
        self.hello_due_ns = mono_ns;
        // Ends whatever half a frame lies in the controller's buffer.
        self.outgoing.push_back(0);
    }

    /// Where it stands.
    pub const fn phase(&self) -> Phase {
        self.phase
    }

    /// What the decoder threw away.
    pub const fn counts(&self) -> DecoderCounts {
        self.decoder.counts()
    }

    /// Bytes received in all.
    pub const fn bytes_in(&self) -> u64 {
        self.bytes_in
    }

    /// How long the hello has been waiting for its answer, nanoseconds.
    pub const fn greeting_ns(&self, mono_ns: i64) -> i64 {
        mono_ns - self.opened_ns
    }

    /// Whether no valid message came for so long that the controller must be taken for gone.
    pub const fn is_silent(&self, mono_ns: i64) -> bool {
        mono_ns - self.heard_ns > SILENCE_NS
    }

    /// The entries expected next: everything before them was handed on.
    pub const fn expected(&self) -> Ack {
        self.expected
    }

    /// Sends one message.
    pub fn say(&mut self, message: &ToDevice) {
        let mut frame = [0; MAX_FRAME];
        // Every message fits MAX_FRAME: the protocol crate asserts it at compile time.
        if let Ok(length) = encode(message, &mut frame) {
            self.outgoing.extend(&frame[..length]);
        }
    }

    /// Asks for something.
    pub fn ask(&mut self, request: Request) {
        self.say(&ToDevice::Ask(request));
    }

    /// Tells the controller that everything before `on_disk` is on disk, so that its journal may let go.
    pub fn acknowledge(&mut self, on_disk: Ack) {
        self.say(&ToDevice::Ack(on_disk));
    }

    /// Whatever is due by time: hello, clock exchange, another request for missing entries.
    pub fn tick(&mut self, mono_ns: i64) {
        if self.phase == Phase::Greeting && mono_ns >= self.hello_due_ns {
            self.hello_due_ns = mono_ns + HELLO_EVERY_NS;
            self.say(&ToDevice::Hello(HostHello { protocol: PROTOCOL_VERSION, host: self.host }));
        }
        if self.phase == Phase::Talking && mono_ns >= self.echo_due_ns {
            self.echo_due_ns = mono_ns + ECHO_EVERY_NS;
            self.ask_time(mono_ns);
        }
    }

    fn ask_time(&mut self, mono_ns: i64) {
        if self.echoes.len() == MOST_ECHOES {
            self.echoes.pop_front();
        }
        let token = self.next_token;
        self.next_token = self.next_token.wrapping_add(1);
        self.echoes.push_back((token, mono_ns));
        self.say(&ToDevice::Echo { token });
    }

    /// Bytes that wait to be written, in order; call [`Self::written`] with how many were taken.
    pub fn outgoing(&mut self) -> &[u8] {
        self.outgoing.make_contiguous()
    }

    /// The first `count` outgoing bytes are on their way.
    pub fn written(&mut self, count: usize) {
        self.outgoing.drain(..count.min(self.outgoing.len()));
    }

    /// Takes bytes that had been read by `mono_ns` and appends what they tell to `heard`.
    pub fn receive(&mut self, bytes: &[u8], mono_ns: i64, heard: &mut Vec<Heard>) {
        self.bytes_in += bytes.len() as u64;
        for byte in bytes {
            if let Some(message) = self.decoder.push::<ToHost>(*byte) {
                self.heard_ns = mono_ns;
                self.take(message, mono_ns, heard);
            }
        }
    }

    fn take(&mut self, message: ToHost, mono_ns: i64, heard: &mut Vec<Heard>) {
        if let ToHost::Hello(hello) = message {
            heard.extend(self.take_hello(hello));
            return;
        }
        // Until the hello is answered nothing else can be placed: it may belong to another epoch.
        if self.phase != Phase::Talking {
            if message == ToHost::Busy {
                heard.push(Heard::Answer(message));
            }
            return;
        }
        let next = match message {
            ToHost::Reading(reading) => {
                self.in_order(Stream::Readings, reading.seq, mono_ns).then_some(Heard::Reading(reading))
            }
            ToHost::Event(event) => self.in_order(Stream::Events, event.seq, mono_ns).then_some(Heard::Event(event)),
            ToHost::Slow(slow) => self.in_order(Stream::Slow, slow.seq, mono_ns).then_some(Heard::Slow(slow)),
            ToHost::Strobe(strobe) => {
                self.in_order(Stream::Strobes, strobe.seq, mono_ns).then_some(Heard::Strobe(strobe))
            }
            ToHost::Gap(gap) => self.take_gap(gap),
            ToHost::Status(status) => Some(Heard::Status(status)),
            ToHost::EchoReply(reply) => self.take_echo(reply.token, reply.received_us, reply.sent_us, mono_ns),
            answer => Some(Heard::Answer(answer)),
        };
        heard.extend(next);
    }

    fn take_hello(&mut self, hello: Hello) -> Option<Heard> {
        if hello.protocol != PROTOCOL_VERSION {
            self.phase = Phase::WrongVersion(hello.protocol);
            return None;
        }
        // A repeated hello was answered twice.
        if self.phase == Phase::Talking && self.peer == Some((hello.device, hello.epoch)) {
            return None;
        }
        let resumed = self.peer == Some((hello.device, hello.epoch));
        if !resumed {
            self.peer = Some((hello.device, hello.epoch));
            self.expected = hello.first;
        }
        self.phase = Phase::Talking;
        Some(Heard::Hello { hello, resumed })
    }

    fn in_order(&mut self, stream: Stream, seq: u32, mono_ns: i64) -> bool {
        let Some(expected) = expected_of(&mut self.expected, stream) else { return false };
        if seq == *expected {
            *expected = expected.wrapping_add(1);
            return true;
        }
        if seq > *expected && mono_ns >= self.rewind_due_ns {
            self.rewind_due_ns = mono_ns + REWIND_EVERY_NS;
            self.say(&ToDevice::Rewind);
        }
        false
    }

    fn take_gap(&mut self, gap: Gap) -> Option<Heard> {
        let expected = expected_of(&mut self.expected, gap.stream)?;
        let end = gap.first.checked_add(gap.count)?;
        if gap.first > *expected || end <= *expected {
            return None;
        }
        let missing = Gap { stream: gap.stream, first: *expected, count: end - *expected };
        *expected = end;
        Some(Heard::Gap(missing))
    }

    fn take_echo(&mut self, token: u32, received_us: u64, sent_us: u64, mono_ns: i64) -> Option<Heard> {
        let at = self.echoes.iter().position(|(asked, _)| *asked == token)?;
        let (_, asked_mono_ns) = self.echoes.remove(at)?;
        let sane = mono_ns - asked_mono_ns <= ECHO_PATIENCE_NS && sent_us >= received_us;
        sane.then_some(Heard::Echo(Echo { asked_mono_ns, answered_mono_ns: mono_ns, received_us, sent_us }))
    }
}

fn expected_of(expected: &mut Ack, stream: Stream) -> Option<&mut u32> {
    match stream {
        Stream::Readings => Some(&mut expected.readings),
        Stream::Events => Some(&mut expected.events),
        Stream::Slow => Some(&mut expected.slow),
        Stream::Strobes => Some(&mut expected.strobes),
        // A stream of a newer protocol: this version cannot place it.
        _ => None,
    }
}

#[cfg(test)]
mod tests;
