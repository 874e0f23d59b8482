// The analogue world beside the emulated chip: a source, its contacts, a capacitor, a bleed.
//
// Comes in: levels of GP2 (make and break), GP3 (relay coil), GP4 (bleed release coil), GP7 (the
// voltage channel's input at its zero) and a description as JSON. Goes out: a code for each
// conversion, levels of GP5 (stop loop) and GP6 (leads reversed). It is advanced only when
// somebody looks, in steps of at most STEP_NS. Its
// circuit is that of host/kneewise/emulator/circuit.py, with the source as a table; test_plant.py
// holds the two together, to one code.
//
//   { "codes": [1000, 2000, 3000] }         fixed codes of the three channels, or:
//   { "u_volt": [...], "i_ampere": [...],   the source's curve, u ascending, i falling to 0
//     "c_farad": 0.0022, "esr_ohm": 0.05,   the capacitor
//     "line_ohm": 0.1,                      leads, contact, switch and shunt together
//     "bleed_ohm": 100, "leak_ohm": 22000,  the bleed, and the permanent bleeder
//     "v_start": 0, "welded": 0, "bleed_open": 0,
//     "relay_operate_us": 8000, "relay_release_us": 5000,
//     "bleed_operate_us": 5000, "bleed_release_us": 5000,   operate = its contact opens
//     "switch_open_us": 50,                 the AC-coupled driver conducts so long after an edge
//     "volt_per_code": [v, c], "ampere_per_code": a, "zero_code": [v, i, c],
//     "noise_code": 0, "seed": 1,           standard deviation of a conversion
//     "wide_code": 1 }                      width of the wide codes of the chip's converter, in LSB
//   and in both: "stop_loop": 1, "reversed": 0, "spi": null or as in spi_pair.mjs

import { SpiPair } from './spi_pair.mjs';

const STEP_NS = 4000;
const PULSE = 2;
const RELAY = 3;
const RELEASE = 4;
const STOP_LOOP = 5;
const REVERSED = 6;
const ZERO_INPUT = 7;

const PLAIN = {
  codes: [0, 0, 0], stop_loop: 1, reversed: 0, zero_code: [0, 0, 0], noise_code: 0, seed: 1,
  v_start: 0, welded: 0, bleed_open: 0, esr_ohm: 0, line_ohm: 0, bleed_ohm: Infinity,
  leak_ohm: Infinity, relay_operate_us: 0, relay_release_us: 0, bleed_operate_us: 0,
  bleed_release_us: 0, switch_open_us: 50, wide_code: 1, spi: null,
};

// A contact that follows its coil after a delay.
class Contact {
  constructor(closed) {
    this.closed = closed;
    this.due = Infinity;
  }

  aim(closed, ns, delayUs) {
    if (closed === this.closed) this.due = Infinity;
    else if (this.due === Infinity) this.due = ns + 1000 * delayUs;
  }

  move(ns) {
    if (ns < this.due) return false;
    this.closed = !this.closed;
    this.due = Infinity;
    return true;
  }
}

export class Plant {
  constructor(description) {
    this.now = 0;
    this.spi = new SpiPair((ns) => [this.code(0, ns), this.code(1, ns)]);
    this.pins = { [PULSE]: null, [RELAY]: null, [RELEASE]: null, [ZERO_INPUT]: null };
    this.describe(description ?? {});
  }

  describe(description) {
    this.d = { ...PLAIN, ...description };
    this.random = this.d.seed >>> 0;
    this.v = this.d.v_start;
    this.closings = 0;
    this.overlapNs = 0; // contact and bleed both conducting
    this.lastEdge = -Infinity;
    this.relay = new Contact(false);
    this.bleed = new Contact(true);
    this.place = 1;
    if (this.d.u_volt) {
      this.loads = [false, true].map((bled) => this.load(bled));
      this.follow(this.now);
    }
    this.spi.describe(this.d.spi);
    if (this.api) this.drive();
  }

  // What the chip's inputs see, other than its converter's.
  drive() {
    this.api.drive(STOP_LOOP, this.d.stop_loop);
    this.api.drive(REVERSED, this.d.reversed);
  }

  // What hangs on the source with the contact closed: for each place of its curve, the voltage
  // on the capacitor without its ESR, and the current into it.
  load(bled) {
    const { u_volt: u, i_ampere: i, line_ohm: line, esr_ohm: esr } = this.d;
    const siemens = 1 / this.d.leak_ohm + (bled && !this.d.bleed_open ? 1 / this.d.bleed_ohm : 0);
    const bank = u.map((volt, place) => volt - i[place] * line);
    const into = bank.map((volt, place) => i[place] - siemens * volt);
    const behind = bank.map((volt, place) => volt - into[place] * esr);
    return { siemens, behind, into, bank };
  }

  // At each boot of the chip.
  attach(api) {
    this.advance(api.nanos());
    this.api = api;
    for (const pin of [PULSE, RELAY, RELEASE, ZERO_INPUT]) {
      this.set(pin, null, api.nanos());
      api.onPin(pin, (level, ns) => this.set(pin, level, ns));
    }
    api.onAdc((channel, ns) => this.widened(this.code(channel, ns)));
    this.spi.attach(api);
    this.drive();
  }

  set(pin, level, ns) {
    this.advance(ns);
    const before = this.closed();
    this.pins[pin] = level;
    if (pin === PULSE && level !== null && this.d.stop_loop) this.lastEdge = ns;
    this.follow(ns);
    this.count(before);
  }

  // The stop loop carries the current of both coils and of the wave.
  stopLoop(closed, ns) {
    this.advance(ns);
    this.d.stop_loop = closed ? 1 : 0;
    this.api.drive(STOP_LOOP, this.d.stop_loop);
    this.follow(ns);
  }

  // Coils follow their pins, contacts their coils; pins that nobody drives are pulled low.
  follow(ns) {
    const { d } = this;
    const on = this.pins[RELAY] === 1 && d.stop_loop === 1;
    this.relay.aim(on, ns, on ? d.relay_operate_us : d.relay_release_us);
    const released = this.pins[RELEASE] === 1 && d.stop_loop === 1;
    this.bleed.aim(!released, ns, released ? d.bleed_operate_us : d.bleed_release_us);
    this.relay.move(ns);
    this.bleed.move(ns);
  }

  count(before) { if (!before && this.closed()) this.closings += 1; }

  closed() {
    if (this.d.welded) return true;
    return this.relay.closed && this.now <= this.lastEdge + 1000 * this.d.switch_open_us;
  }

  // Place and part of the way to the next: where the source works at capacitor voltage v.
  find(behind, v) {
    const last = behind.length - 1;
    let { place } = this;
    while (place < last && behind[place] < v) place += 1;
    while (place > 1 && behind[place - 1] > v) place -= 1;
    this.place = place;
    const width = behind[place] - behind[place - 1]; // 0 where the source is dark
    return width > 0 ? (v - behind[place - 1]) / width : 0;
  }

  at(values, part) {
    const before = values[this.place - 1];
    return before + part * (values[this.place] - before);
  }

  rate(load, v) { return this.at(load.into, this.find(load.behind, v)) / this.d.c_farad; }

  advance(ns) {
    if (!this.d.u_volt) { this.now = Math.max(this.now, ns); return; }
    while (this.now < ns) {
      const closed = this.closed();
      const end = 1000 * this.d.switch_open_us + this.lastEdge + 1;
      let until = Math.min(ns, this.relay.due, this.bleed.due);
      if (closed) until = Math.min(until, this.now + STEP_NS);
      if (this.now < end) until = Math.min(until, end);
      const load = this.loads[this.bleed.closed ? 1 : 0];
      const seconds = (until - this.now) * 1e-9;
      if (closed && this.bleed.closed) this.overlapNs += until - this.now;
      if (closed) {
        const middle = this.v + 0.5 * seconds * this.rate(load, this.v);
        this.v += seconds * this.rate(load, middle);
      } else {
        const path = 1 / load.siemens + this.d.esr_ohm;
        this.v *= Math.exp(-seconds / (path * this.d.c_farad));
      }
      this.now = until;
      this.relay.move(until);
      this.bleed.move(until);
      this.count(closed);
    }
  }

  // Volts at the source, amperes in the loop, volts across the bank.
  analogue() {
    const load = this.loads[this.bleed.closed ? 1 : 0];
    const { u_volt: u, i_ampere: i } = this.d;
    if (!this.closed()) {
      return [u[u.length - 1], 0, this.v / (1 + this.d.esr_ohm * load.siemens)];
    }
    const part = this.find(load.behind, this.v);
    return [this.at(u, part), this.at(i, part), this.at(load.bank, part)];
  }

  code(channel, ns) {
    if (!this.d.u_volt) return this.d.codes[channel] ?? 0;
    this.advance(ns);
    const { volt_per_code: volt, ampere_per_code: ampere, zero_code: zero } = this.d;
    const scale = [volt[0], ampere, volt[1]][channel];
    const sign = this.d.reversed ? -1 : 1;
    const atZero = channel === 0 && this.pins[ZERO_INPUT] === 1;
    const exact = (atZero ? 0 : sign * this.analogue()[channel] / scale) + (zero[channel] ?? 0);
    return exact + this.d.noise_code * this.gauss();
  }

  // Erratum RP2040-E11: codes 511, 1535, 2559, 3583 are wide, all others equally narrower.
  widened(code) {
    const at = code + 0.5;
    const wide = this.d.wide_code;
    if (wide === 1 || !(at >= 0 && at < 4096)) return code;
    const narrow = (1024 - wide) / 1023;
    const part = at % 1024;
    const first = at - part;
    if (part < 511 * narrow) return first + Math.floor(part / narrow);
    if (part < 511 * narrow + wide) return first + 511;
    return first + Math.min(1023, 512 + Math.floor((part - 511 * narrow - wide) / narrow));
  }

  // Sum of twelve even numbers, less six: near enough to a normal one, and the same everywhere.
  gauss() {
    if (!this.d.noise_code) return 0;
    let sum = -6;
    for (let n = 0; n < 12; n += 1) {
      this.random = (Math.imul(this.random, 1664525) + 1013904223) >>> 0;
      sum += this.random / 4294967296;
    }
    return sum;
  }

  state(ns) {
    this.advance(ns);
    return {
      v_capacitor: this.v, closed: this.closed(), bled: this.bleed.closed,
      closings: this.closings, overlap_ns: this.overlapNs, spi: this.spi.state(),
    };
  }
}
