// The certificate in flash, through power cuts.

import { Bench, MS, certificate } from '../lib/bench.js';
import { check } from '../lib/report.js';
import { Random } from '../lib/random.js';

const SCENE = { seconds: 1e6, seed: 6, start: { loop_a: true, loop_b: true } };

export function powerCuts(image, cuts) {
  const bench = new Bench(image, SCENE);
  const { world, host } = bench;
  bench.greeted();
  const device = host.hellos[0].device;
  const blank = host.hellos[0].certificate.every((byte) => byte === 0);
  bench.certify(1);
  const span = timeOfWrite(bench, device);
  const random = new Random(9);
  const seen = { old: 0, new: 0, neither: 0, within: 0 };
  let current = 2;
  for (let i = 0; i < cuts; i++) {
    const next = (current % 250) + 1;
    // Half of the cuts anywhere from the request to well after the write, half within the short program at its end.
    const after = i % 2 ? random.next() * (span.end + 5 * MS) : span.program + (random.next() * 1.5 - 0.2) * (span.end - span.program);
    const sent = world.now;
    world.powerCutAt = sent + after;
    if (after > span.erase && after < span.end) seen.within++;
    host.send({ is: 'WriteCertificate', ...certificate(device, next) });
    bench.until('the power cut', () => world.chip === null, 300);
    const hellos = host.hellos.length;
    world.run(world.now + 20 * MS);
    world.boot(true);
    bench.until('the hello after the cut', () => host.hellos.length > hellos, 3000);
    const got = host.hellos.at(-1).certificate[0];
    if (got === next) seen.new++;
    else if (got === current) seen.old++;
    else seen.neither++;
    current = got;
  }
  check(
    `a certificate is written and the power cut at ${cuts} random instants: the old one or the new one`,
    blank && seen.neither === 0 && seen.old > 20 && seen.new > 5 && seen.within > cuts / 2,
    `${seen.old} old, ${seen.new} new, ${seen.neither} neither; ${seen.within} cuts fell within the write`,
  );
  const epochs = host.hellos.map((hello) => hello.epoch);
  const up = epochs.every((epoch, i) => i === 0 || epoch > epochs[i - 1]);
  check('every start has a higher number than the one before', up, `${epochs[0]} to ${epochs.at(-1)} over ${epochs.length} starts`);
}

// One write without a cut: when, from the request on, its erase and program begin and it ends.
function timeOfWrite(bench, device) {
  const { world, host } = bench;
  const sent = world.now;
  const first = world.flashWrites.length;
  host.send({ is: 'WriteCertificate', ...certificate(device, 2) });
  bench.run(200);
  const [erase, program] = world.flashWrites.slice(first);
  return { erase: erase.at - sent, program: program.at - sent, end: program.at - sent + 0.4 * MS };
}

export function refusedWhileGiven(image) {
  const bench = new Bench(image, { ...SCENE, contactors: {} });
  bench.ready();
  const { host, world } = bench;
  const writes = world.flashWrites.length;
  const answer = bench.certify(7);
  check(
    'a certificate is refused while the permit is given, with that reason',
    answer.is === 'Refused' && answer.why === 'PermitGiven' && world.flashWrites.length === writes && bench.permitRuns,
    `${answer.is}, ${answer.why}; the permit runs on`,
  );
  return host;
}
