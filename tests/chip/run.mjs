#!/usr/bin/env node
// A Pico without a Pico: runs a MicroPython image on an emulated RP2040 beside the plant.
//
//   node run.mjs --image IMAGE.bin --bootrom ROM.bin [--lfs FILES.img] [--plant PLANT.json]
//                [--speed 1] [--port 0] [--control 0] [--uptime-us 0]
//
// IMAGE.bin is the raw flash image of a Pico (offset 0), ROM.bin the raw 16 KiB boot ROM of
// revision B1; neither belongs to this project. FILES.img is a littlefs image, put at 0xA0000.
// --speed caps emulated time over wall time; 0 means no cap. --uptime-us starts the chip's timer
// elsewhere than at 0.
//
// Two TCP ports are served and named in one JSON line on stdout when the chip runs:
//   link     the chip's USB serial. A connection is an open port (DTR); a chip reset drops it.
//   control  one JSON object a line in, one out:
//     {"do": "time"}                       emulated time in ns, boots so far
//     {"do": "edges"}                      changes of GP2, GP3, GP4 since the last call, as
//                                          [pin, 0 or 1 or null, ns]; null = not driven; and GP15
//                                          as it goes high, for tests to mark a moment
//     {"do": "said"}                       the last of what the chip has sent over its link
//     {"do": "plant"}                      the plant's state
//     {"do": "describe", "plant": {...}}   another description, see plant.mjs
//     {"do": "drive", "pin": 5, "level": 0}  the pin alone
//     {"do": "change", "what": "weld", "value": 1}          something goes wrong now, or at
//     {"do": "after_closing", "delay_us": 5000, "what": "power_off", "value": 1}   such a time
//                                          after the source next conducts: names and values of
//                                          mishaps.py, a source as u_volt, i_ampere, open_volt
//     {"do": "record"}                     what moved since the start: [us, what, level]
//     {"do": "forge", "bytes": [3]}        bytes on the link that no host has sent; when, in ns
//     {"do": "speed", "cap": 0}

import fs from 'node:fs';
import net from 'node:net';
import v8 from 'node:v8';
import { parseArgs } from 'node:util';
import { ConsoleLogger, LogLevel, RP2040, USBCDC } from 'rp2040js';
import { correct } from './corrections.mjs';
import { Plant } from './plant.mjs';

// The interpreter is one very large function, which the compiler leaves alone by default.
v8.setFlagsFromString('--max-inlined-bytecode-size=2000');
v8.setFlagsFromString('--max-inlined-bytecode-size-cumulative=20000');
v8.setFlagsFromString('--max-optimized-bytecode-size=200000');

const FLASH_BYTES = 2 * 1024 * 1024;
const FILES_AT = 0xa0000;
const SLICE_NS = 4e6;
const LATE_NS = 20e6; // further behind the wall clock than this: never caught up in a burst
const EDGES_KEPT = 200_000;
const OUTPUTS = [2, 3, 4];
const MARK = 15;
const SAID_KEPT = 8192;
// Flash times of a W25Q16JV, typical.
const ERASE_SECTOR_US = 45_000;
const PROGRAM_PAGE_US = 400;

const { values: options } = parseArgs({
  options: {
    image: { type: 'string' }, bootrom: { type: 'string' }, lfs: { type: 'string' },
    plant: { type: 'string' }, speed: { type: 'string', default: '1' },
    port: { type: 'string', default: '0' }, control: { type: 'string', default: '0' },
    'uptime-us': { type: 'string', default: '0' },
  },
});
if (!options.image || !options.bootrom) {
  console.error('name a Pico image and a boot ROM: --image IMAGE.bin --bootrom ROM.bin');
  process.exit(2);
}

const romFile = fs.readFileSync(options.bootrom);
const rom = new Uint32Array(romFile.buffer.slice(romFile.byteOffset, romFile.byteOffset + 16384));
const flash = new Uint8Array(FLASH_BYTES).fill(0xff); // what is on the flash, over resets
flash.set(fs.readFileSync(options.image));
if (options.lfs) flash.set(fs.readFileSync(options.lfs), FILES_AT);
const outside = { powerOff, powerOn, cutLink };
const description = options.plant && JSON.parse(fs.readFileSync(options.plant, 'utf8'));
const plant = new Plant(description, outside);

const world = { base: 0, boot: 0, uptimeUs: Number(options['uptime-us']) };
let mcu, core, api, usb; // of the present boot
let resetWanted = null;
let powered = true;
let bootWanted = false;
let edges = [];
let edgesDropped = 0;
let said = Buffer.alloc(0);
let speed = Number(options.speed);

// ---- the chip ----

// The flash is no device of its own here: the boot ROM's routines for it are replaced by
// breakpoints 0xf0 to 0xf5, which end up in onBreak.
function replaceFlashRoutines() {
  const bytes = new DataView(mcu.bootrom.buffer);
  const halves = new Uint16Array(mcu.bootrom.buffer);
  ['IF', 'EX', 'RE', 'RP', 'FC', 'CX'].forEach((name, index) => {
    const code = name.charCodeAt(0) | (name.charCodeAt(1) << 8);
    let entry = bytes.getUint16(0x14, true);
    while (bytes.getUint16(entry, true) !== code) entry += 4;
    const at = (bytes.getUint16(entry + 2, true) & ~1) >> 1;
    halves[at] = 0xbef0 + index; // bkpt
    halves[at + 1] = 0x4770; // bx lr
  });
  const registers = mcu.core.registers;
  const cycles = (us) => Math.round(us * mcu.clkSys / 1e6);
  mcu.onBreak = (number) => {
    const [offset, second, third] = registers;
    if (number === 0xf2) { // flash_range_erase(offset, count)
      mcu.flash.fill(0xff, offset, offset + second);
      flash.fill(0xff, offset, offset + second);
      return cycles(ERASE_SECTOR_US * Math.ceil(second / 4096));
    }
    if (number === 0xf3) { // flash_range_program(offset, data, count)
      for (let n = 0; n < third; n += 1) mcu.flash[offset + n] &= mcu.readUint8(second + n);
      flash.set(mcu.flash.subarray(offset, offset + third), offset);
      return cycles(PROGRAM_PAGE_US * Math.ceil(third / 256));
    }
    if (number < 0xf0) console.error(`breakpoint ${number} at 0x${mcu.core.PC.toString(16)}`);
    return 0;
  };
}

// The chip stands still from this instruction on.
function powerOff() {
  if (!powered) return;
  powered = false;
  core.stop = true;
  for (const pin of OUTPUTS) noteEdge(pin, null, nanos());
  cutLink();
}

function powerOn() { bootWanted = !powered; }

function noteEdge(pin, level, ns) {
  if (edges.length < EDGES_KEPT) edges.push([pin, level, Math.round(ns)]);
  else edgesDropped += 1;
}

async function boot(carried) {
  mcu = new RP2040();
  mcu.logger = new ConsoleLogger(LogLevel.Error, false);
  mcu.loadBootrom(rom);
  mcu.flash.set(flash);
  api = correct(mcu, world);
  replaceFlashRoutines();
  const watchdog = mcu.peripherals[0x40058];
  if (carried) { // a watchdog reset leaves these two
    watchdog.reason = carried.reason;
    watchdog.scratchData.set(carried.scratch);
  }
  watchdog.onWatchdogTrigger = () => {
    watchdog.timer.enable = false;
    watchdog.alarm.enable = false;
    resetWanted = { reason: watchdog.reason, scratch: watchdog.scratchData.slice() };
    core.stop = true;
  };
  usb = new UsbHost(mcu);
  if (carried) for (const pin of OUTPUTS) noteEdge(pin, null, nanos()); // in reset
  for (const pin of OUTPUTS) {
    api.onPin(pin, (level, ns) => { if (powered) noteEdge(pin, level, ns); });
  }
  api.onPin(MARK, (level, ns) => { if (powered && level === 1) noteEdge(MARK, level, ns); });
  plant.attach(api);
  mcu.core.PC = 0x10000000;
  core = (await import(`./core.mjs?boot=${world.boot}`)).makeCore(mcu);
}

const nanos = () => world.base + mcu.clock.nanosCounter;

// ---- its USB serial, as one TCP connection ----

let client = null;

class UsbHost {
  constructor(chip) {
    this.waiting = []; // sizes of OUT transfers that the chip is ready for
    this.pending = Buffer.alloc(0);
    this.ready = false;
    this.dtr = null;
    this.cdc = new USBCDC(chip.usbCtrl);
    this.chip = chip;
    this.cdc.onDeviceConnected = () => {
      this.ready = true;
      setTimeout(() => this.setDtr(client !== null), 0);
    };
    this.cdc.onSerialData = (bytes) => {
      said = Buffer.concat([said, bytes]).subarray(-SAID_KEPT);
      client?.write(Buffer.from(bytes));
    };
    chip.usbCtrl.onEndpointRead = (endpoint, size) => {
      if (endpoint !== this.cdc.outEndpoint) return;
      this.waiting.push(size);
      this.feed();
    };
  }

  setDtr(on) {
    if (!this.ready || this.dtr === on) return;
    this.dtr = on;
    this.cdc.cdcSetControlLineState(on ? 3 : 0);
  }

  take(bytes) {
    this.pending = Buffer.concat([this.pending, bytes]);
    if (this.pending.length > 65536) client?.pause();
    this.feed();
  }

  forget() { this.pending = Buffer.alloc(0); }

  // Packets of at most 64 bytes; without a waiting transfer the endpoint answers "not now".
  feed() {
    while (this.waiting.length && this.pending.length) {
      const size = Math.min(this.waiting.shift(), this.pending.length, 64);
      const packet = Uint8Array.from(this.pending.subarray(0, size));
      this.pending = this.pending.subarray(size);
      if (this.pending.length < 8192) client?.resume();
      this.chip.usbCtrl.endpointReadDone(this.cdc.outEndpoint, packet);
    }
  }
}

function cutLink() {
  client?.destroy();
  client = null;
  usb.forget();
  const chip = usb;
  setImmediate(() => chip.setDtr(client !== null)); // between two slices of the chip
}

const linkServer = net.createServer((socket) => {
  if (!powered) {
    socket.destroy();
    return;
  }
  client?.destroy();
  client = socket;
  socket.setNoDelay(true);
  usb.forget();
  usb.setDtr(true);
  socket.on('data', (bytes) => { if (socket === client) usb.take(bytes); });
  const gone = () => {
    if (socket !== client) return;
    client = null;
    usb.forget();
    usb.setDtr(false);
  };
  socket.on('close', gone);
  socket.on('error', gone);
});

// ---- the control port ----

const orders = {
  time: () => ({ ns: nanos(), boots: world.boot }),
  edges: () => {
    const answer = { edges, dropped: edgesDropped };
    edges = [];
    edgesDropped = 0;
    return answer;
  },
  said: () => ({ text: said.toString('latin1') }),
  plant: () => plant.state(nanos()),
  describe: (order) => { plant.describe(order.plant); return {}; },
  change: (order) => { plant.change(order.what, order.value, nanos()); return {}; },
  after_closing: (order) => {
    plant.afterClosing(order.delay_us, order.what, order.value);
    return {};
  },
  record: () => ({ entries: plant.record(nanos()) }),
  drive: (order) => { api.drive(order.pin, order.level); return {}; },
  forge: (order) => { usb.take(Buffer.from(order.bytes)); return { ns: Math.round(nanos()) }; },
  speed: (order) => { speed = order.cap; return {}; },
};

const controlServer = net.createServer((socket) => {
  let text = '';
  socket.on('error', () => {});
  socket.on('data', (bytes) => {
    text += bytes;
    const lines = text.split('\n');
    text = lines.pop();
    for (const line of lines) {
      let answer;
      try {
        const order = JSON.parse(line);
        answer = orders[order.do](order);
      } catch (error) {
        answer = { error: String(error) };
      }
      socket.write(`${JSON.stringify(answer)}\n`);
    }
  });
});

// ---- time ----

let wallFrom = performance.now();
let emulatedFrom = 0;

async function turn() {
  const here = nanos();
  let until = here + SLICE_NS;
  if (speed > 0) {
    let allowed = emulatedFrom + (performance.now() - wallFrom) * 1e6 * speed;
    if (here < allowed - LATE_NS || here > allowed + SLICE_NS) {
      wallFrom = performance.now();
      emulatedFrom = here;
      allowed = here;
    }
    until = Math.min(until, allowed);
  }
  if (until > here) {
    if (powered) core.run(until - world.base);
    else world.base += until - here;
  }
  if (!powered) resetWanted = null;
  if (resetWanted || bootWanted) {
    const carried = resetWanted;
    resetWanted = null;
    bootWanted = false;
    powered = true;
    console.error(`chip ${carried ? 'reset' : 'powered'} at ${(nanos() / 1e6).toFixed(3)} ms`);
    world.base = nanos();
    world.boot += 1;
    world.uptimeUs = 0;
    client?.destroy();
    client = null;
    await boot(carried);
  }
  if (speed > 0 && until <= here + 2e5) setTimeout(turn, 1);
  else setImmediate(turn);
}

process.on('SIGTERM', () => process.exit(0));
await boot(null);
const listen = (server, port) => new Promise((done) => {
  server.listen(Number(port), '127.0.0.1', () => done(server.address().port));
});
const ports = {
  link: await listen(linkServer, options.port),
  control: await listen(controlServer, options.control),
};
console.log(JSON.stringify(ports));
turn();
