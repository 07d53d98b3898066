// The host program itself, as a person runs it, against the emulated board.

import { spawn } from 'node:child_process';
import { createInterface } from 'node:readline';
import { mkdirSync, mkdtempSync, readFileSync, readdirSync, rmSync, writeFileSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';

import { VOLTS_PER_CODE } from '../lib/bench.js';
import { check } from '../lib/report.js';
import { Supply, readScene } from '../lib/scene.js';

const BOOT_US = 3000;
const PATIENCE_MS = 300e3;

/** Runs a program to its end; its output, or an error with what it said. */
function program(path, args) {
  return new Promise((resolve, reject) => {
    const child = spawn(path, args, { timeout: PATIENCE_MS });
    let out = '';
    let err = '';
    child.stdout.on('data', (text) => (out += text));
    child.stderr.on('data', (text) => (err += text));
    child.on('error', reject);
    child.on('close', (code) => (code === 0 ? resolve(out) : reject(new Error(`${path} ended with ${code}: ${err}`))));
  });
}

/** One run of the program over a scene; where its tables are. */
async function run({ dir, uf2, programs }, scene, folder) {
  mkdirSync(join(folder, 'frames'), { recursive: true });
  const bench = join(dir, '../../host/examples/bench.toml');
  const records = join(folder, 'records.json');
  writeFileSync(records, await program(join(programs, 'board-records'), [bench]));
  const board = spawn(process.execPath, [
    ...[join(dir, 'serve.js'), '--image', uf2, '--scene', join(dir, `scenes/${scene}.json`)],
    ...['--clock', '0', '--records', records],
  ]);
  try {
    const lines = createInterface({ input: board.stdout })[Symbol.asyncIterator]();
    const ports = JSON.parse((await lines.next()).value);
    const file = join(folder, 'run.ringvolt');
    await program(join(programs, 'ringvolt'), [
      ...['run', '--bench', bench, '--link', `tcp:127.0.0.1:${ports.link}`, '--clock', `127.0.0.1:${ports.clock}`],
      ...['--frames', join(folder, 'frames'), '--out', file],
    ]);
    const measured = JSON.parse((await lines.next()).value);
    await program(join(programs, 'ringvolt'), ['export', file, '--out', join(folder, 'tables')]);
    return { measured, tables: join(folder, 'tables') };
  } finally {
    board.kill();
  }
}

function table(folder, name) {
  const [head, ...rows] = readFileSync(join(folder, `${name}.csv`), 'utf8').trimEnd().split('\n');
  const names = head.split(',');
  // No field before the ones used here holds a comma.
  return rows.map((row) => {
    const fields = row.split(',');
    return Object.fromEntries(names.map((column, i) => [column, fields[i]]));
  });
}

export async function wholeMinute(context) {
  const folder = mkdtempSync(join(tmpdir(), 'ringvolt-emulator-'));
  try {
    const { tables, measured } = await run(context, 'host', folder);
    const scene = readScene(join(context.dir, 'scenes/host.json'));
    minuteReadings(table(tables, 'readings'), table(tables, 'gaps'), scene);
    minuteEvents(table(tables, 'events'), scene);
    check(
      'idle share while the host program records',
      measured.idle_share >= 0.8,
      `${(100 * measured.idle_share).toFixed(1)} %, ${(measured.instructions / measured.virtual_s / 1e6).toFixed(1)} million instructions a second`,
    );
  } finally {
    rmSync(folder, { recursive: true });
  }
}

function minuteReadings(readings, gaps, scene) {
  const holes = readings.filter((r, i) => Number(r.seq) !== i).length;
  const tears = readings.filter(
    (r, i) => i > 0 && Number(r.time_us) !== Number(readings[i - 1].time_us) + Number(readings[i - 1].duration_us),
  ).length;
  check(
    'the host program records a minute: at least 5990 contiguous readings, none lost',
    readings.length >= 5990 && holes === 0 && tears === 0 && gaps.length === 0,
    `${readings.length} readings, ${holes} out of sequence, ${tears} tears in time, ${gaps.length} gaps`,
  );
  const supply = new Supply(scene.supply);
  for (const { at, volts } of scene.events) if (volts) supply.go(at * 1e9, volts.to, volts.over);
  let worst = 0;
  let judged = 0;
  for (const reading of readings) {
    const from = (Number(reading.time_us) + BOOT_US) * 1e3;
    const to = from + Number(reading.duration_us) * 1e3;
    const steady = supply.at(from - 2e6) === supply.at(to);
    if (!steady || Number(reading.time_us) < 200e3) continue;
    for (const column of ['volts', 'cross_volts']) {
      judged++;
      worst = Math.max(worst, Math.abs(Number(reading[column]) - supply.at(from)));
    }
  }
  check(
    'its voltages are within 1 LSB of the scene',
    judged > 10000 && worst <= VOLTS_PER_CODE * 1.06,
    `worst ${worst.toFixed(4)} V over ${judged} values; 1 LSB is ${VOLTS_PER_CODE.toFixed(4)} V (sense), 0.3300 V (cross)`,
  );
}

function minuteEvents(events, scene) {
  let worst = 0;
  let missed = 0;
  let expected = 0;
  const near = (code, sentence, at, tolerance) => {
    expected++;
    const times = events.filter((e) => e.code === code && e.sentence.includes(sentence)).map((e) => Number(e.time_us));
    const distance = Math.min(...times.map((time) => Math.abs(time + BOOT_US - at * 1e6)));
    if (!(distance <= tolerance)) missed++;
    else if (tolerance === 100) worst = Math.max(worst, distance);
  };
  for (const event of scene.events) {
    if (event.set) {
      const verb = event.set.loop_a ? 'closed' : 'opened';
      near('line', `Loop A ${verb}`, event.at, 100);
      near('line', `Loop B ${verb}`, event.at, 100);
    }
    if (event.press) {
      near('line', 'button was pressed', event.at, 100);
      near('permit-given', '', event.at + event.press, 1000);
    }
  }
  const opened = scene.events.find((e) => e.at > 10 && e.set);
  near('permit-withdrawn', '', opened.at, 1000);
  near('tripped', 'door', opened.at, 1000);
  check(
    'contacts, permit and trip are in the run file with their device times',
    missed === 0 && expected >= 9,
    `${expected - missed} of ${expected} found, contacts within ${worst} us`,
  );
}

export async function repeatable(context) {
  const folder = mkdtempSync(join(tmpdir(), 'ringvolt-emulator-'));
  try {
    const runs = await Promise.all(['a', 'b'].map((name) => run(context, 'short', join(folder, name))));
    const names = readdirSync(runs[0].tables);
    const differ = names.filter((name) => {
      const [a, b] = runs.map(({ tables }) => readFileSync(join(tables, name)));
      return !a.equals(b);
    });
    const readings = table(runs[0].tables, 'readings');
    const holes = readings.filter((r, i) => Number(r.seq) !== i).length;
    check(
      'two runs of the program over one scene, cable pulled and put back: exports equal byte for byte, nothing lost',
      differ.length === 0 && readings.length > 1180 && holes === 0,
      `${names.length} files, ${differ.length} differ (${differ.join(', ')}); ${readings.length} readings, ${holes} out of sequence`,
    );
  } finally {
    rmSync(folder, { recursive: true });
  }
}
