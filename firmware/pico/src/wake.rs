//! Sleep between polls, and what ends it.
//!
//! Every interrupt handler calls [`wake`], or [`nudge`] where no poll is due for it; the main loop sleeps until one has.
//! `wfe` is used and not `wfi`: the return from any handler sets the processor's event flag, so a wake that falls between
//! the check and the sleep is not lost.

use core::sync::atomic::{AtomicBool, Ordering};

use cortex_m::peripheral::{SYST, syst::SystClkSource};

use rp2040_hal::pac::{self, interrupt};

use crate::clock::now_us;

/// The main loop polls at least this often, hertz.
pub const TICK_HZ: u32 = 2_000;

const IDLE_SPAN_US: u64 = 100_000;

static WOKEN: AtomicBool = AtomicBool::new(true);
static NUDGED: AtomicBool = AtomicBool::new(false);

/// Ends the main loop's sleep, for a poll.
pub fn wake() {
    WOKEN.store(true, Ordering::Release);
}

/// Ends the main loop's sleep, to start reading a converter.
pub fn nudge() {
    NUDGED.store(true, Ordering::Release);
}

/// Wakes the loop once more after `us`, besides every tick: where the controller waits for a level to have stood still,
/// the next tick could be late by its whole length.
pub fn wake_in(us: u32) {
    let timer = timer();
    // SAFETY: any value is a time. It is written well before it comes, or the alarm would wait for the counter to wrap;
    // what was armed before is replaced.
    #[allow(unsafe_code)]
    unsafe {
        timer.alarm0().write(|w| w.bits((now_us() as u32).wrapping_add(us)));
    }
}

fn timer() -> &'static pac::timer::RegisterBlock {
    // SAFETY: alarm 0 and its interrupt bits belong to this module; nobody else uses any alarm.
    #[allow(unsafe_code)]
    unsafe {
        &*pac::TIMER::ptr()
    }
}

/// Sleeps, and keeps the books on it.
pub struct Sleep {
    span_start_us: u64,
    asleep_us: u64,
    share: Option<u16>,
}

impl Sleep {
    /// Starts the tick that ends every sleep.
    pub fn new(mut systick: SYST, core_hz: u32) -> Self {
        systick.set_clock_source(SystClkSource::Core);
        systick.set_reload(core_hz / TICK_HZ - 1);
        systick.clear_current();
        systick.enable_counter();
        systick.enable_interrupt();
        timer().inte().modify(|_, w| w.alarm_0().set_bit());
        // SAFETY: the handler needs no state but a flag.
        #[allow(unsafe_code)]
        unsafe {
            pac::NVIC::unmask(pac::Interrupt::TIMER_IRQ_0);
        }
        Self { span_start_us: now_us(), asleep_us: 0, share: None }
    }

    /// Sleeps until a handler has called; tells whether a poll is due.
    pub fn until_woken(&mut self) -> bool {
        let begin = now_us();
        while !WOKEN.load(Ordering::Acquire) && !NUDGED.load(Ordering::Acquire) {
            cortex_m::asm::wfe();
        }
        // Cleared before the loop looks at its inputs: what comes in from here on wakes it again.
        NUDGED.store(false, Ordering::Release);
        let woken = WOKEN.load(Ordering::Acquire);
        if woken {
            WOKEN.store(false, Ordering::Release);
        }
        let end = now_us();
        self.asleep_us += end - begin;
        let span = end - self.span_start_us;
        if span >= IDLE_SPAN_US {
            self.share = u16::try_from(self.asleep_us * 1000 / span).ok();
            self.asleep_us = 0;
            self.span_start_us = end;
        }
        woken
    }

    /// Share of time asleep over the last tenth of a second, per mille.
    pub fn idle_per_mille(&self) -> Option<u16> {
        self.share
    }
}

#[cortex_m_rt::exception]
fn SysTick() {
    wake();
}

#[interrupt]
fn TIMER_IRQ_0() {
    timer().intr().write(|w| w.alarm_0().clear_bit_by_one());
    wake();
}
