// The analogue world beside the emulated chip: a source, a contact, a capacitor, a bleed.
//
// Comes in: levels of GP2 (make and break), GP3 (relay coil), GP4 (bleed release coil) and a
// description as JSON. Goes out: a code for each conversion, levels of GP5 (stop loop) and GP6
// (leads reversed). It is advanced only when somebody looks, in steps of at most STEP_NS.
//
//   { "codes": [1000, 2000, 3000] }     fixed codes of the three channels, or:
//   { "u_volt": [...], "i_ampere": [...],   the source's curve, u ascending, i falling to 0
//     "c_farad": 0.0022, "r_ohm": 0.1,      the capacitor; leads, contact and ESR together
//     "bleed_ohm": 100, "leak_ohm": 22000,  the bleed, and the permanent bleeder
//     "v_start": 0,
//     "volt_per_code": [v, c], "ampere_per_code": a, "zero_code": [v, i, c],
//     "noise_code": 0, "seed": 1 }          standard deviation of a conversion
//   and in both: "stop_loop": 1, "reversed": 0

const STEP_NS = 4000;
const HOLD_NS = 50_000; // the AC-coupled driver conducts this long after an edge

export class Plant {
  constructor(description) {
    this.now = 0;
    this.lastEdge = -Infinity;
    this.pins = { 2: null, 3: null, 4: null };
    this.describe(description ?? {});
  }

  describe(description) {
    this.d = {
      codes: [0, 0, 0], stop_loop: 1, reversed: 0, zero_code: [0, 0, 0], noise_code: 0, seed: 1,
      v_start: 0, leak_ohm: Infinity, ...description,
    };
    this.random = this.d.seed >>> 0;
    this.v = this.d.v_start;
    this.closings = 0;
    if (this.d.u_volt) {
      // The capacitor's voltage with the source at each place of its curve, through r_ohm.
      this.behind = this.d.u_volt.map((u, place) => u - this.d.i_ampere[place] * this.d.r_ohm);
    }
    this.api?.drive(5, this.d.stop_loop);
    this.api?.drive(6, this.d.reversed);
  }

  // At each boot of the chip.
  attach(api) {
    this.advance(api.nanos());
    this.api = api;
    this.pins = { 2: null, 3: null, 4: null };
    for (const pin of [2, 3, 4]) {
      api.onPin(pin, (level, ns) => {
        this.advance(ns);
        const wasClosed = this.closed(ns);
        this.pins[pin] = level;
        if (pin === 2 && level !== null) this.lastEdge = ns;
        if (!wasClosed && this.closed(ns)) this.closings += 1;
      });
    }
    api.onAdc((channel, ns) => this.code(channel, ns));
    api.drive(5, this.d.stop_loop);
    api.drive(6, this.d.reversed);
  }

  closed(ns) { return this.pins[3] === 1 && ns <= this.lastEdge + HOLD_NS; }

  bled() { return this.pins[4] !== 1; } // an undriven coil lets the bleed's contact close

  // Where the source works while the contact is closed: [u, i].
  point() {
    const { u_volt: u, i_ampere: i } = this.d;
    let place = 1;
    while (place < u.length - 1 && this.behind[place] < this.v) place += 1;
    const part = (this.v - this.behind[place - 1]) / (this.behind[place] - this.behind[place - 1]);
    const at = (values) => values[place - 1] + part * (values[place] - values[place - 1]);
    return [at(u), Math.max(0, at(i))];
  }

  advance(ns) {
    if (!this.d.u_volt) { this.now = ns; return; }
    const { c_farad: c, bleed_ohm: bleed } = this.d;
    while (this.now < ns) {
      const conducts = this.closed(this.now);
      let step = ns - this.now;
      if (conducts) step = Math.min(step, STEP_NS, this.lastEdge + HOLD_NS - this.now + 1);
      if (conducts) this.v += this.point()[1] * step * 1e-9 / c;
      this.v *= Math.exp(-step * 1e-9 / (this.d.leak_ohm * c));
      if (this.bled()) this.v *= Math.exp(-step * 1e-9 / (bleed * c));
      this.now += step;
    }
  }

  code(channel, ns) {
    if (!this.d.u_volt) return this.d.codes[channel] ?? 0;
    this.advance(ns);
    const { u_volt: u, volt_per_code: volt, ampere_per_code: ampere, zero_code: zero } = this.d;
    const [source, current] = this.closed(ns) ? this.point() : [u[u.length - 1], 0];
    const exact = [source / volt[0], current / ampere, this.v / volt[1]][channel] ?? 0;
    return exact + (zero[channel] ?? 0) + this.d.noise_code * this.gauss();
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
    return { v_capacitor: this.v, closed: this.closed(ns), bled: this.bled(), closings: this.closings };
  }
}
