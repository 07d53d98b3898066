//! Which of the two ports is served.
//!
//! The first host to say something whole (a frame with the right CRC) is served, on its port; a host that speaks on the
//! other port meanwhile hears that the controller is busy. A host that has said nothing for [`RELEASE_US`] has left.
//! Noise on an unconnected port is no host: nothing but whole frames counts.

use heapless::Vec;
use ringvolt_firmware::{Controller, Journal};
use ringvolt_protocol::{Decoder, MAX_FRAME, ToDevice, ToHost, encode};

use crate::{uart::Uart, usb::Usb};

/// Twice the longest heartbeat interval, and the controller's own default grace: then the port is free for another host.
const RELEASE_US: u64 = 5_000_000;

/// The controller answers "busy" at most this often.
const BUSY_INTERVAL_US: u64 = 200_000;

/// Most bytes that one round takes from a port: more would make the round long.
const ROUND_BYTES: usize = 128;

#[derive(Clone, Copy, PartialEq, Eq)]
enum Port {
    Usb,
    Uart,
}

/// What a port that is not served has said.
struct Listener {
    decoder: Decoder,
    busy_sent_us: Option<u64>,
}

/// The two ports and who is served.
pub struct Link<'a> {
    usb: Option<Usb<'a>>,
    uart: Option<Uart>,
    served: Option<Port>,
    heard_us: u64,
    /// Finds whole frames in what the served host says, to know that it is still there.
    witness: Decoder,
    listeners: [Listener; 2],
    /// What the served host has said this round.
    received: Vec<u8, { ROUND_BYTES + MAX_FRAME }>,
    /// What a port has just given.
    bytes: [u8; ROUND_BYTES],
}

impl<'a> Link<'a> {
    /// A link on whichever ports there are.
    pub fn new(usb: Option<Usb<'a>>, uart: Option<Uart>) -> Self {
        let listener = || Listener { decoder: Decoder::new(), busy_sent_us: None };
        Self {
            usb,
            uart,
            served: None,
            heard_us: 0,
            witness: Decoder::new(),
            listeners: [listener(), listener()],
            received: Vec::new(),
            bytes: [0; ROUND_BYTES],
        }
    }

    /// Takes what came in on both ports, and gives the served host's bytes.
    pub fn receive(&mut self, now_us: u64) -> &[u8] {
        self.received.clear();
        if let Some(usb) = &mut self.usb {
            usb.serve();
        }
        if self.served.is_some() && now_us.saturating_sub(self.heard_us) > RELEASE_US {
            self.served = None;
        }
        for port in [Port::Usb, Port::Uart] {
            let count = self.read(port);
            for index in 0..count {
                self.hear(port, now_us, self.bytes[index]);
            }
        }
        &self.received
    }

    /// Gives the served host what waits for it.
    pub fn send(&mut self, controller: &mut Controller<&mut Journal>) {
        let Some(port) = self.served else { return };
        let waiting = controller.outgoing();
        if waiting.is_empty() {
            return;
        }
        let count = match port {
            Port::Usb => self.usb.as_mut().map_or(0, |usb| usb.write(waiting)),
            Port::Uart => self.uart.as_mut().map_or(0, |uart| uart.write(waiting)),
        };
        controller.sent(count);
    }

    /// Reads a port into `bytes`; how many.
    fn read(&mut self, port: Port) -> usize {
        match port {
            Port::Usb => self.usb.as_mut().map_or(0, |usb| usb.read(&mut self.bytes)),
            Port::Uart => self.uart.as_mut().map_or(0, |uart| uart.read(&mut self.bytes)),
        }
    }

    /// One byte from a port. The served host's is passed on; another's first whole message makes that host the served
    /// one if there is none, and is passed on whole.
    fn hear(&mut self, port: Port, now_us: u64, byte: u8) {
        if self.served == Some(port) {
            if self.witness.push::<ToDevice>(byte).is_some() {
                self.heard_us = now_us;
            }
            // There is room: a port gives at most ROUND_BYTES, and at most one message is passed on whole.
            let _ = self.received.push(byte);
            return;
        }
        let Some(message) = self.listeners[port as usize].decoder.push::<ToDevice>(byte) else { return };
        if self.served.is_some() {
            self.say_busy(port, now_us);
            return;
        }
        self.served = Some(port);
        self.heard_us = now_us;
        self.witness = Decoder::new();
        let mut frame = [0; MAX_FRAME];
        if let Ok(length) = encode(&message, &mut frame) {
            let _ = self.received.extend_from_slice(&frame[..length]);
        }
    }

    fn say_busy(&mut self, port: Port, now_us: u64) {
        let listener = &mut self.listeners[port as usize];
        if listener.busy_sent_us.is_some_and(|sent| now_us.saturating_sub(sent) < BUSY_INTERVAL_US) {
            return;
        }
        listener.busy_sent_us = Some(now_us);
        let mut frame = [0; MAX_FRAME];
        let Ok(length) = encode(&ToHost::Busy, &mut frame) else { return };
        match port {
            Port::Usb => self.usb.as_mut().map_or(0, |usb| usb.write(&frame[..length])),
            Port::Uart => self.uart.as_mut().map_or(0, |uart| uart.write(&frame[..length])),
        };
    }
}
