// How fast the permit is withdrawn, whatever the cause.

import { Bench, MS } from '../lib/bench.js';
import { check } from '../lib/report.js';
import { Random } from '../lib/random.js';

const SCENE = { seconds: 1e6, seed: 5, contactors: {} };

export function latency(image, phases) {
  const bench = new Bench(image, SCENE);
  bench.ready();
  const random = new Random(77);
  const all = [];
  for (let i = 0; i < phases; i++) {
    // Any phase of the tick, of the square wave and of the converters.
    bench.run(60 + 3 * random.next());
    all.push(bench.timeToWithdraw(() => bench.loops(false)));
    bench.run(40);
    bench.loops(true);
    bench.until('the controller to ask for the button', () => bench.host.status.permit === 'AwaitingPress', 3000);
    bench.press(60);
    bench.until('the permit', () => bench.permitRuns, 1000);
  }
  all.sort((a, b) => a - b);
  const worst = all.at(-1);
  check(
    `a loop opens: permit withdrawn within 1 ms, ${phases} random phases`,
    worst <= 1 && all.length === phases,
    `worst ${worst.toFixed(3)} ms, median ${all[phases >> 1].toFixed(3)} ms`,
  );
}

/** One fault on a running bench: what it is called, what is done, which trip must latch, and within what time, ms. */
const FAULTS = [
  ['loop A alone opens', (b) => b.set({ loop_a: false }), ['LoopOpened', 'LoopsDisagree'], 1],
  ['over-voltage', (b) => b.world.supply.go(b.world.now, 6000), ['OverVoltage'], 10],
  ['main converter silent', (b) => (b.world.converters.sense.fault = 'silent'), ['SenseSilent'], 50],
  ['cross converter silent', (b) => (b.world.converters.cross.fault = 'silent'), ['CrossSilent'], 50],
  ['main converter does not answer', (b) => (b.world.converters.sense.fault = 'nak'), ['SenseSilent'], 50],
  ['main bus held', (b) => b.world.buses.sense.hold('data-stuck'), ['SenseSilent'], 50],
  ['cross bus held', (b) => b.world.buses.cross.hold('clock-stuck'), ['CrossSilent'], 50],
  ['main converter frozen', (b) => (b.world.converters.sense.fault = 'frozen'), ['SenseFrozen', 'SensesDisagree'], 3000],
  ['cross converter frozen', (b) => (b.world.converters.cross.fault = 'frozen'), ['CrossFrozen', 'SensesDisagree'], 3000],
  ['senses drift apart by 2 %', (b) => (b.world.converters.sense.gain = 1.02), ['SensesDisagree', 'RatioChanged'], 2500],
  ['an element of the string shorts (11 % up)', (b) => (b.world.converters.sense.gain = 10 / 9), ['RatioChanged', 'SensesDisagree'], 2500],
  ['the string opens', (b) => (b.world.converters.sense.gain = 0), ['SenseLost', 'SensesDisagree', 'RatioChanged', 'Arc'], 2500],
  ['the low side opens', (b) => (b.world.converters.sense.gain = 30), ['TapOverRange', 'OverVoltage'], 50],
  ['contactors drop without cause', (b) => b.set({ released: true }), ['ContactorDropped'], 300],
];

export function faults(image) {
  for (const [name, act, trips, limit] of FAULTS) {
    const bench = new Bench(image, SCENE);
    bench.ready();
    bench.world.supply.go(bench.world.now, 3500, 0.5);
    bench.run(2500);
    if (name.includes('contactors')) bench.world.contactors.look = () => {};
    const took = bench.timeToWithdraw(() => act(bench), limit + 2000);
    bench.run(1200);
    const latched = bench.host.latched;
    const named = trips.filter((trip) => latched.includes(trip));
    const silent = bench.world.resets.length === 0;
    check(
      `${name}: permit withdrawn, cause named`,
      took <= limit && named.length > 0 && silent,
      `${took.toFixed(2)} ms (limit ${limit}), latched ${latched.join(', ')}`,
    );
  }
}

export function heldBus(image) {
  const bench = new Bench(image, SCENE);
  bench.ready();
  bench.run(1000);
  const polls = bench.world.edges.permit.count;
  bench.world.buses.sense.hold('data');
  bench.run(1000);
  const events = bench.host.eventsOf('BusRecovered', { cross: false, freed: true });
  const before = bench.world.converters.sense.conversions;
  const reading = bench.host.readings.at(-1);
  check(
    'a data line held low is freed by nine clocks and the converter goes on',
    events.length > 0 && reading.sense.count >= 7 && before > 0 && bench.world.resets.length === 0,
    `${events.length} recovery, last reading has ${reading.sense.count} conversions, no reset; ` +
      `${bench.world.edges.permit.count - polls} permit edges meanwhile`,
  );

  bench.world.buses.sense.hold('clock-stuck');
  bench.run(500);
  bench.loops(true);
  const statuses = bench.host.statuses.length;
  bench.run(1000);
  const alive = bench.host.statuses.length - statuses;
  const silent = bench.host.readings.at(-1);
  check(
    'a clock line held for good: converter silent, loop alive, the other converter still read',
    bench.host.latched.includes('SenseSilent') && alive >= 9 && silent.cross.count >= 7 && silent.sense.count === 0,
    `${alive} statuses within a second, last reading ${silent.sense.count}/${silent.cross.count} conversions`,
  );
  const both = new Bench(image, SCENE);
  both.ready();
  both.run(500);
  both.world.buses.sense.hold('clock-stuck');
  both.world.buses.cross.hold('data-stuck');
  both.run(2);
  const took = both.timeToWithdraw(() => both.loops(false));
  check('both buses held, a loop opens', took <= 1, `permit withdrawn after ${Math.max(0, took).toFixed(3)} ms`);
}

export function deadLoop(image) {
  const bench = new Bench(image, SCENE);
  bench.ready();
  bench.run(500);
  const { world, host } = bench;
  const { permit } = world.edges;
  const hellos = host.hellos.length;
  const dead = world.now;
  world.setPin(2, true);
  bench.until('the watchdog', () => world.resets.length > 0, 200);
  const reset = world.resets[0].at;
  const running = permit.filter((at) => at > dead && at < reset);
  const stopped = running.length ? running.at(-1) - dead : 0;
  world.setPin(2, false);
  bench.until('the next hello', () => host.hellos.length > hellos, 3000);
  bench.run(1000);
  // A pin that stood high falls once with the reset: one edge is no square wave.
  const after = permit.filter((at) => at >= reset).length;
  const { reset_cause } = host.hellos.at(-1);
  check(
    'a dead main loop is reset by the watchdog; the permit stays withdrawn and the next hello names the cause',
    stopped <= 1 * MS && after <= 1 && reset_cause === 'Watchdog',
    `last edge of the running permit ${(stopped / MS).toFixed(3)} ms after, reset after ${((reset - dead) / MS).toFixed(1)} ms, ` +
      `${after} edges from there to a second after the hello, cause ${reset_cause}`,
  );
}
