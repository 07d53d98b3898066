// An ADS1115-class converter at register level, and the I2C bus it sits on.
//
// Registers, bits and times follow the part's public data sheet (ADS111x, sections on the register map and on the
// conversion-ready pin): pointer 0 result, 1 configuration, 2 and 3 thresholds; continuous or single conversions; data
// rates 8 to 860 a second, each part up to 10 % off; a conversion-ready pulse of about 8 us low at the end of each
// conversion where the thresholds' top bits are 0 and 1 and the comparator queue is not off. A change of input or range
// takes effect with the next conversion: the one in flight is the old one.

const FULL_SCALE = [6.144, 4.096, 2.048, 1.024, 0.512, 0.256, 0.256, 0.256];
const RATE = [8, 16, 32, 64, 128, 250, 475, 860];
const RESET_CONFIGURATION = 0x8583;
const READY_PULSE_NS = 8000;
const WAKE_NS = 30000;

export class Converter {
  /**
   * `volts(from, to)` gives the mean voltage at the input over a span of world time (ns); `rateError` is relative;
   * `noise` is the standard deviation of one conversion in codes.
   */
  constructor(world, { address, volts, rateError, noise, random }) {
    Object.assign(this, { world, address, volts, rateError, noise, random });
    this.ready = () => {};
    this.pointer = 0;
    this.registers = [0, RESET_CONFIGURATION, 0x8000, 0x7fff];
    this.received = [];
    this.conversions = 0;
    this.fault = null; // 'silent', 'frozen', 'nak'
    this.pending = null;
  }

  get configuration() {
    return this.registers[1];
  }

  /** What the code for `volts` is, exactly, in the range that is set. */
  exactCode(volts) {
    return (volts / FULL_SCALE[(this.configuration >> 9) & 7]) * 32768;
  }

  power() {
    this.registers = [0, RESET_CONFIGURATION, 0x8000, 0x7fff];
    this.pointer = 0;
    this.world.agenda.cancel(this.pending);
  }

  begin(delay) {
    this.world.agenda.cancel(this.pending);
    const start = this.world.now + delay;
    const setting = this.configuration;
    const period = 1e9 / (RATE[(setting >> 5) & 7] * (1 + this.rateError));
    this.pending = this.world.agenda.at(start + period, () => this.finish(start, setting));
  }

  finish(start, setting) {
    const end = this.world.now;
    const single = !!(this.configuration & 0x100);
    if (this.fault !== 'silent') {
      if (this.fault !== 'frozen') this.registers[0] = this.convert(start, end, setting) & 0xffff;
      this.conversions++;
      if (single) this.registers[1] |= 0x8000;
      this.pulse();
    }
    if (!single) this.begin(0);
  }

  convert(start, end, setting) {
    // Input 0 against input 1 or against ground is the divider's tap; nothing else is connected.
    const mux = (setting >> 12) & 7;
    const volts = mux === 0 || mux === 4 ? this.volts(start, end) : 0;
    const code = Math.round((volts / FULL_SCALE[(setting >> 9) & 7]) * 32768 + this.noise * this.random.normal());
    return Math.max(-32768, Math.min(32767, code));
  }

  pulse() {
    const readyMode = this.registers[3] & 0x8000 && !(this.registers[2] & 0x8000) && (this.configuration & 3) !== 3;
    if (!readyMode) return;
    const active = !!(this.configuration & 8);
    this.ready(active);
    this.world.agenda.at(this.world.now + READY_PULSE_NS, () => this.ready(!active));
  }

  /** A byte written to the part. */
  write(byte) {
    this.received.push(byte);
    if (this.received.length === 1) this.pointer = byte & 3;
    if (this.received.length === 3) this.store((this.received[1] << 8) | byte);
  }

  store(value) {
    if (this.pointer === 0) return;
    const was = this.configuration;
    this.registers[this.pointer] = value;
    if (this.pointer !== 1) return;
    const continuous = !(value & 0x100);
    if (!continuous) {
      // Writing the top bit starts one conversion; it reads 0 until that is done.
      if (value & 0x8000) {
        this.registers[1] &= 0x7fff;
        this.begin(WAKE_NS);
      }
    } else {
      this.registers[1] |= 0x8000;
      if (was & 0x100) this.begin(WAKE_NS);
    }
  }

  start() {
    this.received = [];
    this.given = 0;
  }

  /** The next byte read from the part. */
  read() {
    const value = this.registers[this.pointer];
    return this.given++ % 2 === 0 ? value >> 8 : value & 0xff;
  }
}

const BIT_NS = 2500;

/** One I2C bus at 400 kHz with one converter: answers the emulated block, and charges the time of every bit. */
export class Bus {
  constructor(world, { index, data, clock, converter }) {
    Object.assign(this, { world, index, data, clock, converter });
    this.held = null; // 'data' (let go by nine clocks), 'data-stuck', 'clock-stuck'
    this.clocks = 0;
    this.bytes = 0;
  }

  attach(chip) {
    this.chip = chip;
    this.pending = null;
    const i2c = chip.i2c[this.index];
    this.i2c = i2c;
    const later = (bits, action) => {
      this.pending = this.world.agenda.at(this.world.now + bits * BIT_NS, () => {
        this.pending = null;
        action();
      });
    };
    i2c.onStart = () => {
      if (!this.held) later(1, () => i2c.completeStart());
    };
    i2c.onConnect = (address) =>
      later(9, () => {
        const there = address === this.converter.address && this.converter.fault !== 'nak';
        if (there) this.converter.start();
        i2c.completeConnect(there);
      });
    i2c.onWriteByte = (value) =>
      later(9, () => {
        this.bytes++;
        this.converter.write(value);
        i2c.completeWrite(true);
      });
    i2c.onReadByte = () =>
      later(9, () => {
        this.bytes++;
        i2c.completeRead(this.converter.read());
      });
    i2c.onStop = () => later(1, () => i2c.completeStop());
    for (const pin of [this.data, this.clock]) chip.gpio[pin].addListener(() => this.settle());
    this.levels = [null, null];
    this.settle();
  }

  /** The block was reset: whatever was under way is gone. */
  resetBlock() {
    this.world.agenda.cancel(this.pending);
    this.pending = null;
    const { i2c } = this;
    Object.assign(i2c, { state: 0, busy: false, stop: false, pendingRestart: false, firstByte: false });
    Object.assign(i2c, { enable: 0, intRaw: 0, abortSource: 0 });
    i2c.txFIFO.reset();
    i2c.rxFIFO.reset();
    i2c.checkInterrupts();
  }

  hold(kind) {
    this.held = kind;
    this.clocks = 0;
    if (kind) {
      // A transfer under way does not come to an end.
      this.world.agenda.cancel(this.pending);
      this.pending = null;
    }
    this.settle();
  }

  // Open drain: a line is low while anybody holds it.
  settle() {
    const { chip } = this;
    if (!chip) return;
    const driven = (pin) => chip.gpio[pin].outputEnable && !chip.gpio[pin].outputValue;
    const clock = !(driven(this.clock) || this.held === 'clock-stuck');
    if (clock && this.levels[1] === false && this.held === 'data' && ++this.clocks >= 9) this.held = null;
    const data = !(driven(this.data) || this.held === 'data' || this.held === 'data-stuck');
    [data, clock].forEach((level, i) => {
      if (this.levels[i] === level) return;
      this.levels[i] = level;
      chip.gpio[[this.data, this.clock][i]].setInputValue(level);
    });
  }
}
