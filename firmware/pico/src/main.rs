//! The Ringvolt controller's image for RP2040 boards: pins, buses, ports, flash and watchdog around
//! [`ringvolt_firmware::Controller`]. Nothing is decided here.
//!
//! | file | subject |
//! | --- | --- |
//! | `pins`, `edges`, `analog` | outputs; inputs with the time of their edges; the two slow inputs |
//! | `bus`, `converters` | I2C with an end to every wait; the two converters on it |
//! | `usb`, `uart`, `link` | the two ports, and which is served |
//! | `flash`, `records` | the flash chip; the two records in it |
//! | `clock`, `wake`, `watchdog`, `reset` | time, sleep, the dead man's switch, why the last epoch ended |
#![no_std]
#![no_main]

mod analog;
mod bus;
mod clock;
mod converters;
mod edges;
mod flash;
mod link;
mod pins;
mod records;
mod reset;
mod uart;
mod usb;
mod wake;
mod watchdog;

#[cfg(feature = "defmt")]
use defmt_rtt as _;
use ringvolt_firmware::{
    Controller, Journal,
    io::{Boot, Channel, Inputs},
};
use ringvolt_protocol::DeviceKind;
use rp2040_hal::{
    Adc, Clock, Sio, Watchdog,
    adc::AdcPin,
    clocks::init_clocks_and_plls,
    gpio::{PinState, Pins},
    pac,
    usb::UsbBus,
};
use usb_device::bus::UsbBusAllocator;

use crate::{
    analog::Slow,
    bus::{Bus, PatientBus},
    converters::{Converter, Round},
    edges::Edges,
    flash::Flash,
    link::Link,
    pins::{Driven, Fitted},
    uart::Uart,
    usb::Usb,
    wake::Sleep,
    watchdog::Dog,
};

/// The second-stage boot loader, for flash chips of the W25Q kind.
#[allow(unsafe_code)]
// SAFETY: the chip's ROM looks for exactly this at the start of the flash; `memory.x` puts it there.
#[unsafe(link_section = ".boot2")]
#[unsafe(no_mangle)]
#[used]
static BOOT2_FIRMWARE: [u8; 256] = rp2040_boot2::BOOT_LOADER_W25Q080;

/// Three quarters of the RAM; static, since the stack could not hold it even for a moment.
static mut JOURNAL: Journal = Journal::new();

const CRYSTAL_HZ: u32 = 12_000_000;

/// Bits of the two I2C blocks in RESETS (datasheet 2.14.3).
const RESET_I2C0: u32 = 1 << 3;
const RESET_I2C1: u32 = 1 << 4;

/// Address pins to ground, and to the supply.
const SENSE_ADDRESS: u8 = 0x48;
const CROSS_ADDRESS: u8 = 0x49;

#[rp2040_hal::entry]
fn main() -> ! {
    let reset_cause = reset::cause();
    let (Some(core), Some(mut chip)) = (pac::CorePeripherals::take(), pac::Peripherals::take()) else {
        panic!("started twice")
    };
    let mut watchdog = Watchdog::new(chip.WATCHDOG);
    let Ok(clocks) = init_clocks_and_plls(
        CRYSTAL_HZ,
        chip.XOSC,
        chip.CLOCKS,
        chip.PLL_SYS,
        chip.PLL_USB,
        &mut chip.RESETS,
        &mut watchdog,
    ) else {
        panic!("the crystal does not start")
    };
    let _timer = rp2040_hal::Timer::new(chip.TIMER, &mut chip.RESETS, &clocks);
    let mut dog = Dog::start(watchdog);

    let sio = Sio::new(chip.SIO);
    let pins = Pins::new(chip.IO_BANK0, chip.PADS_BANK0, sio.gpio_bank0, &mut chip.RESETS);
    let mut driven = Driven {
        permit: pins.gpio16.into_push_pull_output_in_state(PinState::Low),
        lamp: pins.gpio17.into_push_pull_output_in_state(PinState::Low),
        hv_lamp_dark: pins.gpio18.into_push_pull_output_in_state(PinState::Low),
        led: pins.gpio25.into_push_pull_output_in_state(PinState::Low),
    };
    let fitted = Fitted::read(
        pins.gpio20.into_pull_up_input(),
        pins.gpio21.into_pull_up_input(),
        pins.gpio22.into_pull_up_input(),
    );
    // A broken wire reads as open, not released, not pressed, not exposing.
    let _inputs = (
        pins.gpio10.into_pull_down_input(),
        pins.gpio11.into_pull_down_input(),
        pins.gpio12.into_pull_down_input(),
        pins.gpio13.into_pull_down_input(),
        pins.gpio14.into_pull_down_input(),
        // A comparator that is fitted but not connected reads as tripped.
        pins.gpio15.into_pull_up_input(),
        // The converters' ready pins are open drain.
        pins.gpio8.into_pull_up_input(),
        pins.gpio9.into_pull_up_input(),
    );

    // SAFETY: called once; one core runs, no DMA is in use.
    #[allow(unsafe_code)]
    let mut flash = unsafe { Flash::take() };
    let device = flash.unique_id();
    let epoch = flash::STARTS.next(&mut flash);
    let boot = Boot {
        device,
        kind: DeviceKind::Board,
        epoch,
        reset_cause,
        certificate: records::certificate(&mut flash),
        settings: records::settings(&mut flash),
    };
    let journal = &raw mut JOURNAL;
    // SAFETY: `main` runs once, and this is the only place that names the journal.
    #[allow(unsafe_code)]
    let journal = unsafe { &mut *journal };
    let mut controller = Controller::new(boot, journal);

    let mut serial_number = [0; 16];
    let serial_number = hex(&device, &mut serial_number);
    let usb_bus = UsbBusAllocator::new(UsbBus::new(
        chip.USBCTRL_REGS,
        chip.USBCTRL_DPRAM,
        clocks.usb_clock,
        true,
        &mut chip.RESETS,
    ));
    let usb = Usb::new(&usb_bus, serial_number);
    let uart_pins = (pins.gpio0.into_function(), pins.gpio1.into_function().into_pull_type());
    let uart = Uart::new(chip.UART0, uart_pins, &mut chip.RESETS, clocks.peripheral_clock.freq());
    let mut link = Link::new(usb, uart);

    let (Ok(beam), Ok(temperature)) =
        (AdcPin::new(pins.gpio26.into_floating_disabled()), AdcPin::new(pins.gpio27.into_floating_disabled()))
    else {
        panic!("GP26 and GP27 are analog pins")
    };
    let mut slow = Slow::new(Adc::new(chip.ADC, &mut chip.RESETS), beam, temperature, fitted);

    let sense_bus = Bus::new(chip.I2C0, RESET_I2C0, pins.gpio4.reconfigure(), pins.gpio5.reconfigure());
    let cross_bus = Bus::new(chip.I2C1, RESET_I2C1, pins.gpio6.reconfigure(), pins.gpio7.reconfigure());
    let mut sense = Converter::new(Channel::Sense, SENSE_ADDRESS, sense_bus);
    let mut cross = Converter::new(Channel::Cross, CROSS_ADDRESS, cross_bus);
    let mut round = Round::default();

    #[cfg(feature = "dead-loop")]
    let mut deadly = pins.gpio2.into_pull_down_input();

    edges::start();
    let mut sleep = Sleep::new(core.SYST, clocks.system_clock.freq().to_Hz());
    dog.alert();
    let mut edges = Edges::new();
    let mut stored = None;
    loop {
        if !sleep.until_woken() {
            start_reading(&mut sense, &mut cross);
            continue;
        }
        #[cfg(feature = "dead-loop")]
        while embedded_hal::digital::InputPin::is_high(&mut deadly).unwrap_or(false) {}
        let sample = edges::take(&mut edges);
        sense.finish(&mut round);
        cross.finish(&mut round);
        let received = link.receive(sample.now_us);
        let outputs = controller.poll(
            sample.now_us,
            &Inputs {
                contacts: sample.contacts,
                edges: &edges,
                conversions: &round.conversions,
                notices: &round.notices,
                optional: slow.inputs(sample.now_us, sample.comparator),
                received,
                stored: stored.take(),
                idle_per_mille: sleep.idle_per_mille(),
            },
        );
        driven.apply(&outputs);
        dog.feed();
        if let Some(request) = &outputs.store {
            stored = Some(dog.patience(|| records::write(&mut flash, request)));
        }
        link.send(&mut controller);
        round.clear();
        start_reading(&mut sense, &mut cross);
        // Waiting for a bus comes last, and for one of the two in a round: this is what delays the next look at the
        // interlock, by less than a tick even where the bus is held.
        if !sense.attend(sample.now_us, &mut round) {
            cross.attend(sample.now_us, &mut round);
        }
    }
}

fn start_reading(sense: &mut Converter<impl PatientBus>, cross: &mut Converter<impl PatientBus>) {
    let [sense_ready_us, cross_ready_us] = edges::take_ready();
    sense.start(sense_ready_us);
    cross.start(cross_ready_us);
}

fn hex<'a>(bytes: &[u8; 8], text: &'a mut [u8; 16]) -> &'a str {
    const DIGITS: [u8; 16] = *b"0123456789ABCDEF";
    for (index, byte) in bytes.iter().enumerate() {
        text[2 * index] = DIGITS[usize::from(byte >> 4)];
        text[2 * index + 1] = DIGITS[usize::from(byte & 15)];
    }
    core::str::from_utf8(text).unwrap_or("")
}
