// The analogue world beside the emulated chip: a source, its contacts, a capacitor, a bleed.
//
// Comes in: levels of GP2 (make and break), GP3 (relay coil), GP4 (bleed release coil), GP7 (the
// voltage channel's input at its zero) and a description as JSON. Goes out: a code for each
// conversion, levels of GP5 (stop loop) and GP6 (leads reversed), and a record of what moved when.
// It is advanced only when somebody looks, in steps of at most STEP_NS. Its circuit is that of
// host/kneewise/emulator/circuit.py, with the source as a table, and what can go wrong is that of
// mishaps.py beside it; test_plant_beside.py holds the two together, to one code.
//
//   { "codes": [1000, 2000, 3000] }         fixed codes of the three channels, or:
//   { "u_volt": [...], "i_ampere": [...],   the source's curve, u ascending, i falling to 0 or past
//     "open_volt": 40,                      the source without load; left out: the curve's end
//     "c_farad": 0.0022, "esr_ohm": 0.05,   the capacitor
//     "line_ohm": 0.1,                      leads, contact, switch and shunt together
//     "bleed_ohm": 100, "leak_ohm": 22000,  the bleed, and the permanent bleeder
//     "v_start": 0, "welded": 0, "relay_welded": 0, "switch_shorted": 0,
//     "bleed_open": 0, "bleed_shorted": 0,  a thousandth of it is left
//     "bare_relay": 0, "bounce_us": 0,      no switch: the wave drives the relay's coil
//     "relay_operate_us": 8000, "relay_release_us": 5000,
//     "bleed_operate_us": 5000, "bleed_release_us": 5000,   operate = its contact opens
//     "switch_open_us": 50,                 the AC-coupled driver conducts so long after an edge
//     "volt_per_code": [v, c], "ampere_per_code": a, "zero_code": [v, i, c],
//     "noise_code": 0, "seed": 1,           standard deviation of a conversion
//     "wide_code": 1 }                      width of the wide codes of the chip's converter, in LSB
//   and in both: "stop_loop": 1, "reversed": 0, "spi": null or as in spi_pair.mjs, and
//     "stuck": [null, null, null]           a 12-bit code for a channel that always reads it

import { Contact } from './contacts.mjs';
import { SpiPair } from './spi_pair.mjs';

const STEP_NS = 4000;
const PULSE = 2;
const RELAY = 3;
const RELEASE = 4;
const STOP_LOOP = 5;
const REVERSED = 6;
const ZERO_INPUT = 7;
const DRIVEN = [RELAY, RELEASE, ZERO_INPUT, PULSE];

const HOT_A = 0.1;
const SHORTED = 1e-3;
const RECORD_ENTRIES = 10_000;
const NAMES = { [RELAY]: 'relay', [RELEASE]: 'bleed_release', [ZERO_INPUT]: 'zero_input' };
const STUCK = { voltage_stuck: 0, current_stuck: 1, capacitor_stuck: 2 };
const FLAGS = {
  weld: 'welded', switch_short: 'switch_shorted', bleed_open: 'bleed_open',
  bleed_short: 'bleed_shorted',
};

const PLAIN = {
  codes: [0, 0, 0], stop_loop: 1, reversed: 0, zero_code: [0, 0, 0], noise_code: 0, seed: 1,
  v_start: 0, welded: 0, relay_welded: 0, switch_shorted: 0, bleed_open: 0, bleed_shorted: 0,
  bare_relay: 0, bounce_us: 0, esr_ohm: 0, line_ohm: 0, bleed_ohm: Infinity, leak_ohm: Infinity,
  relay_operate_us: 0, relay_release_us: 0, bleed_operate_us: 0, bleed_release_us: 0,
  switch_open_us: 50, wide_code: 1, spi: null, stuck: [null, null, null],
};

export class Plant {
  // `outside`: who runs the chip.
  constructor(description, outside = { powerOff() {}, powerOn() {}, cutLink() {} }) {
    this.now = 0;
    this.outside = outside;
    this.spi = new SpiPair((ns) => [this.code(0, ns), this.code(1, ns)]);
    this.pins = Object.fromEntries(DRIVEN.map((pin) => [pin, null]));
    this.describe(description ?? {});
  }

  describe(description) {
    this.d = { ...PLAIN, ...description };
    this.d.stuck = [...this.d.stuck];
    const { d } = this;
    this.random = d.seed >>> 0;
    this.v = d.v_start;
    this.closings = 0;
    this.overlapNs = 0; // contact and bleed both conducting
    this.bleedJ = 0; // what the bleed resistor has taken
    this.hotOpenings = []; // [us, A]
    this.entries = []; // [ns, what, level]
    this.waiting = []; // { delayUs, what, value }, for the next closing
    this.due = []; // { ns, what, value }
    this.wave = false; // edges come at GP2
    this.edge = -Infinity; // the last of them
    this.lastEdge = -Infinity; // the last that the driver had
    this.relay = new Contact({
      closeUs: d.relay_operate_us, openUs: d.relay_release_us, seed: d.seed,
      welded: this.stuckRelay(), bounceUs: d.bare_relay ? d.bounce_us : 0,
    });
    this.bleed = new Contact({
      closeUs: d.bleed_release_us, openUs: d.bleed_operate_us, closed: true,
    });
    this.seen = this.moving();
    if (d.u_volt) this.load();
    this.settle();
    this.spi.describe(d.spi);
    if (this.api) this.drive();
  }

  // What the chip's inputs see, other than its converter's.
  drive() {
    this.api.drive(STOP_LOOP, this.d.stop_loop);
    this.api.drive(REVERSED, this.d.reversed);
  }

  // What hangs on the source with the contact closed, without and with the bleed: for each place
  // of its curve, the voltage on the capacitor without its ESR, and the current into it.
  load() {
    const { u_volt: u, i_ampere: i, line_ohm: line, esr_ohm: esr, c_farad: farad } = this.d;
    const left = this.d.bleed_ohm * (this.d.bleed_shorted ? SHORTED : 1);
    this.loads = [0, this.d.bleed_open ? 0 : 1 / left].map((bleed) => {
      const siemens = 1 / this.d.leak_ohm + bleed;
      const bank = u.map((volt, place) => volt - i[place] * line);
      const into = bank.map((volt, place) => i[place] - siemens * volt);
      const behind = bank.map((volt, place) => volt - into[place] * esr);
      const fastNs = 3e8 * farad * (esr + 1 / siemens); // a shorted bleed is quicker than a step
      return { siemens, bleed, behind, into, bank, stepNs: Math.min(STEP_NS, fastNs) };
    });
    this.place = 1;
  }

  // At each boot of the chip.
  attach(api) {
    this.advance(api.nanos());
    this.api = api;
    this.powered = true;
    this.alarm = api.alarm(() => {
      this.advance(api.nanos());
      this.wake();
    });
    for (const pin of DRIVEN) {
      this.set(pin, null, api.nanos());
      api.onPin(pin, (level, ns) => { if (this.powered) this.set(pin, level, ns); });
    }
    api.onAdc((channel, ns) => {
      const code = this.code(channel, ns);
      return this.d.stuck[channel] === null ? this.widened(code) : code;
    });
    this.spi.attach(api);
    this.drive();
    this.wake();
  }

  set(pin, level, ns) {
    this.advance(ns);
    this.settle();
    const before = this.pins[pin];
    this.pins[pin] = level;
    if (pin !== PULSE) {
      if (before !== level) this.note(ns, NAMES[pin], level);
    } else if (level === null) {
      if (before !== null) this.note(ns, 'pulse', null);
      this.wave = false;
    } else {
      if (level === 1 && !this.wave) this.note(ns, 'pulse', 1);
      else if (before === null) this.note(ns, 'pulse', 0);
      this.wave = this.wave || level === 1;
      if (this.wave) this.edge = ns;
      if (this.wave && this.carried()) this.lastEdge = ns;
    }
    this.settle();
    this.wake();
  }

  // The stop loop carries the current of both coils and of the wave, and nothing in a build with a
  // bare relay.
  carried() { return this.d.stop_loop === 1 || this.d.bare_relay === 1; }

  stuckRelay() { return Boolean(this.d.welded || this.d.relay_welded); }

  switchClosed() {
    const { d } = this;
    if (d.welded || d.switch_shorted || d.bare_relay) return true;
    return this.now <= this.lastEdge + 1000 * d.switch_open_us;
  }

  closed() { return this.relay.closed && this.switchClosed(); }

  // When something happens next, if no pin changes: the end of a wave is seen, and the switch opens,
  // so long after its last edge.
  plan() {
    const after = 1000 * this.d.switch_open_us + 1;
    const lapses = [this.lastEdge + after, this.edge + after].filter((ns) => ns > this.now);
    const due = this.due[0]?.ns ?? Infinity;
    this.event = Math.min(this.relay.next(), this.bleed.next(), due, ...lapses);
  }

  // Coils follow their pins, contacts their coils; pins that nobody drives are pulled low.
  settle() {
    const before = this.seen.conducting;
    const amperes = before && this.d.u_volt ? this.amperes() : 0;
    if (this.wave && this.now > this.edge + 1000 * this.d.switch_open_us) {
      this.wave = false;
      this.note(this.edge, 'pulse', 0);
      if (this.d.bare_relay) this.relay.aim(false, this.edge);
    }
    const carried = this.carried();
    const coil = this.d.bare_relay ? this.wave : this.pins[RELAY] === 1 && carried;
    this.relay.aim(coil, this.now);
    this.bleed.aim(!(this.pins[RELEASE] === 1 && carried), this.now);
    this.relay.move(this.now);
    this.bleed.move(this.now);
    const moving = this.moving();
    for (const [what, closed] of Object.entries(moving)) {
      if (closed !== this.seen[what]) this.note(this.now, what, closed ? 1 : 0);
    }
    this.seen = moving;
    if (before && !moving.conducting && Math.abs(amperes) > HOT_A) {
      this.hotOpenings.push([Math.round(this.now / 1000), Math.abs(amperes)]);
    }
    if (!before && moving.conducting) {
      this.closings += 1;
      for (const { delayUs, what, value } of this.waiting) {
        this.due.push({ ns: this.now + 1000 * delayUs, what, value });
      }
      this.waiting = [];
      this.due.sort((a, b) => a.ns - b.ns);
    }
    this.plan();
  }

  moving() {
    return {
      relay_contact: this.relay.closed, switch_contact: this.switchClosed(),
      bleed_contact: this.bleed.closed, conducting: this.closed(),
    };
  }

  // Into the record, by its time: the end of a wave is known only some time after it.
  note(ns, what, level) {
    let at = this.entries.length;
    while (at > 0 && this.entries[at - 1][0] > ns) at -= 1;
    this.entries.splice(at, 0, [ns, what, level]);
    if (this.entries.length > RECORD_ENTRIES) this.entries.shift();
  }

  record(ns) {
    this.advance(ns);
    this.settle();
    return this.entries.map(([at, what, level]) => [Math.round(at / 1000), what, level]);
  }

  // ---- what goes wrong; names and values as in mishaps.py, a source as its table ----

  afterClosing(delayUs, what, value) {
    this.waiting.push({ delayUs, what, value });
    this.wake();
  }

  change(what, value, ns) {
    this.advance(ns);
    this.happen(what, value);
    this.wake();
  }

  happen(what, value) {
    const { d } = this;
    const undone = what in STUCK ? value === null : !value;
    this.note(this.now, `event:${what}`, undone ? 0 : 1);
    if (what in FLAGS) d[FLAGS[what]] = value ? 1 : 0;
    else if (what in STUCK) d.stuck[STUCK[what]] = value;
    else if (what === 'source') Object.assign(d, value);
    else if (what === 'stop_loop') {
      d.stop_loop = value ? 0 : 1;
      this.api.drive(STOP_LOOP, d.stop_loop);
    } else if (what === 'link_cut') this.outside.cutLink();
    else if (value) {
      this.outside.powerOff();
      this.powered = false;
      for (const pin of DRIVEN) this.set(pin, null, this.now);
    } else this.outside.powerOn();
    this.relay.welded = this.stuckRelay();
    if (d.u_volt) this.load();
    this.settle();
  }

  befall() {
    while (this.due.length && this.due[0].ns <= this.now) {
      const { what, value } = this.due.shift();
      this.happen(what, value);
    }
  }

  // Nobody looks at the very moment of a mishap; so the chip's clock does, and for a closing.
  wake() {
    if (!this.alarm || (!this.waiting.length && !this.due.length)) return;
    const ns = Math.min(this.due[0]?.ns ?? Infinity, this.relay.next());
    if (ns < Infinity) this.alarm.schedule(Math.max(0, ns - this.api.nanos()));
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

  amperes() {
    const part = this.find(this.loads[this.bleed.closed ? 1 : 0].behind, this.v);
    return this.at(this.d.i_ampere, part);
  }

  advance(ns) {
    if (!this.d.u_volt) this.now = Math.max(this.now, ns);
    this.befall();
    while (this.now < ns) {
      const { closed: bled } = this.bleed;
      const { conducting } = this.seen;
      const load = this.loads[bled ? 1 : 0];
      const until = Math.min(ns, this.event, conducting ? this.now + load.stepNs : Infinity);
      const seconds = (until - this.now) * 1e-9;
      if (conducting) this.charge(load, seconds);
      else this.empty(load, seconds);
      if (conducting && bled) this.overlapNs += until - this.now;
      this.now = until;
      if (until < this.event) continue;
      this.settle();
      this.befall();
    }
  }

  charge(load, seconds) {
    const middle = this.v + 0.5 * seconds * this.rate(load, this.v);
    const part = this.find(load.behind, middle);
    this.v += seconds * this.at(load.into, part) / this.d.c_farad;
    if (load.bleed) this.bleedJ += seconds * load.bleed * this.at(load.bank, part) ** 2;
  }

  empty(load, seconds) {
    const share = 1 + this.d.esr_ohm * load.siemens;
    const rate = load.siemens / (share * this.d.c_farad);
    if (load.bleed) {
      const spent = -Math.expm1(-2 * rate * seconds) / (2 * rate);
      this.bleedJ += load.bleed * (this.v / share) ** 2 * spent;
    }
    this.v *= Math.exp(-rate * seconds);
  }

  // Volts at the source, amperes in the loop, volts across the bank.
  analogue() {
    const load = this.loads[this.bleed.closed ? 1 : 0];
    const { u_volt: u, i_ampere: i, open_volt: open } = this.d;
    if (!this.seen.conducting) {
      return [open ?? u[u.length - 1], 0, this.v / (1 + this.d.esr_ohm * load.siemens)];
    }
    const part = this.find(load.behind, this.v);
    return [this.at(u, part), this.at(i, part), this.at(load.bank, part)];
  }

  code(channel, ns) {
    this.advance(ns);
    const stuck = this.d.stuck[channel];
    if (stuck !== null) return stuck * (this.d.spi && channel < 2 ? 16 : 1);
    if (!this.d.u_volt) return this.d.codes[channel] ?? 0;
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
      closings: this.closings, overlap_ns: this.overlapNs, bleed_j: this.bleedJ,
      hot_openings: this.hotOpenings, loop_a: this.d.u_volt ? this.analogue()[1] : 0,
      spi: this.spi.state(),
    };
  }
}
