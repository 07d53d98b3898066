// The wire, written a second time from its description: COBS frames with a CRC-32, postcard inside.
//
// Used by the harness's own small host. The real host program and `ringvolt-tests` read the same stream with the crate
// that defines it, so a mistake here shows as a difference.

class Reader {
  constructor(bytes) {
    this.bytes = bytes;
    this.at = 0;
  }
  byte() {
    if (this.at >= this.bytes.length) throw new Error('message ends early');
    return this.bytes[this.at++];
  }
}

// Numbers up to 2^53 are exact, and nothing on this wire is larger in a test.
const varint = {
  read(r) {
    let value = 0;
    let scale = 1;
    for (;;) {
      const byte = r.byte();
      value += (byte & 0x7f) * scale;
      if (byte < 0x80) return value;
      scale *= 128;
    }
  },
  write(out, value) {
    while (value >= 128) {
      out.push((value % 128) | 0x80);
      value = Math.floor(value / 128);
    }
    out.push(value);
  },
};
const zigzag = {
  read(r) {
    const n = varint.read(r);
    return n % 2 ? -(n + 1) / 2 : n / 2;
  },
  write: (out, value) => varint.write(out, value < 0 ? -2 * value - 1 : 2 * value),
};
const u8 = { read: (r) => r.byte(), write: (out, value) => out.push(value) };
const bool = { read: (r) => r.byte() === 1, write: (out, value) => out.push(value ? 1 : 0) };
const bytes = (n) => ({
  read: (r) => Array.from({ length: n }, () => r.byte()),
  write: (out, value) => out.push(...value),
});
const option = (inner) => ({
  read: (r) => (r.byte() ? inner.read(r) : null),
  write: (out, value) => {
    out.push(value === null ? 0 : 1);
    if (value !== null) inner.write(out, value);
  },
});
const struct = (fields) => ({
  read(r) {
    const value = {};
    for (const [name, type] of Object.entries(fields)) value[name] = type.read(r);
    return value;
  },
  write(out, value) {
    for (const [name, type] of Object.entries(fields)) type.write(out, value[name]);
  },
});
const unit = { read: () => null, write: () => {} };
/** Variants in order: a name, or [name, content]. A value is { is: name, ...content }, or the name alone. */
const variants = (...list) => {
  const all = list.map((item) => (typeof item === 'string' ? [item, unit] : item));
  return {
    read(r) {
      const variant = all[varint.read(r)];
      if (!variant) throw new Error('unknown variant');
      const [is, type] = variant;
      if (type === unit) return is;
      const content = type.read(r);
      return content !== null && typeof content === 'object' && !Array.isArray(content)
        ? { is, ...content }
        : { is, value: content };
    },
    write(out, value) {
      const name = typeof value === 'string' ? value : value.is;
      const index = all.findIndex(([is]) => is === name);
      if (index < 0) throw new Error(`no variant ${name}`);
      varint.write(out, index);
      const content = typeof value === 'object' && 'value' in value ? value.value : value;
      all[index][1].write(out, content);
    },
  };
};

const ack = struct({ readings: varint, events: varint, slow: varint, strobes: varint });
const codes = struct({ sum: zigzag, min: zigzag, max: zigzag, count: u8 });
const codeToVolts = struct({
  offset_nv: zigzag,
  slope_pv: zigzag,
  bend_av: zigzag,
  code_min: zigzag,
  code_max: zigzag,
});
const certificate = struct({
  hash: bytes(8),
  device: bytes(8),
  sense: codeToVolts,
  cross: codeToVolts,
  difference_ppm: varint,
  difference_mv: varint,
  expires_day: varint,
});
const lamp = struct({ on: bool, chip_us: varint });
const settings = struct({
  window_ns: varint,
  mains_hz: u8,
  polarity: variants('Positive', 'Negative'),
  limit_mv: zigzag,
  limit_code: zigzag,
  beam_limit_na: varint,
  discrepancy_ms: varint,
  contactor_ms: varint,
  grace_ms: varint,
  bleed_ms: varint,
  noise_floor_millicodes: varint,
  lamp,
});
const line = variants('LoopA', 'LoopB', 'Contactors', 'Button', 'Strobe', 'Comparator');
const cause = variants('PowerOn', 'External', 'Watchdog', 'Panic', 'Unknown');
export const TRIPS = [
  'LoopOpened',
  'LoopsDisagree',
  'ContactorWelded',
  'ContactorDropped',
  'ButtonStuck',
  'SenseSilent',
  'CrossSilent',
  'SenseFrozen',
  'CrossFrozen',
  'SensesDisagree',
  'SenseLost',
  'CrossLost',
  'RatioChanged',
  'TapOverRange',
  'OverVoltage',
  'Comparator',
  'OverCurrent',
  'Arc',
  'VoltageAfterOff',
  'HostLost',
  'Restarted',
  'NoCertificate',
  'SettingsUnreadable',
];
const trip = variants(...TRIPS);
const eventKind = variants(
  ['Started', struct({ cause })],
  ['Line', struct({ line, active: bool })],
  'PermitGiven',
  'PermitWithdrawn',
  ['Tripped', struct({ trip, sense_mv: option(zigzag), cross_mv: option(zigzag) })],
  ['Cleared', struct({ trip })],
  'UncalibratedStart',
  'HostLost',
  'HostBack',
  ['CertificateStored', struct({ hash: bytes(8), reading_seq: varint })],
  'SettingsStored',
  ['ConfigurationRepaired', struct({ cross: bool })],
  ['BusRecovered', struct({ cross: bool, freed: bool })],
  ['LampStarted', struct({ chip_us: varint })],
  'LampStopped',
  ['LateLoop', struct({ pause_us: varint })],
);
const request = variants('ReadCertificate', 'ReadSettings', 'WriteCertificate', 'WriteSettings', 'Lamp');
const refusal = variants('PermitGiven', 'OutOfRange', 'OtherDevice', 'Busy', 'StoreFailed', 'Unsupported');
const permit = variants('Withdrawn', 'AwaitingLoopTest', 'AwaitingPress', 'AwaitingRelease', 'Given');

const toHost = variants(
  [
    'Hello',
    struct({
      protocol: varint,
      device: bytes(8),
      kind: variants('Board', 'Simulated'),
      firmware: bytes(3),
      epoch: varint,
      reset_cause: cause,
      time_us: varint,
      certificate: bytes(8),
      first: ack,
      next: ack,
    }),
  ],
  [
    'Reading',
    struct({
      seq: varint,
      time_us: varint,
      duration_us: varint,
      sense: codes,
      cross: codes,
      flags: varint,
      certificate: bytes(8),
    }),
  ],
  ['Event', struct({ seq: varint, time_us: varint, kind: eventKind })],
  [
    'Slow',
    struct({ seq: varint, time_us: varint, beam_na: option(zigzag), enclosure_centicelsius: option(zigzag) }),
  ],
  ['Strobe', struct({ seq: varint, time_us: varint, rising: bool })],
  ['Gap', struct({ stream: variants('Readings', 'Events', 'Slow', 'Strobes'), first: varint, count: varint })],
  [
    'Status',
    struct({
      time_us: varint,
      contacts: struct({ loop_a_closed: bool, loop_b_closed: bool, contactors_released: bool, button_pressed: bool }),
      permit,
      latched: varint,
      present: varint,
      uncalibrated: bool,
      hv_present: bool,
      sense_mv: option(zigzag),
      cross_mv: option(zigzag),
      comparator: option(bool),
      idle_per_mille: option(varint),
      damaged_frames: varint,
    }),
  ],
  ['EchoReply', struct({ token: varint, received_us: varint, sent_us: varint })],
  ['Certificate', struct({ record: option(certificate) })],
  ['Settings', settings],
  ['Done', struct({ request })],
  ['Refused', struct({ request, why: refusal })],
  'Busy',
);

const toDevice = variants(
  ['Hello', struct({ protocol: varint, host: varint })],
  'Heartbeat',
  ['Echo', struct({ token: varint })],
  ['Ack', ack],
  'Rewind',
  ['Ask', struct({ request })],
  ['WriteCertificate', certificate],
  ['WriteSettings', settings],
  ['Lamp', lamp],
  'Goodbye',
);

const CRC = Uint32Array.from({ length: 256 }, (_, n) => {
  let c = n;
  for (let k = 0; k < 8; k++) c = c & 1 ? 0xedb88320 ^ (c >>> 1) : c >>> 1;
  return c >>> 0;
});

/** CRC-32 as ISO-HDLC has it. */
export function crc32(content) {
  let c = 0xffffffff;
  for (const byte of content) c = CRC[(c ^ byte) & 0xff] ^ (c >>> 8);
  return (c ^ 0xffffffff) >>> 0;
}

/** One message to the board as a frame. */
export function encode(message) {
  const content = [];
  toDevice.write(content, message);
  const crc = crc32(content);
  content.push(crc & 0xff, (crc >>> 8) & 0xff, (crc >>> 16) & 0xff, crc >>> 24);
  const frame = [0];
  let mark = 0;
  for (const byte of content) {
    if (byte !== 0) frame.push(byte);
    if (byte === 0 || frame.length - mark === 255) {
      frame[mark] = frame.length - mark;
      mark = frame.push(0) - 1;
    }
  }
  frame[mark] = frame.length - mark;
  frame.push(0);
  return Uint8Array.from(frame);
}

/** Takes the board's stream apart. */
export class Decoder {
  constructor() {
    this.frame = [];
    this.damaged = 0;
  }

  /** The messages that `content` completes. */
  push(content) {
    const messages = [];
    for (const byte of content) {
      if (byte !== 0) {
        this.frame.push(byte);
        continue;
      }
      const frame = this.frame;
      this.frame = [];
      if (!frame.length) continue;
      try {
        messages.push(decode(frame));
      } catch {
        this.damaged++;
      }
    }
    return messages;
  }
}

function decode(frame) {
  const content = [];
  for (let at = 0; at < frame.length; ) {
    const code = frame[at];
    content.push(...frame.slice(at + 1, at + code));
    at += code;
    if (at > frame.length) throw new Error('not COBS');
    if (code < 255 && at < frame.length) content.push(0);
  }
  const body = content.slice(0, -4);
  const [a, b, c, d] = content.slice(-4);
  if (crc32(body) !== ((a | (b << 8) | (c << 16) | (d << 24)) >>> 0)) throw new Error('CRC');
  const reader = new Reader(body);
  const message = toHost.read(reader);
  if (reader.at !== body.length) throw new Error('bytes left over');
  return message;
}
