//! The flash chip as storage, and where the records lie in it.
//!
//! Erasing and programming ([`chip`]) stop the controller for 45 ms typically and 400 ms at most (W25Q16JV data sheet,
//! sector erase), so the controller asks for it only while the permit is withdrawn, and
//! [`crate::watchdog::Dog::patience`] allows for it.

mod chip;

use embedded_storage::nor_flash::{ErrorType, NorFlash, NorFlashErrorKind, ReadNorFlash};
use ringvolt_firmware::store::{Counter, PAGE, Slots, UNIT};

/// Size of the flash on the board, bytes; `memory.x` keeps the program out of the last six units.
const SIZE: u32 = 2 * 1024 * 1024;
const FIRST_UNIT: u32 = SIZE - 6 * UNIT;

/// Where the chip appears in the address space.
const MAPPED: usize = 0x1000_0000;

/// The certificate record's two units.
pub const CERTIFICATE: Slots = Slots { base: FIRST_UNIT };
/// The settings record's two units.
pub const SETTINGS: Slots = Slots { base: FIRST_UNIT + 2 * UNIT };
/// The two units that count starts.
pub const STARTS: Counter = Counter { base: FIRST_UNIT + 4 * UNIT };

/// The part of the flash that is not the program.
pub struct Flash(());

impl Flash {
    /// There is one flash, and whoever holds this owns the part behind the program.
    ///
    /// # Safety
    /// To be called once, and only where a single core runs and no DMA reads the flash.
    #[allow(unsafe_code)]
    pub const unsafe fn take() -> Self {
        Self(())
    }

    /// The chip's unique number.
    pub fn unique_id(&mut self) -> [u8; 8] {
        chip::unique_id()
    }
}

fn checked(offset: u32, length: usize, step: u32) -> Result<(), NorFlashErrorKind> {
    let length = u32::try_from(length).map_err(|_| NorFlashErrorKind::OutOfBounds)?;
    if !offset.is_multiple_of(step) || !length.is_multiple_of(step) {
        return Err(NorFlashErrorKind::NotAligned);
    }
    match offset.checked_add(length) {
        Some(end) if offset >= FIRST_UNIT && end <= SIZE => Ok(()),
        _ => Err(NorFlashErrorKind::OutOfBounds),
    }
}

impl ErrorType for Flash {
    type Error = NorFlashErrorKind;
}

impl ReadNorFlash for Flash {
    const READ_SIZE: usize = 1;

    fn read(&mut self, offset: u32, bytes: &mut [u8]) -> Result<(), NorFlashErrorKind> {
        checked(offset, bytes.len(), 1)?;
        for (index, byte) in bytes.iter_mut().enumerate() {
            // SAFETY: within the mapped flash, as just checked. Volatile, since erase and program change it behind the
            // compiler's back; the ROM functions flush the cache.
            #[allow(unsafe_code)]
            unsafe {
                *byte = ((MAPPED + offset as usize + index) as *const u8).read_volatile();
            }
        }
        Ok(())
    }

    fn capacity(&self) -> usize {
        SIZE as usize
    }
}

impl NorFlash for Flash {
    const WRITE_SIZE: usize = PAGE;
    const ERASE_SIZE: usize = UNIT as usize;

    fn erase(&mut self, from: u32, to: u32) -> Result<(), NorFlashErrorKind> {
        let length = to.checked_sub(from).ok_or(NorFlashErrorKind::OutOfBounds)?;
        checked(from, length as usize, UNIT)?;
        chip::erase(from, length);
        Ok(())
    }

    fn write(&mut self, offset: u32, bytes: &[u8]) -> Result<(), NorFlashErrorKind> {
        checked(offset, bytes.len(), PAGE as u32)?;
        for (page, content) in bytes.chunks_exact(PAGE).enumerate() {
            // In RAM: a caller's bytes that lay in flash could not be read while it is being programmed.
            let mut copy = [0; PAGE];
            copy.copy_from_slice(content);
            chip::program(offset + (page * PAGE) as u32, &copy);
        }
        Ok(())
    }
}
