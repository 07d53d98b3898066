// Everything the image must show under emulation:
//   node checks.js UF2 ELF DEAD-LOOP-ELF PROGRAMS [GROUP...]
// PROGRAMS is the folder with `ringvolt` and `board-records`.

import { writeFileSync } from 'node:fs';
import { dirname } from 'node:path';
import { fileURLToPath } from 'node:url';

import * as link from './checks/link.js';
import * as permit from './checks/permit.js';
import * as program from './checks/program.js';
import { readings } from './checks/readings.js';
import * as store from './checks/store.js';
import { readImage } from './lib/image.js';
import { check, finish, group } from './lib/report.js';

const dir = dirname(fileURLToPath(import.meta.url));
const [uf2, elf, deadElf, programs, ...names] = process.argv.slice(2);
const image = readImage(uf2);
const context = { dir, uf2, programs };

function sameImage() {
  const other = readImage(elf);
  const differ = image.filter((byte, i) => byte !== other[i]).length;
  check('UF2 and ELF hold the same image', differ === 0, `${differ} bytes differ`);
}

const groups = {
  image: sameImage,
  readings: () => {
    const host = readings(image, dir);
    if (process.env.RINGVOLT_CAPTURE) writeFileSync(process.env.RINGVOLT_CAPTURE, Buffer.concat(host.captured));
  },
  program: () => program.wholeMinute(context),
  repeat: () => program.repeatable(context),
  latency: () => permit.latency(image, Number(process.env.RINGVOLT_PHASES ?? 1000)),
  faults: () => permit.faults(image),
  bus: () => permit.heldBus(image),
  dead: () => permit.deadLoop(readImage(deadElf)),
  cuts: () => store.powerCuts(image, 200),
  refused: () => store.refusedWhileGiven(image),
  silent: () => link.hostSilent(image),
  ports: () => link.twoPorts(image),
  unread: () => link.hostThatDoesNotRead(image),
};

const unknown = names.filter((name) => !(name in groups));
if (unknown.length) {
  console.error(`checks.js: no group ${unknown.join(', ')}; there are ${Object.keys(groups).join(', ')}`);
  process.exit(2);
}
for (const [name, action] of Object.entries(groups)) {
  if (names.length === 0 || names.includes(name)) await group(name, action);
}
finish();
