// The emulated board behind TCP: `node serve.js --image FILE --scene FILE [--link PORT] [--clock PORT] [--frames DIR] [--records FILE]`
//
// With --clock, virtual time advances as README.md's clock stream says; without, it follows the wall clock as well as the
// machine can. Ports of 0 (the default) are chosen by the system. The first line on standard output names both; the
// last one, when the run is over, tells what was measured. A scene's "frame" event copies its file, found beside the
// scene, into --frames. --records names what `board-records BENCH` printed: the board then starts with that certificate and
// those settings in its flash.

import { copyFileSync, readFileSync } from 'node:fs';
import { createServer } from 'node:net';
import { dirname, join } from 'node:path';

import { putRecord } from './lib/flash.js';
import { readImage } from './lib/image.js';
import { readScene, stage } from './lib/scene.js';

const UTC_START_NS = 1764583200000000000n;

function options(args) {
  const found = { link: '0', clock: null, frames: null, records: null };
  for (let i = 0; i < args.length; i += 2) {
    const name = args[i].replace(/^--/, '');
    if (!['image', 'scene', 'link', 'clock', 'frames', 'records'].includes(name) || args[i + 1] === undefined) {
      fail(`unknown or unfinished argument ${args[i]}`);
    }
    found[name] = args[i + 1];
  }
  if (!found.image || !found.scene) fail('--image and --scene are needed');
  return found;
}

function fail(message) {
  console.error(`serve.js: ${message}`);
  process.exit(2);
}

const listen = (server, port) =>
  new Promise((resolve, reject) => {
    server.on('error', reject);
    server.listen(Number(port), '127.0.0.1', () => resolve(server.address().port));
  });

// The link as the host's operating system shows it: a serial port that is there while the board's USB is.
class Link {
  constructor(world) {
    this.world = world;
    this.count = 0;
    this.close();
    this.changed = () => {};
    world.usb.reading = false;
    world.usb.onBytes = (bytes) => {
      if (!this.socket) return;
      this.socket.write(bytes);
      this.written += bytes.length;
      world.stop();
    };
    world.usb.onDown = () => {
      if (!this.socket) return;
      this.gone = true;
      this.socket.end();
      this.close();
      world.stop();
    };
  }

  close() {
    this.socket = null;
    this.inbox = [];
    if (this.world.usb) this.world.usb.reading = false;
  }

  accept(socket) {
    socket.setNoDelay(true);
    this.count++;
    this.socket?.destroy();
    this.socket = socket;
    this.written = 0;
    this.received = 0;
    this.gone = false;
    this.inbox = [];
    socket.on('data', (bytes) => {
      if (this.socket !== socket) return;
      this.received += bytes.length;
      this.inbox.push(bytes);
      this.changed();
    });
    socket.on('close', () => {
      if (this.socket === socket) this.close();
      this.changed();
    });
    socket.on('error', () => {});
    this.changed();
  }

  deliver() {
    this.world.usb.read(this.socket !== null);
    for (const bytes of this.inbox.splice(0)) this.world.usb.send(bytes);
  }
}

// Serves the clock stream, one request after the other.
class Clock {
  constructor(world, link, endNs, done) {
    Object.assign(this, { world, link, endNs, done });
    this.requests = [];
    this.waiting = null;
    link.changed = () => this.proceed();
  }

  accept(socket) {
    socket.setNoDelay(true);
    this.socket = socket;
    this.answer({ ringvolt_clock: 1 });
    let text = '';
    socket.on('data', (bytes) => {
      text += bytes;
      const lines = text.split('\n');
      text = lines.pop();
      this.requests.push(...lines.filter((line) => line.trim()));
      this.proceed();
    });
    socket.on('close', () => this.done());
    socket.on('error', () => {});
  }

  answer(extra) {
    const { world, link } = this;
    const mono = Math.round(world.now);
    const utc = UTC_START_NS + BigInt(mono) + (world.utcStep ?? 0n);
    const rest = JSON.stringify({ links: link.count, link_bytes: link.written ?? 0, ...extra });
    // The civil time has more digits than a JavaScript number keeps.
    this.socket.write(`{"mono_ns":${mono},"utc_ns":${utc},${rest.slice(1)}\n`);
  }

  refuse(error) {
    this.answer({ error });
    this.socket.end();
    this.done();
  }

  proceed() {
    if (!this.waiting) {
      const line = this.requests.shift();
      if (line === undefined) return;
      let request;
      try {
        request = JSON.parse(line);
      } catch {
        return this.refuse('a request is not JSON');
      }
      if (!Number.isFinite(request.idle_until_ns)) return this.refuse('idle_until_ns is missing');
      this.waiting = { links: 0, sent: 0, ...request };
    }
    const { link, waiting, world } = this;
    if (link.count < waiting.links) return;
    if (link.socket && link.count === waiting.links && link.received < waiting.sent) return;
    this.waiting = null;
    link.deliver();
    world.run(Math.min(waiting.idle_until_ns, this.endNs));
    const extra = {};
    if (link.gone) extra.gone = true;
    if (world.now >= this.endNs) extra.end = true;
    this.answer(extra);
    setImmediate(() => this.proceed());
  }
}

function followWallClock(world, link, endNs, done) {
  let last = process.hrtime.bigint();
  const step = () => {
    const now = process.hrtime.bigint();
    // At most 50 ms at once, so that sockets are served on a slow machine too.
    const end = Math.min(world.now + Math.min(Number(now - last), 50e6), endNs);
    last = now;
    while (world.now < end) {
      link.deliver();
      world.run(end);
    }
    if (world.now >= endNs) done();
    else setTimeout(step, 1);
  };
  step();
}

async function main() {
  const chosen = options(process.argv.slice(2));
  let world;
  let scene;
  try {
    scene = readScene(chosen.scene);
    const flash = readImage(chosen.image);
    if (chosen.records) {
      const records = JSON.parse(readFileSync(chosen.records, 'utf8'));
      for (const [name, hex] of Object.entries(records)) putRecord(flash, name, Buffer.from(hex, 'hex'));
    }
    world = stage(scene, flash);
  } catch (error) {
    fail(error.message);
  }
  const link = new Link(world);
  const endNs = scene.seconds * 1e9;
  world.onFrame = ({ file, as }) => {
    if (chosen.frames) copyFileSync(join(dirname(chosen.scene), file), join(chosen.frames, as ?? file));
  };
  const done = () => {
    console.log(JSON.stringify(measured(world)));
    process.exit(0);
  };
  const linkServer = createServer((socket) => link.accept(socket));
  const ports = { link: await listen(linkServer, chosen.link) };
  world.boot(true);
  if (chosen.clock !== null) {
    const clock = new Clock(world, link, endNs, done);
    const clockServer = createServer((socket) => {
      clockServer.close();
      clock.accept(socket);
    });
    ports.clock = await listen(clockServer, chosen.clock);
  }
  console.log(JSON.stringify(ports));
  if (chosen.clock === null) followWallClock(world, link, endNs, done);
}

function measured(world) {
  const { permit } = world.edges;
  return {
    virtual_s: world.now / 1e9,
    idle_share: world.idleNs / world.now,
    instructions: world.instructions,
    resets: world.resets,
    permit_edges: permit.count ?? 0,
    permit_last_edge_s: (permit.last ?? 0) / 1e9,
    flash_writes: world.flashWrites.length,
  };
}

await main();
