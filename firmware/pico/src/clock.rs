//! The controller's only clock: microseconds since power-up, 64 bits.

use rp2040_hal::pac;

/// Microseconds since this start of the processor. Never goes back.
pub fn now_us() -> u64 {
    // SAFETY: the raw counter registers are read only and reading them changes nothing, so any context may read them
    // at any time. (The latched pair TIMELR/TIMEHR would need an owner; it is not used.)
    #[allow(unsafe_code)]
    let timer = unsafe { &*pac::TIMER::ptr() };
    loop {
        let high = timer.timerawh().read().bits();
        let low = timer.timerawl().read().bits();
        // Read again where the low word wrapped in between.
        if timer.timerawh().read().bits() == high {
            return (u64::from(high) << 32) | u64::from(low);
        }
    }
}
