"""Run by MicroPython: every vector and every seed, a verdict in JSON for each, a line each.

Arguments: the folder of the package, the folder of the checks, that of the vectors, and the
number of seeds.
"""

import gc
import json
import sys

packages, checks, vectors, seeds = sys.argv[1:5]
sys.path[:0] = [packages, checks]

import wire_checks  # noqa: E402

for name in sorted(wire_checks.CHECKS):
    with open(vectors + "/" + name) as file:
        rows = json.load(file)
    for verdict in wire_checks.CHECKS[name](rows):
        print(json.dumps({"vector": verdict[0], "wrong": verdict[1]}))
    rows = None
    gc.collect()
print(json.dumps({"seeds": wire_checks.seed_crcs(int(seeds))}))
