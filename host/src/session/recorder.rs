//! The loop of a live run: link in, run file out, acknowledgements back.
//!
//! One rule stands above the others: the controller is told to let go of an entry only after the commit that put it on
//! disk. Everything else (stamps, figures, frames) may wait or fail without harm to the recording.

use std::sync::mpsc::Receiver;

use ringvolt_protocol::{Ack, DeviceKind, ToDevice, ToHost};
use thiserror::Error;

use super::{
    figures::Figures,
    memory::Memory,
    pace::Pace,
    store::Store,
    update::{Observer, Update},
};
use crate::{
    clock::Exchange,
    link::{Conversation, Echo, Endpoint, Heard, LinkError, Phase},
    reduction::{Epoch, Reduction, Source},
    run::{
        RunError,
        rows::{FrameRow, Record},
    },
    text::hex,
};

const MS: i64 = 1_000_000;

/// What has arrived is on disk at most so long after.
const COMMIT_EVERY_NS: i64 = 200 * MS;
/// Figures for the screen.
const FIGURES_EVERY_NS: i64 = 100 * MS;
/// The live clock mapping is made anew this often.
const CLOCK_EVERY_NS: i64 = 1_000 * MS;
/// A lost link is tried again this often.
const REOPEN_EVERY_NS: i64 = 500 * MS;
/// A first hello that is not answered for so long is a failure.
const FIRST_HELLO_NS: i64 = 6_000 * MS;
/// A frame is stamped when readings reach this far beyond its end, or when they have stopped coming for the longer time.
const STAMP_AFTER_NS: i64 = 100 * MS;
const STAMP_AT_LAST_NS: i64 = 5_000 * MS;

/// Why a session ended before its time.
#[derive(Debug, Error)]
pub enum SessionError {
    /// The link could not be opened at all.
    #[error(transparent)]
    Link(#[from] LinkError),
    /// The controller speaks another protocol.
    #[error(
        "the controller on {link} speaks protocol version {theirs}, this program version {ours}: install the {older} that belongs to the other"
    )]
    Version {
        /// Where.
        link: String,
        /// Its version.
        theirs: u16,
        /// This program's.
        ours: u16,
        /// Which side is older: `program` or `firmware`.
        older: &'static str,
    },
    /// No controller answered.
    #[error(
        "no Ringvolt controller answered on {link} within {seconds} s ({heard}): check the port, the cable and the controller's LED"
    )]
    NoHello {
        /// Where.
        link: String,
        /// How long it was waited for.
        seconds: i64,
        /// What came instead.
        heard: String,
    },
    /// The profile names another board.
    #[error(
        "the controller on {link} is board {found}, the bench profile wants {wanted}: connect the right one, or correct controller.device"
    )]
    OtherBoard {
        /// Where.
        link: String,
        /// Its identity.
        found: String,
        /// The profile's.
        wanted: String,
    },
    /// The controller serves somebody else.
    #[error("the controller on {link} is busy with a host on its other port: end that one first")]
    Busy {
        /// Where.
        link: String,
    },
    /// The run file could not be written.
    #[error(transparent)]
    Run(#[from] RunError),
    /// Whoever leads the time stopped.
    #[error("{0}")]
    Pace(String),
}

/// What a session works with.
pub struct SessionParts<'a> {
    /// Opens the link, again and again.
    pub open: &'a mut dyn FnMut() -> Result<Box<dyn Endpoint>, LinkError>,
    /// The link as a person named it.
    pub link: String,
    /// Time.
    pub pace: &'a mut dyn Pace,
    /// The run file.
    pub store: Store,
    /// Profile and certificate.
    pub reduction: Reduction,
    /// Frames as they are found; `None` where there is no camera.
    pub frames: Option<Receiver<FrameRow>>,
    /// Whoever watches.
    pub observer: &'a mut dyn Observer,
    /// Asked in every turn: whether to end.
    pub stop: &'a dyn Fn() -> bool,
    /// How long to record, nanoseconds from the first hello; `None` until stopped.
    pub duration_ns: Option<i64>,
    /// Names this process to the controller.
    pub host: u32,
}

/// What was recorded.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Recorded {
    /// Readings on disk.
    pub readings: u64,
    /// Readings in counted gaps.
    pub lost: u64,
    /// Frames found.
    pub frames: u64,
}

/// Records until it is time to end.
///
/// # Errors
/// [`SessionError`]; whatever was received before is in the run file.
pub fn record(parts: SessionParts<'_>) -> Result<Recorded, SessionError> {
    let now = parts.pace.mono_ns();
    let mut session = Session {
        conversation: Conversation::new(parts.host, now),
        endpoint: None,
        memory: Memory::default(),
        figures: Figures::default(),
        waiting: Vec::new(),
        recorded: Recorded::default(),
        epoch_key: None,
        ever_connected_ns: None,
        uncommitted: false,
        commit_due_ns: now,
        figures_due_ns: now,
        clock_due_ns: now,
        reopen_due_ns: now,
        parts,
    };
    let outcome = session.run();
    let closed = session.close();
    outcome.and(closed).map(|()| session.recorded)
}

struct Session<'a> {
    parts: SessionParts<'a>,
    conversation: Conversation,
    endpoint: Option<Box<dyn Endpoint>>,
    memory: Memory,
    figures: Figures,
    /// Frames whose readings have not all come yet.
    waiting: Vec<FrameRow>,
    recorded: Recorded,
    epoch_key: Option<i64>,
    ever_connected_ns: Option<i64>,
    uncommitted: bool,
    commit_due_ns: i64,
    figures_due_ns: i64,
    clock_due_ns: i64,
    reopen_due_ns: i64,
}

impl Session<'_> {
    fn run(&mut self) -> Result<(), SessionError> {
        self.tell(Update::Connecting { link: self.parts.link.clone() });
        // The first time a link that does not open is an error; later it is waited for.
        self.endpoint = Some((self.parts.open)()?);
        self.parts.pace.opened();
        self.conversation.reopened(self.parts.pace.mono_ns());
        let mut received = Vec::new();
        let mut heard = Vec::new();
        while !self.is_over()? {
            self.send();
            received.clear();
            let until = self.next_deadline_ns();
            let endpoint = self.endpoint.as_deref_mut().map(|endpoint| endpoint as &mut dyn Endpoint);
            let read = self.parts.pace.wait(endpoint, until, &mut received);
            let now = self.parts.pace.mono_ns();
            heard.clear();
            self.conversation.receive(&received, now, &mut heard);
            for heard in heard.drain(..) {
                self.take(heard, now)?;
            }
            if let Err(error) = read {
                self.lose(error);
            }
            self.take_frames()?;
            self.work(now)?;
        }
        Ok(())
    }

    fn tell(&mut self, update: Update) {
        self.parts.observer.update(&update);
    }

    fn next_deadline_ns(&self) -> i64 {
        let now = self.parts.pace.mono_ns();
        let due = self.commit_due_ns.min(self.figures_due_ns).min(self.clock_due_ns);
        // The conversation wants to be asked every so often for its own deadlines.
        due.min(now + 25 * MS)
    }

    fn is_over(&mut self) -> Result<bool, SessionError> {
        let now = self.parts.pace.mono_ns();
        if let Some(ended) = self.parts.pace.ended() {
            return ended.map(|()| true).map_err(SessionError::Pace);
        }
        if let Phase::WrongVersion(theirs) = self.conversation.phase() {
            let ours = ringvolt_protocol::PROTOCOL_VERSION;
            let older = if theirs > ours { "program" } else { "firmware" };
            return Err(SessionError::Version { link: self.parts.link.clone(), theirs, ours, older });
        }
        if self.ever_connected_ns.is_none() && self.conversation.greeting_ns(now) > FIRST_HELLO_NS {
            let bytes = self.conversation.bytes_in();
            let heard =
                if bytes == 0 { "nothing came".to_owned() } else { format!("{bytes} bytes came that are no hello") };
            return Err(SessionError::NoHello {
                link: self.parts.link.clone(),
                seconds: FIRST_HELLO_NS / 1_000 / MS,
                heard,
            });
        }
        let time_up =
            self.parts.duration_ns.zip(self.ever_connected_ns).is_some_and(|(long, since)| now - since >= long);
        Ok(time_up || (self.parts.stop)() || self.parts.observer.wants_to_stop())
    }

    fn send(&mut self) {
        let now = self.parts.pace.mono_ns();
        let Some(endpoint) = &mut self.endpoint else { return self.reopen(now) };
        self.conversation.tick(now);
        let waiting = self.conversation.outgoing();
        if waiting.is_empty() {
            return;
        }
        match endpoint.write(waiting) {
            Ok(count) => {
                self.conversation.written(count);
                self.parts.pace.wrote(count);
            }
            Err(error) => self.lose(error),
        }
    }

    fn reopen(&mut self, now: i64) {
        if now < self.reopen_due_ns {
            return;
        }
        self.reopen_due_ns = now + REOPEN_EVERY_NS;
        if let Ok(endpoint) = (self.parts.open)() {
            self.endpoint = Some(endpoint);
            self.parts.pace.opened();
            self.conversation.reopened(now);
        }
    }

    fn lose(&mut self, error: LinkError) {
        self.endpoint = None;
        self.reopen_due_ns = self.parts.pace.mono_ns() + REOPEN_EVERY_NS;
        self.tell(Update::LinkLost { why: error.to_string() });
    }

    fn take(&mut self, heard: Heard, now: i64) -> Result<(), SessionError> {
        match heard {
            Heard::Hello { hello, resumed } => return self.take_hello(hello, resumed, now),
            Heard::Echo(echo) => return self.take_echo(&echo),
            Heard::Answer(ToHost::Busy) if self.ever_connected_ns.is_none() => {
                return Err(SessionError::Busy { link: self.parts.link.clone() });
            }
            Heard::Answer(_) => return Ok(()),
            Heard::Reading(reading) => {
                self.memory.reading(reading);
                self.recorded.readings += 1;
                self.keep(&Record::Reading(reading))?;
            }
            Heard::Event(event) => {
                self.memory.event(event);
                self.keep(&Record::Event(event))?;
                self.tell(Update::Event(event));
            }
            Heard::Slow(slow) => {
                self.memory.slow_inputs(slow);
                self.keep(&Record::Slow(slow))?;
            }
            Heard::Strobe(strobe) => self.keep(&Record::Strobe(strobe))?,
            Heard::Gap(gap) => {
                if gap.stream == ringvolt_protocol::Stream::Readings {
                    self.recorded.lost += u64::from(gap.count);
                }
                self.keep(&Record::Gap(gap))?;
                self.tell(Update::Gap(gap));
            }
            Heard::Status(status) => {
                self.figures.status(status);
                self.keep(&Record::Status(status))?;
            }
        }
        Ok(())
    }

    fn keep(&mut self, record: &Record) -> Result<(), SessionError> {
        if let Some(key) = self.epoch_key {
            self.parts.store.record(key, record)?;
            self.uncommitted = true;
        }
        Ok(())
    }

    fn take_hello(&mut self, hello: ringvolt_protocol::Hello, resumed: bool, now: i64) -> Result<(), SessionError> {
        let wanted = &self.parts.reduction.profile().controller.device;
        let found = hex(&hello.device);
        if !wanted.is_empty() && *wanted != found {
            return Err(SessionError::OtherBoard { link: self.parts.link.clone(), found, wanted: wanted.clone() });
        }
        self.ever_connected_ns.get_or_insert(now);
        if !resumed {
            if hello.kind == DeviceKind::Simulated || self.parts.pace.is_simulated() {
                self.parts.store.mark_simulated()?;
            }
            let key = self.parts.store.epoch(&hello, self.parts.pace.utc_ns(), &self.parts.link)?;
            self.epoch_key = Some(key);
            self.memory.begin_epoch(key);
            self.clock_due_ns = now;
        }
        self.tell(Update::Connected { hello, resumed });
        Ok(())
    }

    fn take_echo(&mut self, echo: &Echo) -> Result<(), SessionError> {
        let utc_less_mono_ns = self.parts.pace.utc_ns() - self.parts.pace.mono_ns();
        let exchange = Exchange {
            asked_mono_ns: echo.asked_mono_ns,
            answered_mono_ns: echo.answered_mono_ns,
            received_us: echo.received_us,
            sent_us: echo.sent_us,
            utc_less_mono_ns,
        };
        self.memory.exchange(exchange);
        // The first mapping must not wait: figures and stamps hang on it.
        if self.memory.epoch().is_none() {
            self.memory.update_clock();
        }
        if let Some(key) = self.epoch_key {
            self.parts.store.echo(key, &exchange)?;
            self.uncommitted = true;
        }
        Ok(())
    }

    fn take_frames(&mut self) -> Result<(), SessionError> {
        while let Some(frame) = self.parts.frames.as_ref().and_then(|frames| frames.try_recv().ok()) {
            self.parts.store.frame(&frame)?;
            self.uncommitted = true;
            self.recorded.frames += 1;
            self.tell(Update::Frame(frame.clone()));
            self.waiting.push(frame);
        }
        Ok(())
    }

    /// Whatever is due by time.
    fn work(&mut self, now: i64) -> Result<(), SessionError> {
        for note in self.parts.observer.notes() {
            self.parts.store.note(self.parts.pace.utc_ns(), "person", &note)?;
            self.uncommitted = true;
        }
        if now >= self.commit_due_ns {
            self.commit_due_ns = now + COMMIT_EVERY_NS;
            self.commit()?;
        }
        if now >= self.clock_due_ns {
            self.clock_due_ns = now + CLOCK_EVERY_NS;
            self.memory.update_clock();
            self.watch_silence(now);
        }
        if now >= self.figures_due_ns {
            self.figures_due_ns = now + FIGURES_EVERY_NS;
            self.stamp_waiting(false)?;
            let utc_ns = self.parts.pace.utc_ns();
            let damaged = self.conversation.counts().damaged;
            let figures = self.figures.now(utc_ns, &self.memory, &self.parts.reduction, &self.recorded, damaged);
            self.tell(Update::Now(Box::new(figures)));
        }
        Ok(())
    }

    /// A controller that stopped talking while the port stays open has restarted or hangs: greet it again.
    fn watch_silence(&mut self, now: i64) {
        let talking = self.conversation.phase() == Phase::Talking;
        if self.endpoint.is_some() && talking && self.conversation.is_silent(now) {
            self.tell(Update::LinkLost { why: "the controller has stopped talking".to_owned() });
            self.conversation.reopened(now);
        }
    }

    fn commit(&mut self) -> Result<(), SessionError> {
        if !self.uncommitted {
            return Ok(());
        }
        let on_disk: Ack = self.conversation.expected();
        self.parts.store.commit()?;
        self.uncommitted = false;
        self.conversation.acknowledge(on_disk);
        Ok(())
    }

    fn stamp_waiting(&mut self, last: bool) -> Result<(), SessionError> {
        let (mut index, utc_ns) = (0, self.parts.pace.utc_ns());
        while index < self.waiting.len() {
            if !last && !self.is_ripe(&self.waiting[index], utc_ns) {
                index += 1;
                continue;
            }
            let frame = self.waiting.remove(index);
            // The live mapping knows only the past of the clock; the reduction at the end of the run uses all of it.
            if let Ok(stamp) = self.parts.reduction.stamp(&frame, &self.memory) {
                self.tell(Update::Stamped { frame, stamp });
            }
        }
        Ok(())
    }

    fn is_ripe(&self, frame: &FrameRow, utc_ns: i64) -> bool {
        let Ok(exposure) = &frame.exposure else { return true };
        let reached = |epoch: &Epoch| {
            let newest = self.memory.newest()?;
            let end_us = newest.time_us + u64::from(newest.duration_us);
            Some(epoch.clock.utc(end_us)?.utc_ns >= exposure.end_utc_ns + STAMP_AFTER_NS)
        };
        let reached = self.memory.epochs().last().and_then(reached).unwrap_or(false);
        reached || utc_ns > exposure.end_utc_ns + STAMP_AT_LAST_NS
    }

    /// The end: last frames, last commit, goodbye.
    fn close(&mut self) -> Result<(), SessionError> {
        self.take_frames()?;
        self.stamp_waiting(true)?;
        self.commit()?;
        self.conversation.say(&ToDevice::Goodbye);
        if let Some(endpoint) = &mut self.endpoint {
            // Courtesy only: a controller that does not hear it withdraws the permit after its grace time.
            let _ = endpoint.write(self.conversation.outgoing());
        }
        Ok(())
    }
}
