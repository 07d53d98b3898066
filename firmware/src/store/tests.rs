//! Against a flash that loses power at any bit it changes.

extern crate std;

use std::{vec, vec::Vec};

use embedded_storage::nor_flash::{ErrorType, NorFlash, NorFlashErrorKind, ReadNorFlash};

use super::*;

/// Erases and programs bit by bit in an order of its own, until `budget` bits were changed.
struct CutFlash {
    bytes: Vec<u8>,
    budget: Option<u32>,
    order: u32,
}

impl CutFlash {
    fn new() -> Self {
        Self { bytes: vec![0xff; 2 * UNIT as usize], budget: None, order: 1 }
    }

    /// Moves `bytes` towards what `target` gives, a pseudo-random bit at a time, as cells follow a pulse unevenly.
    fn change(&mut self, from: usize, target: &[u8]) -> Result<(), NorFlashErrorKind> {
        let mut bits: Vec<(usize, u8)> = Vec::new();
        for (index, byte) in target.iter().enumerate() {
            let differ = self.bytes[from + index] ^ byte;
            bits.extend((0..8).filter(|bit| differ & (1 << bit) != 0).map(|bit| (from + index, 1u8 << bit)));
        }
        for _ in 0..bits.len() {
            if self.budget == Some(0) {
                return Err(NorFlashErrorKind::Other);
            }
            self.order = self.order.wrapping_mul(1_664_525).wrapping_add(1_013_904_223);
            let pick = self.order as usize / 7 % bits.len();
            let (at, mask) = bits.swap_remove(pick);
            self.bytes[at] ^= mask;
            self.budget = self.budget.map(|left| left - 1);
        }
        Ok(())
    }
}

impl ErrorType for CutFlash {
    type Error = NorFlashErrorKind;
}

impl ReadNorFlash for CutFlash {
    const READ_SIZE: usize = 1;
    fn read(&mut self, offset: u32, bytes: &mut [u8]) -> Result<(), Self::Error> {
        bytes.copy_from_slice(&self.bytes[offset as usize..][..bytes.len()]);
        Ok(())
    }
    fn capacity(&self) -> usize {
        self.bytes.len()
    }
}

impl NorFlash for CutFlash {
    const WRITE_SIZE: usize = PAGE;
    const ERASE_SIZE: usize = UNIT as usize;
    fn erase(&mut self, from: u32, to: u32) -> Result<(), Self::Error> {
        self.change(from as usize, &vec![0xff; (to - from) as usize])
    }
    fn write(&mut self, offset: u32, bytes: &[u8]) -> Result<(), Self::Error> {
        let now = &self.bytes[offset as usize..][..bytes.len()];
        let target: Vec<u8> = now.iter().zip(bytes).map(|(old, new)| old & new).collect();
        self.change(offset as usize, &target)
    }
}

const SLOTS: Slots = Slots { base: 0 };

fn read(flash: &mut CutFlash) -> Result<Option<Vec<u8>>, Unreadable> {
    let mut record = [0; MAX_RECORD];
    SLOTS.read(flash, &mut record).map(|found| found.map(|length| record[..length].to_vec()))
}

#[test]
fn a_record_that_was_written_is_read_and_a_blank_flash_holds_none() {
    let mut flash = CutFlash::new();
    assert_eq!(read(&mut flash), Ok(None));
    for number in 0..5u8 {
        let record = vec![number; usize::from(number) * 60];
        assert_eq!(SLOTS.write(&mut flash, &record), StoreOutcome::Stored);
        assert_eq!(read(&mut flash), Ok(Some(record)));
    }
    assert_eq!(SLOTS.write(&mut flash, &[0; MAX_RECORD + 1]), StoreOutcome::Failed);
}

#[test]
fn a_power_cut_at_any_bit_of_a_write_leaves_the_old_record_or_the_new_one() {
    let (old, new) = (vec![0x5a; 90], vec![0xc3; 100]);
    let mut before = CutFlash::new();
    for record in [&new, &new, &old] {
        assert_eq!(SLOTS.write(&mut before, record), StoreOutcome::Stored);
    }
    let mut seen = [0u32; 2];
    for budget in 0.. {
        let mut flash = CutFlash { bytes: before.bytes.clone(), budget: Some(budget), order: budget };
        let outcome = SLOTS.write(&mut flash, &new);
        flash.budget = None;
        let found = read(&mut flash).ok().flatten();
        assert!(found == Some(old.clone()) || found == Some(new.clone()), "neither record after {budget} bits");
        seen[usize::from(found == Some(new.clone()))] += 1;
        // The next write has to work whatever the cut left behind.
        assert_eq!(SLOTS.write(&mut flash, &old), StoreOutcome::Stored);
        assert_eq!(read(&mut flash), Ok(Some(old.clone())));
        if outcome == StoreOutcome::Stored {
            break;
        }
    }
    assert!(seen[0] > 500 && seen[1] > 0, "the cuts did not cover the write: {seen:?}");
}

#[test]
fn a_rotten_single_record_is_unreadable_and_not_taken_for_a_blank_flash() {
    let mut flash = CutFlash::new();
    assert_eq!(SLOTS.write(&mut flash, &[1, 2, 3]), StoreOutcome::Stored);
    for bit in 0..(HEADER + 3 + 4) * 8 {
        let mut rotten = CutFlash { bytes: flash.bytes.clone(), budget: None, order: 0 };
        rotten.bytes[bit / 8] ^= 1 << (bit % 8);
        assert_eq!(read(&mut rotten), Err(Unreadable), "bit {bit}");
    }
}

#[test]
fn the_counter_goes_up_by_one_through_every_wrap_of_its_units() {
    let mut flash = CutFlash::new();
    let counter = Counter { base: 0 };
    for expected in 1..=3 * CELLS + 5 {
        assert_eq!(counter.next(&mut flash), expected);
    }
}

#[test]
fn the_counter_never_goes_back_when_power_is_cut_within_a_count() {
    let counter = Counter { base: 0 };
    let mut flash = CutFlash::new();
    let mut last = 0;
    for round in 0..4_000u32 {
        flash.budget = Some(round % 61 * (1 + round % 7 * 40));
        flash.order = round;
        let cut = counter.next(&mut flash);
        flash.budget = None;
        // The cut start may have had its number or not; the next whole one has a number of its own.
        let next = counter.next(&mut flash);
        assert!(cut > last && next >= cut, "{last} -> {cut} -> {next}");
        last = next;
    }
}
