//! placeholder
#![no_std]
#![no_main]
use rp2040_hal as hal;
#[unsafe(link_section = ".boot2")]
#[allow(unsafe_code)]
#[unsafe(no_mangle)]
#[used]
static BOOT2_FIRMWARE: [u8; 256] = rp2040_boot2::BOOT_LOADER_W25Q080;
#[panic_handler]
fn panic(_: &core::panic::PanicInfo) -> ! { loop {} }
#[hal::entry]
fn main() -> ! {
    loop { cortex_m::asm::wfe(); }
}
