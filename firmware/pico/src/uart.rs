//! The isolated serial port on GP0 and GP1: 921 600 baud, eight bits, no parity, one stop bit.
//!
//! The receiver's 32 bytes fill in 350 us, less than a round of the loop may take, so a handler empties it.

use core::cell::RefCell;

use critical_section::Mutex;
use heapless::Deque;
use rp2040_hal::{
    fugit::HertzU32,
    gpio::{
        FunctionUart, Pin, PullDown, PullUp,
        bank0::{Gpio0, Gpio1},
    },
    pac::{self, UART0, interrupt},
    uart::{DataBits, Enabled, Reader, StopBits, UartConfig, UartPeripheral, Writer},
};

use crate::wake;

const BAUD: u32 = 921_600;

/// The transmit and receive pins. The receiver idles high, so an unconnected input must too.
pub type Pins = (Pin<Gpio0, FunctionUart, PullDown>, Pin<Gpio1, FunctionUart, PullUp>);

struct Receiver {
    reader: Option<Reader<UART0, Pins>>,
    bytes: Deque<u8, 512>,
}

static RECEIVER: Mutex<RefCell<Receiver>> = Mutex::new(RefCell::new(Receiver { reader: None, bytes: Deque::new() }));

/// The port.
pub struct Uart {
    writer: Writer<UART0, Pins>,
}

impl Uart {
    /// Sets up the port; `None` where the clock cannot make the baud rate.
    pub fn new(device: UART0, pins: Pins, resets: &mut pac::RESETS, clock: HertzU32) -> Option<Self> {
        let config = UartConfig::new(HertzU32::Hz(BAUD), DataBits::Eight, None, StopBits::One);
        let port: UartPeripheral<Enabled, _, _> =
            UartPeripheral::new(device, pins, resets).enable(config, clock).ok()?;
        let (mut reader, writer) = port.split();
        reader.enable_rx_interrupt();
        critical_section::with(|token| RECEIVER.borrow_ref_mut(token).reader = Some(reader));
        // SAFETY: what the handler needs is in place.
        #[allow(unsafe_code)]
        unsafe {
            pac::NVIC::unmask(pac::Interrupt::UART0_IRQ);
        }
        Some(Self { writer })
    }

    /// Takes bytes from the host; how many.
    pub fn read(&mut self, buffer: &mut [u8]) -> usize {
        critical_section::with(|token| {
            let mut receiver = RECEIVER.borrow_ref_mut(token);
            let mut count = 0;
            while let Some(place) = buffer.get_mut(count) {
                let Some(byte) = receiver.bytes.pop_front() else { break };
                *place = byte;
                count += 1;
            }
            count
        })
    }

    /// Gives bytes to the transmitter, as many as its FIFO takes; how many.
    pub fn write(&mut self, bytes: &[u8]) -> usize {
        match self.writer.write_raw(bytes) {
            Ok(rest) => bytes.len() - rest.len(),
            Err(_) => 0,
        }
    }
}

#[interrupt]
fn UART0_IRQ() {
    critical_section::with(|token| {
        let mut receiver = RECEIVER.borrow_ref_mut(token);
        let Receiver { reader: Some(reader), bytes } = &mut *receiver else { return };
        let mut buffer = [0; 32];
        // Damaged or lost bytes are the framing's to find: its CRC counts them.
        let count = match reader.read_raw(&mut buffer) {
            Ok(count) => count,
            Err(nb::Error::Other(error)) => error.discarded.len(),
            Err(nb::Error::WouldBlock) => 0,
        };
        for byte in &buffer[..count] {
            let _ = bytes.push_back(*byte);
        }
    });
    wake::wake();
}
