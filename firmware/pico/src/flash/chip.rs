//! The flash chip itself: the boot ROM's functions, called from RAM.
//!
//! While the chip erases, programs or answers a command, no instruction can be fetched from it. So the functions marked
//! `.data.ram` lie in RAM (the start-up code copies them there with the other data), call only the boot ROM, and run with
//! interrupts off. The order of calls is that of the RP2040 datasheet, 2.8.3.1.3; the boot loader is copied to RAM
//! beforehand and called at the end, since the ROM's own way back to mapped reads is the slow one.

use ringvolt_firmware::store::{PAGE, UNIT};
use rp2040_hal::{pac, rom_data};

const BOOT_LOADER: *const u32 = 0x1000_0000 as *const u32;
const BOOT_LOADER_WORDS: usize = 64;

/// 4 KiB sector erase.
const SECTOR_ERASE: u8 = 0x20;
/// Read unique number: one command byte and four idle ones come before its eight.
const READ_UNIQUE: u8 = 0x4b;
const UNIQUE_SKIP: usize = 5;
const UNIQUE_FRAMES: usize = UNIQUE_SKIP + 8;

type Plain = unsafe extern "C" fn();

/// The addresses of what is needed, looked up while the flash can still be read.
struct Rom {
    connect: Plain,
    leave_mapped: Plain,
    erase: unsafe extern "C" fn(u32, usize, u32, u8),
    program: unsafe extern "C" fn(u32, *const u8, usize),
    flush_cache: Plain,
    boot_loader: [u32; BOOT_LOADER_WORDS],
}

impl Rom {
    fn look_up() -> Self {
        let mut boot_loader = [0; BOOT_LOADER_WORDS];
        for (index, word) in boot_loader.iter_mut().enumerate() {
            // SAFETY: the first 256 bytes of the flash, which is mapped now.
            #[allow(unsafe_code)]
            unsafe {
                *word = BOOT_LOADER.add(index).read_volatile();
            }
        }
        Self {
            connect: rom_data::connect_internal_flash::ptr(),
            leave_mapped: rom_data::flash_exit_xip::ptr(),
            erase: rom_data::flash_range_erase::ptr(),
            program: rom_data::flash_range_program::ptr(),
            flush_cache: rom_data::flash_flush_cache::ptr(),
            boot_loader,
        }
    }

    /// The copy of the boot loader, as a function.
    fn enter_mapped(&self) -> Plain {
        let address = self.boot_loader.as_ptr() as usize | 1;
        // SAFETY: the boot loader is position independent Thumb code that returns where its link register is not zero.
        #[allow(unsafe_code)]
        unsafe {
            core::mem::transmute::<usize, Plain>(address)
        }
    }
}

/// Erases whole units; `from` and `length` are multiples of [`UNIT`] behind the program.
pub fn erase(from: u32, length: u32) {
    let rom = Rom::look_up();
    let enter_mapped = rom.enter_mapped();
    critical_section::with(|_| {
        // SAFETY: interrupts are off, the second core never started, no DMA is in use.
        #[allow(unsafe_code)]
        unsafe {
            erase_from_ram(&rom, enter_mapped, from, length as usize);
        }
    });
}

/// Programs one page; `offset` is a multiple of [`PAGE`] behind the program, `page` is in RAM.
pub fn program(offset: u32, page: &[u8; PAGE]) {
    let rom = Rom::look_up();
    let enter_mapped = rom.enter_mapped();
    critical_section::with(|_| {
        // SAFETY: as for `erase`.
        #[allow(unsafe_code)]
        unsafe {
            program_from_ram(&rom, enter_mapped, offset, page.as_ptr());
        }
    });
}

/// The chip's unique number.
pub fn unique_id() -> [u8; 8] {
    let rom = Rom::look_up();
    let enter_mapped = rom.enter_mapped();
    let mut answer = [0; UNIQUE_FRAMES];
    critical_section::with(|_| {
        // SAFETY: as for `erase`; `answer` has the length the function fills.
        #[allow(unsafe_code)]
        unsafe {
            ask_from_ram(&rom, enter_mapped, answer.as_mut_ptr());
        }
    });
    let mut id = [0; 8];
    id.copy_from_slice(&answer[UNIQUE_SKIP..]);
    id
}

// SAFETY (of the section): code that is copied to RAM before `main`, as all of `.data` is.
#[allow(unsafe_code)]
#[unsafe(link_section = ".data.ram.erase")]
#[inline(never)]
unsafe fn erase_from_ram(rom: &Rom, enter_mapped: Plain, from: u32, length: usize) {
    // SAFETY: see `erase`.
    unsafe {
        (rom.connect)();
        (rom.leave_mapped)();
        (rom.erase)(from, length, UNIT, SECTOR_ERASE);
        (rom.flush_cache)();
        enter_mapped();
    }
}

#[allow(unsafe_code)]
#[unsafe(link_section = ".data.ram.program")]
#[inline(never)]
unsafe fn program_from_ram(rom: &Rom, enter_mapped: Plain, offset: u32, page: *const u8) {
    // SAFETY: see `program`.
    unsafe {
        (rom.connect)();
        (rom.leave_mapped)();
        (rom.program)(offset, page, PAGE);
        (rom.flush_cache)();
        enter_mapped();
    }
}

/// Sends the command and fills [`UNIQUE_FRAMES`] bytes at `answer`: byte for byte, as on the wire.
#[allow(unsafe_code)]
#[unsafe(link_section = ".data.ram.ask")]
#[inline(never)]
unsafe fn ask_from_ram(rom: &Rom, enter_mapped: Plain, answer: *mut u8) {
    // SAFETY: see `unique_id`; the two register blocks serve only the flash, which is this module's.
    unsafe {
        let select = (*pac::IO_QSPI::ptr()).gpio_qspiss().gpio_ctrl();
        let ssi = &*pac::XIP_SSI::ptr();
        (rom.connect)();
        (rom.leave_mapped)();
        // Chip select by hand, low then high: the block's own would rise whenever its FIFO runs empty.
        select.modify(|_, w| w.outover().low());
        let mut sent = 0;
        let mut got = 0;
        while got < UNIQUE_FRAMES {
            let status = ssi.sr().read();
            // Never more under way than the receiving FIFO holds.
            if sent < UNIQUE_FRAMES && sent.wrapping_sub(got) < 14 && status.tfnf().bit_is_set() {
                let byte = if sent == 0 { READ_UNIQUE } else { 0 };
                ssi.dr0().write(|w| w.bits(byte as u32));
                sent = sent.wrapping_add(1);
            }
            if status.rfne().bit_is_set() {
                answer.add(got).write_volatile(ssi.dr0().read().bits() as u8);
                got = got.wrapping_add(1);
            }
        }
        select.modify(|_, w| w.outover().high());
        (rom.flush_cache)();
        select.modify(|_, w| w.outover().normal());
        enter_mapped();
    }
}
