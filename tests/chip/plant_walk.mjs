// Walks plant.mjs through a schedule without a chip, for test_plant_beside.py.
//
// Comes in on stdin: {"plant": description, "steps": [["pin", ns, pin, level] or
// ["stop_loop", ns, closed] or ["code", ns, channel], ...]} in order of time; or ["widened", code].
// Goes out: the codes, not rounded, as one JSON list.

import fs from 'node:fs';
import { Plant } from './plant.mjs';

const { plant: description, steps } = JSON.parse(fs.readFileSync(0, 'utf8'));
const plant = new Plant(description);
plant.api = { drive: () => {} };
const codes = [];
for (const [what, ns, first, second] of steps) {
  if (what === 'pin') plant.set(first, second, ns);
  else if (what === 'stop_loop') plant.stopLoop(first, ns);
  else if (what === 'widened') codes.push(plant.widened(ns));
  else codes.push(plant.code(first, ns));
}
console.log(JSON.stringify(codes));
