// The bench around the chip, and the loop that drives it. Virtual time is nanoseconds since the world began, and goes on
// over resets of the chip; the chip's own clock starts at zero with each.

import { RP2040 } from 'rp2040js';

import { Bus, Converter } from './converter.js';
import { Agenda } from './events.js';
import { FlashRom, PowerCut, atomic } from './flash.js';
import { Random } from './random.js';
import { UsbHost } from './usb.js';

const CYCLE_NS = 8; // 125 MHz
/** From reset to the first instruction of the image: the ROM's boot from flash. From memory, no source. */
const ROM_BOOT_NS = 3e6;

export const PIN = {
  loop_a: 10,
  loop_b: 11,
  released: 12,
  button: 13,
  strobe: 14,
  comparator: 15,
  permit: 16,
  lamp: 17,
  hv_dark: 18,
  beam_fitted: 20,
  temperature_fitted: 21,
  comparator_fitted: 22,
  led: 25,
};
const PULLED_UP = new Set([PIN.comparator, PIN.beam_fitted, PIN.temperature_fitted, PIN.comparator_fitted, 1, 8, 9]);

const quiet = { debug() {}, info() {}, warn() {}, error() {} };

export class World {
  /** `flash` is the image; `tube(from, to)` gives the mean voltage at the tube over a span (ns), V. */
  constructor({ flash, seed = 1, sense = {}, cross = {}, tube = () => 0 }) {
    this.agenda = new Agenda();
    this.device = [0x5e, 0xed, 0, 0, 0, 0, 0, 1];
    this.random = new Random(seed);
    this.base = 0;
    this.chip = null;
    this.deadUntil = 0;
    this.flashContent = flash.slice();
    this.flashWrites = [];
    this.powerCutAt = null;
    this.idleNs = 0;
    this.instructions = 0;
    this.resets = [];
    this.faults = [];
    this.levels = new Map();
    this.adc = [0, 0];
    this.edges = { permit: [], lamp: [], hv_dark: [], led: [] };
    for (const edges of Object.values(this.edges)) Object.assign(edges, { level: false, count: 0 });
    this.keepEdges = new Set(['permit']);
    this.tube = tube;
    this.converters = {
      sense: this.converter(0x48, seed + 1, sense),
      cross: this.converter(0x49, seed + 2, cross),
    };
    this.buses = {
      sense: new Bus(this, { index: 0, data: 4, clock: 5, converter: this.converters.sense }),
      cross: new Bus(this, { index: 1, data: 6, clock: 7, converter: this.converters.cross }),
    };
    this.converters.sense.ready = (high) => this.setPin(8, high);
    this.converters.cross.ready = (high) => this.setPin(9, high);
    this.rom = new FlashRom(this);
    this.usb = new UsbHost(this);
    this.onUartByte = () => {};
    this.onBoot = () => {};
  }

  converter(address, seed, { ratio = 5001, rateError = 0.02, noise = 0.5, offset = 0 }) {
    const part = new Converter(this, { address, rateError, noise, random: new Random(seed) });
    part.ratio = ratio;
    part.gain = 1;
    part.volts = (from, to) => (this.tube(from, to) / part.ratio) * part.gain + offset;
    return part;
  }

  get now() {
    return this.chip ? this.base + this.chip.clock.nanos : this.base;
  }

  /** Sets an input pin's level from outside; it stays over resets of the chip. */
  setPin(pin, high) {
    if (this.levels.get(pin) === high) return;
    this.levels.set(pin, high);
    this.chip?.gpio[pin].setInputValue(high);
  }

  /** Applies power (`cold`), or lets the chip start again after a reset. */
  boot(cold, reason = 0, scratch = null) {
    const ram = this.chip?.sram.slice();
    const now = this.now;
    this.chip = new RP2040();
    this.chip.logger = quiet;
    this.base = now;
    const { chip } = this;
    chip.flash.set(this.flashContent);
    if (cold) for (let i = 0; i < chip.sram.length; i++) chip.sram[i] = this.random.next() * 256;
    else if (ram) chip.sram.set(ram);
    this.rom.attach(chip);
    chip.peripherals[0x4000c] = new Resets(this);
    chip.peripherals[0x40064] = new ChipReset();
    const watchdog = chip.peripherals[0x40058];
    watchdog.reason = reason;
    if (scratch) watchdog.scratchData.set(scratch);
    watchdog.onWatchdogTrigger = () => {
      this.resetRequest = watchdog.reason;
      // The reset itself comes after this instruction; until then the emulated counter must not fire again and again.
      watchdog.alarm.enable = false;
    };
    chip.adc.onADCRead = (channel) => {
      chip.adc.currentChannel = channel;
      chip.adc.channelValues[channel] = this.adc[channel] ?? 0;
      chip.adc.sampleAlarm.schedule(2000);
    };
    for (const bus of Object.values(this.buses)) bus.attach(chip);
    for (const [pin, high] of this.levels) chip.gpio[pin].setInputValue(high);
    for (const pin of PULLED_UP) if (!this.levels.has(pin)) chip.gpio[pin].setInputValue(true);
    for (const name of Object.keys(this.edges)) {
      chip.gpio[PIN[name]].addListener(() => this.outputChanged(name));
      this.outputChanged(name);
    }
    chip.uart[0].onByte = (byte) => this.onUartByte(byte);
    this.usb.attach(chip);
    chip.core.VTOR = 0x10000100;
    chip.core.reset();
    this.resetRequest = 0;
    this.deadUntil = now + ROM_BOOT_NS;
    this.onBoot();
  }

  /** Takes the power away. Converters lose their settings too. */
  powerOff() {
    this.keepFlash();
    this.base = this.now;
    this.usb.detach();
    this.chip = null;
    for (const part of Object.values(this.converters)) part.power();
    this.lowerOutputs();
  }

  /** Sends bytes to the board's UART, at the pace of its baud rate. */
  uartSend(bytes) {
    const byteNs = 1e10 / 921600;
    this.uartFree = Math.max(this.uartFree ?? 0, this.now);
    for (const byte of bytes) {
      this.uartFree += byteNs;
      this.agenda.at(this.uartFree, () => this.chip?.uart[0].feedByte(byte));
    }
  }

  keepFlash() {
    this.flashContent.set(this.chip.flash.subarray(0, this.flashContent.length));
  }

  lowerOutputs() {
    for (const name of Object.keys(this.edges)) this.recordOutput(name, false);
  }

  outputChanged(name) {
    const pin = this.chip.gpio[PIN[name]];
    // A pin that is not driven is pulled low on the board.
    this.recordOutput(name, pin.outputEnable && pin.outputValue);
  }

  recordOutput(name, high) {
    const edges = this.edges[name];
    if (edges.level === high) return;
    edges.level = high;
    edges.last = this.now;
    edges.count++;
    if (this.keepEdges.has(name)) edges.push(this.now);
    this.onOutput?.(name, high);
  }

  /** Lets time pass without the processor running (it waits for the flash). */
  pass(ns) {
    const end = this.now + ns;
    while (this.agenda.next <= end) {
      this.tick(this.agenda.next - this.now);
      this.agenda.runNext();
    }
    this.tick(end - this.now);
  }

  tick(ns) {
    if (ns > 0) this.chip.clock.tick(ns);
  }

  /** Runs until `end` (world time, ns), or until `stop()` says so after something happened. */
  run(end, stop = () => false) {
    this.stopped = false;
    while (this.now < end && !this.stopped) {
      if (this.powerCutAt !== null && this.now >= this.powerCutAt) this.cut();
      if (!this.chip || this.now < this.deadUntil) this.runDead(end);
      else this.runLive(Math.min(end, this.powerCutAt ?? Infinity));
      if (stop()) break;
    }
  }

  cut() {
    this.powerCutAt = null;
    this.powerOff();
    this.onPowerCut?.();
    this.stopped = true;
  }

  runDead(end) {
    const until = Math.min(end, this.agenda.next, this.chip ? this.deadUntil : Infinity, this.powerCutAt ?? Infinity);
    // The chip's clock stands while its ROM boots; only the world goes on.
    this.base += until - this.now;
    if (this.agenda.next <= this.now) this.agenda.runNext();
  }

  runLive(end) {
    const { chip, agenda, rom } = this;
    const { core, clock } = chip;
    const { base } = this;
    try {
      while (!this.stopped && !this.resetRequest) {
        if (base + clock.nanosCounter >= agenda.next) {
          agenda.runNext();
          if (this.chip !== chip) return;
          continue;
        }
        if (base + clock.nanosCounter >= end) return;
        if (core.waiting) {
          if (core.interruptsUpdated && core.checkForInterrupts()) {
            core.waiting = false;
            continue;
          }
          const alarm = clock.nextAlarm ? clock.nextAlarm.nanos - clock.nanosCounter : Infinity;
          const wait = Math.max(0, Math.min(alarm, Math.min(agenda.next, end) - base - clock.nanosCounter));
          this.idleNs += wait;
          clock.tick(wait);
        } else {
          if (!rom.mapped && core.registers[15] >>> 28 === 1) {
            throw new Error(`an instruction at 0x${core.registers[15].toString(16)} was fetched while the flash was busy`);
          }
          this.instructions++;
          const ns = core.executeInstruction() * CYCLE_NS;
          // What `tick` does where no alarm is due, without the call.
          const alarm = clock.nextAlarm;
          if (alarm && alarm.nanos <= clock.nanosCounter + ns) clock.tick(ns);
          else clock.nanosCounter += ns;
        }
      }
    } catch (error) {
      if (!(error instanceof PowerCut)) throw error;
      this.cut();
      return;
    }
    if (this.resetRequest) this.reset();
  }

  // The watchdog, or the image itself, resets the chip.
  reset() {
    const reason = this.resetRequest;
    this.resets.push({ at: this.now, reason });
    const scratch = this.chip.peripherals[0x40058].scratchData.slice();
    this.keepFlash();
    this.boot(false, reason, scratch);
  }

  stop() {
    this.stopped = true;
  }
}

// RESETS: the buses' blocks are really reset; everything else comes out of reset at once.
class Resets {
  constructor(world) {
    this.world = world;
    this.reset = 0;
  }

  readUint32(offset) {
    if (offset === 0) return this.reset;
    if (offset === 8) return ~this.reset & 0x1ffffff;
    return 0;
  }

  writeUint32(offset, value) {
    if (offset !== 0) return;
    const rising = value & ~this.reset;
    this.reset = value & 0x1ffffff;
    if (rising & (1 << 3)) this.world.buses.sense.resetBlock();
    if (rising & (1 << 4)) this.world.buses.cross.resetBlock();
  }

  writeUint32Atomic(offset, value, type) {
    this.writeUint32(offset, atomic(this.readUint32(offset), value, type));
  }
}

// VREG_AND_CHIP_RESET: after power-on, the register that names the source says so, and a watchdog reset leaves it.
class ChipReset {
  readUint32(offset) {
    return offset === 8 ? 0x100 : 0;
  }

  writeUint32() {}

  writeUint32Atomic() {}
}
