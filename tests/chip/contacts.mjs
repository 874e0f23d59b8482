// A contact: it follows its coil after a delay, may bounce as it makes, or conducts always.
//
// The same as host/kneewise/emulator/contacts.py, with the same draws; times in ns.

const BOUNCES_AT_MOST = 4;

// Moments after the first touch at which a contact opens and closes again, in turn.
export function bouncesUs(seed, number, withinUs) {
  if (withinUs < 2) return [];
  let state = (seed ^ Math.imul(number, 2654435761)) >>> 0;
  const draw = (below) => {
    state = (Math.imul(state, 1664525) + 1013904223) >>> 0;
    return (state >>> 8) % below;
  };
  const openings = 1 + draw(BOUNCES_AT_MOST);
  const drawn = new Set();
  for (let n = 0; n < 2 * openings; n += 1) drawn.add(1 + draw(withinUs));
  const moments = [...drawn].sort((a, b) => a - b);
  return moments.slice(moments.length % 2);
}

export class Contact {
  constructor({ closeUs, openUs, closed = false, welded = false, bounceUs = 0, seed = 0 }) {
    Object.assign(this, { closeUs, openUs, welded, bounceUs, seed });
    this.closed = closed || welded;
    this.made = this.closed; // its armature; while it bounces, the contact may be open all the same
    this.due = Infinity;
    this.bounces = [];
    this.closings = 0;
  }

  aim(closed, ns) {
    if (this.welded) {
      this.bounces = [];
      this.due = this.closed ? Infinity : ns;
    } else if (closed === this.made) this.due = Infinity;
    else if (this.due === Infinity) this.due = ns + 1000 * (closed ? this.closeUs : this.openUs);
  }

  next() { return Math.min(this.due, this.bounces[0] ?? Infinity); }

  move(ns) {
    if (this.due <= ns) {
      this.due = Infinity;
      this.closed = this.welded || !this.made;
      this.made = this.closed;
      this.bounces = [];
      if (!this.made || this.welded) return;
      this.closings += 1;
      const after = bouncesUs(this.seed, this.closings, this.bounceUs);
      this.bounces = after.map((us) => ns + 1000 * us);
    } else if (this.bounces[0] <= ns) {
      this.bounces.shift();
      this.closed = !this.closed;
    }
  }
}
