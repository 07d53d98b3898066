// A scene: what the bench does, as data. See the README for the members.

import { readFileSync } from 'node:fs';

import { PIN, World } from './world.js';

const S = 1e9;

export function readScene(path) {
  const scene = JSON.parse(readFileSync(path, 'utf8'));
  if (typeof scene.seconds !== 'number') throw new Error(`${path}: "seconds" (how long the scene is) is missing`);
  return scene;
}

/** The voltage of the supply: straight pieces, with ripple on them. */
export class Supply {
  constructor({ volts = 0, ripple_volts = 0, ripple_hz = 100 } = {}) {
    this.pieces = [{ from: 0, volts, slope: 0 }];
    this.amplitude = ripple_volts / 2;
    this.omega = (2 * Math.PI * ripple_hz) / S;
    this.tubeOn = true;
  }

  /** From `now` on, goes to `volts` within `seconds`. */
  go(now, volts, seconds = 0) {
    const start = this.at(now);
    if (seconds > 0) {
      this.pieces.push({ from: now, volts: start, slope: (volts - start) / (seconds * S) });
      this.pieces.push({ from: now + seconds * S, volts, slope: 0 });
    } else {
      this.pieces.push({ from: now, volts, slope: 0 });
    }
  }

  at(time) {
    for (let i = this.pieces.length - 1; i >= 0; i--) {
      const piece = this.pieces[i];
      if (time >= piece.from) return piece.volts + piece.slope * (time - piece.from);
    }
    return 0;
  }

  /** Mean over a span: exact for each straight piece and for the ripple. */
  mean(from, to) {
    const cuts = [from, ...this.pieces.map((p) => p.from).filter((t) => t > from && t < to), to];
    let sum = 0;
    for (let i = 1; i < cuts.length; i++) {
      sum += this.at((cuts[i - 1] + cuts[i]) / 2) * (cuts[i] - cuts[i - 1]);
    }
    const { amplitude, omega } = this;
    const ripple = amplitude ? (amplitude * (Math.cos(omega * from) - Math.cos(omega * to))) / omega : 0;
    return (sum + ripple) / (to - from);
  }
}

/** The contactors and what they switch, driven by the permit the way the charge pump and relay are. */
class Contactors {
  constructor(world, { pull_in_ms = 15, drop_out_ms = 20, pump_ms = 5, welded = false } = {}) {
    Object.assign(this, { world, pullIn: pull_in_ms * 1e6, dropOut: drop_out_ms * 1e6, pump: pump_ms * 1e6, welded });
    this.closed = false;
    this.wanted = false;
    world.setPin(PIN.released, true);
    this.look();
  }

  // The pump holds for a few milliseconds after the last edge; looking each millisecond is fine enough.
  look() {
    const { world } = this;
    const edges = world.edges.permit;
    const pumped = edges.last !== undefined && edges.count > 4 && world.now - edges.last < this.pump;
    const wanted = pumped && world.levels.get(PIN.loop_a) === true && world.levels.get(PIN.loop_b) === true;
    if (wanted !== this.wanted) {
      this.wanted = wanted;
      world.agenda.cancel(this.pending);
      this.pending = world.agenda.at(world.now + (wanted ? this.pullIn : this.dropOut), () => this.move(wanted));
    }
    world.agenda.at(world.now + 1e6, () => this.look());
  }

  move(closed) {
    if (!closed && this.welded) return;
    this.closed = closed;
    this.world.setPin(PIN.released, !closed);
    this.onMove?.(closed);
  }
}

/** Makes the world of a scene and puts its events on the agenda. */
export function stage(scene, flash) {
  const supply = new Supply(scene.supply);
  const world = new World({
    flash,
    seed: scene.seed ?? 1,
    sense: scene.sense,
    cross: scene.cross,
    tube: (from, to) => (supply.tubeOn ? supply.mean(from, to) : 0),
  });
  world.supply = supply;
  for (const [name, high] of Object.entries({ loop_a: false, loop_b: false, button: false, ...scene.start })) {
    setInput(world, name, high);
  }
  if (scene.contactors) {
    world.contactors = new Contactors(world, scene.contactors);
    if (scene.contactors.switch_supply) {
      supply.tubeOn = false;
      world.contactors.onMove = (closed) => {
        supply.tubeOn = closed;
      };
    }
  } else {
    world.setPin(PIN.released, scene.start?.released ?? true);
  }
  for (const event of scene.events ?? []) {
    world.agenda.at(event.at * S, () => apply(world, event));
  }
  return world;
}

function setInput(world, name, high) {
  if (!(name in PIN)) throw new Error(`a scene sets "${name}", which is not an input`);
  world.setPin(PIN[name], high);
}

/** Carries out one event of a scene. */
export function apply(world, event) {
  const { agenda, now } = world;
  for (const [what, value] of Object.entries(event)) {
    switch (what) {
      case 'at':
      case 'note':
        break;
      case 'set':
        for (const [name, high] of Object.entries(value)) setInput(world, name, high);
        break;
      case 'press':
        world.setPin(PIN.button, true);
        agenda.at(now + value * S, () => world.setPin(PIN.button, false));
        break;
      case 'strobe':
        for (let i = 0; i < (value.count ?? 1); i++) {
          const start = now + i * (value.every ?? 0) * S;
          agenda.at(start, () => world.setPin(PIN.strobe, true));
          agenda.at(start + value.for * S, () => world.setPin(PIN.strobe, false));
        }
        break;
      case 'volts':
        world.supply.go(now, value.to, value.over);
        break;
      case 'converter':
        Object.assign(world.converters[value.which], value.set);
        break;
      case 'bus':
        world.buses[value.which].hold(value.held);
        break;
      case 'adc':
        world.adc[value.channel] = value.code;
        break;
      case 'usb':
        if ('plugged' in value) world.usb.plug(value.plugged);
        if ('reading' in value) world.usb.read(value.reading);
        break;
      case 'power_cut':
        world.powerCutAt = now;
        break;
      case 'power_on':
        world.boot(true);
        break;
      case 'frame':
        world.onFrame?.(value);
        break;
      case 'step_utc_ns':
        world.utcStep = (world.utcStep ?? 0n) + BigInt(value);
        break;
      default:
        throw new Error(`a scene has an event "${what}", which is not known`);
    }
  }
}
