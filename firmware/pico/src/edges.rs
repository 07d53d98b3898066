//! Edges of the input pins, caught by interrupt with their time, and the pins' levels.
//!
//! | pin | signal | level meaning |
//! | --- | --- | --- |
//! | GP8, GP9 | conversion ready of sense and cross-sense | falling edge: a result is complete |
//! | GP10, GP11 | interlock loops A and B | high: closed |
//! | GP12 | mirror contacts of both contactors | high: both released |
//! | GP13 | reset button | high: pressed |
//! | GP14 | strobe | high: exposing |
//! | GP15 | over-voltage comparator | high: tripped |
//!
//! GP8 to GP15 share one interrupt register, four bits a pin (datasheet 2.19.6.1), so one read tells everything.

use core::cell::RefCell;

use critical_section::Mutex;
use heapless::Vec;
use ringvolt_firmware::{
    contacts::GLITCH_US,
    io::{Channel, Edge},
};
use ringvolt_protocol::{Contacts, Line};
use rp2040_hal::pac::{self, interrupt};

use crate::{clock::now_us, wake};

/// The register that holds GP8 to GP15.
const BANK: usize = 1;
const FIRST_PIN: u32 = 8;
const EDGE_LOW: u32 = 1 << 2;
const EDGE_HIGH: u32 = 1 << 3;

/// More edges between two polls than any contact makes: past them a line is noise, and must not eat the processor.
const CAPACITY: usize = 32;

/// The controller believes a level that has stood for its glitch filter's time; a little more, so that it has by then.
const SETTLED_US: u32 = GLITCH_US as u32 + 10;

const READY: [(u32, Channel); 2] = [(8, Channel::Sense), (9, Channel::Cross)];
const LINES: [(u32, Line); 6] = [
    (10, Line::LoopA),
    (11, Line::LoopB),
    (12, Line::Contactors),
    (13, Line::Button),
    (14, Line::Strobe),
    (15, Line::Comparator),
];

#[inline(always)]
const fn nibble(pin: u32, bits: u32) -> u32 {
    bits << (4 * (pin - FIRST_PIN))
}

const BOTH: u32 = EDGE_LOW | EDGE_HIGH;
const READY_MASK: u32 = nibble(8, EDGE_LOW) | nibble(9, EDGE_LOW);
const LINE_MASK: u32 =
    nibble(10, BOTH) | nibble(11, BOTH) | nibble(12, BOTH) | nibble(13, BOTH) | nibble(14, BOTH) | nibble(15, BOTH);

#[derive(Debug, Default)]
struct Caught {
    edges: Edges,
    ready_us: [Option<u64>; 2],
}

/// Edges of the input lines, oldest first.
pub type Edges = Vec<Edge, CAPACITY>;

/// One look at the pins.
pub struct Sample {
    /// Levels now.
    pub contacts: Contacts,
    /// Level of the over-voltage comparator's pin now.
    pub comparator: bool,
    /// When "now" is, microseconds since power-up; no edge is later.
    pub now_us: u64,
}

static CAUGHT: Mutex<RefCell<Caught>> = Mutex::new(RefCell::new(Caught { edges: Vec::new(), ready_us: [None; 2] }));

/// Begins to catch edges. The pins must be inputs by now.
pub fn start() {
    let io = io_bank();
    // SAFETY: writes whole registers of plain bits; main has not enabled the interrupt yet, so nobody else does.
    #[allow(unsafe_code)]
    unsafe {
        // Edges of the time when the pins were being set up mean nothing.
        io.intr(BANK).write(|w| w.bits(u32::MAX));
        io.proc0_inte(BANK).write(|w| w.bits(READY_MASK | LINE_MASK));
        pac::NVIC::unmask(pac::Interrupt::IO_IRQ_BANK0);
    }
}

/// The latest ready edge of each converter (sense, cross-sense) since the last call, microseconds since power-up.
pub fn take_ready() -> [Option<u64>; 2] {
    critical_section::with(|token| core::mem::take(&mut CAUGHT.borrow_ref_mut(token).ready_us))
}

/// Moves the edges that were caught into `edges`, which it empties first; gives the levels and the time of this moment.
pub fn take(edges: &mut Edges) -> Sample {
    edges.clear();
    critical_section::with(|token| {
        let mut caught = CAUGHT.borrow_ref_mut(token);
        if caught.edges.is_full() {
            allow_lines(true);
        }
        // Only what is there, since the list is large and nearly always empty; it fits, being of the same capacity.
        let _ = edges.extend_from_slice(&caught.edges);
        caught.edges.clear();
        let levels = levels();
        let high = |pin: u32| levels & (1 << pin) != 0;
        Sample {
            contacts: Contacts {
                loop_a_closed: high(10),
                loop_b_closed: high(11),
                contactors_released: high(12),
                button_pressed: high(13),
            },
            comparator: high(15),
            now_us: now_us(),
        }
    })
}

fn io_bank() -> &'static pac::io_bank0::RegisterBlock {
    // SAFETY: of this block the HAL's pins touch the function registers, before `start`; the interrupt registers used
    // here are touched by this module alone, in its handler or with interrupts off.
    #[allow(unsafe_code)]
    unsafe {
        &*pac::IO_BANK0::ptr()
    }
}

fn levels() -> u32 {
    // SAFETY: a read-only register without side effects.
    #[allow(unsafe_code)]
    unsafe { &*pac::SIO::ptr() }.gpio_in().read().bits()
}

/// With `false`, the lines' edges no longer interrupt; their levels are still sampled by every poll.
fn allow_lines(yes: bool) {
    let mask = if yes { READY_MASK | LINE_MASK } else { READY_MASK };
    // SAFETY: plain enable bits, written by this module alone with interrupts off.
    #[allow(unsafe_code)]
    io_bank().proc0_inte(BANK).write(|w| unsafe { w.bits(mask) });
}

impl Caught {
    fn catch(&mut self, flags: u32, levels: u32, time_us: u64) {
        for (index, (pin, _)) in READY.into_iter().enumerate() {
            if flags & nibble(pin, EDGE_LOW) != 0 {
                self.ready_us[index] = Some(time_us);
            }
        }
        if flags & LINE_MASK == 0 {
            return;
        }
        for (pin, line) in LINES {
            let fell = flags & nibble(pin, EDGE_LOW) != 0;
            let rose = flags & nibble(pin, EDGE_HIGH) != 0;
            let high = levels & (1 << pin) != 0;
            // Where both edges came before the handler did, the level now tells which was the last.
            let order = match (fell, rose) {
                (false, false) => continue,
                (true, true) => [Some(!high), Some(high)],
                _ => [Some(rose), None],
            };
            for active in order.into_iter().flatten() {
                // A full list loses the edge, not the level: that is sampled by every poll.
                let _ = self.edges.push(Edge { line, active, time_us });
            }
        }
    }
}

#[interrupt]
fn IO_IRQ_BANK0() {
    let time_us = now_us();
    let io = io_bank();
    let flags = io.proc0_ints(BANK).read().bits();
    // SAFETY: writing ones clears exactly the edges that were just read.
    #[allow(unsafe_code)]
    io.intr(BANK).write(|w| unsafe { w.bits(flags) });
    critical_section::with(|token| {
        let mut caught = CAUGHT.borrow_ref_mut(token);
        caught.catch(flags, levels(), time_us);
        if caught.edges.is_full() {
            allow_lines(false);
        }
    });
    if flags & LINE_MASK == 0 {
        wake::nudge();
    } else {
        wake::wake();
        wake::wake_in(SETTLED_US);
    }
}
