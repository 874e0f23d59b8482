// Two converters of 16 bits at the chip's pins: GP10 select, GP11 clock, GP12 V, GP13 I.
//
// Comes in: edges of select and clock. Goes out: the level of both data lines at any time. A data
// line shows its old bit until the edge that asks for the next, then the wrong level for
// `valid_ns`, then the right one: a reader that looks too early, or too late, gets wrong codes.
// The same where select falls before `convert_ns` have passed.
//
//   { "valid_ns": 25,     from the edge of select or clock until the bit is right
//     "convert_ns": 500,  from select's rise until it may fall
//     "codes": [[v, i], ...] }  one after the other, the last for ever; without: the plant's

const SELECT = 10;
const CLOCK = 11;
const DATA = [12, 13];
const BITS = 16;
const RISES_KEPT = 20_000;

export class SpiPair {
  constructor(sample) {
    this.sample = sample; // sample(ns) -> [v, i], not rounded
    this.describe(null);
  }

  describe(description) {
    this.d = description;
    this.rises = []; // when select rose, ns
    this.early = 0; // times that select fell before the conversion's end
    this.wrongClocks = 0; // times that other than 16 clocks came between two rises
    this.taken = 0;
    this.words = [0, 0];
    this.left = -1; // place of the bit shown; -1: none, the lines are pulled up
    this.falls = BITS;
    this.selected = false;
    this.clockHigh = false;
    this.before = [true, true];
    this.after = [true, true];
    this.changed = -Infinity;
  }

  attach(api) {
    this.selected = false;
    this.clockHigh = false;
    api.onPin(SELECT, (level, ns) => this.select(level === 1, ns));
    api.onPin(CLOCK, (level, ns) => this.clock(level === 1, ns));
    DATA.forEach((pin, line) => {
      api.line(pin, (ns) => !this.d || this.level(line, ns));
    });
  }

  select(high, ns) {
    if (!this.d || high === this.selected) return;
    this.selected = high;
    if (high) {
      if (this.falls !== BITS) this.wrongClocks += 1;
      this.falls = 0;
      if (this.rises.length < RISES_KEPT) this.rises.push(ns);
      this.rose = ns;
      const { codes } = this.d;
      const exact = codes ? codes[Math.min(this.taken, codes.length - 1)] : this.sample(ns);
      this.taken += 1;
      this.words = exact.map((code) => Math.min(65535, Math.max(0, Math.round(code))));
      this.show(-1, ns);
    } else {
      if (ns - this.rose < this.d.convert_ns) {
        this.early += 1;
        this.words = this.words.map((word) => word ^ 65535);
      }
      this.show(BITS - 1, ns);
    }
  }

  clock(high, ns) {
    const falls = this.clockHigh && !high;
    this.clockHigh = high;
    if (!this.d || this.selected || !falls) return;
    this.falls += 1;
    this.show(Math.max(this.left, 0) - 1, ns);
  }

  show(bit, ns) {
    this.before = this.after;
    this.left = bit;
    this.after = this.words.map((word) => bit < 0 || ((word >> bit) & 1) === 1);
    this.changed = ns;
  }

  level(line, ns) {
    if (ns < this.changed) return this.before[line];
    if (ns < this.changed + this.d.valid_ns) return !this.after[line];
    return this.after[line];
  }

  state() {
    return {
      rises: this.rises, early: this.early, wrong_clocks: this.wrongClocks, taken: this.taken,
    };
  }
}
