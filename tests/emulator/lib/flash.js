// The flash chip and the part of the boot ROM that drives it.
//
// The emulator has no boot ROM. This puts a function table where the RP2040 datasheet (2.8.2, 2.8.3) says it is; each
// function is a breakpoint instruction that this file serves, and a return. Times are typical values of the W25Q16JV data
// sheet: 45 ms for a sector erase, 0.4 ms for a page program.

import { crc32 } from './wire.js';

const ERASE_NS = 45e6;
const PROGRAM_NS = 0.4e6;

const TABLE = 0x40;
const CODE = 0x100;
const FUNCTIONS = ['IF', 'EX', 'RE', 'RP', 'FC', 'CX'];
const LOOKUP = FUNCTIONS.length;

/** Where the image keeps its records, and how: see firmware/src/store.rs and firmware/pico/src/flash.rs. */
const FIRST_UNIT = 2 * 1024 * 1024 - 6 * 4096;
const RECORD_UNITS = { certificate: FIRST_UNIT, settings: FIRST_UNIT + 2 * 4096 };

/** Puts a record's bytes into a flash image as if the controller had stored it. */
export function putRecord(flash, name, record) {
  const page = [...Buffer.from('RVr1'), 1, 0, 0, 0, record.length & 0xff, record.length >> 8, ...record];
  const crc = crc32(page);
  page.push(crc & 0xff, (crc >>> 8) & 0xff, (crc >>> 16) & 0xff, crc >>> 24);
  flash.set(page, RECORD_UNITS[name]);
}

/** Power went away within an erase or a program. */
export class PowerCut extends Error {}

export class FlashRom {
  constructor(world) {
    this.world = world;
  }

  /** Writes the table and stubs into a chip's ROM and serves them. */
  attach(chip) {
    this.chip = chip;
    const bytes = new DataView(new ArrayBuffer(16 * 1024));
    bytes.setUint32(0x10, 0x0201754d, true); // 'M', 'u', 1, version 2
    bytes.setUint16(0x14, TABLE, true);
    bytes.setUint16(0x16, TABLE, true);
    bytes.setUint16(0x18, this.address(LOOKUP), true);
    FUNCTIONS.forEach((name, index) => {
      bytes.setUint16(TABLE + 4 * index, name.charCodeAt(0) | (name.charCodeAt(1) << 8), true);
      bytes.setUint16(TABLE + 4 * index + 2, this.address(index), true);
    });
    for (let index = 0; index <= LOOKUP; index++) {
      bytes.setUint16(CODE + 4 * index, 0xbe00 | index, true); // BKPT #index
      bytes.setUint16(CODE + 4 * index + 2, 0x4770, true); // BX LR
    }
    for (let i = 0; i < chip.bootrom.length; i++) chip.bootrom[i] = bytes.getUint32(4 * i, true);
    chip.onBreak = (code) => this.serve(code);
    chip.peripherals[0x18000] = new Ssi(chip, this);
    chip.peripherals[0x40018] = new QspiPins(chip, this);
    this.mapped = true;
    this.selected = false;
  }

  address(index) {
    return (CODE + 4 * index) | 1;
  }

  serve(code) {
    const [r0, r1] = this.chip.core.registers;
    switch (code) {
      case LOOKUP: {
        const name = String.fromCharCode(r1 & 0xff, (r1 >> 8) & 0xff);
        const index = FUNCTIONS.indexOf(name);
        if (index < 0) throw new Error(`the image asks the boot ROM for '${name}', which is not modelled`);
        this.chip.core.registers[0] = this.address(index);
        return;
      }
      case 1:
        this.mapped = false;
        return;
      case 2:
        this.erase(r0, r1);
        return;
      case 3:
        this.program(r0, r1, this.chip.core.registers[2]);
        return;
      case 5:
        this.mapped = true;
        return;
      default: // IF and FC change nothing that is modelled
    }
  }

  erase(offset, length) {
    if (this.mapped) throw new Error('flash_range_erase before flash_exit_xip');
    for (let at = offset; at < offset + length; at += 4096) {
      this.change(at, new Uint8Array(4096).fill(0xff), ERASE_NS);
    }
  }

  program(offset, from, length) {
    if (this.mapped) throw new Error('flash_range_program before flash_exit_xip');
    if (from >>> 28 !== 2) throw new Error('flash_range_program from data that lies in flash');
    for (let at = 0; at < length; at += 256) {
      const target = new Uint8Array(256);
      for (let i = 0; i < 256; i++) target[i] = this.chip.flash[offset + at + i] & this.chip.readUint8(from + at + i);
      this.change(offset + at, target, PROGRAM_NS);
    }
  }

  // Cells change towards `target` over `duration`; where the power goes within it, each bit has changed or not by chance.
  change(offset, target, duration) {
    const { world } = this;
    world.flashWrites.push({ at: world.now, offset, length: target.length });
    const cut = world.powerCutAt;
    if (cut !== null && cut < world.now + duration) {
      const share = Math.max(0, (cut - world.now) / duration);
      for (let i = 0; i < target.length; i++) {
        let differ = this.chip.flash[offset + i] ^ target[i];
        for (let bit = 1; bit < 256; bit <<= 1) {
          if (differ & bit && world.random.next() >= share) differ &= ~bit;
        }
        this.chip.flash[offset + i] ^= differ;
      }
      world.pass(Math.max(0, cut - world.now));
      throw new PowerCut();
    }
    this.chip.flash.set(target, offset);
    world.pass(duration);
  }

  /** One byte to the chip while it is selected by hand; its answer. */
  exchange(byte) {
    this.sent.push(byte);
    const at = this.sent.length - 1;
    if (this.sent[0] === 0x4b && at >= 5) return this.world.device[(at - 5) % 8];
    if (this.sent[0] === 0x35) return 0x02; // quad enable is set
    return 0;
  }

  select(yes) {
    this.selected = yes;
    this.sent = [];
  }
}

// The serial block of the flash: enough for the second-stage boot loader and for commands with the select line by hand.
class Ssi {
  constructor(chip, rom) {
    this.chip = chip;
    this.rom = rom;
    this.registers = new Map();
    this.received = [];
    this.rom.sent = [];
  }

  readUint32(offset) {
    if (offset === 0x28) return 0x06 | (this.received.length ? 0x08 : 0);
    if (offset === 0x60) return this.received.shift() ?? 0;
    return this.registers.get(offset) ?? 0;
  }

  writeUint32(offset, value) {
    if (offset === 0x60) {
      this.received.push(this.rom.exchange(value & 0xff));
      return;
    }
    this.registers.set(offset, value);
    if (offset !== 0x08) return;
    this.received = [];
    if (!this.rom.selected) this.rom.sent = [];
    // Enabled in the read mode that maps the flash: the boot loader has done its work.
    if (value & 1 && ((this.registers.get(0) ?? 0) & 0x300) === 0x300) this.rom.mapped = true;
  }

  writeUint32Atomic(offset, value, type) {
    this.writeUint32(offset, atomic(this.registers.get(offset) ?? 0, value, type));
  }
}

// The pins of the flash: only the override of the select line matters.
class QspiPins {
  constructor(chip, rom) {
    this.rom = rom;
    this.registers = new Map();
  }

  readUint32(offset) {
    return this.registers.get(offset) ?? 0;
  }

  writeUint32(offset, value) {
    this.registers.set(offset, value);
    if (offset === 0x0c) this.rom.select(((value >> 8) & 3) === 2);
  }

  writeUint32Atomic(offset, value, type) {
    this.writeUint32(offset, atomic(this.registers.get(offset) ?? 0, value, type));
  }
}

export function atomic(now, value, type) {
  if (type === 1) return (now ^ value) >>> 0;
  if (type === 2) return (now | value) >>> 0;
  if (type === 3) return (now & ~value) >>> 0;
  return value >>> 0;
}
