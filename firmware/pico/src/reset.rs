//! Why the controller starts, and how it stops itself.
//!
//! A panic leaves a mark in two scratch registers of the watchdog, which a reset by the watchdog keeps, and resets the
//! chip. Every pin floats from then until the start-up code has run: the permit makes no edge, the HV PRESENT lamp is lit.

use core::panic::PanicInfo;

use ringvolt_protocol::ResetCause;
use rp2040_hal::pac;

/// Scratch registers 4 to 7 belong to the boot ROM; 0 and 1 are ours: this mark, and the line number for a debug probe.
const PANIC_MARK: u32 = 0x5256_7061;

/// Why the previous epoch ended. To be called once, before the watchdog is started.
pub fn cause() -> ResetCause {
    // SAFETY: start-up code; nobody else uses the two blocks yet.
    #[allow(unsafe_code)]
    let (watchdog, chip) = unsafe { (&*pac::WATCHDOG::ptr(), &*pac::VREG_AND_CHIP_RESET::ptr()) };
    let panicked = watchdog.scratch0().read().bits() == PANIC_MARK;
    // SAFETY: any value may be written to a scratch register.
    #[allow(unsafe_code)]
    watchdog.scratch0().write(|w| unsafe { w.bits(0) });
    let reason = watchdog.reason().read();
    let source = chip.chip_reset().read();
    if reason.timer().bit_is_set() {
        ResetCause::Watchdog
    } else if reason.force().bit_is_set() {
        if panicked { ResetCause::Panic } else { ResetCause::External }
    } else if source.had_por().bit_is_set() {
        ResetCause::PowerOn
    } else if source.had_run().bit_is_set() || source.had_psm_restart().bit_is_set() {
        ResetCause::External
    } else {
        ResetCause::Unknown
    }
}

/// Marks and resets. Also the way out of a fault exception.
fn stop(line: u32) -> ! {
    // SAFETY: this never returns, so whoever owns the registers never sees them again.
    #[allow(unsafe_code)]
    unsafe {
        let watchdog = &*pac::WATCHDOG::ptr();
        watchdog.scratch0().write(|w| w.bits(PANIC_MARK));
        watchdog.scratch1().write(|w| w.bits(line));
    }
    rp2040_hal::reset()
}

#[panic_handler]
fn panic(info: &PanicInfo<'_>) -> ! {
    #[cfg(feature = "defmt")]
    defmt::error!("panic: {}", defmt::Display2Format(info));
    stop(info.location().map_or(0, core::panic::Location::line))
}

// SAFETY: the handler returns nowhere and touches only what `stop` does.
#[allow(unsafe_code)]
#[cortex_m_rt::exception]
unsafe fn HardFault(frame: &cortex_m_rt::ExceptionFrame) -> ! {
    #[cfg(feature = "defmt")]
    defmt::error!("fault at {=u32:x}", frame.pc());
    stop(frame.pc())
}
