//! The USB serial port (CDC-ACM).
//!
//! The handler only masks its own interrupt and wakes the main loop, which serves the bus and unmasks it: everything
//! about the port happens in one place, and a busy bus cannot keep the loop from its round.

use rp2040_hal::{
    pac::{self, interrupt},
    usb::UsbBus,
};
use usb_device::{
    bus::UsbBusAllocator,
    device::{StringDescriptors, UsbDevice, UsbDeviceBuilder, UsbDeviceState, UsbVidPid},
};
use usbd_serial::{SerialPort, USB_CLASS_CDC};

use crate::wake;

/// The pair that the open registry of USB numbers sets aside for private test devices. Whoever makes boards for others
/// must have a pair of their own.
const IDENTITY: UsbVidPid = UsbVidPid(0x1209, 0x0001);

/// The port with its device.
pub struct Usb<'a> {
    device: UsbDevice<'a, UsbBus>,
    serial: SerialPort<'a, UsbBus>,
}

impl<'a> Usb<'a> {
    /// Sets up the port; `serial_number` tells boards apart. `None` where the stack refuses the descriptors.
    pub fn new(bus: &'a UsbBusAllocator<UsbBus>, serial_number: &'a str) -> Option<Self> {
        let serial = SerialPort::new(bus);
        let strings = StringDescriptors::default()
            .manufacturer("Ringvolt")
            .product("Ringvolt controller")
            .serial_number(serial_number);
        let device = UsbDeviceBuilder::new(bus, IDENTITY)
            .strings(&[strings])
            .ok()?
            .device_class(USB_CLASS_CDC)
            // 64 and not 8: some hosts ask for more than one packet's worth before the device can follow.
            .max_packet_size_0(64)
            .ok()?
            .build();
        unmask();
        Some(Self { device, serial })
    }

    /// Serves the bus, once a round.
    pub fn serve(&mut self) {
        self.device.poll(&mut [&mut self.serial]);
        unmask();
    }

    /// Takes bytes from the host; how many.
    pub fn read(&mut self, buffer: &mut [u8]) -> usize {
        self.serial.read(buffer).unwrap_or(0)
    }

    /// Gives bytes to the host, as many as there is room for; how many. A host that does not read makes this 0.
    pub fn write(&mut self, bytes: &[u8]) -> usize {
        if self.device.state() != UsbDeviceState::Configured {
            return 0;
        }
        self.serial.write(bytes).unwrap_or(0)
    }
}

fn unmask() {
    // SAFETY: the handler needs no state but a flag, so it may run at any time.
    #[allow(unsafe_code)]
    unsafe {
        pac::NVIC::unmask(pac::Interrupt::USBCTRL_IRQ);
    }
}

#[interrupt]
fn USBCTRL_IRQ() {
    pac::NVIC::mask(pac::Interrupt::USBCTRL_IRQ);
    wake::wake();
}
