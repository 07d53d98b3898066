// Hosts that fall silent, and hosts on both ports.

import { Bench, S } from '../lib/bench.js';
import { Host } from '../lib/host.js';
import { check } from '../lib/report.js';

const SCENE = { seconds: 1e6, seed: 7, start: { loop_a: true, loop_b: true } };

/** Silent for `seconds`, then back: what is missing must be announced, to the number. */
function silence(image, seconds) {
  const bench = new Bench(image, { ...SCENE, contactors: {} });
  bench.ready();
  const { host, world } = bench;
  bench.run(2000);
  const { permit } = world.edges;
  host.silent = true;
  world.usb.plug(false);
  const from = world.now;
  while (world.now < from + seconds * S) world.run(from + seconds * S);
  const withdrawn = (permit.last - from) / S;
  host.silent = false;
  world.usb.plug(true);
  bench.run(10000);
  const numbers = host.readings.map((r) => r.seq);
  const announced = new Set();
  for (const { stream, first, count } of host.gaps) {
    if (stream === 'Readings') for (let seq = first; seq < first + count; seq++) announced.add(seq);
  }
  const got = new Set(numbers);
  let missing = 0;
  let unannounced = 0;
  for (let seq = 0; seq < numbers.at(-1); seq++) {
    if (got.has(seq)) continue;
    missing++;
    if (!announced.has(seq)) unannounced++;
  }
  // What had arrived but was not yet acknowledged is announced too: the board cannot know.
  const excess = [...announced].filter((seq) => got.has(seq)).length;
  return { missing, announced: announced.size, unannounced, excess, withdrawn, count: numbers.length };
}

export function hostSilent(image) {
  const short = silence(image, 60);
  check(
    'the host is silent for 60 s and back: every reading arrives, the permit was withdrawn after the grace time',
    short.missing === 0 && short.announced === 0 && short.withdrawn > 4 && short.withdrawn < 6,
    `${short.count} readings, ${short.missing} missing; permit withdrawn ${short.withdrawn.toFixed(2)} s after`,
  );
  const long = silence(image, 90);
  check(
    'beyond the capacity of the journal the gap is announced with its exact count',
    long.missing > 500 && long.unannounced === 0 && long.missing === long.announced - long.excess && long.excess < 100,
    `${long.missing} missing, ${long.announced} announced, of which ${long.excess} had arrived without being acknowledged`,
  );
}

export function twoPorts(image) {
  const bench = new Bench(image, SCENE);
  const { world } = bench;
  bench.greeted();
  const second = new Host(world, {
    send: (bytes) => world.uartSend(bytes),
    attach: (receive) => {
      world.onUartByte = (byte) => receive([byte]);
    },
  });
  second.hello();
  bench.run(300);
  const busy = second.others.filter((m) => m === 'Busy').length;
  check(
    'a second host, on the serial port, hears that the controller is busy',
    busy > 0 && second.hellos.length === 0 && second.readings.length === 0,
    `${busy} times busy, nothing else`,
  );
  world.usb.plug(false);
  bench.host.silent = true;
  bench.run(6000);
  second.hello();
  bench.run(2000);
  const readings = second.readings.length;
  check(
    'when the first host has left, the second is served on the serial port',
    second.hellos.length > 0 && readings > 150 && second.decoder.damaged === 0,
    `${readings} readings over the serial port, ${second.decoder.damaged} damaged frames`,
  );
}

export function hostThatDoesNotRead(image) {
  const bench = new Bench(image, SCENE);
  const { world, host } = bench;
  bench.greeted();
  bench.run(1000);
  world.usb.read(false);
  bench.run(5000);
  const polls = world.idleNs;
  world.usb.read(true);
  bench.run(5000);
  const holes = host.readings.filter((r, i) => r.seq !== i).length;
  check(
    'a host that does not read for 5 s loses nothing and stops nothing',
    holes === 0 && host.decoder.damaged === 0 && world.resets.length === 0 && polls > 0,
    `${host.readings.length} readings, ${holes} out of sequence, ${host.decoder.damaged} damaged frames`,
  );
}
