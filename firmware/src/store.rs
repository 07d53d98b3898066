//! Records in flash that survive a power cut at any instant.
//!
//! [`Slots`] keeps one record in two erase units. A write erases and programs the unit that does *not* hold the record in
//! force, in one page with a number and a CRC; a read takes the unit with the right CRC and the higher number. So a cut
//! at any instant leaves the old record or the new one, whatever half-erased or half-programmed cells read as.
//!
//! [`Counter`] keeps a number that only goes up, in small cells, so that counting starts of the controller does not wear
//! the flash: one erase in every 512.
//!
//! A kept crate for key-value storage was weighed and left: it moves *other* records about while it writes one, which is
//! what a calibration record must be safe from.

use crc::{CRC_32_ISO_HDLC, Crc, Table};
use embedded_storage::nor_flash::NorFlash;

use crate::io::{StoreOutcome, Unreadable};

static CRC: Crc<u32, Table<1>> = Crc::<u32, Table<1>>::new(&CRC_32_ISO_HDLC);

/// What is erased at once, bytes.
pub const UNIT: u32 = 4096;
/// What is programmed at once, bytes.
pub const PAGE: usize = 256;

const MAGIC: [u8; 4] = *b"RVr1";
/// Magic, number, length.
const HEADER: usize = 4 + 4 + 2;

/// The longest record, bytes.
pub const MAX_RECORD: usize = PAGE - HEADER - 4;

/// One record in two erase units that follow each other from `base`.
#[derive(Clone, Copy, Debug)]
pub struct Slots {
    /// Offset of the first unit in the flash, bytes; a multiple of [`UNIT`].
    pub base: u32,
}

/// What one unit holds.
enum Slot {
    Blank,
    Broken,
    Good { number: u32 },
}

impl Slots {
    /// Copies the record in force into `record` and gives its length; `Ok(None)` where none was ever written.
    ///
    /// # Errors
    /// [`Unreadable`] where something was written and neither unit holds it whole.
    pub fn read<F: NorFlash>(&self, flash: &mut F, record: &mut [u8; MAX_RECORD]) -> Result<Option<usize>, Unreadable> {
        let first = self.look(flash, 0);
        let second = self.look(flash, 1);
        match newest(&first, &second) {
            Some((unit, _)) => self.fetch(flash, unit, record).map(Some).ok_or(Unreadable),
            None if matches!((first, second), (Slot::Blank, Slot::Blank)) => Ok(None),
            None => Err(Unreadable),
        }
    }

    /// Writes a record and reads it back.
    pub fn write<F: NorFlash>(&self, flash: &mut F, record: &[u8]) -> StoreOutcome {
        if record.len() > MAX_RECORD {
            return StoreOutcome::Failed;
        }
        let (unit, number) = match newest(&self.look(flash, 0), &self.look(flash, 1)) {
            Some((unit, number)) => (1 - unit, number.wrapping_add(1)),
            None => (0, 1),
        };
        let page = compose(number, record);
        let from = self.base + unit * UNIT;
        let done = flash.erase(from, from + UNIT).is_ok() && flash.write(from, &page).is_ok();
        let mut back = [0; PAGE];
        if done && flash.read(from, &mut back).is_ok() && back == page {
            StoreOutcome::Stored
        } else {
            StoreOutcome::Failed
        }
    }

    fn page<F: NorFlash>(&self, flash: &mut F, unit: u32) -> Option<[u8; PAGE]> {
        let mut page = [0; PAGE];
        flash.read(self.base + unit * UNIT, &mut page).ok().map(|()| page)
    }

    fn look<F: NorFlash>(&self, flash: &mut F, unit: u32) -> Slot {
        let Some(page) = self.page(flash, unit) else { return Slot::Broken };
        if page == [0xff; PAGE] {
            return Slot::Blank;
        }
        match parse(&page) {
            Some((number, _)) => Slot::Good { number },
            None => Slot::Broken,
        }
    }

    fn fetch<F: NorFlash>(&self, flash: &mut F, unit: u32, record: &mut [u8; MAX_RECORD]) -> Option<usize> {
        let page = self.page(flash, unit)?;
        let (_, found) = parse(&page)?;
        record[..found.len()].copy_from_slice(found);
        Some(found.len())
    }
}

/// Which of two units (0, 1) holds the record in force, and its number.
fn newest(first: &Slot, second: &Slot) -> Option<(u32, u32)> {
    match (first, second) {
        (Slot::Good { number: a }, Slot::Good { number: b }) => {
            // Numbers follow each other; the comparison holds across the wrap.
            Some(if a.wrapping_sub(*b) < u32::MAX / 2 { (0, *a) } else { (1, *b) })
        }
        (Slot::Good { number }, _) => Some((0, *number)),
        (_, Slot::Good { number }) => Some((1, *number)),
        _ => None,
    }
}

fn compose(number: u32, record: &[u8]) -> [u8; PAGE] {
    let mut page = [0xff; PAGE];
    let end = HEADER + record.len();
    page[..4].copy_from_slice(&MAGIC);
    page[4..8].copy_from_slice(&number.to_le_bytes());
    page[8..HEADER].copy_from_slice(&(record.len() as u16).to_le_bytes());
    page[HEADER..end].copy_from_slice(record);
    let crc = CRC.checksum(&page[..end]);
    page[end..end + 4].copy_from_slice(&crc.to_le_bytes());
    page
}

fn parse(page: &[u8; PAGE]) -> Option<(u32, &[u8])> {
    if page[..4] != MAGIC {
        return None;
    }
    let number = u32::from_le_bytes([page[4], page[5], page[6], page[7]]);
    let end = HEADER + usize::from(u16::from_le_bytes([page[8], page[9]]));
    let (content, rest) = page.split_at_checked(end)?;
    let crc = rest.get(..4)?;
    (CRC.checksum(content).to_le_bytes() == crc).then(|| (number, &content[HEADER..]))
}

/// A number that only goes up, in two erase units that follow each other from `base`.
#[derive(Clone, Copy, Debug)]
pub struct Counter {
    /// Offset of the first unit in the flash, bytes; a multiple of [`UNIT`].
    pub base: u32,
}

/// A number and its complement. A cut while programming leaves bits set in both, a cut while erasing too: neither can turn
/// one whole cell into another.
const CELL: usize = 8;
const CELLS: u32 = UNIT / CELL as u32;

impl Counter {
    /// Adds one and gives the result: 1 on a blank flash. Where the flash does not take it, the next call gives the
    /// same number again.
    pub fn next<F: NorFlash>(&self, flash: &mut F) -> u32 {
        let found = [self.scan(flash, 0), self.scan(flash, 1)];
        let unit = u32::from(found[1].highest > found[0].highest);
        let scan = &found[unit as usize];
        let next = scan.highest.saturating_add(1);
        if scan.free < CELLS {
            self.put(flash, unit, scan.free, next);
        } else {
            let other = 1 - unit;
            let from = self.base + other * UNIT;
            if flash.erase(from, from + UNIT).is_ok() {
                self.put(flash, other, 0, next);
            }
        }
        next
    }

    fn scan<F: NorFlash>(&self, flash: &mut F, unit: u32) -> Scan {
        let mut scan = Scan { highest: 0, free: 0 };
        for page_index in 0..UNIT / PAGE as u32 {
            let mut page = [0; PAGE];
            if flash.read(self.base + unit * UNIT + page_index * PAGE as u32, &mut page).is_err() {
                continue;
            }
            for (cell_index, cell) in page.chunks_exact(CELL).enumerate() {
                if cell.iter().all(|byte| *byte == 0xff) {
                    continue;
                }
                // Cells behind a broken one are free only if no later one is used.
                scan.free = page_index * (PAGE / CELL) as u32 + cell_index as u32 + 1;
                if let Some(number) = cell_number(cell) {
                    scan.highest = scan.highest.max(number);
                }
            }
        }
        scan
    }

    fn put<F: NorFlash>(&self, flash: &mut F, unit: u32, cell: u32, number: u32) {
        let at = cell as usize * CELL;
        // Ones leave programmed cells as they are, so a page can be filled cell by cell.
        let mut page = [0xff; PAGE];
        let within = at % PAGE;
        page[within..within + 4].copy_from_slice(&number.to_le_bytes());
        page[within + 4..within + CELL].copy_from_slice(&(!number).to_le_bytes());
        // What a failure means is told in `next`.
        let _ = flash.write(self.base + unit * UNIT + (at - within) as u32, &page);
    }
}

struct Scan {
    highest: u32,
    /// First cell behind the last used one.
    free: u32,
}

fn cell_number(cell: &[u8]) -> Option<u32> {
    let number = u32::from_le_bytes(cell.get(..4)?.try_into().ok()?);
    let complement = u32::from_le_bytes(cell.get(4..CELL)?.try_into().ok()?);
    (number == !complement).then_some(number)
}

#[cfg(test)]
mod tests;
