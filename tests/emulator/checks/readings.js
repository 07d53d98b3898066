// A quiet minute: every reading arrives, and says what the scene did.

import { Bench, S } from '../lib/bench.js';
import { check } from '../lib/report.js';
import { readScene } from '../lib/scene.js';

const LATE = 1 << 11;

export function readings(image, dir) {
  const scene = readScene(`${dir}/scenes/minute.json`);
  const bench = new Bench(image, scene);
  const { world, host } = bench;
  const bootOffsetUs = 3000;
  world.run(0.5 * S);
  bench.certify();
  const end = scene.seconds * S;
  while (world.now < end) world.run(end);

  const list = host.readings.filter((r) => r.time_us / 1e6 < scene.seconds);
  const holes = list.filter((r, i) => r.seq !== i).length;
  const tears = list.filter((r, i) => i > 0 && r.time_us !== list[i - 1].time_us + list[i - 1].duration_us).length;
  check(
    'a minute gives at least 5990 readings, in sequence, without a hole in time',
    list.length >= 5990 && holes === 0 && tears === 0 && host.gaps.length === 0 && host.decoder.damaged === 0,
    `${list.length} readings, ${holes} out of sequence, ${tears} tears in time, ${host.gaps.length} gaps, ` +
      `${host.decoder.damaged} damaged frames`,
  );

  let worst = 0;
  let judged = 0;
  let thin = 0;
  for (const reading of list) {
    for (const name of ['sense', 'cross']) {
      const { sum, count } = reading[name];
      // The first tenths of a second belong to setting up, and a write to the flash stops the processor, as it says.
      if (reading.time_us < 200e3 || reading.flags & LATE) continue;
      if (count < 7) thin++;
      // Conversions that end in the window integrated from one period before it.
      const from = reading.time_us * 1e3 + bootOffsetUs * 1e3;
      const part = world.converters[name];
      const expected = part.exactCode(part.volts(from - 1.2e6, from + reading.duration_us * 1e3));
      const slope = Math.abs(part.exactCode(part.volts(from + 10e6, from + 11e6)) - part.exactCode(part.volts(from, from + 1e6)));
      if (slope > 0.2) continue; // ramps are judged by the stamp, not here
      judged++;
      if (count) worst = Math.max(worst, Math.abs(sum / count - expected));
    }
  }
  check(
    'readings are within 1 LSB of the scene',
    judged > 10000 && worst <= 1 && thin === 0,
    `worst ${worst.toFixed(3)} LSB over ${judged} windows; ${thin} windows with fewer than 7 conversions`,
  );
  times(host, scene, bootOffsetUs);
  const idle = host.statuses.slice(10).map((s) => s.idle_per_mille).filter((v) => v !== null);
  const least = Math.min(...idle) / 10;
  const cycles = world.idleNs / (world.now - world.base);
  check(
    'idle share at the default rate',
    cycles >= 0.8 && least >= 60,
    `${(100 * cycles).toFixed(1)} % by the emulator's cycle count, least tenth of a second by the board's own ${least} %`,
  );
  return host;
}

function times(host, scene, bootOffsetUs) {
  let worst = 0;
  let missed = 0;
  let expected = 0;
  const near = (list, at) => {
    expected++;
    const distance = Math.min(...list.map((time_us) => Math.abs(time_us + bootOffsetUs - at * 1e6)));
    if (distance > 100) missed++;
    else worst = Math.max(worst, distance);
  };
  const rising = host.strobes.filter((s) => s.rising).map((s) => s.time_us);
  const falling = host.strobes.filter((s) => !s.rising).map((s) => s.time_us);
  const lines = (line, active) => host.eventsOf('Line', { line, active }).map((e) => e.time_us);
  for (const event of scene.events) {
    for (let i = 0; i < (event.strobe?.count ?? 0); i++) {
      near(rising, event.at + i * event.strobe.every);
      near(falling, event.at + i * event.strobe.every + event.strobe.for);
    }
    if (event.set?.loop_a !== undefined) near(lines('LoopA', event.set.loop_a), event.at);
    if (event.set?.loop_b !== undefined) near(lines('LoopB', event.set.loop_b), event.at);
    if (event.press) near(lines('Button', true), event.at);
  }
  check(
    'strobe, loop and button events carry their times to 100 us',
    missed === 0 && expected > 50,
    `${expected - missed} of ${expected} found, worst ${worst.toFixed(1)} us`,
  );
}
