// Everything the image must show under emulation: `node checks.js IMAGE.uf2 IMAGE.elf DEAD-LOOP.elf [NAME...]`

import { writeFileSync } from 'node:fs';
import { dirname } from 'node:path';
import { fileURLToPath } from 'node:url';

import * as link from './checks/link.js';
import * as permit from './checks/permit.js';
import { readings } from './checks/readings.js';
import * as store from './checks/store.js';
import { readImage } from './lib/image.js';
import { check, finish, group } from './lib/report.js';

const dir = dirname(fileURLToPath(import.meta.url));
const [uf2, elf, deadElf, ...names] = process.argv.slice(2);
const image = readImage(uf2);

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
  latency: () => permit.latency(image, Number(process.env.RINGVOLT_PHASES ?? 1000)),
  faults: () => permit.faults(image),
  bus: () => permit.heldBus(image),
  dead: () => permit.deadLoop(readImage(deadElf)),
  cuts: () => store.powerCuts(image, Number(process.env.RINGVOLT_CUTS ?? 200)),
  refused: () => store.refusedWhileGiven(image),
  silent: () => link.hostSilent(image),
  ports: () => link.twoPorts(image),
  unread: () => link.hostThatDoesNotRead(image),
};

for (const [name, action] of Object.entries(groups)) {
  if (names.length === 0 || names.includes(name)) await group(name, action);
}
finish();
