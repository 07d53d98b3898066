// The USB host's side of the board's serial port: enumerates it, then carries bytes both ways.
//
// The emulator's own class for this answers every read at once with an empty packet; here a read is held until there are
// bytes. A host that does not read (`reading = false`) leaves the board's packets where they are.

// Control transfers as the USB 2.0 and CDC specifications number them.
const setup = (type, request, value, index, length) =>
  Uint8Array.of(type, request, value & 0xff, value >> 8, index & 0xff, index >> 8, length & 0xff, length >> 8);
const setAddress = (address) => setup(0x00, 5, address, 0, 0);
const getConfiguration = (length) => setup(0x80, 6, 2 << 8, 0, length);
const setConfiguration = (value) => setup(0x00, 9, value, 0, 0);
const setControlLines = (lines) => setup(0x21, 0x22, lines, 0, 0);
const CONFIGURATION_HEAD = 9;

/** A device has 2 ms to take its address (USB 2.0, 9.2.6.3); between other requests a host leaves a frame or so. */
const ADDRESS_NS = 2e6;
const REQUEST_NS = 1e6;

/** Numbers of the bulk endpoints in a configuration's descriptors. */
function bulkEndpoints(descriptors) {
  const found = {};
  for (let at = 0; at < descriptors.length; at += descriptors[at]) {
    const [, type, address, attributes] = descriptors.slice(at, at + 4);
    if (type === 5 && (attributes & 3) === 2) found[address & 0x80 ? 'in' : 'out'] = address & 0xf;
  }
  return found;
}

export class UsbHost {
  constructor(world) {
    this.world = world;
    this.onBytes = () => {};
    this.onUp = () => {};
    this.onDown = () => {};
    this.plugged = true;
    this.reading = true;
    this.toBoard = [];
    this.heldReads = new Map();
    this.detach();
  }

  detach() {
    this.onDown();
    this.up = false;
    this.toBoard.length = 0;
    this.heldReads = new Map();
    this.heldPackets = [];
    this.state = 'off';
    this.controller = null;
  }

  attach(chip) {
    this.detach();
    const usb = chip.usbCtrl;
    this.controller = usb;
    usb.onUSBEnabled = () => {
      if (this.plugged) usb.resetDevice();
    };
    usb.onResetReceived = () => this.enumerate();
    usb.onEndpointWrite = (endpoint, bytes) => this.fromBoard(endpoint, bytes);
    usb.onEndpointRead = (endpoint, size) => {
      // The board offers its buffers before the host has read which endpoint is the serial port's.
      this.heldReads.set(endpoint, size);
      this.feed();
    };
    const original = usb.DPRAMUpdated.bind(usb);
    usb.DPRAMUpdated = (offset, value) => {
      if (this.blocked(offset)) this.heldPackets.push([offset, value]);
      else original(offset, value);
    };
    this.release = original;
  }

  // A packet of the serial port's data while nobody reads stays in the board.
  blocked(offset) {
    return this.up && !(this.reading && this.plugged) && offset === 0x80 + 8 * this.in;
  }

  enumerate() {
    this.up = false;
    this.state = 'address';
    this.descriptors = [];
    this.controller.sendSetupPacket(setAddress(1));
  }

  fromBoard(endpoint, bytes) {
    if (endpoint === 0) this.control(bytes);
    else if (endpoint === this.in && this.up) this.onBytes(bytes);
  }

  // Sends a request after a pause, unless the board was reset meanwhile.
  request(packet, pause = REQUEST_NS) {
    const { controller, world } = this;
    world.agenda.at(world.now + pause, () => {
      if (this.controller === controller && this.plugged) controller.sendSetupPacket(packet);
    });
  }

  control(bytes) {
    if (this.state === 'address' && bytes.length === 0) {
      this.state = 'head';
      this.request(getConfiguration(CONFIGURATION_HEAD), ADDRESS_NS);
    } else if (this.state === 'head' && bytes.length === CONFIGURATION_HEAD) {
      this.state = 'descriptors';
      this.total = bytes[2] | (bytes[3] << 8);
      this.request(getConfiguration(this.total));
    } else if (this.state === 'descriptors' && bytes.length) {
      this.descriptors.push(...bytes);
      if (this.descriptors.length < this.total) return;
      const endpoints = bulkEndpoints(this.descriptors);
      this.in = endpoints.in;
      this.out = endpoints.out;
      this.state = 'configuration';
      this.request(setConfiguration(1));
    } else if (this.state === 'configuration' && bytes.length === 0) {
      this.state = 'lines';
      this.request(setControlLines(3));
    } else if (this.state === 'lines' && bytes.length === 0) {
      this.state = 'up';
      this.up = true;
      this.onUp();
      this.feed();
    }
  }

  /** Sends bytes to the board; they go out as the board takes them. */
  send(bytes) {
    for (const byte of bytes) this.toBoard.push(byte);
    this.feed();
  }

  feed() {
    const room = this.heldReads.get(this.out);
    if (!this.up || !this.plugged || !room || !this.toBoard.length) return;
    const bytes = Uint8Array.from(this.toBoard.splice(0, Math.min(64, room)));
    this.heldReads.delete(this.out);
    this.controller.endpointReadDone(this.out, bytes);
  }

  read(yes) {
    this.reading = yes;
    this.flush();
  }

  flush() {
    if (!this.reading || !this.plugged) return;
    for (const [offset, value] of this.heldPackets.splice(0)) this.release(offset, value);
  }

  /** Pulls the cable, or puts it back (the host then resets and enumerates the board anew). */
  plug(yes) {
    if (this.plugged === yes) return;
    this.plugged = yes;
    if (!yes) {
      this.onDown();
      this.toBoard = [];
      return;
    }
    this.up = false;
    this.heldPackets = [];
    this.heldReads = new Map();
    this.controller?.resetDevice();
  }
}
