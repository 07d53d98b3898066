// A board brought up to where most checks begin.

import { Host } from './host.js';
import { stage } from './scene.js';
import { PIN } from './world.js';

export const MS = 1e6;
export const S = 1e9;

/** Volts at the tube per code: 2.048 V full scale behind a divider of 5001. */
export const VOLTS_PER_CODE = (2.048 / 32768) * 5001;

/** A certificate record for the ideal divider. */
export function certificate(device, hash = 1) {
  const sense = {
    offset_nv: 0,
    slope_pv: Math.round(VOLTS_PER_CODE * 1e12),
    bend_av: 0,
    code_min: -200,
    code_max: 32000,
  };
  return {
    hash: [hash, 2, 3, 4, 5, 6, 7, 8],
    device,
    sense,
    cross: sense,
    difference_ppm: 500,
    difference_mv: 500,
    expires_day: 30000,
  };
}

export class Bench {
  constructor(image, scene, options = {}) {
    this.world = stage(scene, image);
    this.host = new Host(this.world, options);
    this.world.boot(true);
  }

  get ms() {
    return this.world.now / MS;
  }

  run(ms) {
    const end = this.world.now + ms * MS;
    while (this.world.now < end) this.world.run(end);
  }

  /** Runs until `condition` holds, at most `ms`; an error that says what was waited for if it does not. */
  until(what, condition, ms = 3000) {
    const end = this.world.now + ms * MS;
    while (!condition()) {
      if (this.world.now >= end) throw new Error(`waited ${ms} ms for: ${what}`);
      this.world.run(Math.min(end, this.world.now + MS));
    }
  }

  set(levels) {
    for (const [name, high] of Object.entries(levels)) this.world.setPin(PIN[name], high);
  }

  loops(closed) {
    this.set({ loop_a: closed, loop_b: closed });
  }

  press(ms = 100) {
    this.set({ button: true });
    this.run(ms);
    this.set({ button: false });
  }

  greeted() {
    this.until('the hello', () => this.host.hellos.length > 0);
  }

  /** Writes a certificate and waits for the answer. */
  certify(hash = 1) {
    const { host } = this;
    const before = host.others.length;
    host.send({ is: 'WriteCertificate', ...certificate(host.hellos.at(-1).device, hash) });
    this.until('the certificate to be stored', () =>
      host.others.slice(before).some((m) => (m.is === 'Done' || m.is === 'Refused') && m.request === 'WriteCertificate'),
    );
    return host.others.at(-1);
  }

  /** From power-on to the permit: certificate, loops open and closed, press and release. */
  ready() {
    this.loops(true);
    this.greeted();
    this.certify();
    this.permit();
  }

  permit() {
    this.loops(false);
    this.run(300);
    this.loops(true);
    this.until('the controller to ask for the button', () => this.host.status?.permit === 'AwaitingPress', 5000);
    this.press(200);
    this.until('the permit', () => this.permitRuns, 2000);
  }

  /** Whether the permit pin has made an edge within the last 2 ms. */
  get permitRuns() {
    const { permit } = this.world.edges;
    return permit.count > 0 && this.world.now - permit.last < 2 * MS;
  }

  /** Does `fault`, then waits until the permit has been still for 5 ms; how long after `fault` its last edge was, ms. */
  timeToWithdraw(fault, limit = 5000) {
    const { permit } = this.world.edges;
    const from = this.world.now;
    fault();
    this.until('the permit to be withdrawn', () => this.world.now - permit.last > 5 * MS, limit);
    return (permit.last - from) / MS;
  }
}
