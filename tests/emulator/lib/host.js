// A small host on the emulated USB: says hello, keeps the heartbeat, acknowledges, and writes down what it hears.

import { Decoder, TRIPS, encode } from './wire.js';

const PROTOCOL = 1;

export class Host {
  constructor(world, { heartbeat = 0.5, acknowledge = true, send, attach } = {}) {
    this.world = world;
    this.heartbeat = heartbeat;
    this.acknowledge = acknowledge;
    this.silent = false;
    this.decoder = new Decoder();
    this.captured = [];
    this.sendBytes = send ?? ((bytes) => world.usb.send(bytes));
    this.clear();
    const receive = (bytes) => this.receive(bytes);
    if (attach) {
      attach(receive);
    } else {
      world.usb.onBytes = receive;
      world.usb.onUp = () => this.hello();
    }
    this.beat();
  }

  clear() {
    Object.assign(this, { hellos: [], readings: [], events: [], strobes: [], slow: [], gaps: [], statuses: [], others: [] });
    this.next = { readings: 0, events: 0, slow: 0, strobes: 0 };
  }

  send(message) {
    this.sendBytes(encode(message));
  }

  hello() {
    if (!this.silent) this.send({ is: 'Hello', protocol: PROTOCOL, host: 1 });
  }

  beat() {
    if (!this.silent && this.hellos.length) {
      this.send('Heartbeat');
      if (this.acknowledge) this.send({ is: 'Ack', ...this.next });
    }
    this.world.agenda.at(this.world.now + this.heartbeat * 1e9, () => this.beat());
  }

  receive(bytes) {
    if (this.silent) return;
    this.captured.push(Buffer.from(bytes));
    for (const message of this.decoder.push(bytes)) this.take(message);
  }

  take(message) {
    switch (message.is ?? message) {
      case 'Hello':
        this.hellos.push(message);
        break;
      case 'Reading':
        this.keep('readings', message);
        break;
      case 'Event':
        this.keep('events', message);
        break;
      case 'Strobe':
        this.keep('strobes', message);
        break;
      case 'Slow':
        this.keep('slow', message);
        break;
      case 'Gap': {
        this.gaps.push(message);
        const stream = message.stream.toLowerCase();
        this.next[stream] = Math.max(this.next[stream], message.first + message.count);
        break;
      }
      case 'Status':
        this.statuses.push(message);
        break;
      default:
        this.others.push(message);
    }
    this.onMessage?.(message);
  }

  // What the board sends again after a hello is not new.
  keep(stream, message) {
    if (message.seq < this.next[stream]) return;
    this[stream].push(message);
    this.next[stream] = message.seq + 1;
  }

  get status() {
    return this.statuses.at(-1);
  }

  /** Names of the trips that the last status says are latched. */
  get latched() {
    return TRIPS.filter((_, i) => this.status.latched & (1 << i));
  }

  /** Events whose kind is `name`, with the wanted members. */
  eventsOf(name, members = {}) {
    return this.events.filter(({ kind }) => {
      if ((kind.is ?? kind) !== name) return false;
      return Object.entries(members).every(([key, value]) => kind[key] === value);
    });
  }
}
