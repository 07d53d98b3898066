//! A controller on its link: codes for a calibration, and the records it is to keep.

use std::{
    sync::{
        Arc,
        atomic::{AtomicBool, Ordering},
        mpsc::{Receiver, RecvTimeoutError, Sender, channel},
    },
    thread::{self, JoinHandle},
    time::{Duration, Instant},
};

use ringvolt_protocol::{DeviceKind, Hello, Reading, ReadingFlags, Refusal, Request, ToDevice, ToHost};

use crate::{
    calibration::{CodeEvent, CodeSource, Codes, SourceError},
    link::{Address, Conversation, Endpoint, Heard, LinkError, Phase, open},
};

/// How long a controller may take to answer the hello, and a request.
const PATIENCE: Duration = Duration::from_secs(5);
/// Longest wait for bytes in one turn, so that the heartbeat is never late.
const TURN: Duration = Duration::from_millis(50);
/// Distance of acknowledgements.
const ACKNOWLEDGE_EVERY: Duration = Duration::from_millis(500);
/// A link that was lost is tried again at this distance.
const AGAIN: Duration = Duration::from_secs(1);

/// A connected controller.
pub(super) struct Controller {
    address: Address,
    endpoint: Box<dyn Endpoint>,
    conversation: Conversation,
    begun: Instant,
    acknowledged: Instant,
}

impl Controller {
    /// Opens the link and waits for the controller's hello.
    pub(super) fn connect(address: &Address) -> Result<(Self, Hello), String> {
        let endpoint = open(address).map_err(|error| error.to_string())?;
        let begun = Instant::now();
        let conversation = Conversation::new(std::process::id(), 0);
        let mut controller = Self { address: address.clone(), endpoint, conversation, begun, acknowledged: begun };
        while begun.elapsed() < PATIENCE {
            for heard in controller.turn().map_err(|error| error.to_string())? {
                match heard {
                    Heard::Hello { hello, .. } => return Ok((controller, hello)),
                    Heard::Answer(ToHost::Busy) => {
                        return Err(format!("the controller at {address} serves another host; end that one first"));
                    }
                    _ => {}
                }
            }
            if let Phase::WrongVersion(theirs) = controller.conversation.phase() {
                let ours = ringvolt_protocol::PROTOCOL_VERSION;
                return Err(format!(
                    "the controller at {address} speaks version {theirs} of the protocol and this program version {ours}; \
                     bring both to the same release"
                ));
            }
        }
        Err(format!(
            "nothing at {address} answers as a controller within {} s; check port and cable",
            PATIENCE.as_secs()
        ))
    }

    /// One turn: what is due goes out, what has come is handed on. Codes are used up here, so they are acknowledged.
    fn turn(&mut self) -> Result<Vec<Heard>, LinkError> {
        let now_ns = |begun: Instant| i64::try_from(begun.elapsed().as_nanos()).unwrap_or(i64::MAX);
        self.conversation.tick(now_ns(self.begun));
        if self.conversation.phase() == Phase::Talking && self.acknowledged.elapsed() >= ACKNOWLEDGE_EVERY {
            self.acknowledged = Instant::now();
            let taken = self.conversation.expected();
            self.conversation.acknowledge(taken);
        }
        let written = self.endpoint.write(self.conversation.outgoing())?;
        self.conversation.written(written);
        let mut bytes = [0; 4096];
        let count = self.endpoint.read(&mut bytes, TURN)?;
        let mut heard = Vec::new();
        let mono_ns = now_ns(self.begun);
        self.conversation.receive(&bytes[..count], mono_ns, &mut heard);
        if self.conversation.phase() == Phase::Talking && self.conversation.is_silent(mono_ns) {
            return Err(LinkError::Lost {
                what: self.address.to_string(),
                why: "the controller fell silent".to_owned(),
            });
        }
        Ok(heard)
    }

    /// Has a record written and waits for the answer.
    pub(super) fn write(&mut self, message: &ToDevice, request: Request, what: &str) -> Result<(), String> {
        self.conversation.say(message);
        let asked = Instant::now();
        while asked.elapsed() < PATIENCE {
            for heard in self.turn().map_err(|error| error.to_string())? {
                match heard {
                    Heard::Answer(ToHost::Done(done)) if done == request => return Ok(()),
                    Heard::Answer(ToHost::Refused { request: refused, why }) if refused == request => {
                        return Err(format!("the controller did not take the {what}: {}", refusal(why)));
                    }
                    _ => {}
                }
            }
        }
        Err(format!("the controller did not say within {} s whether it took the {what}; ask again", PATIENCE.as_secs()))
    }

    /// Ends the conversation in words.
    pub(super) fn goodbye(mut self) {
        self.conversation.say(&ToDevice::Goodbye);
        // Whether it is heard makes no difference: silence ends the conversation as well.
        let _ = self.endpoint.write(self.conversation.outgoing());
    }
}

fn refusal(why: Refusal) -> &'static str {
    match why {
        Refusal::PermitGiven => "it writes nothing while the permit is given; open an interlock loop first",
        Refusal::OutOfRange => "a value is outside what it permits; check profile and certificate",
        Refusal::OtherDevice => "it was made with another board; take the certificate of this one",
        Refusal::Busy => "it is still writing; try again in a second",
        Refusal::StoreFailed => {
            "its memory did not take it and the old record is still in force; try again, then have the board looked at"
        }
        Refusal::Unsupported => "it has no such thing; bring its firmware up to date",
        _ => "for a reason this program does not know; bring both to the same release",
    }
}

/// Sixteen hexadecimal digits.
pub(super) fn device_text(hello: &Hello) -> String {
    crate::text::hex(&hello.device)
}

enum Delivered {
    Codes(Codes),
    Trouble(String),
}

/// Codes from a controller. A thread of its own keeps the conversation alive while a person thinks or types.
pub(super) struct LinkSource {
    codes: Receiver<Delivered>,
    device: String,
    simulated: bool,
    stop: Arc<AtomicBool>,
    thread: Option<JoinHandle<()>>,
}

impl LinkSource {
    pub(super) fn connect(address: &Address) -> Result<Self, String> {
        let (controller, hello) = Controller::connect(address)?;
        let (sender, codes) = channel();
        let stop = Arc::new(AtomicBool::new(false));
        let thread = thread::spawn({
            let stop = Arc::clone(&stop);
            move || listen(controller, hello, &sender, &stop)
        });
        let simulated = hello.kind == DeviceKind::Simulated;
        Ok(Self { codes, device: device_text(&hello), simulated, stop, thread: Some(thread) })
    }
}

impl Drop for LinkSource {
    fn drop(&mut self) {
        self.stop.store(true, Ordering::Relaxed);
        if let Some(thread) = self.thread.take() {
            let _ = thread.join();
        }
    }
}

impl CodeSource for LinkSource {
    fn next(&mut self, limit: Duration) -> Result<CodeEvent, SourceError> {
        match self.codes.recv_timeout(limit) {
            Ok(Delivered::Codes(codes)) => Ok(CodeEvent::Codes(codes)),
            Ok(Delivered::Trouble(sentence)) => Err(SourceError::Link(sentence)),
            Err(RecvTimeoutError::Timeout) => Ok(CodeEvent::Quiet),
            Err(RecvTimeoutError::Disconnected) => Ok(CodeEvent::Ended),
        }
    }

    fn device(&self) -> String {
        self.device.clone()
    }

    fn simulated(&self) -> bool {
        self.simulated
    }
}

/// Turns readings into codes with times that run as the controller's clock does, so that codes which waited for a
/// person keep their distance.
struct Placing {
    utc_ns: i64,
    device_us: u64,
    enclosure_celsius: Option<f64>,
}

impl Placing {
    fn new(hello: &Hello) -> Self {
        let now = jiff::Timestamp::now().as_nanosecond();
        Self { utc_ns: i64::try_from(now).unwrap_or(0), device_us: hello.time_us, enclosure_celsius: None }
    }

    /// `None` where the window holds no measurement: nothing converted, at the end of the scale, or frozen.
    fn codes(&self, reading: &Reading) -> Option<Codes> {
        let useless = ReadingFlags::SENSE_OVER_RANGE
            .with(ReadingFlags::CROSS_OVER_RANGE)
            .with(ReadingFlags::SENSE_SILENT)
            .with(ReadingFlags::CROSS_SILENT)
            .with(ReadingFlags::SENSE_FROZEN)
            .with(ReadingFlags::CROSS_FROZEN)
            .with(ReadingFlags::CONFIGURATION_REPAIRED);
        if reading.flags.intersects(useless) {
            return None;
        }
        // What the journal kept from before belongs to no step of this calibration.
        let since_us = i64::try_from(reading.time_us.checked_sub(self.device_us)?).ok()?;
        Some(Codes {
            utc_ns: self.utc_ns.checked_add(since_us.checked_mul(1_000)?)?,
            sense_code: reading.sense.mean()?,
            cross_code: reading.cross.mean()?,
            enclosure_celsius: self.enclosure_celsius,
        })
    }
}

fn listen(controller: Controller, hello: Hello, sender: &Sender<Delivered>, stop: &AtomicBool) {
    let (address, device) = (controller.address.clone(), hello.device);
    let mut placing = Placing::new(&hello);
    let mut connected = Some(controller);
    while !stop.load(Ordering::Relaxed) {
        let Some(controller) = &mut connected else {
            thread::sleep(AGAIN);
            connected = again(&address, device, &mut placing);
            continue;
        };
        match controller.turn() {
            Ok(heard) => {
                if heard.into_iter().any(|heard| !deliver(&heard, &mut placing, sender)) {
                    return;
                }
            }
            Err(error) => {
                connected = None;
                if sender.send(Delivered::Trouble(error.to_string())).is_err() {
                    return;
                }
            }
        }
    }
    if let Some(controller) = connected {
        controller.goodbye();
    }
}

/// Tries a lost link once more; only the same board will do.
fn again(address: &Address, device: ringvolt_protocol::DeviceId, placing: &mut Placing) -> Option<Controller> {
    let (controller, hello) = Controller::connect(address).ok()?;
    if hello.device != device {
        return None;
    }
    *placing = Placing::new(&hello);
    Some(controller)
}

/// Hands codes on; `false` when nobody takes them any more.
fn deliver(heard: &Heard, placing: &mut Placing, sender: &Sender<Delivered>) -> bool {
    match heard {
        Heard::Reading(reading) => {
            placing.codes(reading).is_none_or(|codes| sender.send(Delivered::Codes(codes)).is_ok())
        }
        Heard::Slow(slow) => {
            placing.enclosure_celsius = slow.enclosure_centicelsius.map(|value| 0.01 * f64::from(value));
            true
        }
        // A restarted controller has a new clock.
        Heard::Hello { hello, .. } => {
            *placing = Placing::new(hello);
            true
        }
        _ => true,
    }
}
