// Walks plant.mjs through a schedule without a chip, for test_plant_beside.py.
//
// Comes in on stdin: {"plant": description, "steps": [["pin", ns, pin, level] or
// ["after_closing", ns, delay_us, what, value] or ["change", ns, what, value] or
// ["code", ns, channel], ...]} in order of time; or ["widened", code].
// Goes out: {"codes": not rounded, "record": [[us, what, level], ...], "state": as at the end}.

import fs from 'node:fs';
import { Plant } from './plant.mjs';

const { plant: description, steps } = JSON.parse(fs.readFileSync(0, 'utf8'));
const plant = new Plant(description);
plant.api = { drive: () => {} };
const codes = [];
let now = 0;
for (const [what, ns, first, second, third] of steps) {
  now = ns;
  if (what === 'pin') plant.set(first, second, ns);
  else if (what === 'after_closing') plant.afterClosing(first, second, third);
  else if (what === 'change') plant.change(first, second, ns);
  else if (what === 'widened') codes.push(plant.widened(ns));
  else codes.push(plant.code(first, ns));
}
const record = plant.record(now);
console.log(JSON.stringify({ codes, record, state: plant.state(now) }));
